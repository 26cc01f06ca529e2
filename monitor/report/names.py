"""How a page names what its figures are about, and writes the figures of an excess."""

from __future__ import annotations

from collections.abc import Mapping

from monitor.excesses.register import Excess
from monitor.notices import figures
from monitor.words import Side
from monitor.world import Answer, Rule

NOTHING = "–"
_LONGEST = 90


def title(rule: str, rules: Mapping[str, Rule]) -> str:
    """The rule's title; its id where the rule is no longer known."""
    return rules[rule].title if rule in rules else rule


def named(about: Answer | Excess, rules: Mapping[str, Rule]) -> str:
    """Rule and subject as they stand in a sentence; tables show long names whole."""
    return f"{_shortened(title(about.rule, rules))} ({_shortened(about.subject.name)})"


def allowed(side: Side) -> str:
    return "at most" if side is Side.ABOVE else "at least"


def measured_by(answer: Answer) -> str:
    """Measure and method in one line."""
    return ", ".join(filter(None, (figures.measure_name(answer.measure), figures.how_made(answer.how, answer.n))))


def measure_of(excess: Excess, rules: Mapping[str, Rule]) -> str:
    return rules[excess.rule].measure.name if excess.rule in rules else ""


def value_of(excess: Excess, value: float, rules: Mapping[str, Rule]) -> str:
    """One of an excess's values, never printed as equal to a limit that it differs from."""
    return figures.against(value, excess.level, excess.unit, excess.currency, measure_of(excess, rules))[0]


def level_of(excess: Excess, rules: Mapping[str, Rule]) -> str:
    level = figures.level(excess.level, excess.unit, excess.currency, measure_of(excess, rules))
    return f"{allowed(excess.side)} {level}"


def _shortened(name: str) -> str:
    return name if len(name) <= _LONGEST else name[: _LONGEST - 1] + "…"
