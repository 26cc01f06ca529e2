"""The cache of prices, rates and sessions: history.sqlite. Deletable at any time; rebuilt from the archive.

One checked float64 blob a file, so that a file is kept in one write and a window read without parsing; opening, highest
and lowest prices in a blob of their own, which is read only when they are asked for. Lists of names are kept once, for
those of one day and the next are mostly the same.
"""

from __future__ import annotations

import sqlite3
import zlib
from collections.abc import Callable, Sequence
from dataclasses import replace
from datetime import date
from pathlib import Path
from typing import Any

import numpy as np

from monitor.facts import UsedFile
from monitor.feed import calendars
from monitor.feed.calendars import Sessions
from monitor.feed.kinds import RANGE_FIELDS, Panel, Parsed, Vocabulary, parse
from monitor.words import DuskcheckError, FileKind
from monitor.world import Floats, Integers

FORMAT = 3
TABLES = """
CREATE TABLE names (id INTEGER PRIMARY KEY, joined TEXT UNIQUE NOT NULL) STRICT;
CREATE TABLE panel (
    sha256 TEXT, day TEXT, names INTEGER, days BLOB, closes BLOB, sum INTEGER, ranges BLOB, ranges_sum INTEGER,
    PRIMARY KEY (sha256, day)) STRICT;
CREATE TABLE sessions (
    calendar TEXT, version TEXT, ends TEXT, days BLOB, sum INTEGER, PRIMARY KEY (calendar, version)) STRICT;
CREATE TABLE seen (name TEXT PRIMARY KEY, size INTEGER, changed INTEGER, sha256 TEXT) STRICT, WITHOUT ROWID;
"""
# What SQLite says of a file that is broken or not ours; other errors are of the disk or of another process.
BROKEN = (sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB, sqlite3.SQLITE_ERROR)


