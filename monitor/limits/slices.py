"""A slice of the world: some subjects of one rule that share a currency, a calendar and a number of sessions."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from monitor.limits.subjects import Members
from monitor.limits.valuation import (
    LEAST_OF_WINDOW,
    LastSession,
    Scenarios,
    Valuation,
    expired,
    foreign,
    own_cash,
    position_currencies,
)
from monitor.words import Mark, MarkKind
from monitor.world import Booleans, Floats, Integers, Rule, World

NAMED = 3  # how many instruments a reason or a mark lists before it only counts


@dataclass(frozen=True)
class Denominator:
    """What each subject's amount is divided by; NaN with the reason. doubts: by subject."""

    value: Floats
    reasons: list[str | None]
    doubts: list[list[Mark]]


@dataclass(frozen=True)
class Slice:
    """Everything that a measure may ask about its subjects. Arrays are (subjects,) unless said otherwise.

    bounded: whether figures are wanted with their sampling bounds, which cost more than the figures.
    """

    valuation: Valuation
    rule: Rule
    members: Members
    currency: str
    calendar: str
    bounded: bool = True

    @property
    def world(self) -> World:
        return self.valuation.world

    @property
    def size(self) -> int:
        return len(self.members.subjects)

    @property
    def of_firm(self) -> bool:
        """Whether subjects are measured within the firm, whatever book they lie in."""
        return within_firm(self.rule)

    @cached_property
    def exposure(self) -> Floats:
        """(positions,) in the slice's currency; zero where unknown: `exposure_troubles` names those."""
        return np.nan_to_num(self.valuation.exposure(self.currency))

    @property
    def own_cash(self) -> Booleans:
        """(positions,) cash in the slice's currency."""
        return own_cash(self.world, self.world.holdings, self.currency)

    def scenarios(self, window: int) -> Scenarios:
        """The newest sessions of the calendar's window, `window` at most."""
        return self.valuation.scenarios(self.calendar, self.currency).newest(window)

    def overlapping(self, window: int, days: int) -> Floats:
        """(positions, sessions) P&L over each run of so many sessions within the newest `window`."""
        pnl = self.valuation.overlapping(self.calendar, self.currency, days)
        return pnl[:, max(pnl.shape[1] - max(window - days + 1, 0), 0) :]

    def log_returns(self, window: int) -> Floats:
        """(positions, n) of the newest `window` sessions."""
        returns = self.valuation.log_returns(self.calendar, self.currency)
        return returns[:, max(returns.shape[1] - window, 0) :]

    def ranges(self, sessions: int, subjects: Integers) -> tuple[Floats, Floats, Floats, Floats, Booleans]:
        """Opens, highs, lows and closes of the newest sessions, (k, sessions), of subjects of one position each.

        And the sessions that count: not those on which the instrument's own market was closed.
        """
        window = self.world.windows[self.calendar]
        found = window.ranges
        if found is None:
            raise RuntimeError("a world without the day's ranges was asked for them")
        instruments = self.world.holdings.instrument[self.members.position[subjects]]
        newest = slice(found.close.shape[1] - sessions, None)
        opened, high, low, close = (
            matrix[instruments, newest] for matrix in (found.open, found.high, found.low, found.close)
        )
        return opened, high, low, close, ~np.isnan(close) | window.gap[instruments, newest]

    def last_session(self) -> LastSession:
        return self.valuation.last_session(self.calendar, self.currency)

    def denominator(self, name: str) -> Denominator:
        """The NAV or the gross exposure of the book that each subject lies in, or of the firm."""
        ask = self._nav if name == "nav" else self._gross
        books = [None if self.of_firm else subject.book for subject in self.members.subjects]
        of_book = {book: ask(book) for book in set(books)}
        found = [of_book[book] for book in books]
        values = np.array([value for value, _, _ in found], dtype=np.float64)
        return Denominator(values, [reason for _, reason, _ in found], [doubts for _, _, doubts in found])

    def _gross(self, book: str | None) -> tuple[float, str | None, list[Mark]]:
        holdings = self.world.holdings
        numbers = [at for at, item in enumerate(self.world.terms.firm.books) if book in (None, item.id)]
        missing = [reason for name, reason in holdings.missing.items() if book in (None, name)]
        own = np.isin(holdings.book, numbers)
        gross = float(np.abs(self.valuation.exposure(self.currency)[own]).sum())
        if missing or not np.isfinite(gross):
            return np.nan, missing[0] if missing else "a part of the gross exposure is not known", []
        if gross <= 0:
            return np.nan, "there is no gross exposure to divide by", []
        doubts = [mark for at, marks in self._doubts.items() if own[at] for mark in marks]
        return gross, None, shortened(doubts)

    def _nav(self, book: str | None) -> tuple[float, str | None, list[Mark]]:
        market, total = self.world.market, 0.0
        place, doubts = market.currency_index(), []
        for item in self.world.terms.firm.books:
            if book not in (None, item.id):
                continue
            nav = self.world.nav[item.id]
            if nav.value is None:
                return np.nan, nav.reason, []
            if item.currency == self.currency:
                total += nav.value
                continue
            total += nav.value * float(market.rate[place[item.currency]] / market.rate[place[self.currency]])
            doubts += self._old_rates(item.currency)
        if not np.isfinite(total):
            return np.nan, f"no FX rate turns the NAV into {self.currency}", []
        return total, None, shortened(doubts)

    def exposure_troubles(self) -> dict[int, str]:
        """Positions whose exposure is not known, with the reason."""
        world, market, held = self.world, self.world.market, self.world.holdings.instrument
        member = np.zeros(len(held), dtype=np.bool_)
        member[self.members.position] = True
        over = expired(world, world.holdings)
        troubles: dict[int, str] = {}
        for at in np.flatnonzero(member & np.isnan(self.valuation.exposure(self.currency))).tolist():
            instrument = market.instruments[int(held[at])]
            if market.unknown[held[at]]:
                troubles[at] = f"no instruments file describes {instrument.id}"
            elif over[at]:
                troubles[at] = f"{instrument.id} expired on {instrument.expiry}"
            elif np.isnan(market.close[held[at]]):
                troubles[at] = f"no close of {instrument.id} is known"
            else:
                troubles[at] = f"no FX rate from {instrument.currency} to {self.currency} is known"
        return troubles

    def window_troubles(self, window: int, sessions: Integers) -> dict[int, str]:
        """Positions with too few returns in their subject's window. sessions: (subjects,) how many it uses."""
        made = self.scenarios(window)
        troubles: dict[int, str] = {}
        need = LEAST_OF_WINDOW * window
        for used in np.unique(sessions):
            members = np.unique(self.members.position[(sessions == used)[self.members.owner]])
            have = used - made.lacks[members, made.lacks.shape[1] - used :].sum(axis=1)
            for at, count in zip(members[have < need].tolist(), have[have < need].tolist(), strict=True):
                name = self.world.market.instruments[int(self.world.holdings.instrument[at])].id
                troubles[at] = f"{name} has {count} of the {window} returns of the window"
        return troubles

    def sessions_used(self, window: int) -> Integers:
        """(subjects,) how far back each subject's window reaches: to the first return of any of its positions."""
        made = self.scenarios(window)
        count = made.lacks.shape[1]
        first = np.where(made.lacks.all(axis=1), count, np.argmin(made.lacks, axis=1))
        used = np.full(self.size, count, dtype=np.int64)
        if len(self.members.owner):
            starts = np.flatnonzero(np.diff(self.members.owner, prepend=-1))
            risky = ~made.riskless[self.members.position]
            earliest = np.minimum.reduceat(np.where(risky, first[self.members.position], count), starts)
            earliest[~np.logical_or.reduceat(risky, starts)] = 0
            used[self.members.owner[starts]] = count - earliest
        return used

    def marks(self, window: int | None) -> list[list[Mark]]:
        """For each subject what makes its figures less certain than they look. window: sessions that they rest on."""
        marks: list[list[Mark]] = [list(self._stray) for _ in range(self.size)]
        owner, position = self.members.owner, self.members.position
        for at in np.flatnonzero(np.isin(position, list(self._doubts))).tolist():
            marks[owner[at]] += self._doubts[int(position[at])]
        if window:
            made = self.scenarios(window)
            # A position has no return before its subject's window begins, so that those are not gaps within it.
            before = made.lacks.shape[1] - self.sessions_used(window)
            gaps = made.lacks.sum(axis=1)[position] - before[owner]
            for at in np.flatnonzero(gaps > 0).tolist():
                name = self.world.market.instruments[int(self.world.holdings.instrument[position[at]])].id
                marks[owner[at]].append(Mark(MarkKind.GAPS, f"{name} without {int(gaps[at])} of its returns"))
        return [shortened(own) for own in marks]

    @cached_property
    def _stray(self) -> list[Mark]:
        names = [self.world.market.instruments[at].id for at in self.world.holdings.instrument[self.members.stray]]
        return stray_marks(names)

    @cached_property
    def _doubts(self) -> dict[int, list[Mark]]:
        """By position, what is old in its exposure in the slice's currency."""
        market, holdings = self.world.market, self.world.holdings
        held = holdings.instrument
        old_close = (market.carried & ~np.isnan(market.close))[held]
        own_old = market.rate_carried[market.currency_index()[self.currency]]
        old_rate = market.rate_carried[position_currencies(self.world, holdings)] | own_old
        old_rate &= foreign(self.world, holdings, self.currency)
        doubts: dict[int, list[Mark]] = {}
        for at in np.flatnonzero(old_close | old_rate).tolist():
            instrument = market.instruments[int(held[at])]
            if old_close[at]:
                note = f"{instrument.id} on its close of {market.closed_on[held[at]]}"
                doubts.setdefault(at, []).append(Mark(MarkKind.CARRIED, note))
            if old_rate[at]:
                doubts.setdefault(at, []).extend(self._old_rates(instrument.currency))
        return doubts

    def _old_rates(self, currency: str) -> list[Mark]:
        """What is old in the rate from a currency into the slice's."""
        place, carried = self.world.market.currency_index(), self.world.market.rate_carried
        old = [code for code in (currency, self.currency) if carried[place[code]]]
        return [Mark(MarkKind.CARRIED, f"an older FX rate of {code}") for code in old]


def within_firm(rule: Rule) -> bool:
    """Whether a rule measures what its subjects are within the firm, whatever book they lie in."""
    return rule.measure.parameters.get("within") == "firm"


def stray_marks(names: Iterable[str]) -> list[Mark]:
    """The doubt that positions which no file describes cast on every group that they may belong to."""
    return [Mark(MarkKind.MISSING, f"{name} may belong here, no instruments file describes it") for name in names]


def shortened(marks: list[Mark]) -> list[Mark]:
    """One mark a kind, naming the first few instruments and counting the others."""
    short = []
    for kind in MarkKind if marks else ():
        notes = list(dict.fromkeys(mark.note for mark in marks if mark.kind is kind))
        if notes:
            more = len(notes) - NAMED
            short.append(Mark(kind, "; ".join(notes[:NAMED]) + (f"; and {more} more" if more > 0 else "")))
    return short
