"""The enumerations and small value types that every room shares. Standard library only."""

from __future__ import annotations

import datetime
import difflib
from collections.abc import Iterable
from dataclasses import dataclass
from enum import IntEnum, StrEnum


class Standing(StrEnum):
    """Tonight's answer of a rule for a subject."""

    WITHIN = "within"
    NEAR = "near"
    OVER = "over"
    UNMEASURED = "unmeasured"


class Outcome(StrEnum):
    """What a whole evening came to: the worst of its standings, or that it could not be completed."""

    WITHIN = "within"
    NEAR = "near"
    OVER = "over"
    INCOMPLETE = "incomplete"


class InstrumentKind(StrEnum):
    EQUITY = "equity"
    FUND = "fund"
    FUTURE = "future"
    CASH = "cash"


class FileKind(StrEnum):
    PRICES = "prices"
    POSITIONS = "positions"
    FX = "fx"
    INSTRUMENTS = "instruments"
    NAV = "nav"
    PNL = "pnl"
    HISTORY = "history"
    HISTORY_FX = "history_fx"


class Unit(StrEnum):
    AMOUNT = "amount"
    OF_NAV = "of_nav"
    OF_GROSS = "of_gross"
    RATIO = "ratio"
    NUMBER = "number"
    DAYS = "days"


class Side(StrEnum):
    """Which of a rule's levels a standing is held against: `limit` (above) or `limit_below` (below)."""

    ABOVE = "above"
    BELOW = "below"


class SubjectKind(StrEnum):
    POSITION = "position"
    BOOK = "book"
    GROUP = "group"
    FIRM = "firm"


class ExcessState(StrEnum):
    OPEN = "open"
    WAIVED = "waived"
    CURED = "cured"
    VOID = "void"


class CuredBy(StrEnum):
    """How an excess ended: its figure came back, or its rule or subject is no more."""

    FIGURE = "figure"
    END_OF_RULE = "end_of_rule"
    END_OF_SUBJECT = "end_of_subject"


class MarkKind(StrEnum):
    """What makes a figure less certain than it looks.

    `carried`: on an older price or rate because tonight's is missing. `gaps`: returns missing inside the window.
    `missing`: a part of the subject could not be read. `short`: the window holds fewer sessions than asked for.
    `method`: worked out by something else than the method asked for, as the note says.
    """

    CARRIED = "carried"
    GAPS = "gaps"
    MISSING = "missing"
    SHORT = "short"
    METHOD = "method"


class Exit(IntEnum):
    """Exit codes of the commands. FAILED wins over INCOMPLETE, INCOMPLETE over OVER."""

    DONE = 0
    FAILED = 1
    WRONG_USE = 2
    OVER = 3
    INCOMPLETE = 4
    DAMAGED = 5


@dataclass(frozen=True, order=True)
class Subject:
    """What a measure is about.

    `key` names it for ever: `firm`, `book:ID`, `position:BOOK/INSTRUMENT`, `group:SELECTION`. `book` is the one book
    it lies in, or None when it reaches across books.
    """

    key: str
    kind: SubjectKind
    book: str | None

    @property
    def name(self) -> str:
        """The key as a reader says it: `north-quay/ARDNAVALE`, `book far-east, kind equity or fund`."""
        if self.kind is SubjectKind.FIRM:
            return "the firm"
        told = self.key.partition(":")[2]
        if self.kind is SubjectKind.GROUP:
            return told.replace("; ", ", ").replace("=", " ").replace("|", " or ")
        return told


@dataclass(frozen=True)
class Mark:
    """One doubt about a figure: its kind and, in words, what it is about."""

    kind: MarkKind
    note: str

    @property
    def doubtful(self) -> bool:
        """Whether an evening marked so must not cure an excess."""
        return self.kind in (MarkKind.CARRIED, MarkKind.MISSING)


@dataclass(frozen=True)
class Recipe:
    """Every input of an evening, by name. `rules` is the hash of rules and settings, `known` a ledger sequence."""

    date: datetime.date
    round: str
    positions_on: datetime.date
    prices_on: datetime.date
    window_to: datetime.date
    rules: str
    known: int


@dataclass(frozen=True)
class Finding:
    """One thing wrong with an input: where, what was found, what was expected, what to do. Lines and columns from 1."""

    file: str
    line: int | None
    column: int | None
    found: str
    expected: str
    remedy: str = ""

    def __str__(self) -> str:
        place = ":".join(str(part) for part in (self.file, self.line, self.column) if part is not None)
        text = f"{place}: found {self.found}; expected {self.expected}"
        return f"{text}. {self.remedy}" if self.remedy else text


def did_you_mean(word: str, known: Iterable[str]) -> str:
    """The question that names the nearest known word, or nothing when none is near."""
    near = difflib.get_close_matches(word, list(known), 1)
    return f"Did you mean {near[0]!r}?" if near else ""


class DuskcheckError(Exception):
    """Something a user can understand and mend. Everything else that escapes is a defect.

    DuskcheckError (exit 1)
      WrongUse (2): the site, the rules or the command are wrong; carries findings where there are places to name
      Damaged (5): the record does not hold together
      Busy (1): another process holds the lock
    """

    exit = Exit.FAILED


class WrongUse(DuskcheckError):
    exit = Exit.WRONG_USE

    def __init__(self, message: str = "", findings: tuple[Finding, ...] = ()) -> None:
        self.findings = findings
        super().__init__("\n".join([*([message] if message else []), *map(str, findings)]))


class Damaged(DuskcheckError):
    exit = Exit.DAMAGED


class Busy(DuskcheckError):
    pass