class History:
    """Reads blobs by hash through `read` when the cache does not hold them. A broken cache is begun anew.

    What a file says depends on its bytes and on the date in its name: two days may have the same prices.
    """

    def __init__(self, path: Path, read: Callable[[str], bytes]) -> None:
        self._path = path
        self._read = read
        self._db: sqlite3.Connection | None = None
        self._panels: dict[tuple[str, date | None], Panel] = {}
        self._ranges: dict[tuple[str, date | None], Floats | None] = {}
        self._lists: dict[str, tuple[str, ...]] = {}
        self._parsed: dict[tuple[FileKind, str, date | None], Parsed] = {}
        self._sessions: dict[str, Sessions] = {}
        self._fetched: set[str] = set()

    def close(self) -> None:
        if self._db is not None:
            self._db.close()
            self._db = None

    def sessions(self, calendar: str, until: date) -> Sessions:
        """The sessions of a calendar as exchange_calendars has them. Raises WrongUse for unknown codes.

        The package is asked again when what is kept ends before `until`: it knows more as time goes on.
        """
        if calendar not in self._sessions:
            self._sessions[calendar] = self._kept_sessions(calendar) or self._fetch_sessions(calendar)
        if self._sessions[calendar].end < until and calendar not in self._fetched:
            self._sessions[calendar] = self._fetch_sessions(calendar)
        return self._sessions[calendar]

    def knows_calendar(self, calendar: str) -> bool:
        """Whether there are sessions of a calendar. Does not raise for unknown codes."""
        return calendar in self._sessions or self._kept_sessions(calendar) is not None or calendars.in_library(calendar)

    def _kept_sessions(self, calendar: str) -> Sessions | None:
        for ends, days, total in self._rows(
            "SELECT ends, days, sum FROM sessions WHERE calendar = ? AND version = ?",
            (calendar, calendars.library_version()),
        ):
            if _sum(calendar, ends, days) == total:
                return Sessions(calendar, np.frombuffer(days, dtype="<M8[D]"), date.fromisoformat(ends))
        return None

    def _fetch_sessions(self, calendar: str) -> Sessions:
        found = calendars.from_library(calendar)
        self._fetched.add(calendar)
        ends, days = found.end.isoformat(), found.days.astype("<M8[D]").tobytes()
        self._rows(
            "INSERT OR REPLACE INTO sessions VALUES (?, ?, ?, ?, ?)",
            (calendar, calendars.library_version(), ends, days, _sum(calendar, ends, days)),
        )
        return found

    def seen(self) -> dict[tuple[str, int, int], str]:
        """The hashes of the files in the drop that were hashed before, by name, size and time of change."""
        rows = self._rows("SELECT name, size, changed, sha256 FROM seen")
        return {(name, size, changed): sha256 for name, size, changed, sha256 in rows}

    def remember_seen(self, name: str, size: int, changed: int, sha256: str) -> None:
        self._rows("INSERT OR REPLACE INTO seen VALUES (?, ?, ?, ?)", (name, size, changed, sha256))

    def parsed(self, file: UsedFile) -> Parsed:
        """An accepted file that is not a panel, parsed."""
        key = (file.file, file.sha256, file.day)
        if key not in self._parsed:
            self._parsed[key] = self._parse(file)
        return self._parsed[key]

    def _parse(self, file: UsedFile) -> Parsed:
        return parse(file.file, file.file.value, self._read(file.sha256), file.day, Vocabulary())

    def keep(self, sha256: str, day: date | None, panel: Panel) -> None:
        """Store the panel of a file just accepted. day: the date in its name."""
        on = str(day or "")
        joined = "\n".join(panel.names)
        days = np.array(panel.days, dtype="<i8").tobytes()
        closes = panel.values.astype("<f8").tobytes()
        ranges = None if panel.ranges is None else panel.ranges.astype("<f8").tobytes()
        total = _sum(sha256, on, joined, days, closes)
        self._rows("INSERT OR IGNORE INTO names (joined) VALUES (?)", (joined,))
        self._rows(
            "INSERT OR REPLACE INTO panel SELECT ?, ?, id, ?, ?, ?, ?, ? FROM names WHERE joined = ?",
            (sha256, on, days, closes, total, ranges, _sum(str(total), ranges or b""), joined),
        )

    def panel(self, file: UsedFile) -> Panel:
        """The values of an accepted file of prices or rates, without ranges."""
        key = (file.sha256, file.day)
        if key not in self._panels:
            stored = self._stored_panel(file.sha256, str(file.day or ""))
            self._panels[key] = stored or replace(self._parse_panel(file), ranges=None)
        return self._panels[key]

    def _stored_panel(self, sha256: str, on: str) -> Panel | None:
        for joined, days, closes, total in self._rows(
            "SELECT joined, days, closes, sum FROM panel JOIN names ON names.id = panel.names"
            " WHERE sha256 = ? AND day = ?",
            (sha256, on),
        ):
            if _sum(sha256, on, joined, days, closes) == total:
                return self._unpacked(joined, np.frombuffer(days, dtype="<i8"), np.frombuffer(closes, dtype="<f8"))
        return None

    def _unpacked(self, joined: str, days: Integers, closes: Floats) -> Panel:
        if joined not in self._lists:
            self._lists[joined] = tuple(joined.split("\n")) if joined else ()
        names = self._lists[joined]
        return Panel(tuple(days.tolist()), names, closes.reshape(len(days), len(names)))

    def _parse_panel(self, file: UsedFile) -> Panel:
        content = self._parse(file).content
        if not isinstance(content, Panel):
            raise TypeError(f"{file.file} is not a file of prices or rates")
        self.keep(file.sha256, file.day, content)
        return content

    def _ranges_of(self, file: UsedFile) -> Floats | None:
        """(3, days, names) beside the panel of a file; None when it has none."""
        key = (file.sha256, file.day)
        if key not in self._ranges:
            self._ranges[key] = self._read_ranges(file, str(file.day or ""), self.panel(file))
        return self._ranges[key]

    def _read_ranges(self, file: UsedFile, on: str, panel: Panel) -> Floats | None:
        for beside, ranges, total in self._rows(
            "SELECT sum, ranges, ranges_sum FROM panel WHERE sha256 = ? AND day = ?", (file.sha256, on)
        ):
            if _sum(str(beside), ranges or b"") == total:
                shape = (len(RANGE_FIELDS), *panel.values.shape)
                return np.frombuffer(ranges, dtype="<f8").reshape(shape) if ranges else None
        return self._parse_panel(file).ranges

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

    def ranges(self, files: Sequence[UsedFile], days: Integers, names: Sequence[str]) -> Floats:
        """The prices of RANGE_FIELDS beside the closes of `matrix`: (3, days, names), NaN where there is none.

        They come from the very file whose close counts: a later file that gives a close alone leaves none of them.
        """
        place = {name: at for at, name in enumerate(names)}
        found = np.full((len(RANGE_FIELDS), len(days), len(names)), np.nan)
        chosen: dict[tuple[str, ...], tuple[Integers, Integers]] = {}
        for file in files:
            panel, ranges = self.panel(file), self._ranges_of(file)
            if panel.names not in chosen:
                source = np.array([at for at, name in enumerate(panel.names) if name in place], dtype=np.int64)
                chosen[panel.names] = source, np.array([place[panel.names[at]] for at in source], dtype=np.int64)
            source, columns = chosen[panel.names]
            own = np.array(panel.days, dtype=np.int64)
            inside = np.flatnonzero(np.isin(own, days))
            picked, target = np.ix_(inside, source), np.ix_(np.searchsorted(days, own[inside]), columns)
            closed = ~np.isnan(panel.values[picked])
            for at, field in enumerate(found):
                block = np.nan if ranges is None else ranges[at][picked]
                field[target] = np.where(closed, block, field[target])
        return found

    def _rows(self, statement: str, values: Sequence[object] = ()) -> list[tuple[Any, ...]]:
        """Run one statement; its rows. Raises DuskcheckError when the disk or another process is in the way."""
        try:
            try:
                return self._run(statement, values)
            except sqlite3.Error as error:
                if getattr(error, "sqlite_errorcode", sqlite3.SQLITE_CORRUPT) & 0xFF not in BROKEN:
                    raise
                self.close()
                self._path.unlink(missing_ok=True)
                return self._run(statement, values)
        except sqlite3.Error as error:
            raise DuskcheckError(
                f"{self._path} cannot be used: {error}. It is a cache: check the disk's free space and "
                "permissions, or delete it, and run the command again"
            ) from error

    def _run(self, statement: str, values: Sequence[object]) -> list[tuple[Any, ...]]:
        if self._db is None:
            self._db = _opened(self._path)
        return self._db.execute(statement, values).fetchall()


def _opened(path: Path) -> sqlite3.Connection:
    db = sqlite3.connect(path, isolation_level=None, timeout=30)
    try:
        db.executescript("PRAGMA journal_mode=MEMORY; PRAGMA synchronous=OFF;")
        (found,) = db.execute("PRAGMA user_version").fetchone()
        if found != FORMAT:
            tables = [name for (name,) in db.execute("SELECT name FROM sqlite_master WHERE type = 'table'")]
            for name in tables:
                db.execute(f'DROP TABLE "{name}"')
            db.executescript(TABLES + f"PRAGMA user_version={FORMAT};")
    except sqlite3.Error:
        db.close()
        raise
    return db


def _sum(*parts: str | bytes) -> int:
    total = 0
    for part in parts:
        total = zlib.crc32(part if isinstance(part, bytes) else part.encode(), total)
    return total
