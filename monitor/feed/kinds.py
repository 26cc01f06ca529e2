"""What each kind of file holds: bytes in, a parsed file or findings out."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date

import numpy as np

from monitor.feed.tables import TOO_LARGE, Table, read_table
from monitor.reading.values import shown
from monitor.words import FileKind, Finding, InstrumentKind, did_you_mean
from monitor.world import Floats, Instrument

LATER_KINDS = ("bond_price", "external")
RANGE_FIELDS = ("open", "high", "low")


@dataclass(frozen=True)
class Panel:
    """Values by day and name. days: ordinals, ascending. values: (days, names), NaN where a name has none.

    ranges: (3, days, names) the prices of RANGE_FIELDS beside closes, NaN where not given; None when the file has none.
    """

    days: tuple[int, ...]
    names: tuple[str, ...]
    values: Floats
    ranges: Floats | None = None


@dataclass(frozen=True)
class PositionRows:
    """Rows as given, lots not yet summed. flat: books that say they hold nothing."""

    book: tuple[str, ...]
    instrument: tuple[str, ...]
    quantity: tuple[float, ...]
    flat: frozenset[str]

    @property
    def books(self) -> frozenset[str]:
        return self.flat | frozenset(self.book)


@dataclass(frozen=True)
class NavRow:
    book: str
    nav: float
    on: date


@dataclass(frozen=True)
class PnlRow:
    book: str
    actual: float
    fees: float | None
    intraday: float | None


@dataclass(frozen=True)
class Vocabulary:
    """The names that a site knows, against which new files are held. None: the file was held against them before."""

    books: tuple[str, ...] | None = None
    currencies: frozenset[str] | None = None
    knows_calendar: Callable[[str], bool] | None = None
    currency_of: Mapping[str, str] = field(default_factory=dict)

    @property
    def held_before(self) -> bool:
        return self.books is None

    def has_currency(self, code: str) -> bool:
        return self.currencies is None or code in self.currencies


@dataclass(frozen=True)
class Parsed:
    """A file that can be taken: its content, the number of its rows and the dates they cover."""

    content: Panel | PositionRows | tuple[NavRow, ...] | tuple[PnlRow, ...] | tuple[Instrument, ...]
    rows: int
    first: date | None
    last: date | None
    findings: tuple[Finding, ...] = field(default=())


def parse(kind: FileKind, file: str, data: bytes, day: date | None, words: Vocabulary) -> Parsed:
    """Parse one file. What is wrong stands in `findings`; then the content must not be used."""
    required, optional, extra, read = READERS[kind]
    table = read_table(file, data, required, optional, extra)
    if table.findings:
        return _refused(table)
    parsed = read(table, day, words)
    return _refused(table) if table.findings else parsed


def _refused(table: Table) -> Parsed:
    return Parsed((), len(table.rows), None, None, tuple(table.findings))


def _prices(table: Table, day: date | None, words: Vocabulary) -> Parsed:
    names = table.names("instrument")
    closes = table.numbers("close")
    ranges = _ranges(table, closes, words)
    if table.has("volume"):
        table.numbers("volume", empty=0.0)
    if table.has("currency"):
        _own_currencies(table, names, words)
    table.once([(name,) for name in names], "instrument")
    return _one_day(day, names, closes, ranges)


def _ranges(table: Table, closes: Sequence[float], words: Vocabulary) -> Floats | None:
    """(3, rows) of RANGE_FIELDS, NaN in empty cells; None when there is nothing in any.

    A file that was taken by an edition which did not look at these columns stays taken: in a row that would be refused
    now, nothing counts as given.
    """
    if not any(table.has(column) for column in RANGE_FIELDS):
        return None
    already = len(table.findings)
    ranges = np.full((len(RANGE_FIELDS), len(closes)), np.nan)
    for place, column in enumerate(RANGE_FIELDS):
        if table.has(column):
            ranges[place] = table.numbers(column, empty=math.nan)
            for at in np.flatnonzero(ranges[place] <= 0).tolist():
                found = f"the {column} {table.texts(column)[at]}"
                table.wrong(at, column, found, "a number above zero", "Leave the cell empty where there is none.")
                ranges[place, at] = np.nan
    _check_order(table, ranges, closes)
    if words.held_before:
        lines = {finding.line for finding in table.findings[already:]}
        del table.findings[already:]
        ranges[:, [at for at, line in enumerate(table.lines) if line in lines]] = np.nan
    return None if np.isnan(ranges).all() else ranges


def _check_order(table: Table, ranges: Floats, closes: Sequence[float]) -> None:
    """No open and no close lies below the low or above the high of its row."""
    opening, high, low = ranges
    for column, bound, beyond, side, expected in (
        ("high", high, np.greater, "below", "a high at or above open and close"),
        ("low", low, np.less, "above", "a low at or below open and close"),
    ):
        for other, prices in (("open", opening), ("close", np.array(closes))):
            for at in np.flatnonzero(beyond(prices, bound)).tolist():
                found = f"the {column} {table.texts(column)[at]} {side} the {other} {table.texts(other)[at]}"
                table.wrong(at, column, found, expected)


def _fx(table: Table, day: date | None, words: Vocabulary) -> Parsed:
    pairs, rates = _pairs(table, words)
    table.once([(pair,) for pair in pairs], "pair")
    return _one_day(day, pairs, rates)


def _one_day(day: date | None, names: Sequence[str], values: Sequence[float], ranges: Floats | None = None) -> Parsed:
    if day is None:
        raise ValueError("a daily file has a date in its name")
    row = np.array([values], dtype=np.float64).reshape(1, len(names))
    panel = Panel((day.toordinal(),), tuple(names), row, None if ranges is None else ranges[:, None, :])
    return Parsed(panel, len(names), day, day)


def _history(table: Table, _day: date | None, words: Vocabulary) -> Parsed:
    names = table.names("instrument")
    closes = table.numbers("close")
    return _long(table, "instrument", names, closes, _ranges(table, closes, words))


def _history_fx(table: Table, _day: date | None, words: Vocabulary) -> Parsed:
    pairs, rates = _pairs(table, words)
    return _long(table, "pair", pairs, rates)


def _long(table: Table, column: str, names: list[str], values: list[float], ranges: Floats | None = None) -> Parsed:
    days = table.days("date")
    table.once([(str(day), name) for day, name in zip(days, names, strict=True)], column)
    if table.findings or not days:
        return Parsed(Panel((), (), np.empty((0, 0))), len(names), None, None)
    ordinals = np.array([day.toordinal() for day in days])
    axis, row = np.unique(ordinals, return_inverse=True)
    known, column_of = np.unique(np.array(names), return_inverse=True)
    matrix = np.full((len(axis), len(known)), np.nan)
    matrix[row, column_of] = values
    spread = None
    if ranges is not None:
        spread = np.full((len(ranges), len(axis), len(known)), np.nan)
        spread[:, row, column_of] = ranges
    panel = Panel(tuple(int(day) for day in axis), tuple(str(name) for name in known), matrix, spread)
    return Parsed(panel, len(names), min(days), max(days))


def _pairs(table: Table, words: Vocabulary) -> tuple[list[str], list[float]]:
    pairs = table.names("pair")
    rates = table.numbers("rate")
    for at, (pair, rate) in enumerate(zip(pairs, rates, strict=True)):
        if not (words.has_currency(pair[:3]) and words.has_currency(pair[3:])) or pair[:3] == pair[3:]:
            expected = "two ISO 4217 codes, as EURUSD: what one EUR costs in USD"
            table.wrong(at, "pair", f"{shown(pair)} as pair", expected)
        if rate <= 1 / TOO_LARGE:
            table.wrong(at, "rate", f"the rate {rate:g}", "a rate above zero")
    return pairs, rates


def _own_currencies(table: Table, names: Sequence[str], words: Vocabulary) -> None:
    """A price must be in its instrument's currency."""
    given = _known_currencies(table, "currency", words, empty=True)
    for at, (name, code) in enumerate(zip(names, given, strict=True)):
        own = words.currency_of.get(name, code)
        if code and code != own:
            expected = f"{own}, its currency by the instruments file"
            table.wrong(at, "currency", f"a close of {name} in {code}", expected)


