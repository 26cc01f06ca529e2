"""What `verify` finds: every way in which a stored ledger or its archive can have been altered."""

from __future__ import annotations

import json
import os
import shutil
import sqlite3
import subprocess
import sys
from contextlib import closing
from dataclasses import fields, is_dataclass
from pathlib import Path
from typing import get_args, get_type_hints

import pytest
import rfc8785
from ledger_samples import environment, every_blob, every_fact, make_archive, make_ledger, rows_of, tampering

from monitor.facts import FACTS, NoticeSent
from monitor.ledger.chain import Ledger
from monitor.ledger.links import START, Head, digest
from monitor.ledger.verify import BLOB_FIELDS, verify
from monitor.words import DuskcheckError


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("made")
    make_ledger(folder / "ledger.sqlite", every_fact())
    make_archive(folder / "archive")
    return folder


@pytest.fixture
def path(made: Path, tmp_path: Path) -> Path:
    return Path(shutil.copy(made / "ledger.sqlite", tmp_path))


def first_problem(path: Path, head: Head | None = None) -> str:
    return verify(path, head=head).problems[0]


def test_a_sound_ledger_of_every_kind_and_its_archive(made):
    archive = make_archive(made / "archive")
    with Ledger.open(made / "ledger.sqlite") as ledger:
        head = ledger.head()

    report = verify(made / "ledger.sqlite", archive, head)

    assert report.problems == ()
    assert report.sound
    assert report.entries == len(FACTS) == report.head.seq
    assert report.head == head


@pytest.mark.parametrize("first", range(0, len(FACTS), 3))
def test_any_flipped_byte_of_a_stored_entry_is_found_with_its_number(tmp_path, first):
    """Flipped in the file itself, so that no part of the program helps; one bit a byte, another in turn.

    Every kind is in one of several short ledgers: in a long one each flip would verify all entries before it again.
    """
    path = tmp_path / "ledger.sqlite"
    make_ledger(path, every_fact()[first : first + 3])
    stored = path.read_bytes()
    with path.open("r+b", buffering=0) as file:
        for seq, data, sha in rows_of(path):
            record = data + sha.encode()  # SQLite stores the columns of a row side by side
            start = stored.index(record)
            for place in range(start, start + len(record)):
                os.pwrite(file.fileno(), bytes([stored[place] ^ 1 << place % 8]), place)
                report = verify(path)
                os.pwrite(file.fileno(), stored[place : place + 1], place)
                assert report.problems[0].startswith(f"entry {seq}: "), (seq, place - start, report.problems)
                assert report.entries == seq - 1

    assert verify(path).problems == ()


def test_a_flipped_byte_anywhere_in_the_file_is_never_a_traceback_nor_another_answer(path):
    stored = path.read_bytes()
    sound = rows_of(path)
    found = 0
    with path.open("r+b", buffering=0) as file:
        for place in [*range(100), *range(100, len(stored), 23)]:
            os.pwrite(file.fileno(), bytes([stored[place] ^ 0xFF]), place)
            try:
                report = verify(path)
            except DuskcheckError:
                report = None
            if report is None or not report.sound:
                found += 1
            else:
                assert rows_of(path) == sound
            os.pwrite(file.fileno(), stored[place : place + 1], place)

    assert found > 100


def test_an_entry_removed_from_the_middle(path):
    with tampering(path) as connection:
        connection.execute("DELETE FROM entries WHERE seq = 4")

    assert first_problem(path) == "entry 4 is missing: in its place stands one numbered 5"
    assert verify(path).entries == 3


def test_an_entry_removed_and_the_later_ones_moved_up(path):
    with tampering(path) as connection:
        connection.execute("DELETE FROM entries WHERE seq = 4")
        connection.execute("UPDATE entries SET seq = seq - 1 WHERE seq > 4")

    assert first_problem(path) == "entry 4: its bytes say that it is entry 5"


def test_the_first_entry_removed(path):
    with tampering(path) as connection:
        connection.execute("DELETE FROM entries WHERE seq = 1")

    assert first_problem(path) == "entry 1 is missing: in its place stands one numbered 2"


def test_two_entries_swapped(path):
    rows = rows_of(path)
    with tampering(path) as connection:
        for seq, (_, data, sha) in ((5, rows[5]), (6, rows[4])):
            connection.execute("UPDATE entries SET bytes = ?, hash = ? WHERE seq = ?", (data, sha, seq))

    assert first_problem(path) == "entry 5: its bytes say that it is entry 6"


