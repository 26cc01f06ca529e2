"""When evenings are due: a round's time of day in its zone, on the sessions of its books' calendars."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from datetime import date, datetime, timedelta

from monitor.daemon.settings import Round
from monitor.feed.build import rounds_due
from monitor.feed.calendars import Sessions
from monitor.world import Terms

LONGEST_CLOSURE = 30  # days; longer than any exchange of the calendars stays closed


def newest_due(
    rounds: Sequence[Round], terms: Terms, sessions: Mapping[str, Sessions], now: datetime
) -> list[tuple[str, date]]:
    """For each round the newest business date whose time has come."""
    found = []
    for each in rounds:
        today = each.today(now)
        for back in range(LONGEST_CLOSURE):
            day = today - timedelta(days=back)
            if each.id in rounds_due(terms, day, sessions) and each.moment(day, each.at) <= now:
                found.append((each.id, day))
                break
    return found


def due_since(round_: Round, terms: Terms, sessions: Mapping[str, Sessions], after: date, now: datetime) -> list[date]:
    """The business dates of a round after a date whose time has come, in order."""
    last = round_.today(now)
    days = [date.fromordinal(ordinal) for ordinal in range(after.toordinal() + 1, last.toordinal() + 1)]
    return [
        day for day in days if round_.id in rounds_due(terms, day, sessions) and round_.moment(day, round_.at) <= now
    ]
