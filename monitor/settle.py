"""(register, standings) -> drafts of entries: what one evening changes in the register of excesses."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import date

from monitor.excesses.register import Excess
from monitor.excesses.step import Evening, Held, compare, step, without_end
from monitor.facts import ExcessChanged, ExcessCured, ExcessOpened, ExcessVoided
from monitor.words import CuredBy, ExcessState, Recipe, Side, SubjectKind
from monitor.world import Answer, Rule, Standings, Terms

ExcessFact = ExcessOpened | ExcessChanged | ExcessCured | ExcessVoided


@dataclass(frozen=True)
class Settled:
    """The facts to append, and the excesses that somebody must be told of.

    opened: those new on record, cured ones among them. cured: whose cure is new, or of another day or cause than was
    recorded. reopened: recorded as cured, and alive. voided: with the reason. alive: open or waived after the evening.
    """

    facts: tuple[ExcessFact, ...]
    opened: tuple[Excess, ...]
    cured: tuple[Excess, ...]
    reopened: tuple[Excess, ...]
    voided: tuple[Excess, ...]
    alive: tuple[Excess, ...]


def as_evening(recipe: Recipe, standings: Standings, terms: Terms) -> Evening:
    """An evening as the register sees it."""
    rules = {rule.id: rule for rule in terms.rules}
    missing = {gap.subject.book for gap in standings.unmeasured if gap.subject.kind is SubjectKind.BOOK}
    return Evening(
        day=recipe.date,
        held=tuple(_held(answer, rules) for answer in standings.answers),
        rules=frozenset(rule.id for rule in terms.rules if rule.in_force(recipe.date)),
        site_books=frozenset(book.id for book in terms.firm.books),
        known=frozenset(terms.rounds[recipe.round]) - missing,
        # The gross exposure of the whole is known only when that of every position is.
        whole=frozenset(own.subject.book for own in standings.books if own.gross is not None),
    )


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
            facts.append(_changed(excess, evening.day, "still over"))
    alive = tuple(excess for excess in after if excess.alive)
    return Settled(tuple(facts), tuple(opened), tuple(cured), (), (), alive)


def settle_again(register: Sequence[Excess], evenings: Iterable[Evening], day: date, ids: Iterable[str]) -> Settled:
    """A new edition or a late evening: fold all evenings anew and record what differs from the register.

    evenings: every evening on record in business-date order, in its latest edition, tonight's among them.
    """
    before = {excess.id: excess for excess in register}
    expected: tuple[Excess, ...] = ()
    openings: dict[str, Excess] = {}
    for evening in evenings:
        expected = step(expected, evening, _provisional(expected))
        openings |= {excess.id: excess for excess in expected[len(openings) :]}
    found = compare(register, expected)
    names = dict(zip((excess.id for excess in found.opened), ids, strict=False))
    opened, cured, alive = (_named(excesses, names) for excesses in (found.opened, found.cured, found.alive))
    first = _named((openings[excess.id] for excess in found.opened), names)
    voided = tuple(
        replace(excess, state=ExcessState.VOID, void_reason=_void_reason(day, whole, names))
        for excess, whole in found.voided
    )
    facts: list[ExcessFact] = [
        *(ExcessVoided(excess.id, day, excess.void_reason or "") for excess in voided),
        *(_opened(excess) for excess in first),
        *(
            _changed(excess, day, "over on later evenings too")
            for excess, opening in zip(opened, first, strict=True)
            if without_end(excess) != opening
        ),
        *(_changed(excess, day, "corrected") for excess in found.changed),
        *(_cured(excess) for excess in cured),
    ]
    return Settled(
        facts=tuple(facts),
        opened=opened,
        cured=tuple(excess for excess in cured if _ended(excess) != _ended(before.get(excess.id))),
        reopened=tuple(excess for excess in found.changed if excess.alive and not before[excess.id].alive),
        voided=voided,
        alive=alive,
    )


def _ended(excess: Excess | None) -> tuple[date | None, CuredBy | None]:
    return (excess.cured_on, excess.cured_by) if excess else (None, None)


def _void_reason(day: date, whole: Excess | None, names: Mapping[str, str]) -> str:
    if whole is None:
        return f"the check of {day} shows that it was not over"
    name = names.get(whole.id, whole.id)
    return f"the check of {day} shows that it was over before too: it is a part of {name}, opened on {whole.opened_on}"


def _provisional(register: Sequence[Excess]) -> Iterator[str]:
    number = len(register)
    while True:
        number += 1
        yield f"new{number}"


def _named(excesses: Iterable[Excess], names: Mapping[str, str]) -> tuple[Excess, ...]:
    return tuple(replace(excess, id=names.get(excess.id, excess.id)) for excess in excesses)


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
    """How the excess opened, from what it was on that evening."""
    return ExcessOpened(
        excess=excess.id,
        rule=excess.rule,
        subject=excess.subject,
        day=excess.opened_on,
        side=excess.side,
        value=excess.opened_value,
        level=excess.level,
        distance=excess.worst_distance,
        unit=excess.unit,
        currency=excess.currency,
        owner=excess.owner,
    )


def _changed(excess: Excess, day: date, reason: str) -> ExcessChanged:
    return ExcessChanged(
        excess=excess.id,
        day=day,
        state=excess.state,
        side=excess.side,
        unit=excess.unit,
        currency=excess.currency,
        owner=excess.owner,
        opened_on=excess.opened_on,
        opened_value=excess.opened_value,
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
