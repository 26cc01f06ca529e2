"""How an excess and the answer behind it are worded, and the same as data for programs."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from monitor.excesses.register import Excess
from monitor.notices import figures
from monitor.notices.story import Section
from monitor.words import ExcessState, Side
from monitor.world import Answer, Rule


def past_limit(answer: Answer) -> str:
    """`EUR 62,400 above its limit of EUR 1,250,000`."""
    if answer.distance is None:
        return f"against its limit of {figures.limit_of(answer)}"
    amount = figures.figure(abs(answer.distance), answer.unit, answer.currency, answer.measure)
    side = "above its limit" if answer.side is Side.ABOVE else "below its lower limit"
    other = "within its limit" if answer.side is Side.ABOVE else "clear of its lower limit"
    if answer.distance > 0:
        return f"{amount} {side} of {figures.limit_of(answer)}"
    return f"{amount} {other} of {figures.limit_of(answer)}"


def answer_data(answer: Answer) -> dict[str, Any]:
    """An answer as `check --json` gives it."""
    return {
        "rule": answer.rule,
        "subject": answer.subject.key,
        "measure": answer.measure,
        "value": answer.value,
        "unit": answer.unit.value,
        "currency": answer.currency,
        "near": answer.near,
        "limit": answer.limit,
        "limit_below": answer.limit_below,
        "distance": answer.distance,
        "utilisation": answer.utilisation,
        "standing": answer.standing.value,
        "low": answer.low,
        "high": answer.high,
        "n": answer.n,
        "reason": answer.reason,
        "marks": [{"kind": mark.kind.value, "note": mark.note} for mark in answer.marks],
        "how": figures.how_made(answer.how, answer.n),
    }


def excess_data(excess: Excess, day: int | None = None) -> dict[str, Any]:
    return {
        "id": excess.id,
        "rule": excess.rule,
        "subject": excess.subject.key,
        "side": excess.side.value,
        "state": excess.state.value,
        "owner": excess.owner,
        "day": day,
        "opened_on": excess.opened_on.isoformat(),
        "opened_value": excess.opened_value,
        "worst_on": excess.worst_on.isoformat(),
        "worst_value": excess.worst_value,
        "worst_distance": excess.worst_distance,
        "level": excess.level,
        "unit": excess.unit.value,
        "currency": excess.currency,
        "cured_on": excess.cured_on.isoformat() if excess.cured_on else None,
        "cured_by": excess.cured_by.value if excess.cured_by else None,
        "void_reason": excess.void_reason,
    }


EXCESS_COLUMNS = ("rule and subject", "day", "opened on", "last over at", "worst was")


def excess_row(excess: Excess, day: int | None, rules: Mapping[str, Rule]) -> tuple[str, ...]:
    """The cells of EXCESS_COLUMNS; an excess that is no longer alive shows how it ended in place of its day."""
    last, limit = last_over(excess, None, rules)
    age = excess.state.value if day is None else f"{day}" if excess.state is ExcessState.OPEN else f"{day} (waived)"
    return (
        f"{excess.rule} of {excess.subject.name}",
        age,
        figures.day(excess.opened_on),
        f"{last}, limit {limit}, on {figures.day(excess.last_on)}",
        worst_of(excess, rules) if excess.worst_on != excess.last_on else "",
    )


def last_over(excess: Excess, answer: Answer | None, rules: Mapping[str, Rule]) -> tuple[str, str]:
    """The value and the limit of tonight's answer; without one, those of the newest evening over."""
    if answer is not None:
        return figures.value_of(answer), figures.limit_of(answer)
    return figures.against(excess.last_value, excess.level, excess.unit, excess.currency, _measure(rules, excess))


def worst_of(excess: Excess, rules: Mapping[str, Rule]) -> str:
    """The worst figure of an excess and its evening."""
    measure = _measure(rules, excess)
    value, _ = figures.against(excess.worst_value, excess.level, excess.unit, excess.currency, measure)
    return f"{value} on {figures.day(excess.worst_on)}"


def _measure(rules: Mapping[str, Rule], excess: Excess) -> str:
    rule = rules.get(excess.rule)
    return rule.measure.name if rule else ""


def figure_facts(answer: Answer) -> tuple[tuple[str, str], ...]:
    lower = answer.side is Side.BELOW
    near = (
        "not set" if answer.near is None else figures.level(answer.near, answer.unit, answer.currency, answer.measure)
    )
    made = figures.how_made(answer.how, answer.n)
    bounds = figures.bounds_of(answer)
    return (
        ("Measure", figures.measure_name(answer.measure)),
        ("Value", figures.value_of(answer)),
        ("Lower limit" if lower else "Limit", figures.limit_of(answer)),
        ("Near at", near),
        ("Utilisation", share_used(answer)),
        *_distance(answer),
        *((("How it was made", made),) if made else ()),
        *((("Uncertainty", bounds),) if bounds else ()),
    )


def share_used(answer: Answer) -> str:
    """The utilisation, or why there is none."""
    if answer.utilisation is None:
        return "none, for value and limit are not both positive"
    return figures.utilisation(answer.utilisation)


def _distance(answer: Answer) -> tuple[tuple[str, str], ...]:
    if answer.distance is None:
        return ()
    label = "Past the limit by" if answer.distance > 0 else "Headroom"
    return ((label, figures.figure(abs(answer.distance), answer.unit, answer.currency, answer.measure)),)


def doubts(answer: Answer) -> tuple[Section, ...]:
    if not answer.marks:
        return ()
    return (Section("Doubts about this figure", lines=tuple(f"{m.kind.value}: {m.note}" for m in answer.marks)),)
