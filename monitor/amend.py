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

    Rounds of one date come in the order of the day that tonight's settings name; before them those that the settings
    no longer name, in the order they were checked.
    """
    order = list(state.terms(recipe.rules).rounds)

    def place(own: Recipe) -> tuple[date, int]:
        return own.date, order.index(own.round) if own.round in order else -1

    recorded = {(own.recipe.date, own.recipe.round): own for own in evenings.latest_of_all(state.index())}
    recorded.pop((recipe.date, recipe.round), None)
    for recipe_then in sorted([*(own.recipe for own in recorded.values()), recipe], key=place):
        own = recorded.get((recipe_then.date, recipe_then.round))
        if own is None:
            yield tonight
        else:
            standings = results.decode(state.archive.get(own.results))
            yield as_evening(own.recipe, standings, state.terms(own.recipe.rules))
