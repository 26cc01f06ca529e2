"""Entries: their bytes, their transactions, and what the triggers stop."""

from __future__ import annotations

import json
import sqlite3
import struct
import subprocess
import sys
from contextlib import closing
from datetime import UTC, datetime, timedelta, timezone
from pathlib import Path

import pytest
import rfc8785
from hypothesis import given, settings
from hypothesis import strategies as st
from ledger_samples import NOON, environment, every_fact, make_ledger, rows_of, sample, tampering

from monitor import facts
from monitor.facts import ClockOdd, DaemonStopped, EveningMissed, Fact, NoticeSent
from monitor.ledger.chain import BATCH, Ledger
from monitor.ledger.links import START, Head, digest
from monitor.ledger.verify import verify
from monitor.words import Busy, Damaged, DuskcheckError

STOPPED = DaemonStopped("asked to stop", 7)

# RFC 8785, appendix B: the bits of a double and how it is written. From memory.
NUMBERS = [
    ("0000000000000000", "0"),
    ("8000000000000000", "0"),
    ("0000000000000001", "5e-324"),
    ("8000000000000001", "-5e-324"),
    ("7fefffffffffffff", "1.7976931348623157e+308"),
    ("4340000000000000", "9007199254740992"),
    ("c340000000000000", "-9007199254740992"),
    ("4430000000000000", "295147905179352830000"),
    ("44b52d02c7e14af5", "9.999999999999997e+22"),
    ("44b52d02c7e14af6", "1e+23"),
    ("444b1ae4d6e2ef4e", "999999999999999700000"),
    ("444b1ae4d6e2ef50", "1e+21"),
    ("3eb0c6f7a0b5ed8c", "9.999999999999997e-7"),
    ("3eb0c6f7a0b5ed8d", "0.000001"),
    ("41b3de4355555553", "333333333.3333332"),
    ("41b3de4355555557", "333333333.33333343"),
    ("becbf647612f3696", "-0.0000033333333333333333"),
    ("43143ff3c1cb0959", "1424953923781206.2"),
]


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "state" / "ledger.sqlite"


@pytest.fixture
def ledger(path: Path):
    with Ledger.open(path, create=True) as ledger:
        yield ledger


def append(ledger: Ledger, *given: Fact, at: datetime = NOON) -> list[facts.Entry]:
    with ledger.transaction(at) as transaction:
        return [transaction.append(fact) for fact in given]


def test_an_empty_ledger_begins_at_zero(ledger, path):
    assert ledger.head() == START == Head(0, "0" * 64)
    assert list(ledger.entries()) == []
    assert verify(path).problems == ()


def test_an_entry_is_the_canonical_json_of_its_six_fields_and_its_hash_their_sha256(ledger):
    first, second = append(ledger, STOPPED, ClockOdd(1.0), at=datetime(2026, 12, 1, 19, 15, 0, 123987, tzinfo=UTC))

    # Written by hand from design section 9: keys sorted, no blanks, 1.0 as 1, the time cut to milliseconds.
    text = (
        '{"at":"2026-12-01T19:15:00.123Z","body":{"pid":7,"reason":"asked to stop"},"kind":"daemon.stopped",'
        f'"prev":"{"0" * 64}","seq":1,"v":1}}'
    )
    assert ledger.raw(1) == text.encode()
    assert first.hash == digest(text.encode())
    assert second.prev == first.hash
    assert b'"body":{"seconds":1}' in ledger.raw(2)
    assert ledger.head() == Head(2, digest(ledger.raw(2)))


def test_the_time_is_told_in_utc(ledger):
    (entry,) = append(ledger, STOPPED, at=datetime(2026, 7, 1, 1, 30, tzinfo=timezone(timedelta(hours=2))))

    assert entry.at == "2026-06-30T23:30:00.000Z"


def test_a_time_without_zone_is_a_defect(ledger):
    with pytest.raises(ValueError, match="needs a zone"), ledger.transaction(datetime(2026, 7, 1)):  # noqa: DTZ001
        pass
    assert ledger.head() == START


@pytest.mark.parametrize(("bits", "written"), NUMBERS)
def test_numbers_are_written_as_rfc_8785_says_and_come_back_as_floats(ledger, path, bits, written):
    number = struct.unpack(">d", bytes.fromhex(bits))[0]
    append(ledger, ClockOdd(number))

    seconds = ledger.entry(1).fact.seconds

    assert f'{{"seconds":{written}}}'.encode() in ledger.raw(1)
    assert isinstance(seconds, float)
    assert seconds == number
    assert verify(path).problems == ()


