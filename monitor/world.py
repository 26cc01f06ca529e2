"""A recipe names every input of an evening; a world is what is built from it; rules are asked of a world. Data only.

Axes: positions, instruments, currencies, sessions. Rates say what one unit of a currency is worth in the firm's base
currency, so that the rate from X into Y is rate[X] / rate[Y]. NaN in a price or a rate means that none is known.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import date
from decimal import Decimal
from typing import Any

import numpy as np
import numpy.typing as npt

from monitor.words import InstrumentKind, Mark, Outcome, Recipe, Side, Standing, Subject, Unit

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Booleans = npt.NDArray[np.bool_]
Days = npt.NDArray[np.datetime64]


@dataclass(frozen=True)
class Book:
    id: str
    name: str
    currency: str
    calendar: str


@dataclass(frozen=True)
class Firm:
    """All books of the site together, in the site's base currency, on the site's calendar."""

    site: str
    base_currency: str
    calendar: str
    books: tuple[Book, ...]


@dataclass(frozen=True)
class Instrument:
    """`tags` holds sector, issuer, country and whatever the site adds; `calendar` None: that of the book."""

    id: str
    currency: str
    kind: InstrumentKind = InstrumentKind.EQUITY
    multiplier: float = 1.0
    calendar: str | None = None
    expiry: date | None = None
    tags: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Nav:
    """A book's net asset value in its own currency; `value` None with the reason why there is none to divide by."""

    value: float | None
    on: date | None
    reason: str | None = None


@dataclass(frozen=True)
class Holdings:
    """Positions on one business date, sorted by book and instrument.

    book: (positions,) index into Firm.books. instrument: (positions,) index into Market.instruments.
    quantity: (positions,) signed, lots summed. missing: books whose positions are not known, with the reason.
    """

    on: date
    book: Integers
    instrument: Integers
    quantity: Floats
    missing: Mapping[str, str]


@dataclass(frozen=True)
class Market:
    """Prices and rates of the evening.

    close, closed_on: (instruments,) the newest close on or before `on`, and its date. rate: (currencies,).
    carried: (instruments,) the price is older than the instrument's own market has sessions; rate_carried likewise.
    unknown: (instruments,) no instrument file describes it.
    """

    on: date
    instruments: tuple[Instrument, ...]
    close: Floats
    closed_on: Days
    carried: Booleans
    unknown: Booleans
    currencies: tuple[str, ...]
    rate: Floats
    rate_carried: Booleans

    def currency_index(self) -> Mapping[str, int]:
        return {currency: place for place, currency in enumerate(self.currencies)}


@dataclass(frozen=True)
class ActualPnl:
    """What a book says it made on one date, in its own currency; negative is a loss.

    actual: with the day's trades, after fees. fees: what of it was paid in fees and commissions, above zero for a cost.
    intraday: what of it came from the day's trades. None where the book does not say. A P&L without fees, as rules of
    supervision ask for, is actual + fees.
    """

    actual: float
    fees: float | None
    intraday: float | None


@dataclass(frozen=True)
class Ranges:
    """What the price files say of each session itself: (instruments, n + 1), NaN where not given, and never carried.

    open, high, low: above zero, low <= open, close <= high wherever two of them are given. close: as given beside them.
    """

    open: Floats
    high: Floats
    low: Floats
    close: Floats


@dataclass(frozen=True)
class Window:
    """The sessions of one calendar up to the evening, with a close and a rate on each.

    sessions: (n + 1,) dates, ascending. close: (instruments, n + 1), carried over days without one.
    rate: (currencies, n + 1), carried likewise. gap: (instruments, n + 1) no close although the instrument's own market
    was open. rate_gap: (currencies, n + 1) no rate although the firm's calendar had a session. ranges: None unless a
    rule needs them.
    """

    calendar: str
    sessions: Days
    close: Floats
    rate: Floats
    gap: Booleans
    rate_gap: Booleans
    ranges: Ranges | None = None


@dataclass(frozen=True)
class Past:
    """What tonight's figures need of earlier evenings: by calendar, the holdings of its session before."""

    held_before: Mapping[str, Holdings]


@dataclass(frozen=True)
class MeasureCall:
    """A measure by name with its parameters, the site's defaults filled in."""

    name: str
    parameters: Mapping[str, Any]


@dataclass(frozen=True)
class Selector:
    """Which values of one tag a rule applies to: `values` None means any value; `negated` means all but these."""

    tag: str
    values: tuple[str, ...] | None
    negated: bool = False


@dataclass(frozen=True)
class Rule:
    """One limit. Levels are in the rule's unit (percentages as fractions). `file`, `line`: where it is written."""

    id: str
    title: str
    applies_to: tuple[Selector, ...]
    each: str | None
    measure: MeasureCall
    unit: Unit
    currency: str | None
    near: float | None
    limit: float | None
    near_below: float | None
    limit_below: float | None
    kind: str | None
    owner: str | None
    tell: tuple[str, ...]
    in_force_from: date | None
    in_force_to: date | None
    because: str | None
    file: str
    line: int

    def in_force(self, day: date) -> bool:
        return (self.in_force_from or day) <= day <= (self.in_force_to or day)


