"""What is known: the files accepted and refused, folded from the ledger, and the view of them at one sequence."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterable
from dataclasses import dataclass
from datetime import date

from monitor.facts import Entry, FileAccepted, FileRefused, UsedFile
from monitor.words import FileKind

TABLES = """
CREATE TABLE accepted (
    seq INTEGER PRIMARY KEY, name TEXT, kind TEXT, source TEXT, day TEXT, sha256 TEXT, first TEXT, last TEXT) STRICT;
CREATE INDEX accepted_identity ON accepted (kind, day, source, seq);
CREATE TABLE refused (
    seq INTEGER PRIMARY KEY, name TEXT, kind TEXT, source TEXT, day TEXT, sha256 TEXT, reason TEXT) STRICT;
CREATE INDEX refused_name ON refused (name, sha256);
CREATE INDEX refused_day ON refused (day);
"""


def record(index: sqlite3.Connection, entry: Entry) -> None:
    """Fold one ledger entry into the tables."""
    fact = entry.fact
    if isinstance(fact, FileAccepted):
        index.execute(
            "INSERT INTO accepted VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
            (
                entry.seq,
                fact.name,
                fact.file,
                fact.source,
                _text(fact.day),
                fact.sha256,
                *map(_text, (fact.first, fact.last)),
            ),
        )
    elif isinstance(fact, FileRefused):
        reason = str(fact.findings[0]) if fact.findings else "refused"
        index.execute(
            "INSERT INTO refused VALUES (?, ?, ?, ?, ?, ?, ?)",
            (entry.seq, fact.name, fact.file, fact.source, _text(fact.day), fact.sha256, reason),
        )


def _text(day: date | None) -> str:
    return day.isoformat() if day else ""


@dataclass(frozen=True)
class Known:
    """The files in effect for business dates up to `until`, as accepted up to the ledger sequence `seq`."""

    index: sqlite3.Connection
    seq: int
    until: date

    def files(self, kind: FileKind, since: date | None = None) -> list[UsedFile]:
        """The newest accepted file of each identity, by day, source. Files without a date come with day None."""
        rows = self.index.execute(
            "SELECT day, source, sha256, MAX(seq) FROM accepted WHERE kind = ? AND seq <= ? AND day <= ?"
            " AND (day = '' OR day >= ?) GROUP BY day, source ORDER BY day, source",
            (kind, self.seq, self.until.isoformat(), _text(since)),
        )
        return [UsedFile(kind, source, _day(day), sha256) for day, source, sha256, _ in rows]

    def of_day(self, kind: FileKind, day: date) -> list[UsedFile]:
        return [file for file in self.files(kind, since=day) if file.day == day]

    def refusals(self, day: date) -> list[str]:
        """Why files of this day, or files without a day, were refused and not mended since."""
        rows = self.index.execute(
            "SELECT reason FROM refused AS r WHERE kind IS NOT NULL AND day IN (?, '') AND seq <= ?"
            " AND NOT EXISTS (SELECT 1 FROM accepted AS a WHERE a.kind = r.kind AND a.source = r.source"
            " AND a.day = r.day AND a.seq > r.seq AND a.seq <= ?)"
            " AND seq = (SELECT MAX(seq) FROM refused AS s WHERE s.name = r.name AND s.seq <= ?) ORDER BY name",
            (day.isoformat(), self.seq, self.seq, self.seq),
        )
        return [reason for (reason,) in rows]

    def all_files(self) -> Iterable[UsedFile]:
        for kind in FileKind:
            yield from self.files(kind)


def in_effect(index: sqlite3.Connection, kind: FileKind, source: str, day: date | None) -> str | None:
    """The hash of the file that counts now for an identity."""
    row = index.execute(
        "SELECT sha256 FROM accepted WHERE kind = ? AND source = ? AND day = ? ORDER BY seq DESC LIMIT 1",
        (kind, source, _text(day)),
    ).fetchone()
    return row[0] if row else None


def refused_before(index: sqlite3.Connection, name: str, sha256: str | None) -> bool:
    """Whether this very content was the last thing refused under this name, and nothing accepted since."""
    row = index.execute("SELECT seq, sha256 FROM refused WHERE name = ? ORDER BY seq DESC LIMIT 1", (name,)).fetchone()
    if row is None or row[1] != sha256:
        return False
    later = index.execute("SELECT 1 FROM accepted WHERE name = ? AND seq > ?", (name, row[0])).fetchone()
    return later is None


def _day(text: str) -> date | None:
    return date.fromisoformat(text) if text else None
