"""Derived tables: equal to a fold of the whole ledger, whatever happened to their file."""

from __future__ import annotations

import shutil
import sqlite3
from contextlib import closing
from dataclasses import replace
from datetime import timedelta
from pathlib import Path

import pytest
from ledger_samples import NOON, every_fact, make_ledger, rows_of, tampering

from monitor.facts import DaemonStopped, Entry
from monitor.ledger.chain import Ledger
from monitor.ledger.index import Index, Projection
from monitor.words import Damaged

STOPPED = DaemonStopped("asked to stop", 7)


def count_kinds(connection: sqlite3.Connection, entry: Entry) -> None:
    connection.execute(
        "INSERT INTO kinds VALUES (?, 1) ON CONFLICT (kind) DO UPDATE SET times = times + 1", (entry.fact.KIND,)
    )


def keep_stops(connection: sqlite3.Connection, entry: Entry) -> None:
    if isinstance(entry.fact, DaemonStopped):
        connection.execute("INSERT INTO stops VALUES (?, ?)", (entry.seq, entry.fact.reason))


KINDS = Projection("kinds", 1, "CREATE TABLE kinds (kind TEXT PRIMARY KEY, times INTEGER NOT NULL) STRICT", count_kinds)
STOPS = Projection(
    "stops",
    1,
    """
    CREATE TABLE stops (seq INTEGER PRIMARY KEY, reason TEXT NOT NULL DEFAULT 'a;b') STRICT;
    CREATE INDEX stops_by_reason ON stops (reason);
    CREATE VIEW last_stop AS SELECT max(seq) AS seq FROM stops;
    """,
    keep_stops,
)


@pytest.fixture
def ledger(tmp_path: Path):
    make_ledger(tmp_path / "ledger.sqlite", every_fact())
    with Ledger.open(tmp_path / "ledger.sqlite") as ledger:
        yield ledger


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "index" / "index.sqlite"


@pytest.fixture
def index(path: Path):
    with closing(Index(path, (KINDS, STOPS))) as index:
        yield index


def append(ledger: Ledger, times: int = 1) -> None:
    with ledger.transaction(NOON + timedelta(hours=1)) as transaction:
        for _ in range(times):
            transaction.append(STOPPED)


def dump(connection: sqlite3.Connection) -> list[str]:
    return list(connection.iterdump())


def rebuilt(ledger: Ledger, tmp_path: Path, *projections: Projection) -> list[str]:
    shutil.rmtree(tmp_path / "rebuilt", ignore_errors=True)
    with closing(Index(tmp_path / "rebuilt" / "index.sqlite", projections or (KINDS, STOPS))) as index:
        return dump(index.caught_up(ledger))


def test_catching_up_bit_by_bit_equals_building_anew(ledger, index, tmp_path):
    for times in (1, 3, 0, 2):
        append(ledger, times)
        assert dump(index.caught_up(ledger)) == rebuilt(ledger, tmp_path)

    tables = index.caught_up(ledger)
    assert tables.execute("SELECT times FROM kinds WHERE kind = 'daemon.stopped'").fetchone() == (7,)
    assert tables.execute("SELECT seq FROM last_stop").fetchone() == (ledger.head().seq,)


def test_each_entry_is_folded_once(ledger, path):
    seen = []
    once = Projection("once", 1, "CREATE TABLE once (x)", lambda _, entry: seen.append(entry.seq))
    with closing(Index(path, (once,))) as index:
        index.caught_up(ledger)
        index.caught_up(ledger)
        append(ledger)
        index.caught_up(ledger)
    with closing(Index(path, (once,))) as index:
        index.caught_up(ledger)

    assert seen == list(range(1, ledger.head().seq + 1))


def test_an_empty_ledger_gives_empty_tables(tmp_path, index):
    with Ledger.open(tmp_path / "empty.sqlite", create=True) as ledger:
        assert index.caught_up(ledger).execute("SELECT * FROM kinds").fetchall() == []
        assert dump(index.caught_up(ledger)) == rebuilt(ledger, tmp_path)