@dataclass(frozen=True)
class RecordTerms:
    """How the record of the loss model is judged. challenger: the method that stands beside a rule's own.

    missing_counts: a day without P&L or VaR is an exception. pnl: `hypothetical`, `actual`, or `larger`, which counts
    the exceptions of both and takes the larger count.
    """

    challenger: MeasureCall | None
    missing_counts: bool
    pnl: str


@dataclass(frozen=True)
class Terms:
    """What was signed, as a recipe's `rules` hash names it: the firm, its rounds and its rules.

    rounds: books by round, in the order of the day. longest_window: the most sessions that a rule or a page asks for.
    nav_age: business days that a NAV may be old. default_tail: the measure that pages show of every book. needs_ranges:
    whether a rule looks at opening, highest and lowest prices.
    """

    firm: Firm
    rounds: Mapping[str, tuple[str, ...]]
    rules: tuple[Rule, ...]
    longest_window: int
    days_a_year: int
    nav_age: int
    default_tail: MeasureCall
    record: RecordTerms
    needs_ranges: bool


@dataclass(frozen=True)
class Scope:
    """What this round answers for: its books, and the subjects across books when it completes the date."""

    books: tuple[str, ...]
    completes: bool

    def holds(self, book: str | None) -> bool:
        return self.completes if book is None else book in self.books


@dataclass(frozen=True)
class World:
    """All that the rules are asked of. nav: by book id. windows: by calendar."""

    recipe: Recipe
    scope: Scope
    holdings: Holdings
    market: Market
    windows: Mapping[str, Window]
    nav: Mapping[str, Nav]
    past: Past
    terms: Terms
    calendars: tuple[str, ...]  # all whose sessions were used
    lacking: tuple[str, ...]  # what was expected tonight and did not come, in words


@dataclass(frozen=True)
class How:
    """The method behind a figure, so that it can say so wherever it is shown."""

    method: str | None = None
    confidence: Decimal | None = None
    horizon_days: int | None = None
    window: int | None = None
    of: str | None = None
    detail: str | None = None  # what else the method was told, in words


@dataclass(frozen=True)
class Answer:
    """Tonight's standing of one rule for one subject, with everything a reader needs to believe it.

    value is None exactly when standing is `unmeasured`, and then reason says why. low and high are sampling bounds at
    95 %; `unbounded` says why one of them is None where the measure has such bounds at all.
    utilisation is None unless value and level are both positive.
    """

    rule: str
    subject: Subject
    measure: str
    standing: Standing
    value: float | None
    unit: Unit
    currency: str | None
    near: float | None
    limit: float | None
    limit_below: float | None
    side: Side
    distance: float | None
    utilisation: float | None
    low: float | None
    high: float | None
    unbounded: str | None
    n: int | None
    reason: str | None
    marks: tuple[Mark, ...]
    how: How

    @property
    def doubtful(self) -> bool:
        """Whether this answer must not cure an excess."""
        return self.standing is Standing.UNMEASURED or any(mark.doubtful for mark in self.marks)


@dataclass(frozen=True)
class BookFigures:
    """What a page shows of a book or the firm whatever its rules say, in `currency`, with the reasons for gaps.

    value_at_risk: by the site's default measure, a forecast for the next session. pnl: the hypothetical P&L of the
    session just ended, of the positions held before it; negative is a loss.
    """

    subject: Subject
    currency: str
    positions: int
    gross: float | None
    net: float | None
    nav: float | None
    nav_on: date | None
    value_at_risk: float | None
    expected_shortfall: float | None
    pnl: float | None
    n: int | None
    how: How
    reasons: tuple[str, ...]


@dataclass(frozen=True)
class Unmeasured:
    """A position or a book that could not be measured, and why."""

    subject: Subject
    reason: str


@dataclass(frozen=True)
class Standings:
    """The answers of all rules in force to one world."""

    answers: tuple[Answer, ...]
    books: tuple[BookFigures, ...]
    unmeasured: tuple[Unmeasured, ...]
    uncovered: tuple[Subject, ...]
    lacking: tuple[str, ...]

    @property
    def outcome(self) -> Outcome:
        found = {answer.standing for answer in self.answers}
        if self.lacking or self.unmeasured or Standing.UNMEASURED in found:
            return Outcome.INCOMPLETE
        for standing in (Standing.OVER, Standing.NEAR):
            if standing in found:
                return Outcome(standing.value)
        return Outcome.WITHIN

    def counts(self) -> dict[str, int]:
        found = [answer.standing for answer in self.answers]
        return {standing.value: found.count(standing) for standing in Standing}
