"""Which kind of file a name in the drop stands for."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date
from fnmatch import translate
from functools import cache

from monitor.feed.tables import read_day
from monitor.words import FileKind

MAIN = "main"
DEFAULT_PATTERNS: Mapping[FileKind, str] = {
    FileKind.PRICES: "prices_{date}.csv",
    FileKind.POSITIONS: "positions_{date}.csv",
    FileKind.FX: "fx_{date}.csv",
    FileKind.NAV: "nav_{date}.csv",
    FileKind.PNL: "pnl_{date}.csv",
    FileKind.INSTRUMENTS: "instruments.csv",
    FileKind.HISTORY_FX: "history_fx*.csv",
    FileKind.HISTORY: "history*.csv",
}
LATER_NAMES = ("actions_*", "scenario_pnl_*", "*.manifest", "*.csv.gz", "*.parquet")
UNFINISHED = re.compile(r"\..*|.*\.(tmp|part)")


@dataclass(frozen=True)
class Name:
    """What a file's name says of it. The source tells files of one kind and date apart."""

    kind: FileKind
    source: str
    day: date | None


def read_name(name: str, patterns: Mapping[FileKind, str]) -> Name | None:
    """The kind, source and date of a name; None when it fits no pattern. Each file of a `*` pattern is a source."""
    for kind, pattern in patterns.items():
        found = _shape(pattern).fullmatch(name)
        if found is None:
            continue
        if "{date}" not in pattern:
            return Name(kind, name if "*" in pattern else MAIN, None)
        day = read_day(found["date"])
        return Name(kind, MAIN, day) if day else None
    return None


@cache
def _shape(pattern: str) -> re.Pattern[str]:
    return re.compile(translate(pattern).replace(r"\{date\}", r"(?P<date>\d{4}-\d{2}-\d{2})"))


def comes_later(name: str) -> bool:
    """Whether a later edition of duskcheck reads files of this name."""
    return any(re.fullmatch(translate(pattern), name) for pattern in LATER_NAMES)
