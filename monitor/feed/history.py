"""The cache of prices, rates and sessions: history.sqlite. Deletable at any time; rebuilt from the archive.

One checked float64 blob a file and day, so that a day is appended in one write and a window read without parsing.
"""

from __future__ import annotations

import sqlite3
import zlib
from collections.abc import Callable, Sequence
from datetime import date
from pathlib import Path

import numpy as np

from monitor.facts import UsedFile
from monitor.feed import calendars
from monitor.feed.calendars import Sessions
from monitor.feed.kinds import Panel, Parsed, Vocabulary, parse
from monitor.world import Floats, Integers

FORMAT = 1
TABLES = """
CREATE TABLE names (id INTEGER PRIMARY KEY, joined TEXT UNIQUE NOT NULL) STRICT;
CREATE TABLE stored (sha256 TEXT PRIMARY KEY) STRICT, WITHOUT ROWID;
CREATE TABLE day (
    sha256 TEXT, ordinal INTEGER, names INTEGER, closes BLOB, sum INTEGER,
    PRIMARY KEY (sha256, ordinal)) STRICT, WITHOUT ROWID;
CREATE TABLE sessions (calendar TEXT, version TEXT, ends TEXT, days BLOB, PRIMARY KEY (calendar, version)) STRICT;
CREATE TABLE seen (name TEXT PRIMARY KEY, size INTEGER, changed INTEGER, sha256 TEXT) STRICT, WITHOUT ROWID;
"""


