"""The shape of what a notice says, and its rendering: one story, a plain text and an HTML that say the same."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum
from functools import cache

from jinja2 import Environment, PackageLoader, StrictUndefined

CAUTIONS = (
    "Value at risk is not the worst case: on a day beyond its confidence the loss is larger, and may be much larger.",
    "These figures rest on past prices and on the data that was delivered. They are information for the people who "
    "control the risk, not advice to buy, sell or hold.",
    "They do not replace the approved models and the licensed people that local rules require. Where these "
    "figures and those rules differ, the rules and the people who answer for them decide.",
)
LISTED = 20
_WIDTH = 78
_JOINT = "\u00a0"
_TOGETHER = re.compile(r"(?<=\d) (?=%)|(?<=\b[A-Z]{3}) (?=-?\d)|(?<=\bn) (?==)|(?<==) (?=\d)")


class Tone(StrEnum):
    """What colour the head of the HTML has; the words say it too."""

    OVER = "over"
    DOUBT = "doubt"
    CALM = "calm"


@dataclass(frozen=True)
class Table:
    """Rows of cells under columns. In plain text a row is `- cell: column cell; column cell`. more: rows left out."""

    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    more: int = 0


@dataclass(frozen=True)
class Section:
    heading: str
    facts: tuple[tuple[str, str], ...] = ()
    lines: tuple[str, ...] = ()
    table: Table | None = None


@dataclass(frozen=True)
class Story:
    """`headline` is the first line: what is wrong and by how much. `record` says where it is written in the ledger."""

    tone: Tone
    headline: str
    lead: tuple[str, ...]
    sections: tuple[Section, ...]
    record: tuple[tuple[str, str], ...]
    cautions: tuple[str, ...] = CAUTIONS


def table(columns: tuple[str, ...], rows: Sequence[tuple[str, ...]], listed: int = LISTED) -> Table:
    """The first rows, with the number of those left out, and without the columns that are empty in all of them."""
    shown = rows[:listed]
    kept = [place for place in range(len(columns)) if any(cells[place] for cells in shown)]
    return Table(
        tuple(columns[place] for place in kept),
        tuple(tuple(cells[place] for place in kept) for cells in shown),
        len(rows) - len(shown),
    )


def render(story: Story) -> tuple[str, str]:
    """(plain text, HTML). The text carries everything that the HTML does."""
    environment = _environment()
    return (
        environment.get_template("notice.txt").render(story=story).strip() + "\n",
        environment.get_template("notice.html").render(story=story),
    )


@cache
def _environment() -> Environment:
    environment = Environment(
        loader=PackageLoader("monitor.notices", "."),
        autoescape=lambda name: name is not None and name.endswith(".html"),
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters["fold"] = _fold
    environment.filters["joined"] = _joined
    environment.filters["row"] = _row
    return environment


def _joined(text: str) -> str:
    return _TOGETHER.sub(_JOINT, text)


def _fold(text: str, first: str = "", rest: str = "") -> str:
    """Lines of at most 78 characters where the words allow it; a number keeps its unit and its currency."""
    lines = textwrap.fill(
        _joined(text),
        _WIDTH,
        initial_indent=first,
        subsequent_indent=rest,
        break_long_words=False,
        break_on_hyphens=False,
    )
    return lines.replace(_JOINT, " ")


def _row(cells: tuple[str, ...], columns: tuple[str, ...]) -> str:
    named = [f"{column} {cell}" for column, cell in zip(columns[1:], cells[1:], strict=True) if cell]
    return f"{cells[0]}: {'; '.join(named)}" if named else cells[0]