def _known_currencies(table: Table, column: str, words: Vocabulary, empty: bool = False) -> list[str]:
    codes = table.names(column, empty)
    for at, code in enumerate(codes):
        if not words.has_currency(code) and not (empty and not code):
            table.wrong(at, column, f"{shown(code)} as {column}", "an ISO 4217 currency, as EUR")
    return codes


def _known_books(table: Table, words: Vocabulary) -> list[str]:
    books = table.names("book")
    for at, book in enumerate(books):
        if words.books is not None and book not in words.books:
            expected = "one of " + ", ".join(words.books)
            table.wrong(at, "book", f"the book {shown(book)}", expected, did_you_mean(book, words.books))
    return books


def _positions(table: Table, day: date | None, words: Vocabulary) -> Parsed:
    books = _known_books(table, words)
    instruments = table.names("instrument", empty=True)
    flat = {book for book, instrument in zip(books, instruments, strict=True) if not instrument}
    quantities = table.numbers("quantity", empty=0.0)
    if table.has("cost"):
        table.numbers("cost", empty=0.0)
    given = table.texts("quantity")
    held = [at for at, instrument in enumerate(instruments) if instrument]
    for at, instrument in enumerate(instruments):
        if not instrument and quantities[at] != 0:
            table.wrong(at, "instrument", "a quantity without an instrument", "the instrument, or no quantity")
        if instrument and not given[at]:
            table.wrong(at, "quantity", f"no quantity of {shown(instrument)}", "a number; 0 when it is sold")
        if instrument and books[at] in flat:
            table.wrong(at, "book", f"a position of {books[at]}, which another row says is flat", "one or the other")
    if table.has("lot"):
        lots = table.names("lot", empty=True)
        table.once([(books[at], instruments[at], lots[at]) for at in held if lots[at]], "lot")
    rows = PositionRows(
        tuple(books[at] for at in held),
        tuple(instruments[at] for at in held),
        tuple(quantities[at] for at in held),
        frozenset(flat),
    )
    return Parsed(rows, len(books), day, day)


