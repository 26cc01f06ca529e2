"""One hash of all that an evening's answers depend on."""

from __future__ import annotations

import hashlib
import json
from typing import Any

import numpy as np

from monitor.feed.build import calendars_of
from monitor.world import Holdings, World


def digest_inputs(world: World) -> str:
    """The same digest means that a check again would say nothing new, whatever files came meanwhile.

    Only what the round answers for counts: its books' holdings and NAVs, the closes and rates that value them on every
    session of the windows, what is signed, and what is lacking; of the tags, those that a rule names.
    """
    recipe, firm = world.recipe, world.terms.firm
    used = {item.tag for rule in world.terms.rules for item in rule.applies_to}
    used |= {rule.each for rule in world.terms.rules if rule.each}
    digest = hashlib.sha256()

    def add(part: Any) -> None:
        data = np.ascontiguousarray(part).tobytes() if isinstance(part, np.ndarray) else json.dumps(part).encode()
        digest.update(len(data).to_bytes(8, "big") + data)

    books = [at for at, book in enumerate(firm.books) if world.scope.completes or world.scope.holds(book.id)]
    calendars = calendars_of(firm) if world.scope.completes else sorted({firm.books[at].calendar for at in books})
    held = [world.holdings, *(world.past.held_before[name] for name in calendars)]
    instruments = np.unique(np.concatenate([own.instrument[np.isin(own.book, books)] for own in held]))
    described = [world.market.instruments[at] for at in instruments.tolist()]
    needed = {item.currency for item in described} | {firm.books[at].currency for at in books} | {firm.base_currency}
    needed |= {rule.currency for rule in world.terms.rules if rule.currency}
    currencies = np.array([at for at, code in enumerate(world.market.currencies) if code in needed], dtype=np.int64)

    add([str(day) for day in (recipe.date, recipe.positions_on, recipe.prices_on, recipe.window_to)])
    add([recipe.round, recipe.rules, world.scope.completes, list(world.lacking)])
    add([[i.id, i.currency, i.kind, i.multiplier, i.calendar, str(i.expiry)] for i in described])
    add([[[tag, value] for tag, value in sorted(i.tags.items()) if tag in used] for i in described])
    add(world.market.unknown[instruments])
    for own in held:
        _add_holdings(own, books, world, add)
    for array in (world.market.close, world.market.closed_on, world.market.carried):
        add(array[instruments])
    for array in (world.market.rate, world.market.rate_carried):
        add(array[currencies])
    for name in calendars:
        window = world.windows[name]
        for array in (window.close, window.gap):
            add(array[instruments])
        for array in (window.rate, window.rate_gap):
            add(array[currencies])
        add(window.sessions)
        if window.ranges is not None:
            for array in (window.ranges.open, window.ranges.high, window.ranges.low, window.ranges.close):
                add(array[instruments])
    navs = [(firm.books[at].id, world.nav[firm.books[at].id]) for at in books]
    add([[book, nav.value, str(nav.on), nav.reason] for book, nav in navs])
    return digest.hexdigest()


def _add_holdings(holdings: Holdings, books: list[int], world: World, add: Any) -> None:
    own = np.isin(holdings.book, books)
    names = [world.market.instruments[at].id for at in holdings.instrument[own].tolist()]
    missing = [
        [book, reason]
        for book, reason in holdings.missing.items()
        if book in {world.terms.firm.books[at].id for at in books}
    ]
    add([str(holdings.on), names, missing])
    add(holdings.book[own])
    add(holdings.quantity[own])
