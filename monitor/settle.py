"""(register, standings) -> drafts of entries: what one evening changes in the register of excesses."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import date

from monitor.excesses.register import Excess
from monitor.excesses.step import Evening, Held, compare, step
from monitor.facts import ExcessChanged, ExcessCured, ExcessOpened, ExcessVoided
from monitor.words import Recipe, Side, SubjectKind
from monitor.world import Answer, Rule, Standings, Terms

ExcessFact = ExcessOpened | ExcessChanged | ExcessCured | ExcessVoided


@dataclass(frozen=True)
class Settled:
    """The facts to append, and the excesses they are about. alive: open or waived after the evening."""

    facts: tuple[ExcessFact, ...]
    opened: tuple[Excess, ...]
    cured: tuple[Excess, ...]
    voided: tuple[Excess, ...]
    alive: tuple[Excess, ...]


def as_evening(recipe: Recipe, standings: Standings, terms: Terms, completes: bool) -> Evening:
    """An evening as the register sees it."""
    rules = {rule.id: rule for rule in terms.rules}
    in_force = [rule.id for rule in terms.rules if is_in_force(rule, recipe.date)]
    return Evening(
        day=recipe.date,
        held=tuple(_held(answer, rules) for answer in standings.answers),
        rules=frozenset(in_force),
        books=frozenset(terms.rounds[recipe.round]),
        completes=completes,
        missing=frozenset(
            gap.subject.book
            for gap in standings.unmeasured
            if gap.subject.kind is SubjectKind.BOOK and gap.subject.book
        ),
    )


def is_in_force(rule: Rule, day: date) -> bool:
    return (rule.in_force_from or day) <= day <= (rule.in_force_to or day)


def settle_newest(register: Sequence[Excess], evening: Evening, ids: Iterable[str]) -> Settled:
    """The ordinary case: tonight follows every evening on record."""
    before = {excess.id: excess for excess in register}
    after = step(register, evening, ids)
    facts: list[ExcessFact] = []
    opened, cured = [], []
    for excess in after:
        old = before.get(excess.id)
        if old is None:
            opened.append(excess)
            facts.append(_opened(excess))
        elif old.alive and not excess.alive:
            cured.append(excess)
            facts.append(_cured(excess))
        elif excess != old:
            facts.append(_changed(excess, evening.day, "over again"))
    alive = tuple(excess for excess in after if excess.alive)
    return Settled(tuple(facts), tuple(opened), tuple(cured), (), alive)


def settle_again(register: Sequence[Excess], evenings: Iterable[Evening], day: date, ids: Iterable[str]) -> Settled:
    """A new edition or a late evening: fold all evenings anew and record what differs from the register.

    evenings: every evening on record in business-date order, in its latest edition, tonight's among them.
    """
    expected: tuple[Excess, ...] = ()
    numbers = iter(ids)
    for evening in evenings:
        expected = step(expected, evening, _provisional(expected))
    found = compare(register, expected)
    named = {excess.id: next(numbers) for excess in found.opened}
    opened = tuple(_renamed(excess, named) for excess in found.opened)
    cured = tuple(_renamed(excess, named) for excess in found.cured)
    reason = f"the evening of {day} was checked again, and this was not over"
    facts: list[ExcessFact] = [
        *(ExcessVoided(excess.id, day, reason) for excess in found.voided),
        *(_opened(excess) for excess in opened),
        *(_changed(excess, day, "opened") for excess in opened if excess.last_on != excess.opened_on),
        *(_changed(excess, day, "corrected") for excess in found.changed),
        *(_cured(excess) for excess in cured),
    ]
    recorded = {excess.id for excess in found.voided}
    kept = {excess.id: excess for excess in register if excess.id not in recorded}
    kept |= {excess.id: excess for excess in (*opened, *found.changed, *cured)}
    alive = tuple(excess for excess in kept.values() if excess.alive)
    return Settled(tuple(facts), opened, cured, found.voided, alive)


def _provisional(register: Sequence[Excess]) -> Iterator[str]:
    number = len(register)
    while True:
        number += 1
        yield f"new{number}"


def _renamed(excess: Excess, names: Mapping[str, str]) -> Excess:
    return replace(excess, id=names.get(excess.id, excess.id))


def _held(answer: Answer, rules: Mapping[str, Rule]) -> Held:
    rule = rules[answer.rule]
    return Held(
        rule=answer.rule,
        subject=answer.subject,
        standing=answer.standing,
        doubtful=answer.doubtful,
        side=answer.side,
        unit=answer.unit,
        currency=answer.currency,
        value=answer.value,
        distance=answer.distance,
        level=answer.limit if answer.side is Side.ABOVE else answer.limit_below,
        owner=rule.owner,
    )


def _opened(excess: Excess) -> ExcessOpened:
    """How the excess opened; a worse day that a fold over several evenings found stands in a change after it."""
    distance = excess.opened_value - excess.level if excess.side is Side.ABOVE else excess.level - excess.opened_value
    return ExcessOpened(
        excess=excess.id,
        rule=excess.rule,
        subject=excess.subject,
        day=excess.opened_on,
        side=excess.side,
        value=excess.opened_value,
        level=excess.level,
        distance=distance,
        unit=excess.unit,
        currency=excess.currency,
        owner=excess.owner,
    )


def _changed(excess: Excess, day: date, reason: str) -> ExcessChanged:
    return ExcessChanged(
        excess=excess.id,
        day=day,
        state=excess.state,
        opened_on=excess.opened_on,
        last_on=excess.last_on,
        last_value=excess.last_value,
        level=excess.level,
        worst_on=excess.worst_on,
        worst_value=excess.worst_value,
        worst_distance=excess.worst_distance,
        reason=reason,
    )


def _cured(excess: Excess) -> ExcessCured:
    if excess.cured_on is None or excess.cured_by is None:
        raise ValueError(f"the excess {excess.id} is not cured")
    return ExcessCured(excess.id, excess.cured_on, excess.cured_by, excess.cured_value)
