"""Who holds what on a date, what each book is worth and what it says it made: from the files of the books."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import date, timedelta

import numpy as np

from monitor.facts import UsedFile
from monitor.feed.calendars import Sessions
from monitor.feed.history import History
from monitor.feed.kinds import NavRow, PnlRow, PositionRows
from monitor.feed.known import Known
from monitor.words import FileKind
from monitor.world import ActualPnl, Book, Firm, Holdings, Instrument, Nav


def collect_holdings(
    on: date, firm: Firm, known: Known, history: History, calendars: Mapping[str, Sessions]
) -> tuple[list[str], Holdings]:
    """The names of the instruments held on a date, and the holdings with instruments numbered by those names.

    On a session of its calendar a book's positions are those of that day's file; on other days those of its last
    session, unless a file of the day gives it. A book that is not given is missing with the reason, never flat.
    """
    lots: dict[tuple[int, str], float] = {}
    missing: dict[str, str] = {}
    for number, book in enumerate(firm.books):
        day = calendars[book.calendar].last(on)
        found = _rows_of(book, on, known, history) or _rows_of(book, day, known, history)
        if found is None:
            missing[book.id] = f"no accepted file gives the positions of {book.id} on {day}"
            continue
        for owner, name, quantity in zip(found.book, found.instrument, found.quantity, strict=True):
            if owner == book.id:
                lots[number, name] = lots.get((number, name), 0.0) + quantity
    held = sorted(key for key, quantity in lots.items() if quantity != 0)
    names = sorted({name for _, name in held})
    place = {name: at for at, name in enumerate(names)}
    return names, Holdings(
        on=on,
        book=np.array([number for number, _ in held], dtype=np.int64),
        instrument=np.array([place[name] for _, name in held], dtype=np.int64),
        quantity=np.array([lots[key] for key in held], dtype=np.float64),
        missing=missing,
    )


def _rows_of(book: Book, day: date, known: Known, history: History) -> PositionRows | None:
    for file in reversed(known.of_day(FileKind.POSITIONS, day)):
        rows = _positions(file, history)
        if book.id in rows.books:
            return rows
    return None


def _positions(file: UsedFile, history: History) -> PositionRows:
    content = history.parsed(file).content
    if not isinstance(content, PositionRows):
        raise TypeError(f"{file.file} holds no positions")
    return content


def latest_nav(
    book: Book, on: date, nav_age: int, known: Known, history: History, calendars: Mapping[str, Sessions]
) -> Nav:
    """The newest NAV dated on or before a date, if it is not older than `nav_age` business days of the book.

    The search goes further back than that, so that the reason can say how old the newest one is.
    """
    since = on - timedelta(days=40 + 2 * nav_age)
    rows = [
        row
        for file in known.files(FileKind.NAV, since=since)
        for row in _nav_rows(file, history)
        if row.book == book.id and row.on <= on
    ]
    if not rows:
        return Nav(None, None, f"no NAV of {book.id} on or before {on} is known")
    _, nav = max(enumerate(rows), key=lambda item: (item[1].on, item[0]))  # of two files for one date the later counts
    age = calendars[book.calendar].count(nav.on, on)
    if age > nav_age:
        return Nav(
            None, nav.on, f"the newest NAV of {book.id} is of {nav.on}, {age} business days old; {nav_age} allowed"
        )
    if nav.nav <= 0:
        return Nav(None, nav.on, f"the NAV of {book.id} of {nav.on} is not positive")
    return Nav(nav.nav, nav.on)


def _nav_rows(file: UsedFile, history: History) -> tuple[NavRow, ...]:
    content = history.parsed(file).content
    return tuple(row for row in content if isinstance(row, NavRow)) if isinstance(content, tuple) else ()


def actual_pnl(known: Known, history: History, first: date, last: date) -> dict[tuple[str, date], ActualPnl]:
    """What each book says it made on the dates from first to last, by book and date; absent where no file says it.

    Of the files for one date the one accepted last counts, whole: a book that it does not name has no P&L then.
    """
    return {
        (row.book, file.day): ActualPnl(row.actual, row.fees, row.intraday)
        for file in known.files(FileKind.PNL, since=first)
        if file.day is not None and file.day <= last
        for row in _pnl_rows(file, history)
    }


def _pnl_rows(file: UsedFile, history: History) -> tuple[PnlRow, ...]:
    content = history.parsed(file).content
    return tuple(row for row in content if isinstance(row, PnlRow)) if isinstance(content, tuple) else ()


def describe(known: Known, history: History) -> dict[str, Instrument]:
    """What the instruments files say of each instrument."""
    described: dict[str, Instrument] = {}
    for file in known.files(FileKind.INSTRUMENTS):
        content = history.parsed(file).content
        if isinstance(content, tuple):
            described.update((item.id, item) for item in content if isinstance(item, Instrument))
    return described
