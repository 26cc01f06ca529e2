"""What is known: the files accepted and refused, folded from the ledger, and the view of them at one sequence."""

from __future__ import annotations

import sqlite3
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date

from monitor.facts import Entry, FileAccepted, FileRefused, SettingsAdopted, UsedFile
from monitor.words import FileKind

LATEST = 2**62  # a sequence after every entry
HINDSIGHT = FileKind.PNL  # for looking back: no evening rests on such a file, waits for it or is checked again for it
TABLES = """
CREATE TABLE accepted (
    seq INTEGER PRIMARY KEY, name TEXT, kind TEXT, source TEXT, day TEXT, sha256 TEXT) STRICT;
CREATE INDEX accepted_identity ON accepted (kind, day, source, seq);
CREATE TABLE refused (
    seq INTEGER PRIMARY KEY, name TEXT, kind TEXT, source TEXT, day TEXT, sha256 TEXT, reason TEXT) STRICT;
CREATE INDEX refused_name ON refused (name, sha256);
CREATE INDEX refused_day ON refused (day);
CREATE TABLE settings_adopted (seq INTEGER PRIMARY KEY) STRICT;
"""


def record(index: sqlite3.Connection, entry: Entry) -> None:
    """Fold one ledger entry into the tables."""
    fact = entry.fact
    if isinstance(fact, FileAccepted):
        index.execute(
            "INSERT INTO accepted VALUES (?, ?, ?, ?, ?, ?)",
            (entry.seq, fact.name, fact.file, fact.source, _text(fact.day), fact.sha256),
        )
    elif isinstance(fact, FileRefused):
        reason = str(fact.findings[0]) if fact.findings else "refused"
        if fact.reasons > 1:
            reason += f" (the first of {fact.reasons} reasons)"
        index.execute(
            "INSERT INTO refused VALUES (?, ?, ?, ?, ?, ?, ?)",
            (entry.seq, fact.name, fact.file, fact.source, _text(fact.day), fact.sha256, reason),
        )
    elif isinstance(fact, SettingsAdopted):
        index.execute("INSERT INTO settings_adopted VALUES (?)", (entry.seq,))


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
        """Why files of this day, or files without a day, were refused and not mended since.

        Only of files that evenings rest on.
        """
        rows = self.index.execute(
            "SELECT reason FROM refused AS r WHERE kind IS NOT NULL AND kind <> ? AND day IN (?, '') AND seq <= ?"
            " AND NOT EXISTS (SELECT 1 FROM accepted AS a WHERE a.kind = r.kind AND a.source = r.source"
            " AND a.day = r.day AND a.seq > r.seq AND a.seq <= ?)"
            " AND seq = (SELECT MAX(seq) FROM refused AS s WHERE s.name = r.name AND s.seq <= ?) ORDER BY name",
            (HINDSIGHT, day.isoformat(), self.seq, self.seq, self.seq),
        )
        return [reason for (reason,) in rows]


@dataclass(frozen=True)
class Decisions:
    """What was decided last. in_effect: hash by kind, source and day. refused: kind and hash by name, if not mended.

    A refusal stands under the settings that it was made with: other books, currencies or patterns might take the file.
    So might a newer edition, which knows a kind for its name.
    """

    in_effect: Mapping[tuple[str, str, str], str]
    refused: Mapping[str, tuple[str | None, str | None]]

    def stands(self, name: str, identity: tuple[FileKind, str, date | None] | None, sha256: str | None) -> bool:
        """Whether this very content was decided about under this name."""
        if name in self.refused:
            return self.refused[name] == (identity[0] if identity else None, sha256)
        if identity is None or sha256 is None:
            return False
        kind, source, day = identity
        return self.in_effect.get((kind, source, _text(day))) == sha256


def decisions(index: sqlite3.Connection) -> Decisions:
    accepted = index.execute("SELECT kind, source, day, sha256, MAX(seq) FROM accepted GROUP BY kind, source, day")
    refused = index.execute(
        "SELECT name, kind, sha256 FROM (SELECT name, kind, sha256, MAX(seq) AS last FROM refused GROUP BY name) AS r"
        " WHERE NOT EXISTS (SELECT 1 FROM accepted AS a WHERE a.name = r.name AND a.seq > r.last)"
        " AND last > (SELECT COALESCE(MAX(seq), 0) FROM settings_adopted)"
    )
    return Decisions(
        {(kind, source, day): sha256 for kind, source, day, sha256, _ in accepted},
        {name: (kind, sha256) for name, kind, sha256 in refused},
    )


def accepted_after(index: sqlite3.Connection, seq: int) -> list[tuple[date | None, int]]:
    """The dates of the files accepted after an entry, None for files without one, each with the newest such entry.

    Files that no evening rests on are passed over.
    """
    rows = index.execute(
        "SELECT day, MAX(seq) FROM accepted WHERE seq > ? AND kind <> ? GROUP BY day", (seq, HINDSIGHT)
    )
    return [(_day(day), newest) for day, newest in rows]


def refused_between(index: sqlite3.Connection, after: int, upto: int) -> list[int]:
    """The numbers of the entries after < seq <= upto that refused a file."""
    rows = index.execute("SELECT seq FROM refused WHERE seq > ? AND seq <= ? ORDER BY seq", (after, upto))
    return [seq for (seq,) in rows]


def _day(text: str) -> date | None:
    return date.fromisoformat(text) if text else None