def test_keys_are_sorted_by_utf_16(ledger, path):
    evening = sample(facts.EveningChecked)
    # U+FB01 comes before U+1F600 by code point and after it in UTF-16.
    append(ledger, type(evening)(**{**vars(evening), "versions": {"\ufb01": "1", "\U0001f600": "2"}}))

    assert '"versions":{"\U0001f600":"2","\ufb01":"1"}'.encode() in ledger.raw(1)
    assert verify(path).problems == ()


st.register_type_strategy(float, st.floats(allow_nan=False, allow_infinity=False))
st.register_type_strategy(int, st.integers(-(2**53) + 1, 2**53 - 1))


@pytest.mark.parametrize("kind", facts.FACTS.values(), ids=facts.FACTS.keys())
def test_every_fact_comes_back_from_its_canonical_bytes(kind):
    @settings(max_examples=25, deadline=None, database=None)
    @given(st.from_type(kind))
    def comes_back(fact):
        data = rfc8785.dumps(facts.encode(fact))
        again = facts.decode(kind.KIND, kind.V, json.loads(data))

        assert again == fact
        assert rfc8785.dumps(facts.encode(again)) == data

    comes_back()


def test_entries_are_read_in_order_between_two_numbers(ledger):
    every = every_fact()
    append(ledger, *every)

    assert [entry.fact for entry in ledger.entries()] == every
    assert [entry.seq for entry in ledger.entries(after=2, upto=5)] == [3, 4, 5]
    assert [entry.seq for entry in ledger.entries(after=len(every))] == []
    assert ledger.entry(4).fact == every[3]
    with pytest.raises(DuskcheckError, match=f"holds no entry {len(every) + 1}"):
        ledger.entry(len(every) + 1)
    with pytest.raises(DuskcheckError, match="holds no entry 0"):
        ledger.raw(0)


def test_reading_many_entries_holds_no_lock_and_sees_one_moment(ledger, path):
    append(ledger, *[STOPPED] * (BATCH + 5))

    reading = ledger.entries()
    next(reading)
    with Ledger.open(path) as other:
        append(other, STOPPED)

    assert sum(1 for _ in reading) == BATCH + 4


def test_next_seq_and_the_entry_given_are_what_is_stored(ledger):
    with ledger.transaction(NOON) as transaction:
        assert transaction.next_seq == 1
        entry = transaction.append(STOPPED)
        assert transaction.next_seq == 2

    assert ledger.entry(1) == entry


def test_a_transaction_that_fails_leaves_nothing(ledger, path):
    append(ledger, STOPPED)
    before = rows_of(path)

    with pytest.raises(KeyError), ledger.transaction(NOON) as transaction:
        transaction.append(STOPPED)
        raise KeyError

    assert rows_of(path) == before
    with pytest.raises(RuntimeError, match="ended"):
        transaction.append(STOPPED)
    append(ledger, STOPPED)
    assert verify(path).entries == 2


def test_a_fact_that_could_not_be_read_back_is_not_written(ledger):
    with pytest.raises(ValueError, match="cannot be read back"), ledger.transaction(NOON) as transaction:
        transaction.append(DaemonStopped(17, 7))
    with pytest.raises(rfc8785.FloatDomainError), ledger.transaction(NOON) as transaction:
        transaction.append(ClockOdd(float("nan")))

    assert ledger.head() == START


def test_a_clock_that_went_back_is_recorded_once(ledger):
    append(ledger, STOPPED)
    append(ledger, STOPPED, at=NOON - timedelta(minutes=90))
    append(ledger, STOPPED, at=NOON - timedelta(minutes=89))

    entries = list(ledger.entries())

    assert [entry.fact for entry in entries] == [STOPPED, ClockOdd(5400.0), STOPPED, STOPPED]
    assert [entry.at[11:16] for entry in entries] == ["12:00", "10:30", "10:30", "10:31"]


def test_the_same_millisecond_is_not_odd(ledger):
    append(ledger, STOPPED, at=NOON + timedelta(microseconds=900))
    append(ledger, STOPPED, at=NOON + timedelta(microseconds=100))

    assert [entry.fact for entry in ledger.entries()] == [STOPPED, STOPPED]