def test_an_entry_inserted(path):
    """The forged one follows the third as it should; the old fourth, moved down, gives it away."""
    rows = rows_of(path)
    forged = rewritten(rows[3][1], at="2026-03-02T12:00:02.500Z")
    with tampering(path) as connection:
        connection.execute("UPDATE entries SET seq = -seq - 1 WHERE seq > 3")
        connection.execute("UPDATE entries SET seq = -seq WHERE seq < 0")
        connection.execute("INSERT INTO entries VALUES (4, ?, ?)", (forged, digest(forged)))

    assert first_problem(path) == "entry 5: its bytes say that it is entry 4"


@pytest.mark.parametrize("seq", [0, -3])
def test_an_entry_put_before_the_first(path, seq):
    with tampering(path) as connection:
        connection.execute("INSERT INTO entries SELECT ?, bytes, hash FROM entries WHERE seq = 1", (seq,))

    assert first_problem(path) == f"entry 1 is missing: in its place stands one numbered {seq}"


def rewritten(data: bytes, **changes: object) -> bytes:
    return rfc8785.dumps({**json.loads(data), **changes})


def replace(path: Path, seq: int, data: bytes) -> None:
    with tampering(path) as connection:
        connection.execute("UPDATE entries SET bytes = ?, hash = ? WHERE seq = ?", (data, digest(data), seq))


def test_an_entry_rewritten_with_its_hash_breaks_the_one_after(path):
    replace(path, 3, rewritten(rows_of(path)[2][1], at="2020-01-01T00:00:00.000Z"))

    assert first_problem(path).startswith("entry 4: it follows an entry with the hash ")
    assert verify(path).entries == 3


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"prev": "f" * 64}, "it follows an entry with the hash f"),
        ({"seq": 9}, "its bytes say that it is entry 9"),
        ({"v": "1"}, "its bytes are not {seq, at, kind, v, body, prev}"),
        ({"seq": True}, "its bytes are not {seq"),
        ({"at": "yesterday"}, "its bytes are not {seq"),
        ({"more": 1}, "its bytes are not {seq"),
        ({"body": {}}, "its body is not that of a "),
    ],
)
def test_an_entry_rewritten_wrongly_although_its_hash_is_right(path, change, message):
    replace(path, 3, rewritten(rows_of(path)[2][1], **change))

    assert first_problem(path).startswith(f"entry 3: {message}")


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        (b'{"at":', b'{ "at":', "not canonical JSON"),
        (b'{"at":', b'{"\\u0061t":', "not canonical JSON"),
        (b'"v":1}', b'"v":1,"v":1}', "not canonical JSON"),
        (b'"v":1}', b'"v":1', "not JSON"),
        (b'"kind":"', b'"kind":"\xff', "not JSON"),
    ],
)
def test_bytes_that_are_not_canonical_json(path, old, new, message):
    replace(path, 3, rows_of(path)[2][1].replace(old, new))

    assert first_problem(path).startswith("entry 3: its bytes are ")
    assert message in first_problem(path)


def test_json_nested_too_deeply_is_no_traceback(path):
    replace(path, 3, b"[" * 200_000)

    assert first_problem(path) == "entry 3: its bytes are not JSON"


def test_a_lost_tail_is_seen_with_the_head_of_an_old_notice_and_only_then(path):
    *_, (seq, _, sha) = rows_of(path)
    with tampering(path) as connection:
        connection.execute("DELETE FROM entries WHERE seq > ?", (seq - 2,))

    assert verify(path).problems == ()
    assert "without a witness" in verify(path).notes[0]
    assert first_problem(path, Head(seq, sha)) == (
        f"the newest entries are lost: the ledger ends at entry {seq - 2}, but the head given is that of entry {seq}"
    )


def test_a_tail_written_anew_is_seen_with_the_head_of_an_old_notice(path):
    *_, (seq, data, sha) = rows_of(path)
    replace(path, seq, rewritten(data, at="2020-01-01T00:00:00.000Z"))

    assert verify(path).problems == ()
    assert first_problem(path, Head(seq, sha)).startswith(f"entry {seq}: its hash is ")
    assert sha in first_problem(path, Head(seq, sha))


