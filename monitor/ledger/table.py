"""The ledger's one table, which never changes its shape, and SQLite's troubles in plain words.

The triggers stop accidents: an update, a removal, a replacement, a gap, a fork. Whoever owns the file can remove
them; tampering is found by the chain of hashes and not here.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator
from contextlib import closing, contextmanager
from functools import cache
from pathlib import Path

from monitor.ledger.links import START
from monitor.words import Busy, Damaged, DuskcheckError

APPLICATION_ID = int.from_bytes(b"dusk")
FORMAT = 1
WAIT_SECONDS = 30

# Not to be touched, not even a blank: every ledger carries this very text, and is compared with it.
STATEMENTS = (
    "CREATE TABLE entries (seq INTEGER PRIMARY KEY, bytes BLOB NOT NULL, hash TEXT NOT NULL) STRICT",
    """CREATE TRIGGER entries_are_not_updated BEFORE UPDATE ON entries
    BEGIN SELECT RAISE(ABORT, 'an entry of the ledger is never changed'); END""",
    """CREATE TRIGGER entries_are_not_deleted BEFORE DELETE ON entries
    BEGIN SELECT RAISE(ABORT, 'an entry of the ledger is never removed'); END""",
    # Canonical JSON sorts the keys, so that prev, seq and v stand side by side at the end of the bytes. SQLite's JSON
    # functions would say it better, but 3.40 forbids them in triggers under trusted_schema = OFF.
    f"""CREATE TRIGGER entries_follow_the_newest BEFORE INSERT ON entries
    WHEN NEW.seq IS NOT (SELECT coalesce(max(seq), 0) + 1 FROM entries)
    OR instr(NEW.bytes, CAST(',"prev":"'
    || coalesce((SELECT hash FROM entries WHERE seq = NEW.seq - 1), '{START.hash}')
    || '","seq":' || NEW.seq || ',"v":' AS BLOB)) = 0
    BEGIN SELECT RAISE(ABORT, 'an entry of the ledger follows the newest one and names its hash'); END""",
    f"PRAGMA application_id = {APPLICATION_ID}",
    f"PRAGMA user_version = {FORMAT}",
)


def connect(path: Path, mode: str) -> sqlite3.Connection:
    """Open a database file; mode is SQLite's ro, rw or rwc. Transactions are begun and ended by hand."""
    where = f"{path.absolute().as_uri()}?mode={mode}"
    return sqlite3.connect(where, uri=True, isolation_level=None, timeout=WAIT_SECONDS)


def is_blank(connection: sqlite3.Connection) -> bool:
    """Whether nothing was ever committed to the file: it is new, or a crash cut off its making."""
    (objects,) = connection.execute("SELECT count(*) FROM sqlite_schema").fetchone()
    (mark,) = connection.execute("PRAGMA application_id").fetchone()
    return (objects, mark) == (0, 0)


def fault_of_shape(connection: sqlite3.Connection) -> str | None:
    """What differs from the ledger's shape, in words; None when nothing does."""
    (mark,) = connection.execute("PRAGMA application_id").fetchone()
    if mark != APPLICATION_ID:
        return "it is not a ledger of duskcheck"
    (version,) = connection.execute("PRAGMA user_version").fetchone()
    if version != FORMAT:
        return f"its format is {version}, and this program knows format {FORMAT}"
    differing = sorted(dict(_objects(connection) ^ _model()))
    if differing:
        return f"its table or its triggers were altered ({', '.join(differing)})"
    return None


@cache
def _model() -> set[tuple[str, str]]:
    with closing(sqlite3.connect(":memory:", isolation_level=None)) as connection:
        for statement in STATEMENTS:
            connection.execute(statement)
        return _objects(connection)


def _objects(connection: sqlite3.Connection) -> set[tuple[str, str]]:
    rows = connection.execute("SELECT name, sql FROM sqlite_schema WHERE substr(name, 1, 7) <> 'sqlite_'")
    return {(_text(name), _text(sql)) for name, sql in rows}


def _text(value: str | bytes) -> str:
    return value.decode(errors="replace") if isinstance(value, bytes) else value


def is_damage(error: Exception) -> bool:
    """Whether SQLite says that the file itself is broken, be it with a message that quotes broken text."""
    return isinstance(error, UnicodeDecodeError) or _code(error) in (sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB)


@contextmanager
def sqlite_errors(path: Path, doing: str) -> Iterator[None]:
    """Turn what can go wrong with the file into a DuskcheckError; a defect of the program passes through."""
    try:
        yield
    except (sqlite3.Error, UnicodeDecodeError) as error:
        if is_damage(error):
            raise Damaged(f"{path} is damaged: {error}. Keep the file as it is and go back to a backup") from error
        if _code(error) in (sqlite3.SQLITE_BUSY, sqlite3.SQLITE_LOCKED):
            raise Busy(f"{doing} {path} failed: another process is using it. Try again") from error
        if _code(error) in _OF_THE_DISK:
            raise DuskcheckError(
                f"{doing} {path} failed: {error}. Check the disk's free space and permissions, then run the command "
                "again: it goes on from what is recorded"
            ) from error
        raise


_OF_THE_DISK = (
    sqlite3.SQLITE_FULL,
    sqlite3.SQLITE_IOERR,
    sqlite3.SQLITE_CANTOPEN,
    sqlite3.SQLITE_READONLY,
    sqlite3.SQLITE_PERM,
    sqlite3.SQLITE_NOLFS,
    sqlite3.SQLITE_TOOBIG,
)


def _code(error: Exception) -> int:
    # The low byte is the kind of error, the rest its variety. An error raised by Python's module itself has none.
    code: int = getattr(error, "sqlite_errorcode", 0)
    return code & 0xFF
