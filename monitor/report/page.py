"""All that a page shows. Data only: a page is a pure function of it, so the same data give the same bytes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date

from monitor.excesses.register import Excess
from monitor.words import Outcome, Recipe, Subject
from monitor.world import Rule, Standings


@dataclass(frozen=True)
class Series:
    """A book's or the firm's VaR against what came, oldest session first; all three tuples have the same length.

    value_at_risk: the forecast made the evening BEFORE for that day, positive when it is a loss. pnl: the P&L of that
    day, negative when it is a loss. None where there is none. Amounts are in `currency`.
    """

    subject: Subject
    currency: str
    days: tuple[date, ...]
    value_at_risk: tuple[float | None, ...]
    pnl: tuple[float | None, ...]

    @property
    def exceptions(self) -> tuple[int, ...]:
        """The places of the days whose loss was strictly larger than the VaR."""
        pairs = enumerate(zip(self.value_at_risk, self.pnl, strict=True))
        return tuple(place for place, (var, pnl) in pairs if var is not None and pnl is not None and -pnl > var)

    @property
    def compared(self) -> int:
        """The number of days that have both a forecast and a P&L."""
        return sum(None not in pair for pair in zip(self.value_at_risk, self.pnl, strict=True))


@dataclass(frozen=True)
class AgedExcess:
    """An excess that is alive tonight; `day` counts the business days of its subject's calendar, 1 when it opened."""

    excess: Excess
    day: int


@dataclass(frozen=True)
class Before:
    """The evening that tonight is compared with: the newest one before it of the same round."""

    date: date
    standings: Standings


@dataclass(frozen=True)
class Neighbours:
    """File names of the pages one can go to from here."""

    earlier: str | None = None
    later: str | None = None
    index: str | None = None


@dataclass(frozen=True)
class Page:
    """One edition of one evening. seq, hash: its ledger entry. checked_at: when, as text. rules: by id."""

    site: str
    recipe: Recipe
    edition: int
    seq: int
    hash: str
    checked_at: str
    standings: Standings
    before: Before | None
    rules: Mapping[str, Rule]
    alive: tuple[AgedExcess, ...]
    opened: tuple[Excess, ...]
    cured: tuple[Excess, ...]
    series: tuple[Series, ...]
    neighbours: Neighbours = Neighbours()


@dataclass(frozen=True)
class Listed:
    """One evening in the list of evenings; `page` is the name of its file, None where it is not drawn.

    counts: standings by their word. newest: whether this is the latest edition of its evening.
    """

    date: date
    round: str
    edition: int
    outcome: Outcome
    counts: Mapping[str, int]
    page: str | None
    newest: bool = True