def _nav(table: Table, day: date | None, words: Vocabulary) -> Parsed:
    books = _known_books(table, words)
    navs = table.numbers("nav")
    on = table.days("nav_date", empty=day) if table.has("nav_date") else [day or date.min] * len(books)
    for column in ("flows", "units"):
        if table.has(column):
            table.numbers(column, empty=0.0)
    for at, nav_day in enumerate(on):
        if day is not None and nav_day > day:
            table.wrong(at, "nav_date", f"the date {nav_day}", f"a date up to that of the file, {day}")
    table.once([(book,) for book in books], "book")
    return Parsed(tuple(map(NavRow, books, navs, on)), len(books), day, day)


def _pnl(table: Table, day: date | None, words: Vocabulary) -> Parsed:
    books = _known_books(table, words)
    actual = table.numbers("actual")
    fees, intraday = _optional_numbers(table, "fees"), _optional_numbers(table, "intraday")
    table.once([(book,) for book in books], "book")
    return Parsed(tuple(map(PnlRow, books, actual, fees, intraday)), len(books), day, day)


def _optional_numbers(table: Table, column: str) -> list[float | None]:
    """The numbers of a column that may be absent; None in empty cells."""
    if not table.has(column):
        return [None] * len(table.rows)
    numbers = table.numbers(column, empty=0.0)
    return [number if text else None for number, text in zip(numbers, table.texts(column), strict=True)]


