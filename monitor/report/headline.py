"""The outcome of an evening in one sentence."""

from __future__ import annotations

from collections.abc import Mapping

from monitor.notices import figures
from monitor.report.names import named
from monitor.words import Outcome, Standing
from monitor.world import Answer, Rule, Standings

ORDER = (Standing.OVER, Standing.NEAR, Standing.UNMEASURED, Standing.WITHIN)


def headline(standings: Standings, rules: Mapping[str, Rule]) -> str:
    """How many are over, near and unmeasured, and which is worst; an incomplete evening says so first, and why last."""
    if not standings.answers:
        sentence = "no rule was asked tonight, so nothing was held against a limit"
    else:
        sentence = f"{_counted(standings)}{_worst(standings, rules)}"
    if standings.outcome is Outcome.INCOMPLETE:
        return f"Incomplete: {sentence}{_amiss(standings)}."
    return f"{sentence[0].upper()}{sentence[1:]}."


def _amiss(standings: Standings) -> str:
    lacking = f"; {figures.count(len(standings.lacking), 'item')} lacking" if standings.lacking else ""
    return lacking + (f"; {figures.not_measured(len(standings.unmeasured))}" if standings.unmeasured else "")


def by_urgency(answers: tuple[Answer, ...]) -> list[Answer]:
    """Over, near, unmeasured, within; in each the highest utilisation first, those without one after the others."""
    return sorted(
        answers,
        key=lambda answer: (
            ORDER.index(answer.standing),
            answer.utilisation is None,
            -(answer.utilisation or 0.0),
            answer.rule,
            answer.subject.key,
        ),
    )


def _counted(standings: Standings) -> str:
    counts, total = standings.counts(), len(standings.answers)
    if counts[Standing.WITHIN] == total:
        return (
            "the one standing is within its limit" if total == 1 else f"all {total:,} standings are within their limits"
        )
    over, near, unmeasured = counts[Standing.OVER], counts[Standing.NEAR], counts[Standing.UNMEASURED]
    said = [f"{_are(over)} over {'its limit' if over == 1 else 'their limits'}" if over else "none is over its limit"]
    if near:
        said.append(f"{_are(near)} near")
    if unmeasured:
        said.append(f"{unmeasured:,} could not be measured")
    listed = said[0] if len(said) == 1 else f"{', '.join(said[:-1])} and {said[-1]}"
    return f"of {figures.count(total, 'standing')}, {listed}"


def _are(count: int) -> str:
    return "1 is" if count == 1 else f"{count:,} are"


def _worst(standings: Standings, rules: Mapping[str, Rule]) -> str:
    """Whose utilisation is highest, among those over where there are any."""
    worst = by_urgency(standings.answers)[0]
    if worst.utilisation is None:
        worst = max(standings.answers, key=lambda answer: answer.utilisation or 0.0)
    if worst.utilisation is None:
        return ""
    word = "worst" if worst.standing is Standing.OVER else "closest"
    return f"; the {word} is {named(worst, rules)} at {figures.utilisation(worst.utilisation)} of its limit"
