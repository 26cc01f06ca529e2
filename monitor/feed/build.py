"""recipe -> world: everything that tonight's figures depend on, taken from what was known at the recipe's sequence."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import date

import numpy as np

from monitor.feed.calendars import Sessions
from monitor.feed.grid import cut_market, cut_window, make_grid
from monitor.feed.history import History
from monitor.feed.holdings import collect_holdings, describe, latest_nav
from monitor.feed.known import Known
from monitor.feed.lacking import what_is_lacking
from monitor.words import Recipe
from monitor.world import Firm, Holdings, Instrument, Past, Scope, Terms, World


@dataclass(frozen=True)
class Sources:
    """Where the names in a recipe are looked up.

    known: the files as of a ledger sequence, for dates up to a day. terms: by hash.
    """

    known: Callable[[int, date], Known]
    history: History
    sessions: Callable[[str], Sessions]
    terms: Callable[[str], Terms]


def build(recipe: Recipe, sources: Sources) -> World:
    """The world of a recipe. Raises WrongUse when a calendar is unknown or ends before the recipe's date."""
    terms = sources.terms(recipe.rules)
    firm, history = terms.firm, sources.history
    known = sources.known(recipe.known, recipe.date)
    main = {name: sources.sessions(name) for name in calendars_of(firm)}
    held, tonight = collect_holdings(recipe.positions_on, firm, known, history, main)
    earlier = {
        name: collect_holdings(own.before(recipe.date), firm, known, history, main) for name, own in main.items()
    }
    names = sorted(set(held).union(*(before for before, _ in earlier.values())))
    described = describe(known, history)
    instruments = tuple(described.get(name) or Instrument(name, firm.base_currency) for name in names)
    unknown = np.array([name not in described for name in names], dtype=np.bool_)
    holdings = _renumbered(tonight, held, names)
    past = {name: _renumbered(own, before, names) for name, (before, own) in earlier.items()}
    own_calendars = _own_calendars(instruments, (holdings, *past.values()), firm)
    calendars = main | {name: sources.sessions(name) for name in set(own_calendars)}
    spans = {name: main[name].up_to(recipe.window_to)[-(terms.longest_window + 1) :] for name in main}
    grid = make_grid(
        first=min(span[0].item() for span in spans.values()),
        last=max(recipe.prices_on, recipe.window_to),
        known=known,
        history=history,
        instruments=instruments,
        currencies=_currencies(terms, instruments),
        base=firm.base_currency,
        needs_ranges=terms.needs_ranges,
    )
    scope = _scope(recipe, terms, main)
    market = cut_market(recipe.prices_on, instruments, unknown, calendars, own_calendars, firm.calendar, grid)
    return World(
        recipe=recipe,
        scope=scope,
        holdings=holdings,
        market=market,
        windows={
            name: cut_window(name, span, calendars, own_calendars, firm.calendar, grid) for name, span in spans.items()
        },
        nav={book.id: latest_nav(book, recipe.date, terms.nav_age, known, history, main) for book in firm.books},
        past=Past(past),
        terms=terms,
        calendars=tuple(sorted(calendars)),
        lacking=what_is_lacking(recipe.date, terms, scope, known, holdings, market, main),
    )


def calendars_of(firm: Firm) -> tuple[str, ...]:
    """The calendars on which subjects have their sessions."""
    return tuple(sorted({firm.calendar, *(book.calendar for book in firm.books)}))


def rounds_due(terms: Terms, day: date, calendars: Mapping[str, Sessions]) -> tuple[str, ...]:
    """The rounds of a date: those with a book that has a session on it."""
    open_books = {book.id for book in terms.firm.books if calendars[book.calendar].open_on(day)}
    return tuple(name for name, books in terms.rounds.items() if open_books & set(books))


def _scope(recipe: Recipe, terms: Terms, calendars: Mapping[str, Sessions]) -> Scope:
    """The last round of a date completes it: it answers for the firm and for subjects across books."""
    due = rounds_due(terms, recipe.date, calendars)
    return Scope(terms.rounds[recipe.round], completes=not due or due[-1] == recipe.round)


def _renumbered(holdings: Holdings, own_names: Sequence[str], names: Sequence[str]) -> Holdings:
    """The same holdings with instruments numbered by their place in `names`."""
    place = {name: at for at, name in enumerate(names)}
    numbers = np.array([place[name] for name in own_names], dtype=np.int64)
    return replace(holdings, instrument=numbers[holdings.instrument])


def _own_calendars(instruments: Sequence[Instrument], held: Sequence[Holdings], firm: Firm) -> tuple[str, ...]:
    """The calendar on which each instrument's closes are expected: its own, else that of the first book holding it.

    held: tonight's holdings, and then earlier ones, for what was sold since.
    """
    holder: dict[int, int] = {}
    for holdings in held:
        for at, book in zip(holdings.instrument.tolist(), holdings.book.tolist(), strict=True):
            holder.setdefault(at, book)
    return tuple(item.calendar or firm.books[holder[at]].calendar for at, item in enumerate(instruments))


def _currencies(terms: Terms, instruments: Sequence[Instrument]) -> list[str]:
    firm = terms.firm
    named = {rule.currency for rule in terms.rules if rule.currency}
    return sorted(
        {firm.base_currency} | {book.currency for book in firm.books} | {i.currency for i in instruments} | named
    )