@pytest.mark.parametrize(("kind", "v"), [("moon.risen", 1), ("daemon.stopped", 2)])
def test_an_entry_of_an_unknown_kind_or_version_stops_reading_and_writing(ledger, path, kind, v):
    append(ledger, STOPPED)
    insert(path, 2, ledger.head().hash, kind, v)
    before = rows_of(path)

    with pytest.raises(DuskcheckError, match=rf"entry 2 .*'{kind}', version {v}.*does not know"):
        list(ledger.entries())
    with pytest.raises(DuskcheckError, match=r"entry 2 .*Nothing was written"):
        append(ledger, STOPPED)

    assert rows_of(path) == before
    assert [entry.seq for entry in ledger.entries(upto=1)] == [1]
    report = verify(path)
    assert report.entries == 2
    assert report.problems == ()
    assert any(f"'{kind}', version {v}" in note for note in report.notes)


def insert(path: Path, seq: int, prev: str, kind: str, v: int) -> None:
    data = rfc8785.dumps({"seq": seq, "at": "2026-03-02T12:00:00.000Z", "kind": kind, "v": v, "body": {}, "prev": prev})
    with closing(sqlite3.connect(path)) as connection:
        connection.execute("INSERT INTO entries VALUES (?, ?, ?)", (seq, data, digest(data)))
        connection.commit()


NEVER_CHANGED, NEVER_REMOVED, FOLLOWS = "never changed", "never removed", "follows the newest one"
STOPPED_BY_TRIGGERS = {
    "update": ("UPDATE entries SET hash = hash WHERE seq = 2", NEVER_CHANGED),
    "delete": ("DELETE FROM entries WHERE seq = 3", NEVER_REMOVED),
    "replace": ("INSERT OR REPLACE INTO entries SELECT * FROM entries WHERE seq = 3", FOLLOWS),
    "upsert": (
        "INSERT INTO entries SELECT * FROM entries WHERE seq = 3 ON CONFLICT (seq) DO UPDATE SET hash = ''",
        FOLLOWS,
    ),
    "gap": ("INSERT INTO entries SELECT 5, bytes, hash FROM entries WHERE seq = 3", FOLLOWS),
    "no number": ("INSERT INTO entries (bytes, hash) SELECT bytes, hash FROM entries WHERE seq = 3", FOLLOWS),
    "fork": ("INSERT INTO entries SELECT 4, bytes, hash FROM entries WHERE seq = 3", FOLLOWS),
    "fork, ignored": ("INSERT OR IGNORE INTO entries SELECT 4, bytes, hash FROM entries WHERE seq = 3", FOLLOWS),
}


@pytest.mark.parametrize("attack", STOPPED_BY_TRIGGERS)
def test_the_triggers_stop(path, attack):
    make_ledger(path, [STOPPED, NoticeSent("n", 1, "r"), STOPPED])
    before = rows_of(path)
    statement, message = STOPPED_BY_TRIGGERS[attack]

    # A connection of another program, without our settings.
    with closing(sqlite3.connect(path)) as connection, pytest.raises(sqlite3.IntegrityError, match=message):
        connection.execute(statement)

    assert rows_of(path) == before


def test_the_triggers_stop_another_hash_or_number_inside_the_bytes(path):
    make_ledger(path, [STOPPED])
    newest = rows_of(path)[0][2]

    with pytest.raises(sqlite3.IntegrityError, match=FOLLOWS):
        insert_as(path, 2, seq_inside=2, prev="f" * 64)
    with pytest.raises(sqlite3.IntegrityError, match=FOLLOWS):
        insert_as(path, 2, seq_inside=3, prev=newest)
    insert_as(path, 2, seq_inside=2, prev=newest)

    assert verify(path).entries == 2


def insert_as(path: Path, seq: int, seq_inside: int, prev: str) -> None:
    document = {"seq": seq_inside, "at": "2026-03-02T12:00:00.000Z", "kind": "daemon.stopped", "v": 1, "prev": prev}
    data = rfc8785.dumps({**document, "body": facts.encode(STOPPED)})
    with closing(sqlite3.connect(path)) as connection:
        connection.execute("INSERT INTO entries VALUES (?, ?, ?)", (seq, data, digest(data)))
        connection.commit()


def test_its_settings_survive_a_power_cut(ledger):
    settings = {
        name: ledger._connection.execute(f"PRAGMA {name}").fetchone()[0]
        for name in (
            "journal_mode",
            "synchronous",
            "recursive_triggers",
            "foreign_keys",
            "trusted_schema",
            "busy_timeout",
        )
    }

    # SQLite's pragma.html: synchronous 3 is EXTRA.
    assert settings == {
        "journal_mode": "delete",
        "synchronous": 3,
        "recursive_triggers": 1,
        "foreign_keys": 1,
        "trusted_schema": 0,
        "busy_timeout": 30_000,
    }


