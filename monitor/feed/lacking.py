"""What was expected of an evening and did not come, in words: one sentence a cause."""

from __future__ import annotations

from collections.abc import Mapping, Sequence, Set
from datetime import date

import numpy as np

from monitor.feed.calendars import Sessions
from monitor.feed.known import Known
from monitor.words import FileKind
from monitor.world import Firm, Holdings, Integers, Market, Scope, Terms

NAMED = 5  # how many names a sentence lists before it only counts


def what_is_lacking(
    day: date,
    terms: Terms,
    scope: Scope,
    known: Known,
    holdings: Holdings,
    market: Market,
    calendars: Mapping[str, Sessions],
) -> tuple[str, ...]:
    """Refused files, missing books, held instruments without a close, currencies without a rate: of this round."""
    firm = terms.firm
    answered = [at for at, book in enumerate(firm.books) if scope.completes or scope.holds(book.id)]
    own = np.isin(holdings.book, answered)
    held = np.unique(holdings.instrument[own])
    books = {firm.books[at].id for at in answered}
    money = {market.instruments[at].currency for at in held}
    money |= {firm.books[at].currency for at in np.unique(holdings.book[own])}
    money |= {rule.currency for rule in terms.rules if rule.currency and rule.in_force(day)}
    return (
        *known.refusals(day),
        *(reason for book, reason in holdings.missing.items() if book in books),
        *_prices(day, known, held, market),
        *_rates(day, firm, money, market, calendars),
    )


def _prices(day: date, known: Known, held: Integers, market: Market) -> list[str]:
    stale = [market.instruments[at].id for at in held if market.carried[at] and not market.unknown[at]]
    unknown = [market.instruments[at].id for at in held if market.unknown[at]]
    told = []
    if stale and not known.of_day(FileKind.PRICES, day):
        told.append(f"no accepted price file gives closes of {day}; {_held(stale)}")
    elif stale:
        told.append(f"no usable close of {day} for {_held(stale)}")
    if unknown:
        told.append(f"no instruments file describes {_held(unknown)}")
    return told


def _rates(day: date, firm: Firm, needed: Set[str], market: Market, calendars: Mapping[str, Sessions]) -> list[str]:
    place = market.currency_index()
    told = []
    absent = sorted(code for code in needed if np.isnan(market.rate[place[code]]))
    if absent:
        told.append(f"no chain of FX rates leads from {listed(absent)} to {firm.base_currency}")
    old = sorted(code for code in needed - set(absent) if market.rate_carried[place[code]])
    if old:
        session = calendars[firm.calendar].last(day)
        told.append(f"no FX rate of {session} for {listed(old)}; the last known ones count")
    return told


def _held(names: Sequence[str]) -> str:
    return f"{len(names)} held instrument{'' if len(names) == 1 else 's'}: {listed(names)}"


def listed(names: Sequence[str]) -> str:
    """The first few names, and how many more there are."""
    more = len(names) - NAMED
    return ", ".join(names[:NAMED]) + (f" and {more} more" if more > 0 else "")