def _instruments(table: Table, _day: date | None, words: Vocabulary) -> Parsed:
    names = table.names("instrument")
    table.once([(name,) for name in names], "instrument")
    currencies = _known_currencies(table, "currency", words)
    kinds = [_kind(table, at, text) for at, text in enumerate(table.texts("kind"))] if table.has("kind") else []
    multipliers = table.numbers("multiplier", empty=1.0) if table.has("multiplier") else []
    calendars = _known_calendars(table, words) if table.has("calendar") else []
    expiries = table.days("expiry", empty=date.max) if table.has("expiry") else []
    tags = [name for name in table.columns if name not in INSTRUMENT_FIELDS]
    values = {name: table.names(name, empty=True) for name in tags}
    for at, multiplier in enumerate(multipliers):
        if multiplier <= 0:
            table.wrong(at, "multiplier", f"the multiplier {multiplier:g}", "a number above zero")
    for at, kind in enumerate(kinds):
        if kind is InstrumentKind.FUTURE and (not expiries or expiries[at] == date.max):
            column = "expiry" if expiries else "kind"
            table.wrong(at, column, f"the future {shown(names[at])} without an expiry", "a date in the column expiry")
    if table.findings:
        return Parsed((), len(names), None, None)
    made = tuple(
        Instrument(
            id=name,
            currency=currencies[at],
            kind=kinds[at] if kinds else InstrumentKind.EQUITY,
            multiplier=multipliers[at] if multipliers else 1.0,
            calendar=(calendars[at] or None) if calendars else None,
            expiry=expiries[at] if expiries and expiries[at] != date.max else None,
            tags={tag: values[tag][at] for tag in tags if values[tag][at]},
        )
        for at, name in enumerate(names)
    )
    return Parsed(made, len(made), None, None)


def _known_calendars(table: Table, words: Vocabulary) -> list[str]:
    calendars = table.names("calendar", empty=True)
    if words.knows_calendar is not None:
        unknown = {name for name in set(calendars) if name and not words.knows_calendar(name)}
        for at, name in enumerate(calendars):
            if name in unknown:
                expected = "the ISO 10383 code of an exchange, as XDUB"
                table.wrong(at, "calendar", f"the calendar {shown(name)}", expected, "Leave it out for the book's.")
    return calendars


def _kind(table: Table, at: int, text: str) -> InstrumentKind:
    known = [kind.value for kind in InstrumentKind]
    if not text:
        return InstrumentKind.EQUITY
    if text in LATER_KINDS:
        table.wrong(at, "kind", f"the kind {text!r}, which is not there yet", "one of " + ", ".join(known))
    elif text not in known:
        table.wrong(at, "kind", f"the kind {shown(text)}", "one of " + ", ".join(known), did_you_mean(text, known))
    else:
        return InstrumentKind(text)
    return InstrumentKind.EQUITY


INSTRUMENT_FIELDS = ("instrument", "currency", "kind", "multiplier", "calendar", "expiry")
PRICE_FIELDS = (*RANGE_FIELDS, "volume", "currency")

Reader = Callable[[Table, date | None, Vocabulary], Parsed]
READERS: Mapping[FileKind, tuple[tuple[str, ...], tuple[str, ...], bool, Reader]] = {
    FileKind.PRICES: (("instrument", "close"), PRICE_FIELDS, False, _prices),
    FileKind.POSITIONS: (("book", "instrument", "quantity"), ("cost", "lot"), False, _positions),
    FileKind.FX: (("pair", "rate"), (), False, _fx),
    FileKind.INSTRUMENTS: (("instrument", "currency"), INSTRUMENT_FIELDS[2:], True, _instruments),
    FileKind.NAV: (("book", "nav"), ("nav_date", "flows", "units"), False, _nav),
    FileKind.PNL: (("book", "actual"), ("fees", "intraday"), False, _pnl),
    FileKind.HISTORY: (("date", "instrument", "close"), PRICE_FIELDS, False, _history),
    FileKind.HISTORY_FX: (("date", "pair", "rate"), (), False, _history_fx),
}
