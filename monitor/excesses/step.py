"""The register of excesses as a pure fold: (register, one evening's standings) -> register."""

from __future__ import annotations

from collections.abc import Collection, Iterable
from dataclasses import dataclass, replace
from datetime import date

from monitor.excesses.register import Excess
from monitor.words import CuredBy, ExcessState, Side, Standing, Subject, SubjectKind, Unit


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

    rules: the ids of the rules in force. site_books: all books of the site. known: the books of the round whose
    positions are known. whole: those of them, and None for the firm, whose every position was described and valued.
    """

    day: date
    held: tuple[Held, ...]
    rules: frozenset[str]
    site_books: frozenset[str]
    known: frozenset[str]
    whole: frozenset[str | None]

    def ends(self, subject: Subject) -> bool:
        """Whether a subject that no rule asks about tonight is no more, and not only out of sight.

        A position that no file describes may belong to any group. A book that left the site ends when all others are
        measured.
        """
        if subject.book is not None and subject.book not in self.site_books:
            return None in self.whole
        if subject.kind is SubjectKind.GROUP or subject.book is None:
            return subject.book in self.whole
        return subject.book in self.known


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
        if evening.ends(excess.subject):
            return _cured(excess, evening.day, CuredBy.END_OF_SUBJECT, None)
        return excess
    if held.standing is Standing.OVER:
        return _over_again(excess, held, evening.day)
    if held.doubtful:
        return excess
    return _cured(excess, evening.day, CuredBy.FIGURE, held.value)


def _over_again(excess: Excess, held: Held, day: date) -> Excess:
    """Another evening over. Figures in another unit cannot be compared, so that they start anew; the clock does not."""
    value, distance, level = _figures(held)
    still = replace(excess, side=held.side, owner=held.owner, last_on=day, last_value=value, level=level)
    other_unit = (held.unit, held.currency) != (excess.unit, excess.currency)
    if other_unit:
        still = replace(still, unit=held.unit, currency=held.currency, opened_value=value)
    if other_unit or distance > excess.worst_distance:
        still = replace(still, worst_on=day, worst_value=value, worst_distance=distance)
    return still


def _cured(excess: Excess, day: date, by: CuredBy, value: float | None) -> Excess:
    return replace(excess, state=ExcessState.CURED, cured_on=day, cured_by=by, cured_value=value)


def _figures(held: Held) -> tuple[float, float, float]:
    if held.value is None or held.distance is None or held.level is None:
        raise ValueError(f"the answer of {held.rule} for {held.subject.key} is over without a figure")
    return held.value, held.distance, held.level


@dataclass(frozen=True)
class Differences:
    """What must be recorded so that the recorded register becomes the expected one, with recorded ids where there are.

    opened: with the ids of `expected`. changed: whose dates or figures differ, or that are alive again. cured: whose
    cure must be recorded, after its change where there is one. voided: with the excess it is a part of, if any.
    """

    opened: tuple[Excess, ...]
    changed: tuple[Excess, ...]
    cured: tuple[Excess, ...]
    voided: tuple[tuple[Excess, Excess | None], ...]
    alive: tuple[Excess, ...]


def compare(recorded: Collection[Excess], expected: Collection[Excess]) -> Differences:
    """Hold the register folded anew over corrected evenings against the one on record.

    Runs of one rule and subject that share an evening are one excess and keep the recorded id, the first of them when
    there are several. A recorded run left over is void. Void excesses stay as they are.
    """
    standing = [excess for excess in recorded if excess.state is not ExcessState.VOID]
    of_key: dict[tuple[str, str], list[Excess]] = {}
    for excess in standing:
        of_key.setdefault(_key(excess), []).append(excess)
    opened, changed, cured, alive = [], [], [], []
    met: set[str] = set()
    named: dict[tuple[str, str], list[Excess]] = {}
    for wanted in expected:
        candidates = of_key.get(_key(wanted), [])
        own = next((run for run in candidates if run.id not in met and _share_an_evening(run, wanted)), None)
        after = wanted if own is None else replace(wanted, id=own.id)
        named.setdefault(_key(wanted), []).append(after)
        if after.alive:
            alive.append(after)
        if own is None:
            opened.append(after)
        else:
            met.add(own.id)
            if without_end(after) != without_end(own) or (after.alive and not own.alive):
                changed.append(after)
        if not after.alive and after != own:
            cured.append(after)
    voided = [
        (run, next((other for other in named.get(_key(run), []) if _share_an_evening(run, other)), None))
        for run in standing
        if run.id not in met
    ]
    return Differences(tuple(opened), tuple(changed), tuple(cured), tuple(voided), tuple(alive))


def _key(excess: Excess) -> tuple[str, str]:
    return excess.rule, excess.subject.key


def _share_an_evening(one: Excess, other: Excess) -> bool:
    """Whether some evening lies in both runs; the evening of the cure lies in none, unless it opened then too."""
    far = date.max
    if one.opened_on == other.opened_on:
        return True
    return one.opened_on < (other.cured_on or far) and other.opened_on < (one.cured_on or far)


def without_end(excess: Excess) -> Excess:
    """The excess without how it ended."""
    return replace(excess, state=ExcessState.OPEN, cured_on=None, cured_by=None, cured_value=None)
