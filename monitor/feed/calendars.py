"""Sessions of exchanges by ISO 10383 code, and all counting of business days.

The sessions come from the package exchange_calendars, whose import and calendars cost seconds; they are kept in the
history cache by the package's version, so that most commands never load it.
"""

from __future__ import annotations

import importlib.metadata
import json
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date

import numpy as np

from monitor.words import WrongUse
from monitor.world import Booleans, Days

FIRST = date(1990, 1, 1)  # exchange_calendars tests its answers from 1990 on


@dataclass(frozen=True)
class Sessions:
    """The sessions of one calendar, ascending, from FIRST or later up to the day up to which they are known."""

    calendar: str
    days: Days
    end: date

    def up_to(self, day: date) -> Days:
        """The sessions on or before a day. Raises WrongUse past the calendar's known end."""
        if day > self.end:
            raise WrongUse(
                f"the calendar {self.calendar} is known up to {self.end} only, and {day} was asked for. "
                "Install a newer exchange_calendars"
            )
        return self.days[: np.searchsorted(self.days, np.datetime64(day), side="right")]

    def open_on(self, day: date) -> bool:
        past = self.up_to(day)
        return bool(len(past)) and _date(past[-1]) == day

    def open_on_each(self, days: Days) -> Booleans:
        """For each of some ascending days whether it is a session."""
        places = np.minimum(np.searchsorted(self.days, days), len(self.days) - 1)
        return np.asarray(self.days[places] == days)

    def last(self, day: date) -> date:
        """The newest session on or before a day."""
        past = self.up_to(day)
        if not len(past):
            raise WrongUse(f"the calendar {self.calendar} is not known as far back as {day}")
        return _date(past[-1])

    def before(self, day: date) -> date:
        """The newest session before a day."""
        return self.last(date.fromordinal(day.toordinal() - 1))

    def count(self, after: date, until: date) -> int:
        """Business days after one day up to and with another."""
        return len(self.up_to(until)) - len(self.up_to(after))


def _date(day: np.datetime64) -> date:
    found: date = day.astype("datetime64[D]").item()
    return found


def library_version() -> str:
    return importlib.metadata.version("exchange_calendars")


def in_library(calendar: str) -> bool:
    """Whether exchange_calendars knows a code, without the cost of its sessions."""
    import exchange_calendars

    return calendar in exchange_calendars.get_calendar_names(include_aliases=True)


def from_library(calendar: str) -> Sessions:
    """All sessions that exchange_calendars knows. Raises WrongUse for a code it does not know."""
    import exchange_calendars

    try:
        earliest = type(exchange_calendars.get_calendar(calendar)).bound_min()
        start = max(FIRST, earliest.date()) if earliest is not None else FIRST
        known = exchange_calendars.get_calendar(calendar, start=start.isoformat())
    except exchange_calendars.errors.InvalidCalendarName:
        raise WrongUse(
            f"found the calendar {calendar!r}; expected the ISO 10383 code of an exchange that the package "
            "exchange_calendars knows, as XDUB. Mend it in the site file"
        ) from None
    days = known.sessions.to_numpy().astype("datetime64[D]")
    return Sessions(calendar, days, _date(days[-1]))


def to_bytes(sessions: Mapping[str, Sessions], until: date) -> bytes:
    """What the archive keeps: the sessions of each calendar up to the end of a date's year, as JSON."""
    last = date(until.year, 12, 31)
    kept = {}
    for calendar, own in sorted(sessions.items()):
        end = min(own.end, last)
        kept[calendar] = {"end": str(end), "days": [str(day) for day in own.up_to(end)]}
    return json.dumps(kept, separators=(",", ":")).encode()


def from_bytes(data: bytes) -> dict[str, Sessions]:
    """The sessions as an earlier evening used them."""
    return {
        name: Sessions(name, np.array(own["days"], dtype="datetime64[D]"), date.fromisoformat(own["end"]))
        for name, own in json.loads(data).items()
    }
