"""Derived tables: each a pure fold of the ledger, kept in one SQLite file that may be thrown away at any time."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

from monitor.facts import Entry
from monitor.ledger.chain import Ledger
from monitor.ledger.disk import disk_errors, make_folder
from monitor.ledger.links import START, Head
from monitor.ledger.table import connect, is_damage, sqlite_errors

MARK = "CREATE TABLE mark (format TEXT NOT NULL, seq INTEGER NOT NULL, hash TEXT NOT NULL) STRICT"


@dataclass(frozen=True)
class Projection:
    """One fold: `tables` is the DDL of its own tables, `apply` takes in the next entry and touches only those.

    `apply` must depend on the entry and its tables alone, and must not commit. Raise `version` when it changes.
    """

    name: str
    version: int
    tables: str
    apply: Callable[[sqlite3.Connection, Entry], None]


class Index:
    """The derived tables of one site. Holds one connection: use it in one thread and close it."""

    def __init__(self, path: Path, projections: tuple[Projection, ...]) -> None:
        self.path = path
        self._projections = projections
        self._format = json.dumps([[part.name, part.version, part.tables] for part in projections])
        self._connection: sqlite3.Connection | None = None
        self._file: tuple[int, int] | None = None

    def close(self) -> None:
        if self._connection is not None:
            self._connection.close()
            self._connection = None

    def caught_up(self, ledger: Ledger) -> sqlite3.Connection:
        """The tables with every entry of the ledger folded in, for reading; valid until the next call or `close`.

        Built anew when the file is missing or broken, was made by other projections, or belongs to another ledger.
        """
        with sqlite_errors(self.path, "writing to"):
            try:
                return self._caught_up(ledger)
            except (sqlite3.DatabaseError, UnicodeDecodeError) as error:
                if not is_damage(error):
                    raise
                self._throw_away()
                return self._caught_up(ledger)

    def _caught_up(self, ledger: Ledger) -> sqlite3.Connection:
        connection = self._opened()
        head = ledger.head()
        if self._mark(connection, ledger) == head:
            return connection
        connection.execute("BEGIN IMMEDIATE")
        try:
            mark = self._mark(connection, ledger)  # another process may have folded meanwhile
            if mark is None:
                self._make_tables(connection)
                mark = START
            self._fold(connection, ledger, mark, head)
            connection.execute("COMMIT")
        except BaseException:
            if connection.in_transaction:
                connection.execute("ROLLBACK")
            raise
        return connection

    def _opened(self) -> sqlite3.Connection:
        # A file removed or replaced under an open connection would still be read, and its journal written beside
        # the new one.
        if self._connection is not None and self._file != _identity(self.path):
            self.close()
        if self._connection is None:
            with disk_errors(f"making the folder {self.path.parent}"):
                make_folder(self.path.parent)
            self._connection = connect(self.path, "rwc")
            self._connection.execute("PRAGMA journal_mode = DELETE")
            # A cache may be lost, but one that a power cut left half-written would be believed.
            self._connection.execute("PRAGMA synchronous = FULL")
            self._connection.execute("PRAGMA trusted_schema = OFF")
            (answer,) = self._connection.execute("PRAGMA quick_check(1)").fetchone()
            if answer != "ok":
                self._throw_away()
                return self._opened()
            self._file = _identity(self.path)
        return self._connection

    def _mark(self, connection: sqlite3.Connection, ledger: Ledger) -> Head | None:
        """How far the tables were folded; None when they must be built anew."""
        if connection.execute("SELECT 1 FROM sqlite_schema WHERE name = 'mark'").fetchone() is None:
            return None
        rows = connection.execute("SELECT format, seq, hash FROM mark").fetchall()
        if len(rows) != 1 or rows[0][0] != self._format:
            return None
        mark = Head(rows[0][1], rows[0][2])
        return mark if ledger.holds(mark) else None

    def _make_tables(self, connection: sqlite3.Connection) -> None:
        old = connection.execute(
            "SELECT type, name FROM sqlite_schema WHERE type IN ('table', 'view') AND substr(name, 1, 7) <> 'sqlite_'"
        ).fetchall()
        for kind, name in old:
            connection.execute(f'DROP {kind} "{name}"')
        connection.execute(MARK)
        connection.execute("INSERT INTO mark VALUES (?, ?, ?)", (self._format, START.seq, START.hash))
        for projection in self._projections:
            for statement in _statements(projection.tables):
                connection.execute(statement)

    def _fold(self, connection: sqlite3.Connection, ledger: Ledger, mark: Head, head: Head) -> None:
        for entry in ledger.entries(mark.seq, head.seq):
            for projection in self._projections:
                projection.apply(connection, entry)
            mark = Head(entry.seq, entry.hash)
        connection.execute("UPDATE mark SET seq = ?, hash = ?", (mark.seq, mark.hash))

    def _throw_away(self) -> None:
        self.close()
        with disk_errors(f"removing {self.path}"):
            self.path.unlink(missing_ok=True)
            self.path.with_name(f"{self.path.name}-journal").unlink(missing_ok=True)


def _identity(path: Path) -> tuple[int, int] | None:
    try:
        found = path.stat()
    except FileNotFoundError:
        return None
    return found.st_dev, found.st_ino


def _statements(ddl: str) -> Iterator[str]:
    """The statements of a script one by one, for sqlite3's own executescript would commit the transaction."""
    statement = ""
    for piece in ddl.split(";"):
        statement += piece + ";"
        if sqlite3.complete_statement(statement):
            if statement.strip() != ";":
                yield statement
            statement = ""
