"""(world, questions) -> standings: every rule in force held against every subject it applies to."""

from __future__ import annotations

from collections.abc import Collection, Iterator

from monitor.limits.coverage import figures_of_books, find_uncovered, find_unmeasured
from monitor.limits.measures import MEASURES, Measured, divide
from monitor.limits.slices import Slice
from monitor.limits.subjects import Members, members_of, selected_books
from monitor.limits.valuation import Valuation
from monitor.words import Mark, Side, Standing, Subject, Unit
from monitor.world import Answer, Rule, Standings, World

BEYOND_ROUNDING = 1e-12  # how far past its level, as a share of it, a figure must lie to count as past it
DENOMINATORS = {Unit.OF_NAV: "nav", Unit.OF_GROSS: "gross"}


def evaluate(world: World, questions: Collection[str] | None = None) -> Standings:
    """The standings of the rules named in `questions` (None: of all in force), and what none of them says."""
    valuation = Valuation(world)
    rules = [
        rule for rule in world.terms.rules if in_force(rule, world) and (questions is None or rule.id in questions)
    ]
    asked = [(rule, members_of(rule, world)) for rule in rules]
    answers = [answer for rule, members in asked for answer in _answers(rule, members, valuation)]
    return Standings(
        answers=tuple(answers),
        books=tuple(figures_of_books(valuation)) if questions is None else (),
        unmeasured=tuple(find_unmeasured(valuation)) if questions is None else (),
        uncovered=tuple(find_uncovered(world, [members for _, members in asked])) if questions is None else (),
        lacking=world.lacking,
    )


def in_force(rule: Rule, world: World) -> bool:
    day = world.recipe.date
    return (rule.in_force_from or day) <= day <= (rule.in_force_to or day)


def _answers(rule: Rule, members: Members, valuation: Valuation) -> Iterator[Answer]:
    """In the order of the subjects, those of this round only."""
    world = valuation.world
    slices: dict[tuple[str, str], list[int]] = {}
    for at, subject in enumerate(members.subjects):
        if world.scope.holds(subject.book):
            slices.setdefault(_currency_and_calendar(rule, subject, world), []).append(at)
    found: dict[int, Answer] = {}
    for (currency, calendar), places in slices.items():
        part = Slice(valuation, rule, members.only(places), currency, calendar)
        found.update(zip(places, _standings(rule, part), strict=True))
    return iter([found[at] for at in sorted(found)])


def _currency_and_calendar(rule: Rule, subject: Subject, world: World) -> tuple[str, str]:
    firm = world.terms.firm
    book = next((book for book in firm.books if book.id == subject.book), None)
    currency = book.currency if book else firm.base_currency
    return rule.currency or currency, book.calendar if book else firm.calendar


def _standings(rule: Rule, part: Slice) -> list[Answer]:
    measured = MEASURES[rule.measure.name](part, rule.measure.parameters, rule.unit)
    amount = measured.amount
    if rule.unit in DENOMINATORS:
        measured = divide(measured, *part.denominator(DENOMINATORS[rule.unit]))
        amount = False
    marks = part.marks(measured.how.window)
    return [
        _answer(rule, part, at, subject, measured, amount, marks[at])
        for at, subject in enumerate(part.members.subjects)
    ]


def _answer(
    rule: Rule, part: Slice, at: int, subject: Subject, measured: Measured, amount: bool, marks: list[Mark]
) -> Answer:
    reason = _missing_book(rule, subject, part.world) or measured.reasons[at]
    value = None if reason else float(measured.value[at])
    side, distance = _distance(rule, value)
    own = [measured.marks[at]] if at in measured.marks else []
    return Answer(
        rule=rule.id,
        subject=subject,
        measure=rule.measure.name,
        standing=_standing(rule, value, side, distance),
        value=value,
        unit=rule.unit,
        currency=part.currency if amount else None,
        near=rule.near_below if side is Side.BELOW else rule.near,
        limit=rule.limit,
        limit_below=rule.limit_below,
        side=side,
        distance=distance,
        utilisation=_utilisation(rule, value, side),
        low=None,
        high=None,
        n=int(measured.n[at]) if measured.n is not None else None,
        reason=reason,
        marks=(*marks, *own),
        how=measured.how,
    )


def _missing_book(rule: Rule, subject: Subject, world: World) -> str | None:
    """Why a subject that lies in, or reaches over, a book without positions cannot be measured."""
    missing = world.holdings.missing
    books = [subject.book] if subject.book else [book.id for book in selected_books(world, rule.applies_to)]
    return next((missing[book] for book in books if book in missing), None)


def _distance(rule: Rule, value: float | None) -> tuple[Side, float | None]:
    """The side that the value is furthest past, or nearest to, and how far: positive is past the limit."""
    if value is None:
        return (Side.ABOVE if rule.limit is not None else Side.BELOW), None
    sides = []
    if rule.limit is not None:
        sides.append((value - rule.limit, Side.ABOVE))
    if rule.limit_below is not None:
        sides.append((rule.limit_below - value, Side.BELOW))
    distance, side = max(sides, key=lambda found: found[0])
    return side, distance


def _standing(rule: Rule, value: float | None, side: Side, distance: float | None) -> Standing:
    if value is None or distance is None:
        return Standing.UNMEASURED
    level = rule.limit if side is Side.ABOVE else rule.limit_below
    if distance > BEYOND_ROUNDING * abs(level or 0.0):
        return Standing.OVER
    if (rule.near is not None and value >= rule.near) or (rule.near_below is not None and value <= rule.near_below):
        return Standing.NEAR
    return Standing.WITHIN


def _utilisation(rule: Rule, value: float | None, side: Side) -> float | None:
    level = rule.limit if side is Side.ABOVE else rule.limit_below
    if value is None or level is None or value <= 0 or level <= 0:
        return None
    return value / level if side is Side.ABOVE else level / value
