"""An old evening again: its recorded recipe built and evaluated from the archive, and held against the record."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

from monitor import results
from monitor.evenings import CheckedEvening
from monitor.feed.build import build
from monitor.limits.evaluate import evaluate
from monitor.limits.tolerance import tolerance
from monitor.state import State
from monitor.world import Answer, BookFigures, How, Standings


@dataclass(frozen=True)
class Replayed:
    """exact: the results to the last digit. differences: what is not the same within its measure's tolerance."""

    exact: bool
    differences: tuple[str, ...]


def replay(state: State, evening: CheckedEvening) -> Standings:
    """What the recorded recipe says today, from the archived files, rules, settings and sessions alone."""
    return evaluate(build(evening.recipe, state.recorded_sources(evening.sessions)))


def replayed(state: State, evening: CheckedEvening) -> Replayed:
    """A recorded evening worked out again, and where it differs from the record."""
    recorded, again = state.archive.get(evening.results), replay(state, evening)
    if results.encode(again) == recorded:
        return Replayed(exact=True, differences=())
    return Replayed(exact=False, differences=tuple(differences(results.decode(recorded), again)))


def differences(recorded: Standings, again: Standings) -> Iterator[str]:
    """What two answers to one recipe do not have in common, one line a difference.

    Standings must be equal. Figures may differ by the tolerance of their method, which is what other versions of the
    libraries are allowed. Sampling bounds count only where the record has them: earlier editions had none.
    """
    before = {(own.rule, own.subject): own for own in recorded.answers}
    after = {(own.rule, own.subject): own for own in again.answers}
    for key in before.keys() ^ after.keys():
        yield f"{key[0]}, {key[1].name}: asked in one of the two only"
    for key in before.keys() & after.keys():
        yield from _of_answer(before[key], after[key])
    books = {own.subject: own for own in again.books}
    for own in recorded.books:
        yield from _of_book(own, books.get(own.subject))
    for name in ("unmeasured", "uncovered", "lacking"):
        if getattr(recorded, name) != getattr(again, name):
            yield f"{name}: not the same"


def _of_answer(recorded: Answer, again: Answer) -> Iterator[str]:
    name = f"{recorded.rule}, {recorded.subject.name}"
    if recorded.standing is not again.standing:
        yield f"{name}: {recorded.standing} on record, {again.standing} again"
    if not _close(recorded.value, again.value, recorded.how):
        yield f"{name}: {recorded.value} on record, {again.value} again"
    for side in ("low", "high"):
        bound = getattr(recorded, side)
        if bound is not None and not _close(bound, getattr(again, side), recorded.how):
            yield f"{name}: {side} bound {bound} on record, {getattr(again, side)} again"


def _of_book(recorded: BookFigures, again: BookFigures | None) -> Iterator[str]:
    for figure in ("gross", "net", "nav", "value_at_risk", "expected_shortfall", "pnl"):
        was, now = getattr(recorded, figure), getattr(again, figure, None)
        if not _close(was, now, recorded.how, scale=recorded.gross or 0.0):
            yield f"{recorded.subject.name}: {figure} {was} on record, {now} again"


def _close(recorded: float | None, again: float | None, how: How, scale: float = 0.0) -> bool:
    """scale: of the amounts that a figure is a sum of, whose rounding it bears."""
    if recorded is None or again is None:
        return recorded is again
    return math.isclose(recorded, again, rel_tol=tolerance(how), abs_tol=tolerance(how) * scale)
