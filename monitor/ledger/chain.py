"""The ledger: entries are appended in synced transactions and never changed.

Only what is committed counts: a transaction that fails, or that a crash cuts off, leaves no trace. Every entry is
checked against its hash and the entry before whenever it is read.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType
from typing import Any

import rfc8785

from monitor import facts
from monitor.facts import ClockOdd, Entry, Fact
from monitor.ledger.disk import disk_errors, make_folder
from monitor.ledger.links import START, Head, Link, digest, link_after
from monitor.ledger.table import STATEMENTS, connect, fault_of_shape, is_blank, sqlite_errors
from monitor.words import Damaged, DuskcheckError

BATCH = 1000
ROWS = "SELECT seq, bytes, CAST(hash AS BLOB) FROM entries"


class Ledger:
    """One connection to a ledger file; use it in one thread and close it. Made by `Ledger.open`."""

    def __init__(self, path: Path, connection: sqlite3.Connection) -> None:
        self.path = path
        self._connection = connection
        self._known_to = 0

    @classmethod
    def open(cls, path: Path, create: bool = False) -> Ledger:
        """Open the ledger at `path`, or make an empty one there when `create` is set and there is none.

        Raises DuskcheckError when there is none, and Damaged when the file is not a ledger that this program made.
        """
        if create:
            with disk_errors(f"making the folder {path.parent}"):
                make_folder(path.parent)
        elif not path.exists():
            raise DuskcheckError(f"there is no ledger at {path}. It is made by the first check")
        with sqlite_errors(path, "opening"):
            connection = connect(path, "rwc" if create else "rw")
            try:
                _prepare(connection, path, create)
            except BaseException:
                connection.close()
                raise
        return cls(path, connection)

    def close(self) -> None:
        self._connection.close()

    def __enter__(self) -> Ledger:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def head(self) -> Head:
        """The newest entry's number and hash; `links.START` when there is none."""
        newest = self._newest()
        return newest.head if newest else START

    def holds(self, head: Head) -> bool:
        """Whether the entry of that number is there with that hash; always so for `links.START`."""
        rows = self._rows("SELECT CAST(hash AS BLOB) FROM entries WHERE seq = ?", (head.seq,))
        return head == START or (bool(rows) and rows[0][0] == head.hash.encode())

    def entries(self, after: int = 0, upto: int | None = None) -> Iterator[Entry]:
        """The entries with after < seq <= upto, in order; upto None: the newest when the reading begins.

        Raises Damaged at an entry that does not hold together, DuskcheckError at one of a kind this program does not
        know. No lock is held between entries.
        """
        last = self.head().seq if upto is None else upto
        before = self._head_at(after)
        while before.seq < last:
            rows = self._rows(f"{ROWS} WHERE seq > ? AND seq <= ? ORDER BY seq LIMIT ?", (before.seq, last, BATCH))
            if not rows:
                return
            for row in rows:
                link = self._link_after(before, row)
                yield self._decoded(link)
                before = link.head

    def entry(self, seq: int) -> Entry:
        """One entry. Raises DuskcheckError when the ledger does not hold it."""
        for entry in self.entries(seq - 1, seq):
            return entry
        raise self._absent(seq)

    def raw(self, seq: int) -> bytes:
        """The exact bytes of one entry, as they were hashed. Raises DuskcheckError when the ledger does not hold it."""
        rows = self._rows("SELECT bytes FROM entries WHERE seq = ?", (seq,))
        if not rows:
            raise self._absent(seq)
        data: bytes = rows[0][0]
        return data

    @contextmanager
    def transaction(self, now: datetime) -> Iterator[Transaction]:
        """Append entries that all bear the time `now` (with a zone), together or not at all; durable on leaving.

        When `now` lies before the newest entry's time, a ClockOdd fact comes first. Raises DuskcheckError when the
        ledger holds an entry that this program does not know, or the disk fails; then nothing is recorded.
        """
        with sqlite_errors(self.path, "writing to"):
            self._connection.execute("BEGIN IMMEDIATE")
        try:
            self._refuse_unknown()
            newest = self._newest()
            transaction = Transaction(self.path, self._connection, newest.head if newest else START, _text(now))
            if newest and newest.at > transaction.at:
                transaction.append(ClockOdd((_moment(newest.at) - _moment(transaction.at)).total_seconds()))
            yield transaction
            with sqlite_errors(self.path, "writing to"):
                self._connection.execute("COMMIT")
        except BaseException:
            # Some errors of SQLite end the transaction by themselves.
            if self._connection.in_transaction:
                self._connection.execute("ROLLBACK")
            raise

    def _newest(self) -> Link | None:
        rows = self._rows(f"{ROWS} ORDER BY seq DESC LIMIT 2")
        if not rows:
            return None
        return self._link_after(_head_of(rows[1]) if len(rows) == 2 else START, rows[0])

    def _head_at(self, seq: int) -> Head:
        if seq == 0:
            return START
        rows = self._rows(f"{ROWS} WHERE seq = ?", (seq,))
        if not rows:
            raise self._absent(seq)
        return _head_of(rows[0])

    def _rows(self, query: str, values: tuple[int, ...] = ()) -> list[Any]:
        with sqlite_errors(self.path, "reading"):
            return self._connection.execute(query, values).fetchall()

    def _link_after(self, before: Head, row: tuple[object, object, object]) -> Link:
        try:
            return link_after(before, *row)
        except Damaged as damage:
            raise Damaged(f"{self.path}: {damage}. `duskcheck ledger verify` says more") from None

    def _decoded(self, link: Link) -> Entry:
        try:
            fact = facts.decode(link.kind, link.v, link.body)
        except facts.UnknownFactError:
            raise self._unknown(link.seq, link.kind, link.v) from None
        except (KeyError, TypeError, ValueError, AttributeError):
            raise Damaged(f"{self.path}: entry {link.seq}: its body is not that of a {link.kind} fact") from None
        return Entry(link.seq, link.at, link.prev, link.hash, fact)

    def _refuse_unknown(self) -> None:
        kinds = self._rows(
            """SELECT min(seq), max(seq), json_extract(text, '$.kind') AS kind, json_extract(text, '$.v') AS v
            FROM (SELECT seq, iif(json_valid(CAST(bytes AS TEXT)), CAST(bytes AS TEXT), '{}') AS text
                  FROM entries WHERE seq > ?)
            GROUP BY kind, v""",
            (self._known_to,),
        )
        for first, _, kind, v in kinds:
            if not isinstance(kind, str) or not isinstance(v, int):
                raise Damaged(f"{self.path}: the bytes of entry {first} are not an entry's. Nothing was written")
            if kind not in facts.FACTS or v > facts.FACTS[kind].V:
                raise self._unknown(first, kind, v)
        self._known_to = max([self._known_to, *(last for _, last, _, _ in kinds)])

    def _absent(self, seq: int) -> DuskcheckError:
        return DuskcheckError(f"{self.path} holds no entry {seq}; its newest is {self.head().seq}")

    def _unknown(self, seq: int, kind: object, v: object) -> DuskcheckError:
        return DuskcheckError(
            f"{self.path}: entry {seq} is of kind {kind!r}, version {v}, which this version of duskcheck does not "
            "know. A newer one wrote it: use that one. Nothing was written"
        )


