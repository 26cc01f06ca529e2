"""Closes and rates by day, carried over days without one, cut into the windows and the market of an evening."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import date, timedelta

import numpy as np

from monitor.facts import UsedFile
from monitor.feed.calendars import Sessions
from monitor.feed.history import History
from monitor.feed.known import Known
from monitor.feed.rates import worth
from monitor.words import FileKind, InstrumentKind
from monitor.world import Booleans, Days, Floats, Instrument, Integers, Market, Ranges, Window

LOOK_BACK = timedelta(days=20)  # far enough before a window to find the close that its first session carries
EPOCH = date(1970, 1, 1).toordinal()


@dataclass(frozen=True)
class Grid:
    """Closes (days, instruments) and worths of currencies (rate days, currencies), with the day each comes from.

    Days are ordinals, ascending; a source day of 0 means that nothing is known yet. The first row of each lies before
    everything known, so that any date finds a row. given: (days, instruments) a file gave a close for that very day.
    cash: (instruments,) whose close is always 1, and which no file of prices names. ranges: (3, days, instruments) of
    open, high and low as given, not carried; None unless a rule needs them.
    """

    cash: Booleans
    days: Integers
    given: Booleans
    close: Floats
    close_day: Integers
    rate_days: Integers
    currencies: tuple[str, ...]
    rate: Floats
    rate_day: Integers
    ranges: Floats | None


def make_grid(
    first: date,
    last: date,
    known: Known,
    history: History,
    instruments: Sequence[Instrument],
    currencies: Sequence[str],
    base: str,
    needs_ranges: bool,
) -> Grid:
    """Everything known from LOOK_BACK before `first` up to `last`. currencies: sorted."""
    since = first - LOOK_BACK
    cash = _of_kind(instruments, InstrumentKind.CASH)
    files = _files(known, FileKind.HISTORY, FileKind.PRICES, since)
    days, names, values = history.matrix(files, since, last)
    days, closes = _after_nothing(days, _closes_of(instruments, names, values))
    close, close_day = _carry(days, closes)
    close[:, cash] = 1.0
    ranges = history.ranges(files, days, [instrument.id for instrument in instruments]) if needs_ranges else None
    rate_days, pairs, rates = history.matrix(_files(known, FileKind.HISTORY_FX, FileKind.FX, since), since, last)
    rate_days, rates = _after_nothing(rate_days, rates)
    rate, rate_day = worth(*_carry(rate_days, rates), pairs, currencies, base)
    given = ~np.isnan(closes)
    return Grid(cash, days, given, close, close_day, rate_days, tuple(currencies), rate.T, rate_day.T, ranges)


def cut_window(
    calendar: str,
    sessions: Days,
    own: Mapping[str, Sessions],
    calendars: Sequence[str],
    firm_calendar: str,
    grid: Grid,
) -> Window:
    """The closes and rates on the sessions of one calendar. calendars: the name of each instrument's own."""
    ordinals = _ordinals(sessions)
    rows, rate_rows = _row_of(grid.days, ordinals), _row_of(grid.rate_days, ordinals)
    own_open = {name: own[name].open_on_each(sessions) for name in set(calendars)}
    opened = np.array([own_open[name] for name in calendars], dtype=np.bool_).reshape(len(calendars), len(sessions))
    given_today = grid.given[rows] & (grid.days[rows] == ordinals)[:, None]
    gap = opened & ~given_today.T & ~grid.cash[:, None]
    rate_gap = own[firm_calendar].open_on_each(sessions) & (ordinals > grid.rate_day[rate_rows].T)
    ranges = _cut_ranges(grid.ranges, grid.close, rows, given_today & ~grid.cash) if grid.ranges is not None else None
    return Window(calendar, sessions, grid.close[rows].T.copy(), grid.rate[rate_rows].T.copy(), gap, rate_gap, ranges)


def _cut_ranges(ranges: Floats, close: Floats, rows: Integers, given: Booleans) -> Ranges:
    """given: (sessions, instruments) a close that counts was given on the session itself."""
    opening, high, low, last = (np.where(given, prices[rows], np.nan).T.copy() for prices in (*ranges, close))
    return Ranges(open=opening, high=high, low=low, close=last)


def cut_market(
    on: date,
    instruments: tuple[Instrument, ...],
    unknown: Booleans,
    own: Mapping[str, Sessions],
    calendars: Sequence[str],
    firm_calendar: str,
    grid: Grid,
) -> Market:
    """The newest closes and rates on or before a date, with those marked that are older than they should be."""
    ordinal = np.array([on.toordinal()])
    row, rate_row = _row_of(grid.days, ordinal)[0], _row_of(grid.rate_days, ordinal)[0]
    last_session = {name: own[name].last(on).toordinal() for name in {*calendars, firm_calendar}}
    expected = np.array([last_session[name] for name in calendars], dtype=np.int64)
    return Market(
        on=on,
        instruments=instruments,
        close=grid.close[row],
        closed_on=_days(np.where(grid.cash, on.toordinal(), grid.close_day[row])),
        carried=(grid.close_day[row] < expected) & ~grid.cash,
        unknown=unknown,
        currencies=grid.currencies,
        rate=grid.rate[rate_row],
        rate_carried=grid.rate_day[rate_row] < last_session[firm_calendar],
    )


def _files(known: Known, start: FileKind, daily: FileKind, since: date) -> list[UsedFile]:
    return known.files(start) + known.files(daily, since=since)


def _closes_of(instruments: Sequence[Instrument], names: Sequence[str], values: Floats) -> Floats:
    """The closes of these instruments; a close that is not positive counts only for a future."""
    place = {name: at for at, name in enumerate(names)}
    columns = np.array([place.get(instrument.id, len(names)) for instrument in instruments], dtype=np.int64)
    closes = np.column_stack([values, np.full(len(values), np.nan)])[:, columns]
    closes[(closes <= 0) & ~_of_kind(instruments, InstrumentKind.FUTURE)] = np.nan
    return closes


def _of_kind(instruments: Sequence[Instrument], kind: InstrumentKind) -> Booleans:
    return np.array([item.kind is kind for item in instruments], dtype=np.bool_)


def _after_nothing(days: Integers, values: Floats) -> tuple[Integers, Floats]:
    nothing = np.full((1, values.shape[1]), np.nan)
    return np.concatenate([[0], days]), np.concatenate([nothing, values])


def _carry(days: Integers, values: Floats) -> tuple[Floats, Integers]:
    """Values (days, names) carried over days without one, and the day each comes from."""
    rows = np.maximum.accumulate(np.where(np.isnan(values), 0, np.arange(len(days))[:, None]), axis=0)
    return np.take_along_axis(values, rows, axis=0), days[rows]


def _row_of(days: Integers, ordinals: Integers) -> Integers:
    return np.searchsorted(days, ordinals, side="right") - 1


def _ordinals(days: Days) -> Integers:
    return days.astype("datetime64[D]").astype(np.int64) + EPOCH


def _days(ordinals: Integers) -> Days:
    return (ordinals - EPOCH).astype("datetime64[D]")
