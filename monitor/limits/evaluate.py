"""(world, questions) -> standings: every rule in force held against every subject it applies to."""

from __future__ import annotations

from collections.abc import Collection, Iterator

from monitor.limits.coverage import figures_of_books, find_uncovered, find_unmeasured
from monitor.limits.measured import Measured, divide
from monitor.limits.measures import MEASURES
from monitor.limits.slices import Slice, shortened, within_firm
from monitor.limits.subjects import Members, books_under, members_of, with_past
from monitor.limits.valuation import Valuation
from monitor.words import Mark, Side, Standing, Subject, Unit
from monitor.world import Answer, Rule, Standings, World

BEYOND_ROUNDING = 1e-12  # how far past its level, as a share of it, a figure must lie to count as past it
DENOMINATORS = {Unit.OF_NAV: "nav", Unit.OF_GROSS: "gross"}
SEVERITY = (Standing.WITHIN, Standing.NEAR, Standing.OVER)
OF_WHAT_WAS_HELD = ("day_loss",)  # measures whose subjects may hold nothing any more


def evaluate(world: World, questions: Collection[str] | None = None) -> Standings:
    """The standings of the rules named in `questions` (None: of all in force), and what none of them says."""
    valuation = Valuation(world)
    rules = [
        rule
        for rule in world.terms.rules
        if rule.in_force(world.recipe.date) and (questions is None or rule.id in questions)
    ]
    asked = [(rule, _subjects(rule, world)) for rule in rules]
    answers = [answer for rule, members in asked for answer in _answers(rule, members, valuation)]
    return Standings(
        answers=tuple(answers),
        books=tuple(figures_of_books(valuation)) if questions is None else (),
        unmeasured=tuple(find_unmeasured(valuation)) if questions is None else (),
        uncovered=tuple(find_uncovered(world, asked)) if questions is None else (),
        lacking=world.lacking,
    )


def _subjects(rule: Rule, world: World) -> Members:
    members = members_of(rule, world)
    return with_past(rule, world, members) if rule.measure.name in OF_WHAT_WAS_HELD else members


def _answers(rule: Rule, members: Members, valuation: Valuation) -> Iterator[Answer]:
    """In the order of the subjects, those of this round only."""
    world, firm = valuation.world, valuation.world.terms.firm
    of_book = {book.id: (rule.currency or book.currency, book.calendar) for book in firm.books}
    of_firm = (rule.currency or firm.base_currency, firm.calendar)
    slices: dict[tuple[str, str], list[int]] = {}
    for at, subject in enumerate(members.subjects):
        book = None if within_firm(rule) else subject.book
        if world.scope.holds(book):
            slices.setdefault(of_book[book] if book else of_firm, []).append(at)
    found: dict[int, Answer] = {}
    for (currency, calendar), places in slices.items():
        part = Slice(valuation, rule, members.only(places), currency, calendar)
        found.update(zip(places, _standings(rule, part), strict=True))
    return iter([found[at] for at in sorted(found)])


def _standings(rule: Rule, part: Slice) -> list[Answer]:
    measured = MEASURES[rule.measure.name](part, rule.measure.parameters, rule.unit)
    amount = measured.amount
    if rule.unit in DENOMINATORS:
        measured = divide(measured, part.denominator(DENOMINATORS[rule.unit]))
        amount = False
    marks = part.marks(measured.how.window)
    return [
        _answer(rule, part, at, subject, measured, amount, marks[at])
        for at, subject in enumerate(part.members.subjects)
    ]


def _answer(
    rule: Rule, part: Slice, at: int, subject: Subject, measured: Measured, amount: bool, marks: list[Mark]
) -> Answer:
    value, reason = measured.figure(at)
    missing = _missing_book(rule, subject, part.world)
    if missing:
        value, reason = None, missing
    low, high, unbounded = measured.bounds(at) if value is not None else (None, None, None)
    standing, side, distance = _held(rule, value)
    return Answer(
        rule=rule.id,
        subject=subject,
        measure=rule.measure.name,
        standing=standing,
        value=value,
        unit=rule.unit,
        currency=part.currency if amount else None,
        near=rule.near_below if side is Side.BELOW else rule.near,
        limit=rule.limit,
        limit_below=rule.limit_below,
        side=side,
        distance=distance,
        utilisation=_utilisation(rule, value, side),
        low=low,
        high=high,
        unbounded=unbounded,
        n=int(measured.n[at]) if measured.n is not None else None,
        reason=reason,
        marks=tuple(shortened([*marks, *measured.marks[at]]) if at in measured.marks else marks),
        how=measured.how,
    )


def _missing_book(rule: Rule, subject: Subject, world: World) -> str | None:
    """Why a subject that lies in, or reaches over, a book without positions cannot be measured."""
    missing = world.holdings.missing
    return next((missing[book] for book in books_under(rule, subject, world) if book in missing), None)


def _held(rule: Rule, value: float | None) -> tuple[Standing, Side, float | None]:
    """The standing, on the side where it is worst or else nearest to its limit, and how far past: positive is over."""
    if value is None:
        return Standing.UNMEASURED, Side.ABOVE if rule.limit is not None else Side.BELOW, None
    sides = []
    if rule.limit is not None:
        near = rule.near is not None and value >= rule.near
        sides.append((_standing(value - rule.limit, rule.limit, near), Side.ABOVE, value - rule.limit))
    if rule.limit_below is not None:
        near = rule.near_below is not None and value <= rule.near_below
        sides.append(
            (_standing(rule.limit_below - value, rule.limit_below, near), Side.BELOW, rule.limit_below - value)
        )
    return max(sides, key=lambda found: (SEVERITY.index(found[0]), found[2]))


def _standing(distance: float, limit: float, near: bool) -> Standing:
    if distance > BEYOND_ROUNDING * abs(limit):
        return Standing.OVER
    return Standing.NEAR if near else Standing.WITHIN


def _utilisation(rule: Rule, value: float | None, side: Side) -> float | None:
    level = rule.limit if side is Side.ABOVE else rule.limit_below
    if value is None or level is None or value <= 0 or level <= 0:
        return None
    return value / level if side is Side.ABOVE else level / value