@dataclass
class Transaction:
    """What `Ledger.transaction` gives: the place to append facts. `at` is the time that its entries bear."""

    path: Path
    connection: sqlite3.Connection
    head: Head
    at: str

    @property
    def next_seq(self) -> int:
        """The number that the next entry will have."""
        return self.head.seq + 1

    def append(self, fact: Fact) -> Entry:
        """Add a fact as the next entry. Raises ValueError for one that could not be read back as it is."""
        if not self.connection.in_transaction:
            raise RuntimeError("this transaction has ended")
        body = facts.encode(fact)
        document: dict[str, Any] = {
            "seq": self.next_seq,
            "at": self.at,
            "kind": fact.KIND,
            "v": fact.V,
            "body": body,
            "prev": self.head.hash,
        }
        data = rfc8785.dumps(document)
        row = (self.next_seq, data, digest(data))
        link = link_after(self.head, row[0], row[1], row[2].encode())
        if facts.decode(link.kind, link.v, link.body) != fact:
            raise ValueError(f"a {fact.KIND} fact cannot be read back as it was given: {fact}")
        with sqlite_errors(self.path, "writing to"):
            self.connection.execute("INSERT INTO entries (seq, bytes, hash) VALUES (?, ?, ?)", row)
        entry = Entry(link.seq, link.at, link.prev, link.hash, fact)
        self.head = link.head
        return entry


def _prepare(connection: sqlite3.Connection, path: Path, create: bool) -> None:
    connection.execute("PRAGMA journal_mode = DELETE")
    connection.execute("PRAGMA synchronous = EXTRA")
    connection.execute("PRAGMA recursive_triggers = ON")  # otherwise INSERT OR REPLACE gets round the delete trigger
    connection.execute("PRAGMA foreign_keys = ON")
    connection.execute("PRAGMA trusted_schema = OFF")
    if create and is_blank(connection):
        connection.execute("BEGIN IMMEDIATE")
        if is_blank(connection):  # still, now that no other process can be making it
            for statement in STATEMENTS:
                connection.execute(statement)
        connection.execute("COMMIT")
    fault = fault_of_shape(connection)
    if fault:
        raise Damaged(f"{path} cannot be used as a ledger: {fault}")


def _head_of(row: tuple[int, bytes, bytes]) -> Head:
    return Head(row[0], row[2].decode(errors="replace"))


def _text(now: datetime) -> str:
    if now.tzinfo is None:
        raise ValueError("the time of an entry needs a zone")
    return now.astimezone(UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")


def _moment(at: str) -> datetime:
    return datetime.fromisoformat(at)