def test_a_deleted_file_is_made_again_also_under_an_open_index(ledger, index, path, tmp_path):
    index.caught_up(ledger)
    path.unlink()
    append(ledger)

    assert dump(index.caught_up(ledger)) == rebuilt(ledger, tmp_path)
    assert path.exists()


@pytest.mark.parametrize("damage", ["no database", "empty", "half", "inside"])
def test_a_broken_file_is_made_again(ledger, index, path, tmp_path, damage):
    # The page of a table that catching up does not read when nothing is new.
    (page,) = index.caught_up(ledger).execute("SELECT rootpage FROM sqlite_schema WHERE name = 'stops'").fetchone()
    index.close()
    data = path.read_bytes()
    start = (page - 1) * 4096
    broken = {
        "no database": b"x" * 5000,
        "empty": b"",
        "half": data[: len(data) // 2],
        "inside": data[:start] + b"\xff" * 4096 + data[start + 4096 :],
    }
    path.write_bytes(broken[damage])

    assert dump(index.caught_up(ledger)) == rebuilt(ledger, tmp_path)


@pytest.mark.parametrize(
    "projections",
    [
        (KINDS,),
        (replace(KINDS, version=2), STOPS),
        (replace(KINDS, name="sorts"), STOPS),
        (KINDS, replace(STOPS, tables=STOPS.tables.replace("last_stop", "newest_stop"))),
    ],
)
def test_another_format_is_made_anew(ledger, index, path, tmp_path, projections):
    index.caught_up(ledger)

    with closing(Index(path, projections)) as other:
        assert dump(other.caught_up(ledger)) == rebuilt(ledger, tmp_path, *projections)

    assert dump(index.caught_up(ledger)) == rebuilt(ledger, tmp_path)


def test_the_tables_of_another_ledger_are_made_anew(ledger, index, tmp_path):
    append(ledger, 3)
    index.caught_up(ledger)

    # A backup from before the last entries, which then went on differently; and one that is merely shorter.
    make_ledger(tmp_path / "other.sqlite", [*every_fact(), *[DaemonStopped("otherwise", 8)] * 4])
    make_ledger(tmp_path / "shorter.sqlite", every_fact())
    for name in ("other", "shorter"):
        with Ledger.open(tmp_path / f"{name}.sqlite") as restored:
            assert dump(index.caught_up(restored)) == rebuilt(restored, tmp_path)


def test_a_fold_that_fails_leaves_the_tables_as_they_were(ledger, index, path, tmp_path):
    before = dump(index.caught_up(ledger))
    append(ledger, 3)
    times = 0

    def fails(connection: sqlite3.Connection, entry: Entry) -> None:
        nonlocal times
        count_kinds(connection, entry)
        times += 1
        if times == 2:
            raise ZeroDivisionError

    with closing(Index(path, (replace(KINDS, apply=fails), STOPS))) as other, pytest.raises(ZeroDivisionError):
        other.caught_up(ledger)

    with closing(sqlite3.connect(path)) as connection:
        assert dump(connection) == before
    assert dump(index.caught_up(ledger)) == rebuilt(ledger, tmp_path)


def test_a_damaged_ledger_is_told_and_not_folded(ledger, index, path):
    before = dump(index.caught_up(ledger))
    append(ledger, 2)
    with tampering(ledger.path) as connection:
        seq = rows_of(ledger.path)[-2][0]
        connection.execute(
            "UPDATE entries SET bytes = CAST(replace(bytes, 'asked', 'Asked') AS BLOB) WHERE seq = ?", (seq,)
        )

    with pytest.raises(Damaged, match=f"entry {seq}:"):
        index.caught_up(ledger)

    with closing(sqlite3.connect(path)) as connection:
        assert dump(connection) == before
