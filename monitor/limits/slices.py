"""A slice of the world: some subjects of one rule that share a currency, a calendar and a number of sessions."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from monitor.limits.subjects import Members
from monitor.limits.valuation import LEAST_OF_WINDOW, Scenarios, Valuation, position_currencies
from monitor.words import InstrumentKind, Mark, MarkKind
from monitor.world import Booleans, Floats, Integers, Rule, World

NAMED = 3  # how many instruments a reason or a mark lists before it only counts


@dataclass(frozen=True)
class Slice:
    """Everything that a measure may ask about its subjects. Arrays are (subjects,) unless said otherwise."""

    valuation: Valuation
    rule: Rule
    members: Members
    currency: str
    calendar: str

    @property
    def world(self) -> World:
        return self.valuation.world

    @property
    def size(self) -> int:
        return len(self.members.subjects)

    @cached_property
    def exposure(self) -> Floats:
        """(positions,) in the slice's currency; zero where unknown: `troubles` names those."""
        return np.nan_to_num(self.valuation.exposure(self.currency))

    @cached_property
    def own_cash(self) -> Booleans:
        """(positions,) cash in the slice's currency, which cannot lose."""
        holdings, instruments = self.world.holdings, self.world.market.instruments
        cash = np.array(
            [item.kind is InstrumentKind.CASH and item.currency == self.currency for item in instruments],
            dtype=np.bool_,
        )
        return cash[holdings.instrument]

    def scenarios(self, window: int) -> Scenarios:
        """The newest sessions of the calendar's window, `window` at most."""
        made = self.valuation.scenarios(self.calendar, self.currency)
        rows = slice(max(made.pnl.shape[1] - window, 0), None)
        return Scenarios(made.pnl[:, rows], made.lacks[:, rows], made.riskless, made.log_returns[:, rows])

    def denominator(self, name: str) -> tuple[Floats, list[str | None]]:
        """The NAV or the gross exposure of the book (or the firm) that each subject lies in, with reasons for gaps."""
        of_book = {book: self._denominator(name, book) for book in {item.book for item in self.members.subjects}}
        found = [of_book[subject.book] for subject in self.members.subjects]
        return np.array([value for value, _ in found], dtype=np.float64), [reason for _, reason in found]

    def _denominator(self, name: str, book: str | None) -> tuple[float, str | None]:
        firm, market, holdings = self.world.terms.firm, self.world.market, self.world.holdings
        books = [item for item in firm.books if book in (None, item.id)]
        if name == "gross":
            missing = [holdings.missing[item.id] for item in books if item.id in holdings.missing]
            numbers = [at for at, item in enumerate(firm.books) if item in books]
            own = self.valuation.exposure(self.currency)[np.isin(holdings.book, numbers)]
            gross = float(np.abs(own).sum())
            if missing or not np.isfinite(gross):
                return np.nan, missing[0] if missing else "a part of the gross exposure is not known"
            return (gross, None) if gross > 0 else (np.nan, "there is no gross exposure to divide by")
        total, place = 0.0, market.currency_index()
        for item in books:
            nav = self.world.nav[item.id]
            if nav.value is None:
                return np.nan, nav.reason
            total += nav.value * float(market.rate[place[item.currency]] / market.rate[place[self.currency]])
        if not np.isfinite(total):
            return np.nan, f"no FX rate turns the NAV into {self.currency}"
        return total, None

    def exposure_troubles(self) -> dict[int, str]:
        """Positions whose exposure is not known, with the reason."""
        world = self.world
        held = world.holdings.instrument
        exposure = self.valuation.exposure(self.currency)
        expired = np.array(
            [item.expiry is not None and item.expiry < world.recipe.date for item in world.market.instruments]
        )
        doubtful = self._is_member() & (world.market.unknown[held] | expired[held] | np.isnan(exposure))
        troubles: dict[int, str] = {}
        for at in np.flatnonzero(doubtful).tolist():
            instrument = world.market.instruments[int(held[at])]
            if world.market.unknown[held[at]]:
                troubles[at] = f"no instruments file describes {instrument.id}"
            elif expired[held[at]]:
                troubles[at] = f"{instrument.id} expired on {instrument.expiry}"
            elif np.isnan(world.market.close[held[at]]):
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
        """For each subject what makes its figures less certain than they look."""
        market, held = self.world.market, self.world.holdings.instrument
        foreign = np.array([item.currency != self.currency for item in market.instruments], dtype=np.bool_)[held]
        old_close = (market.carried & ~np.isnan(market.close))[held]
        old_rate = market.rate_carried[position_currencies(self.world, self.world.holdings)] & foreign
        gaps = self.scenarios(window).lacks.sum(axis=1) if window else np.zeros(len(held), dtype=np.int64)
        marked = old_close | old_rate | (gaps > 0)
        marks: list[list[Mark]] = [[] for _ in range(self.size)]
        pairs = marked[self.members.position]
        for owner, at in zip(self.members.owner[pairs].tolist(), self.members.position[pairs].tolist(), strict=True):
            instrument = market.instruments[int(held[at])]
            if old_close[at]:
                note = f"{instrument.id} on its close of {market.closed_on[held[at]]}"
                marks[owner].append(Mark(MarkKind.CARRIED, note))
            if old_rate[at]:
                marks[owner].append(Mark(MarkKind.CARRIED, f"an older FX rate of {instrument.currency}"))
            if gaps[at]:
                marks[owner].append(Mark(MarkKind.GAPS, f"{instrument.id} without {int(gaps[at])} returns"))
        return [_shortened(own) for own in marks]

    def _is_member(self) -> Booleans:
        member = np.zeros(len(self.world.holdings.quantity), dtype=np.bool_)
        member[self.members.position] = True
        return member


def _shortened(marks: list[Mark]) -> list[Mark]:
    """One mark a kind, naming the first few instruments and counting the others."""
    short = []
    for kind in MarkKind:
        notes = list(dict.fromkeys(mark.note for mark in marks if mark.kind is kind))
        if notes:
            more = len(notes) - NAMED
            short.append(Mark(kind, "; ".join(notes[:NAMED]) + (f"; and {more} more" if more > 0 else "")))
    return short
