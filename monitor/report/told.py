"""What changed since the evening before, in words."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from monitor.excesses.register import Excess
from monitor.notices import figures
from monitor.report.changes import Move, Turn, changes
from monitor.report.names import level_of, named, title, value_of
from monitor.report.page import Page
from monitor.words import CuredBy, Standing
from monitor.world import Rule

MOST_IN_WORDS = 25
_CURED = {
    CuredBy.FIGURE: "its figure came back",
    CuredBy.END_OF_RULE: "its rule ended",
    CuredBy.END_OF_SUBJECT: "its subject is no more",
}


@dataclass(frozen=True)
class Said:
    """Changes of one kind in words; `total` counts also those that are not listed."""

    heading: str
    lines: tuple[str, ...]
    total: int


@dataclass(frozen=True)
class Moved:
    title: str
    subject: str
    before: str
    now: str
    change: str


def said(page: Page) -> tuple[Said, ...]:
    """What changed since the evening before, in words, the excesses first."""
    rules = page.rules
    found = [
        _listed("Excess opened", [_opened(excess, rules) for excess in page.opened]),
        _listed("Excess cured", [_cured(excess, rules) for excess in page.cured]),
    ]
    if page.before:
        change = changes(page.before.standings, page.standings)
        opened = {(excess.rule, excess.subject) for excess in page.opened}
        over = [turn for turn in change.turned(Standing.OVER) if (turn.answer.rule, turn.answer.subject) not in opened]
        found += [
            _listed("Over now, under an excess already open", [_turn(turn, rules) for turn in over]),
            _listed("Newly near", [_turn(turn, rules) for turn in change.turned(Standing.NEAR)]),
            _listed("Newly within", [_turn(turn, rules) for turn in change.turned(Standing.WITHIN)]),
            _listed("Not measured any more", [_turn(turn, rules) for turn in change.turned(Standing.UNMEASURED)]),
            _listed("Asked for the first time, and within", [named(answer, rules) for answer in change.asked]),
            _listed("Not asked any more", [f"{named(gone, rules)}, was {gone.standing}" for gone in change.dropped]),
        ]
    return tuple(part for part in found if part.total)


def moves(page: Page) -> tuple[Moved, ...]:
    if not page.before:
        return ()
    return tuple(_moved(move, page.rules) for move in changes(page.before.standings, page.standings).moves)


def _moved(move: Move, rules: Mapping[str, Rule]) -> Moved:
    return Moved(
        title=title(move.answer.rule, rules),
        subject=move.answer.subject.name,
        before=figures.utilisation(move.before.utilisation),
        now=figures.utilisation(move.answer.utilisation),
        change=f"{100 * move.change:+.1f}",
    )


def _listed(heading: str, lines: list[str]) -> Said:
    return Said(heading, tuple(lines[:MOST_IN_WORDS]), len(lines))


def _turn(turn: Turn, rules: Mapping[str, Rule]) -> str:
    answer = turn.answer
    was = f"was {turn.was}" if turn.was else "not asked before"
    if answer.utilisation is not None:
        return f"{named(answer, rules)}: {figures.utilisation(answer.utilisation)} of its limit, {was}"
    return f"{named(answer, rules)}: {answer.reason or 'utilisation has no meaning here'}; {was}"


def _opened(excess: Excess, rules: Mapping[str, Rule]) -> str:
    return f"{named(excess, rules)}: {value_of(excess, excess.last_value, rules)}, allowed {level_of(excess, rules)}"


def _cured(excess: Excess, rules: Mapping[str, Rule]) -> str:
    text = f"{named(excess, rules)}, opened on {excess.opened_on}"
    if excess.cured_by:
        text += f": {_CURED[excess.cured_by]}"
    return f"{text}, {value_of(excess, excess.cured_value, rules)} tonight" if excess.cured_value is not None else text