def test_a_witness_of_an_earlier_entry_says_how_far_it_goes(path):
    seq, _, sha = rows_of(path)[4]

    report = verify(path, head=Head(seq, sha.upper()))

    assert report.problems == ()
    assert report.notes == ("the head given bears witness up to entry 5; a loss of later entries cannot be seen",)
    assert verify(path, head=Head(0, "f" * 64)).problems
    assert verify(path, head=Head(-1, sha)).problems


def test_the_archive_s_altered_and_missing_files_are_named(path, tmp_path):
    archive = make_archive(tmp_path / "archive")
    altered, missing, *_ = hashes = [digest(data) for data in every_blob()]
    assert len(hashes) >= 10
    archive.path(altered).write_bytes(archive.path(hashes[2]).read_bytes())
    archive.path(missing).unlink()

    problems = verify(path, archive).problems

    assert len(problems) == 2
    assert problems[0].startswith(f"{archive.path(altered)} was altered")
    assert altered in problems[0]
    assert "first named by entry 2, settings.adopted" in problems[0]
    assert problems[1].startswith(f"{archive.path(missing)} is missing")
    assert verify(path).problems == ()


def test_every_blob_that_a_fact_names_is_looked_for(path, tmp_path):
    for data in every_blob():
        archive = make_archive(tmp_path / "archive")
        archive.path(digest(data)).unlink()

        (problem,) = verify(path, archive).problems

        assert digest(data) in problem


# Fields of text that are no blob's hash. A new field stands here or in BLOB_FIELDS; `inputs` digests what the recipe
# and the files say, `after_hash` is an entry's.
PLAIN_FIELDS = set(
    """
    after_hash base_currency book changes channel counts currency excess expected file found host id inputs key login
    name next_try owner person program reason receipt remedy round rule site source subject title topic versions
    """.split()
)


def test_every_text_field_of_a_fact_is_known_to_hold_a_blob_s_hash_or_not():
    found: set[str] = set()

    def walk(kind: type) -> None:
        for field in fields(kind):
            hint = get_type_hints(kind)[field.name]
            for part in (hint, *get_args(hint)):
                if is_dataclass(part):
                    walk(part)
                elif part is str:
                    found.add(field.name)

    for kind in FACTS.values():
        walk(kind)

    assert found - PLAIN_FIELDS == BLOB_FIELDS & found
    assert not PLAIN_FIELDS & BLOB_FIELDS


def test_a_value_that_only_looks_like_a_hash_is_not_looked_for(tmp_path):
    make_ledger(tmp_path / "ledger.sqlite", [NoticeSent("n", 1, "a" * 64)])

    assert verify(tmp_path / "ledger.sqlite", make_archive(tmp_path / "archive")).problems == ()


def test_a_truncated_file_is_damage(path):
    with path.open("r+b") as file:
        file.truncate(path.stat().st_size - 5000)

    report = verify(path)

    assert "database disk image is malformed" in report.problems[0]


def test_a_file_that_is_no_database_is_damage(path):
    path.write_bytes(b"x" * 8192)

    assert "file is not a database" in first_problem(path)


def test_a_table_of_another_shape_is_damage(path):
    with closing(sqlite3.connect(path)) as connection:
        connection.execute("ALTER TABLE entries RENAME TO things")

    problems = verify(path).problems

    assert "altered" in problems[0]
    assert "no such table" in problems[1]


def test_no_ledger_at_all(tmp_path):
    report = verify(tmp_path / "ledger.sqlite", head=START)

    assert report.problems == (f"there is no ledger at {tmp_path / 'ledger.sqlite'}",)


def test_verifying_writes_nothing(path):
    before = path.read_bytes(), path.stat().st_mtime_ns
    verify(path)

    assert (path.read_bytes(), path.stat().st_mtime_ns) == before
    assert [file.name for file in path.parent.iterdir()] == [path.name]


def loaded_after(statement: str) -> set[str]:
    script = f"import sys; {statement}; print(*sys.modules)"
    run = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True, env=environment())
    return {name.partition(".")[0] for name in run.stdout.split()}


def test_importing_the_verifier_loads_the_standard_library_alone():
    # What the installation loads into every interpreter is not ours.
    ours = loaded_after("import monitor.ledger.verify") - loaded_after("pass")

    assert ours - sys.stdlib_module_names == {"monitor"}