class History:
    """Reads blobs by hash through `read` when the cache does not hold them."""

    def __init__(self, path: Path, read: Callable[[str], bytes]) -> None:
        self._read = read
        self._db = _open(path)
        self._panels: dict[str, Panel] = {}
        self._parsed: dict[str, Parsed] = {}
        self._sessions: dict[str, Sessions] = {}
        self._fetched: set[str] = set()

    def close(self) -> None:
        self._db.close()

    def sessions(self, calendar: str, until: date) -> Sessions:
        """The sessions of a calendar as exchange_calendars has them. Raises WrongUse for unknown codes.

        The package is asked again when what is kept ends before `until`: it knows more as time goes on.
        """
        if calendar not in self._sessions:
            self._sessions[calendar] = self._kept_sessions(calendar) or self._fetch_sessions(calendar)
        if self._sessions[calendar].end < until and calendar not in self._fetched:
            self._sessions[calendar] = self._fetch_sessions(calendar)
        return self._sessions[calendar]

    def _kept_sessions(self, calendar: str) -> Sessions | None:
        row = self._db.execute(
            "SELECT ends, days FROM sessions WHERE calendar = ? AND version = ?",
            (calendar, calendars.library_version()),
        ).fetchone()
        if row is None:
            return None
        return Sessions(calendar, np.frombuffer(row[1], dtype="<M8[D]"), date.fromisoformat(row[0]))

    def _fetch_sessions(self, calendar: str) -> Sessions:
        found = calendars.from_library(calendar)
        self._fetched.add(calendar)
        self._db.execute(
            "INSERT OR REPLACE INTO sessions VALUES (?, ?, ?, ?)",
            (calendar, calendars.library_version(), found.end.isoformat(), found.days.astype("<M8[D]").tobytes()),
        )
        return found

    def seen(self) -> dict[tuple[str, int, int], str]:
        """The hashes of the files in the drop that were hashed before, by name, size and time of change."""
        rows = self._db.execute("SELECT name, size, changed, sha256 FROM seen")
        return {(name, size, changed): sha256 for name, size, changed, sha256 in rows}

    def remember_seen(self, name: str, size: int, changed: int, sha256: str) -> None:
        self._db.execute("INSERT OR REPLACE INTO seen VALUES (?, ?, ?, ?)", (name, size, changed, sha256))

    def parsed(self, file: UsedFile) -> Parsed:
        """An accepted file that is not a panel, parsed."""
        if file.sha256 not in self._parsed:
            data = self._read(file.sha256)
            self._parsed[file.sha256] = parse(file.file, file.file.value, data, file.day, Vocabulary())
        return self._parsed[file.sha256]

    def keep(self, sha256: str, panel: Panel) -> None:
        """Store the panel of a file just accepted."""
        if self._db.execute("SELECT 1 FROM stored WHERE sha256 = ?", (sha256,)).fetchone():
            return
        joined = "\n".join(panel.names)
        self._db.execute("BEGIN")
        self._db.execute("INSERT OR IGNORE INTO names (joined) VALUES (?)", (joined,))
        (names,) = self._db.execute("SELECT id FROM names WHERE joined = ?", (joined,)).fetchone()
        blobs = (row.astype("<f8").tobytes() for row in panel.values)
        self._db.executemany(
            "INSERT OR REPLACE INTO day VALUES (?, ?, ?, ?, ?)",
            ((sha256, day, names, blob, zlib.crc32(blob)) for day, blob in zip(panel.days, blobs, strict=True)),
        )
        self._db.execute("INSERT INTO stored VALUES (?)", (sha256,))
        self._db.execute("COMMIT")
        self._panels[sha256] = panel

    def panel(self, file: UsedFile) -> Panel:
        """The values of an accepted file of prices or rates."""
        if file.sha256 not in self._panels:
            self._panels[file.sha256] = self._stored_panel(file.sha256) or self._parse_panel(file)
        return self._panels[file.sha256]

    def _stored_panel(self, sha256: str) -> Panel | None:
        if not self._db.execute("SELECT 1 FROM stored WHERE sha256 = ?", (sha256,)).fetchone():
            return None
        rows = self._db.execute(
            "SELECT ordinal, joined, closes, sum FROM day JOIN names ON names.id = day.names"
            " WHERE sha256 = ? ORDER BY ordinal",
            (sha256,),
        ).fetchall()
        if not rows or any(zlib.crc32(blob) != total for _, _, blob, total in rows):
            return None
        names = tuple(rows[0][1].split("\n")) if rows[0][1] else ()
        values = np.frombuffer(b"".join(row[2] for row in rows), dtype="<f8").reshape(len(rows), len(names))
        return Panel(tuple(row[0] for row in rows), names, values)

    def _parse_panel(self, file: UsedFile) -> Panel:
        content = self.parsed(file).content
        if not isinstance(content, Panel):
            raise TypeError(f"{file.file} is not a file of prices or rates")
        self._db.execute("DELETE FROM stored WHERE sha256 = ?", (file.sha256,))
        self.keep(file.sha256, content)
        return content

    def matrix(self, files: Sequence[UsedFile], first: date, last: date) -> tuple[Integers, tuple[str, ...], Floats]:
        """All values from one day to another, later files outranking earlier ones name by name.

        Returns the days as ordinals (days,), the names, and the values (days, names), NaN where there is none.
        """
        low, high = first.toordinal(), last.toordinal()
        panels = [self.panel(file) for file in files]
        names = tuple(sorted({name for kept in {panel.names for panel in panels} for name in kept}))
        place = {name: at for at, name in enumerate(names)}
        days = np.array(sorted({day for panel in panels for day in panel.days if low <= day <= high}), dtype=np.int64)
        values = np.full((len(days), len(names)), np.nan)
        columns: dict[tuple[str, ...], Integers] = {}
        for panel in panels:
            if panel.names not in columns:
                columns[panel.names] = np.array([place[name] for name in panel.names], dtype=np.int64)
            own = np.array(panel.days, dtype=np.int64)
            inside = (own >= low) & (own <= high)
            rows = np.searchsorted(days, own[inside])
            block = panel.values[inside]
            target = np.ix_(rows, columns[panel.names])
            values[target] = np.where(np.isnan(block), values[target], block)
        return days, names, values


def _open(path: Path) -> sqlite3.Connection:
    try:
        return _ready(path)
    except sqlite3.DatabaseError:
        path.unlink()
        return _ready(path)


def _ready(path: Path) -> sqlite3.Connection:
    db = sqlite3.connect(path, isolation_level=None, timeout=30)
    db.executescript("PRAGMA journal_mode=MEMORY; PRAGMA synchronous=OFF;")
    (found,) = db.execute("PRAGMA user_version").fetchone()
    if found != FORMAT:
        tables = [name for (name,) in db.execute("SELECT name FROM sqlite_master WHERE type = 'table'")]
        for name in tables:
            db.execute(f'DROP TABLE "{name}"')
        db.executescript(TABLES + f"PRAGMA user_version={FORMAT};")
    return db