def test_there_is_no_ledger(path):
    with pytest.raises(DuskcheckError, match=r"there is no ledger at .*first check"):
        Ledger.open(path)


def test_a_file_whose_making_a_crash_cut_off_is_made_again(path):
    path.parent.mkdir()
    path.touch()

    with Ledger.open(path, create=True) as ledger:
        append(ledger, STOPPED)

    assert verify(path).entries == 1


def test_a_file_of_another_kind_is_refused(path):
    path.parent.mkdir()
    path.write_bytes(b"not a database at all" * 100)
    with pytest.raises(Damaged, match="is damaged: file is not a database"):
        Ledger.open(path)

    path.unlink()
    with closing(sqlite3.connect(path)) as connection:
        connection.execute("CREATE TABLE entries (x)")
    with pytest.raises(Damaged, match="not a ledger of duskcheck"):
        Ledger.open(path, create=True)


def test_a_ledger_without_its_triggers_is_refused(path):
    make_ledger(path, [STOPPED])
    with closing(sqlite3.connect(path)) as connection:
        connection.execute("DROP TRIGGER entries_are_not_deleted")

    with pytest.raises(Damaged, match=r"altered \(entries_are_not_deleted"):
        Ledger.open(path)
    assert any("entries_are_not_deleted" in problem for problem in verify(path).problems)


def test_a_ledger_of_a_later_format_is_refused(path):
    make_ledger(path, [STOPPED])
    with closing(sqlite3.connect(path)) as connection:
        connection.execute("PRAGMA user_version = 2")

    with pytest.raises(Damaged, match="its format is 2"):
        Ledger.open(path)


def test_an_altered_entry_is_noticed_when_it_is_read_and_nothing_follows_it(path):
    make_ledger(path, [STOPPED, STOPPED, STOPPED])
    with tampering(path) as connection:
        connection.execute("UPDATE entries SET bytes = CAST(replace(bytes, 'asked', 'Asked') AS BLOB) WHERE seq = 3")

    with Ledger.open(path) as ledger:
        assert [entry.seq for entry in ledger.entries(upto=2)] == [1, 2]
        with pytest.raises(Damaged, match="entry 3: its bytes and its hash do not belong together"):
            list(ledger.entries(upto=3))
        with pytest.raises(Damaged, match="entry 3"):
            append(ledger, STOPPED)


def test_a_writer_that_does_not_end_is_told(path, ledger):
    ledger._connection.execute("PRAGMA busy_timeout = 1")
    with Ledger.open(path) as other, other.transaction(NOON), pytest.raises(Busy, match="another process"):
        append(ledger, STOPPED)


def test_a_full_disk_is_told_and_leaves_nothing_half_written(path, ledger):
    append(ledger, STOPPED)
    (pages,) = ledger._connection.execute("PRAGMA page_count").fetchone()
    ledger._connection.execute(f"PRAGMA max_page_count = {pages}")
    long = EveningMissed(sample(EveningMissed).day, "asia", "x" * 20_000)

    with pytest.raises(DuskcheckError, match=r"writing to .* failed: database or disk is full\. Check the disk"):
        append(ledger, STOPPED, long)

    assert verify(path).entries == 1
    ledger._connection.execute("PRAGMA max_page_count = 1000")
    append(ledger, STOPPED, long)
    assert verify(path).entries == 3


def test_a_write_that_the_system_refuses_is_told_and_leaves_nothing_half_written(path, ledger, tmp_path):
    append(ledger, STOPPED)
    ledger.close()
    told = tmp_path / "told"

    script = """
import resource, sys
from pathlib import Path
from ledger_samples import NOON
from monitor.facts import DaemonStopped
from monitor.ledger.chain import Ledger
from monitor.words import DuskcheckError

path, told = map(Path, sys.argv[1:])
with Ledger.open(path) as ledger:
    resource.setrlimit(resource.RLIMIT_FSIZE, (path.stat().st_size,) * 2)
    try:
        with ledger.transaction(NOON) as transaction:
            transaction.append(DaemonStopped("x" * 200_000, 7))
    except DuskcheckError as error:
        told.write_text(str(error)[:path.stat().st_size], encoding="utf-8")
"""
    subprocess.run([sys.executable, "-c", script, path, told], check=True, env=environment())

    assert "Check the disk's free space" in told.read_text(encoding="utf-8")
    assert verify(path).problems == ()
    assert verify(path).entries == 1
