"""The register of excesses as a pure fold: (register, one evening's standings) -> register."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Mapping
from dataclasses import dataclass, replace
from datetime import date

from monitor.excesses.register import Excess
from monitor.words import CuredBy, ExcessState, Side, Standing, Subject, Unit


@dataclass(frozen=True)
class Held:
    """What the register needs of one answer. level: the limit on the side it was held against."""

    rule: str
    subject: Subject
    standing: Standing
    doubtful: bool
    side: Side
    unit: Unit
    currency: str | None
    value: float | None
    distance: float | None
    level: float | None
    owner: str | None


@dataclass(frozen=True)
class Evening:
    """One evening as the register sees it.

    rules: the ids of the rules in force, of which a subject not answered for is no more. books: those of the round.
    missing: books whose positions are not known, of which no subject is known to have ended.
    """

    day: date
    held: tuple[Held, ...]
    rules: frozenset[str]
    books: frozenset[str]
    completes: bool
    missing: frozenset[str]

    def answers_for(self, subject: Subject) -> bool:
        """Whether this evening can say that the subject is no more."""
        if subject.book is None:
            return self.completes and not self.missing
        return subject.book in self.books and subject.book not in self.missing


def step(register: Iterable[Excess], evening: Evening, new_id: Iterable[str]) -> tuple[Excess, ...]:
    """The register after an evening: excesses opened, gone on and cured, in the order of opening.

    An excess opens on the first evening over. An unmeasured or doubtful answer neither cures it nor stops its clock;
    a figure that is over counts even when doubtful. new_id yields the ids of excesses to open.
    """
    ids = iter(new_id)
    answers = {(held.rule, held.subject.key): held for held in evening.held}
    after = []
    running = set()
    for excess in register:
        if excess.alive:
            running.add((excess.rule, excess.subject.key))
            after.append(_gone_on(excess, answers.get((excess.rule, excess.subject.key)), evening))
        else:
            after.append(excess)
    for key, held in answers.items():
        if held.standing is Standing.OVER and key not in running:
            after.append(_opened(next(ids), held, evening.day))
    return tuple(after)


def _opened(name: str, held: Held, day: date) -> Excess:
    value, distance, level = _figures(held)
    return Excess(
        id=name,
        rule=held.rule,
        subject=held.subject,
        side=held.side,
        unit=held.unit,
        currency=held.currency,
        owner=held.owner,
        state=ExcessState.OPEN,
        opened_on=day,
        opened_value=value,
        last_on=day,
        last_value=value,
        worst_on=day,
        worst_value=value,
        worst_distance=distance,
        level=level,
    )


def _gone_on(excess: Excess, held: Held | None, evening: Evening) -> Excess:
    if held is None:
        if excess.rule not in evening.rules:
            return _cured(excess, evening.day, CuredBy.END_OF_RULE, None)
        if evening.answers_for(excess.subject):
            return _cured(excess, evening.day, CuredBy.END_OF_SUBJECT, None)
        return excess
    if held.standing is Standing.OVER:
        value, distance, level = _figures(held)
        still = replace(excess, last_on=evening.day, last_value=value, level=level)
        if distance > excess.worst_distance:
            still = replace(still, worst_on=evening.day, worst_value=value, worst_distance=distance)
        return still
    if held.doubtful:
        return excess
    return _cured(excess, evening.day, CuredBy.FIGURE, held.value)


def _cured(excess: Excess, day: date, by: CuredBy, value: float | None) -> Excess:
    return replace(excess, state=ExcessState.CURED, cured_on=day, cured_by=by, cured_value=value)


def _figures(held: Held) -> tuple[float, float, float]:
    if held.value is None or held.distance is None or held.level is None:
        raise ValueError(f"the answer of {held.rule} for {held.subject.key} is over without a figure")
    return held.value, held.distance, held.level


@dataclass(frozen=True)
class Differences:
    """What must be recorded so that the recorded register becomes the expected one."""

    opened: tuple[Excess, ...]
    changed: tuple[Excess, ...]
    cured: tuple[Excess, ...]
    voided: tuple[Excess, ...]


def compare(recorded: Collection[Excess], expected: Collection[Excess]) -> Differences:
    """Hold the register folded anew over corrected evenings against the one on record.

    Runs of one rule and subject that share an evening are one excess and keep the recorded id. A recorded run that
    meets no expected one should never have opened. Void excesses stay as they are.
    """
    standing = [excess for excess in recorded if excess.state is not ExcessState.VOID]
    by_key: dict[tuple[str, str], list[Excess]] = {}
    for excess in standing:
        by_key.setdefault((excess.rule, excess.subject.key), []).append(excess)
    opened, changed, cured, met = [], [], [], set()
    for wanted in expected:
        own = next(
            (
                excess
                for excess in by_key.get((wanted.rule, wanted.subject.key), [])
                if excess.id not in met and _overlap(excess, wanted)
            ),
            None,
        )
        if own is None:
            opened.append(wanted)
            if not wanted.alive:
                cured.append(wanted)
            continue
        met.add(own.id)
        merged = replace(wanted, id=own.id, opened_value=wanted.opened_value)
        moved = _dates_and_worst(own) != _dates_and_worst(merged) or (own.cured_on is not None and merged.alive)
        if moved:
            changed.append(merged)
        if not merged.alive and (moved or (merged.cured_on, merged.cured_by) != (own.cured_on, own.cured_by)):
            cured.append(merged)
    voided = [excess for excess in standing if excess.id not in met]
    return Differences(tuple(opened), tuple(changed), tuple(cured), tuple(voided))


def _overlap(one: Excess, other: Excess) -> bool:
    far = date.max
    return one.opened_on <= (other.cured_on or far) and other.opened_on <= (one.cured_on or far)


def _dates_and_worst(excess: Excess) -> tuple[object, ...]:
    return excess.opened_on, excess.last_on, excess.last_value, excess.level, excess.worst_on, excess.worst_distance


def by_rule_and_subject(register: Iterable[Excess]) -> Mapping[tuple[str, str], Excess]:
    """The excesses that are alive, by what they are about."""
    return {(excess.rule, excess.subject.key): excess for excess in register if excess.alive}
