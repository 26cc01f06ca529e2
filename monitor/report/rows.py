"""Standings as the rows of a table, and all of them on one strip."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from monitor.notices import figures
from monitor.report.headline import ORDER, by_urgency
from monitor.report.names import NOTHING, allowed, measured_by, title
from monitor.report.page import Page
from monitor.words import Side, Standing
from monitor.world import Answer, Rule, Standings

MOST_WITHIN = 60
BAR_ENDS_AT = 1.5  # of the limit
BAR_WIDTH = 120.0
STRIP_WIDTH = 960


@dataclass(frozen=True)
class Bar:
    """Utilisation drawn from 0 to 1.5 of the limit, in the units of the drawing; `beyond`: it goes on past the end."""

    fill: float
    near: float | None
    limit: float
    beyond: bool


@dataclass(frozen=True)
class Row:
    title: str
    rule: str
    subject: str
    value: str
    bounds: str
    limit: str
    near: str
    utilisation: str
    bar: Bar | None
    how: str
    notes: tuple[str, ...]


@dataclass(frozen=True)
class Group:
    """All standings of one word, of which `left_out` are not shown."""

    standing: Standing
    total: int
    rows: tuple[Row, ...]

    @property
    def left_out(self) -> int:
        return self.total - len(self.rows)


@dataclass(frozen=True)
class Tick:
    """One place on the strip of all utilisations, where at least one standing of this word lies."""

    at: float
    standing: Standing


def groups(page: Page) -> tuple[Group, ...]:
    """The standings in the order of urgency; only those within may be left out."""
    ordered = by_urgency(page.standings.answers)
    found = []
    for standing in ORDER:
        answers = [answer for answer in ordered if answer.standing is standing]
        shown = answers[:MOST_WITHIN] if standing is Standing.WITHIN else answers
        if answers:
            found.append(Group(standing, len(answers), tuple(_row(answer, page.rules) for answer in shown)))
    return tuple(found)


def strip(standings: Standings) -> tuple[Tick, ...]:
    """Where the utilisations lie between 0 and 1.5 of the limit, the urgent ones last so that they lie on top."""
    places = {
        (ORDER.index(answer.standing), round(STRIP_WIDTH * min(answer.utilisation / BAR_ENDS_AT, 1.0)))
        for answer in standings.answers
        if answer.utilisation is not None
    }
    return tuple(Tick(at, ORDER[rank]) for rank, at in sorted(places, reverse=True))


def _row(answer: Answer, rules: Mapping[str, Rule]) -> Row:
    return Row(
        title=title(answer.rule, rules),
        rule=answer.rule,
        subject=answer.subject.name,
        value=figures.value_of(answer),
        bounds=figures.bounds_in_short(answer),
        limit=_limit(answer),
        near=_near(answer),
        utilisation=figures.utilisation(answer.utilisation),
        bar=_bar(answer),
        how=measured_by(answer),
        notes=_notes(answer),
    )


def _notes(answer: Answer) -> tuple[str, ...]:
    """What a reader must know of the figure: why there is none, why a bound is missing, what is doubtful."""
    bound = [f"bounds: {answer.unbounded}"] if answer.unbounded else []
    return (
        *([answer.reason] if answer.reason else []),
        *bound,
        *(f"{mark.kind}: {mark.note}" for mark in answer.marks),
    )


def _limit(answer: Answer) -> str:
    sides = [(Side.ABOVE, answer.limit), (Side.BELOW, answer.limit_below)]
    other = [
        f"{allowed(side)} {_level(answer, level)}"
        for side, level in sides
        if side is not answer.side and level is not None
    ]
    if figures.held_against(answer) is None:
        return "; ".join(other) or NOTHING
    return "; ".join([f"{allowed(answer.side)} {figures.limit_of(answer)}", *other])


def _near(answer: Answer) -> str:
    if answer.near is None:
        return ""
    return f"near from {_level(answer, answer.near)}{'' if answer.side is Side.ABOVE else ' down'}"


def _level(answer: Answer, level: float) -> str:
    return figures.level(level, answer.unit, answer.currency, answer.measure)


def _bar(answer: Answer) -> Bar | None:
    if answer.utilisation is None:
        return None
    level = figures.held_against(answer)
    near = None
    if answer.near and level and answer.near * level > 0:
        near = answer.near / level if answer.side is Side.ABOVE else level / answer.near
    return Bar(
        fill=_on_bar(answer.utilisation),
        near=None if near is None else _on_bar(near),
        limit=_on_bar(1.0),
        beyond=answer.utilisation > BAR_ENDS_AT,
    )


def _on_bar(fraction: float) -> float:
    return round(BAR_WIDTH * min(fraction / BAR_ENDS_AT, 1.0), 1)
