"""Whether the record still is what was written: the chain, a witness of it, and the files it names.

Reads the stored bytes alone: neither the triggers nor the derived tables count for anything here. Imports the standard
library only, but for the check that the bytes are canonical.
"""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Iterator
from contextlib import closing
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from monitor import facts
from monitor.ledger.archive import SHA256, Archive
from monitor.ledger.links import START, Head, Link, link_after
from monitor.ledger.table import connect, fault_of_shape, sqlite_errors
from monitor.words import Damaged

BATCH = 1000
LOWEST = -(2**63)
SAFE = 2**53

# The fields, in whatever fact, that hold the SHA-256 of a blob in the archive. Chosen by name, for other text (a value
# found in a file, a server's receipt) may look like a hash.
BLOB_FIELDS = frozenset({"content", "results", "rules", "sessions", "settings", "sha256", "was"})


@dataclass(frozen=True)
class Report:
    """entries, head: how many entries from the first on are sound, and the last of them. notes: what to know beside."""

    entries: int
    head: Head
    problems: tuple[str, ...]
    notes: tuple[str, ...]

    @property
    def sound(self) -> bool:
        return not self.problems


@dataclass
class _Reading:
    """What was found so far: `named` is the first entry that names each blob."""

    witness: Head | None
    head: Head = START
    witnessed: bool = False
    named: dict[str, Link] = field(default_factory=dict)
    unknown: set[tuple[str, int]] = field(default_factory=set)
    problems: list[str] = field(default_factory=list)


def verify(ledger_path: Path, archive: Archive | None = None, head: Head | None = None) -> Report:
    """Check every entry, stopping at the first broken one, and every file that the sound entries name.

    archive: None leaves the files out. head: seq and hash as an old notice or the heads file gives them; without it
    the loss of the newest entries cannot be seen. Raises DuskcheckError only for what is no damage: the file is in use,
    or the disk or the permissions forbid reading it.
    """
    reading = _Reading(head)
    if ledger_path.exists():
        _read_ledger(ledger_path, reading)
    else:
        reading.problems.append(f"there is no ledger at {ledger_path}")
    if archive is not None:
        for sha, problem in archive.check(reading.named):
            first = reading.named[sha]
            reading.problems.append(f"{problem} (first named by entry {first.seq}, {first.kind})")
    return Report(reading.head.seq, reading.head, tuple(reading.problems), tuple(_notes(reading)))


def named_blobs(body: facts.Body) -> Iterator[str]:
    """The hashes of the archive's blobs that an entry's body names, whatever its kind and version."""
    return _blobs("", body)


def _blobs(name: str, value: Any) -> Iterator[str]:
    if isinstance(value, dict):
        for key, item in value.items():
            yield from _blobs(key, item)
    elif isinstance(value, list):
        for item in value:
            yield from _blobs(name, item)
    elif name in BLOB_FIELDS and isinstance(value, str) and SHA256.fullmatch(value):
        yield value


def _read_ledger(path: Path, reading: _Reading) -> None:
    try:
        with sqlite_errors(path, "reading"), closing(_open(path)) as connection:
            fault = fault_of_shape(connection)
            if fault:
                reading.problems.append(f"{path}: {fault}")
            _read_chain(connection, reading)
            for (complaint,) in connection.execute("PRAGMA integrity_check(1)"):
                if complaint != b"ok":
                    reading.problems.append(f"{path} is damaged: {complaint.decode(errors='replace')}")
    except Damaged as damage:
        reading.problems.append(f"{damage} (after entry {reading.head.seq})")
    except sqlite3.Error as error:
        # The queries here are fixed, and a sound ledger answers them.
        reading.problems.append(f"{path} is damaged: {error} (after entry {reading.head.seq})")


def _open(path: Path) -> sqlite3.Connection:
    """Open for reading. Where a crash left a transaction half-done, SQLite must first be let roll it back."""
    connection = connect(path, "ro")
    try:
        connection.execute("SELECT 1 FROM sqlite_schema").fetchone()
    except sqlite3.Error as error:
        connection.close()
        if getattr(error, "sqlite_errorcode", 0) != sqlite3.SQLITE_READONLY_ROLLBACK:
            raise
        connection = connect(path, "rw")
        connection.execute("PRAGMA query_only = ON")
    connection.text_factory = bytes  # damaged text may not be UTF-8
    return connection


def _read_chain(connection: sqlite3.Connection, reading: _Reading) -> None:
    _compare_witness(reading)
    try:
        for row in _rows(connection):
            link = link_after(reading.head, *row)
            _check_meaning(link, row[1], reading)
            reading.head = link.head
            _compare_witness(reading)
            for sha in named_blobs(link.body):
                reading.named.setdefault(sha, link)
    except Damaged as damage:
        reading.problems.append(str(damage))
        return
    if reading.witness and not reading.witnessed:
        reading.problems.append(
            f"the newest entries are lost: the ledger ends at entry {reading.head.seq}, but the head given is that of "
            f"entry {reading.witness.seq}"
        )


def _rows(connection: sqlite3.Connection) -> Iterator[tuple[Any, Any, Any]]:
    # In batches, so that a long verification does not keep the evening from writing.
    start = LOWEST
    while rows := connection.execute(
        "SELECT seq, bytes, hash FROM entries WHERE seq >= ? ORDER BY seq LIMIT ?", (start, BATCH)
    ).fetchall():
        yield from rows
        start = rows[-1][0] + 1


def _compare_witness(reading: _Reading) -> None:
    witness, head = reading.witness, reading.head
    if witness is None or witness.seq != head.seq:
        return
    reading.witnessed = True
    if witness.hash.lower() != head.hash:
        reading.problems.append(
            f"entry {head.seq}: its hash is {head.hash}, but the head given says {witness.hash}: this entry or one "
            "before it was written anew"
        )


def _check_meaning(link: Link, data: bytes, reading: _Reading) -> None:
    if not _is_canonical(data):
        raise Damaged(f"entry {link.seq}: its bytes are not canonical JSON (RFC 8785)")
    try:
        facts.decode(link.kind, link.v, link.body)
    except facts.UnknownFactError:
        reading.unknown.add((link.kind, link.v))
    except (KeyError, TypeError, ValueError, AttributeError):
        raise Damaged(f"entry {link.seq}: its body is not that of a {link.kind} fact") from None


def _is_canonical(data: bytes) -> bool:
    import rfc8785

    try:
        return rfc8785.dumps(json.loads(data, parse_int=_number)) == data
    except rfc8785.CanonicalizationError:
        return False


def _number(text: str) -> int | float:
    # RFC 8785 writes 1e20 with all its digits, so a long whole number was a float.
    number = int(text)
    return number if abs(number) < SAFE else float(text)


def _notes(reading: _Reading) -> Iterator[str]:
    for kind, v in sorted(reading.unknown):
        yield (
            f"this version of duskcheck does not know the kind {kind!r}, version {v}: such entries hold together, but "
            "what they say was not checked"
        )
    if reading.witness is None:
        yield (
            "without a witness (--head with the number and hash in an old notice) nobody can see from the ledger alone "
            "whether its newest entries are lost or all of it was written anew"
        )
    else:
        yield f"the head given bears witness up to entry {reading.witness.seq}; a loss of later entries cannot be seen"
