"""The evenings on record in business-date order, for folding the register anew."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import date

from monitor import evenings, results
from monitor.excesses.step import Evening
from monitor.settle import as_evening
from monitor.state import State
from monitor.words import Recipe


def evenings_in_order(state: State, tonight: Evening, recipe: Recipe) -> Iterator[Evening]:
    """Every evening in its latest edition; tonight's stands in the place of its earlier ones.

    Rounds of one date come in the order of the day that tonight's settings name.
    """
    order = list(state.terms(recipe.rules).rounds)

    def place(own: Recipe) -> tuple[date, int]:
        return own.date, order.index(own.round) if own.round in order else -1

    recorded = {place(own.recipe): own for own in evenings.latest_of_all(state.index())}
    for at in sorted({*recorded, place(recipe)}):
        if at == place(recipe):
            yield tonight
        else:
            own = recorded[at]
            standings = results.decode(state.archive.get(own.results))
            yield as_evening(own.recipe, standings, state.terms(own.recipe.rules), own.completes)
