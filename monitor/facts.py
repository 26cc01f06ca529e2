"""One frozen dataclass for each kind of ledger entry, with its version. Standard library only.

A fact's body is plain JSON: dates as ISO 8601 text, enumerations by value, tuples as lists. Numbers are decoded by the
field's own type, for RFC 8785 writes 1.0 as 1. A body changes only by a new version, with a function in UPCASTS that
lifts the older body; entries already written are never rewritten.
"""

from __future__ import annotations

import types
from collections.abc import Callable, Mapping
from dataclasses import dataclass, fields, is_dataclass
from datetime import date
from enum import Enum
from functools import cache
from typing import Any, ClassVar, Union, get_args, get_origin, get_type_hints

from monitor.words import CuredBy, ExcessState, FileKind, Finding, Outcome, Recipe, Side, Subject, Unit

Body = dict[str, Any]


class UnknownFactError(Exception):
    """The ledger holds a kind or version that this program does not know; it must not write to that ledger."""


@dataclass(frozen=True)
class Hand:
    """Who did something, as the machine saw it: the login and the host."""

    login: str
    host: str


@dataclass(frozen=True)
class SiteOpened:
    KIND: ClassVar = "site.opened"
    V: ClassVar = 1
    site: str
    base_currency: str
    program: str
    hand: Hand


@dataclass(frozen=True)
class SettingsAdopted:
    """`settings` is the hash of the site file; `changes` says in words what differs from `was`."""

    KIND: ClassVar = "settings.adopted"
    V: ClassVar = 1
    settings: str
    was: str | None
    changes: tuple[str, ...]
    hand: Hand


@dataclass(frozen=True)
class NamedFile:
    name: str
    sha256: str


@dataclass(frozen=True)
class RulesAdopted:
    """`rules` is the hash of the list of rule files and settings that a recipe names."""

    KIND: ClassVar = "rules.adopted"
    V: ClassVar = 1
    rules: str
    was: str | None
    settings: str
    files: tuple[NamedFile, ...]
    changes: tuple[str, ...]
    hand: Hand


@dataclass(frozen=True)
class FileAccepted:
    """`day` is the date in the file's name, None for files that have none. first, last: the dates its rows cover."""

    KIND: ClassVar = "file.accepted"
    V: ClassVar = 1
    name: str
    file: FileKind
    source: str
    day: date | None
    sha256: str
    size: int
    rows: int
    first: date | None
    last: date | None


@dataclass(frozen=True)
class FileRefused:
    """`findings` holds the first of the reasons, `reasons` their number. sha256 is None when it could not be read."""

    KIND: ClassVar = "file.refused"
    V: ClassVar = 1
    name: str
    file: FileKind | None
    source: str
    day: date | None
    sha256: str | None
    size: int
    reasons: int
    findings: tuple[Finding, ...]


@dataclass(frozen=True)
class UsedFile:
    file: FileKind
    source: str
    day: date | None
    sha256: str


@dataclass(frozen=True)
class BookLine:
    """The forecast for the next session and the P&L of the one just ended, of a book or the firm; None: not known."""

    subject: str
    currency: str
    value_at_risk: float | None
    pnl: float | None


@dataclass(frozen=True)
class EveningChecked:
    """The check of one round for one date. `inputs` digests all that the answer depends on.

    `results`: hash of the file of standings, in the archive. `sessions`: likewise of the calendars' sessions.
    `told`: whether its own notices were queued with it; if not, a summary covers it.
    """

    KIND: ClassVar = "evening.checked"
    V: ClassVar = 1
    recipe: Recipe
    edition: int
    inputs: str
    files: tuple[UsedFile, ...]
    settings: str
    rules: tuple[str, ...]
    sessions: str
    versions: Mapping[str, str]
    completes: bool
    outcome: Outcome
    counts: Mapping[str, int]
    books: tuple[BookLine, ...]
    results: str
    told: bool


@dataclass(frozen=True)
class EveningMissed:
    """An evening that was due and could not be checked at all."""

    KIND: ClassVar = "evening.missed"
    V: ClassVar = 1
    day: date
    round: str
    reason: str


@dataclass(frozen=True)
class ExcessOpened:
    KIND: ClassVar = "excess.opened"
    V: ClassVar = 1
    excess: str
    rule: str
    subject: Subject
    day: date
    side: Side
    value: float
    level: float
    distance: float
    unit: Unit
    currency: str | None
    owner: str | None


@dataclass(frozen=True)
class ExcessChanged:
    """What the register holds of an excess from now on: another evening over, or other dates after a correction.

    side, unit, currency, owner: as its rule has them by now. An excess that had been cured is no longer.
    """

    KIND: ClassVar = "excess.changed"
    V: ClassVar = 1
    excess: str
    day: date
    state: ExcessState
    side: Side
    unit: Unit
    currency: str | None
    owner: str | None
    opened_on: date
    opened_value: float
    last_on: date
    last_value: float
    level: float
    worst_on: date
    worst_value: float
    worst_distance: float
    reason: str


@dataclass(frozen=True)
class ExcessCured:
    KIND: ClassVar = "excess.cured"
    V: ClassVar = 1
    excess: str
    day: date
    by: CuredBy
    value: float | None


@dataclass(frozen=True)
class ExcessVoided:
    KIND: ClassVar = "excess.voided"
    V: ClassVar = 1
    excess: str
    day: date
    reason: str


@dataclass(frozen=True)
class NoticeQueued:
    """One notice for one receiver on one channel. `id` stays the same over all tries; the text lies in the archive.

    `content` is the hash of the batch of notices written with it and `place` the position in that batch. after_seq and
    after_hash name the entry it speaks of. person is None where the channel itself is the receiver.
    """

    KIND: ClassVar = "notice.queued"
    V: ClassVar = 1
    id: str
    topic: str
    title: str
    channel: str
    person: str | None
    content: str
    place: int
    after_seq: int
    after_hash: str


@dataclass(frozen=True)
class NoticeSent:
    KIND: ClassVar = "notice.sent"
    V: ClassVar = 1
    id: str
    attempt: int
    receipt: str


@dataclass(frozen=True)
class NoticeFailed:
    """A try that did not succeed. next_try: UTC text; None when it is `final` and will not be tried again by itself."""

    KIND: ClassVar = "notice.failed"
    V: ClassVar = 1
    id: str
    attempt: int
    reason: str
    final: bool
    next_try: str | None


@dataclass(frozen=True)
class ClockOdd:
    """The clock stood before the newest entry's time by `seconds`; the entries after it say what the clock said."""

    KIND: ClassVar = "clock.odd"
    V: ClassVar = 1
    seconds: float


@dataclass(frozen=True)
class DaemonStarted:
    KIND: ClassVar = "daemon.started"
    V: ClassVar = 1
    program: str
    pid: int
    hand: Hand


@dataclass(frozen=True)
class DaemonStopped:
    KIND: ClassVar = "daemon.stopped"
    V: ClassVar = 1
    reason: str
    pid: int


Fact = (
    SiteOpened
    | SettingsAdopted
    | RulesAdopted
    | FileAccepted
    | FileRefused
    | EveningChecked
    | EveningMissed
    | ExcessOpened
    | ExcessChanged
    | ExcessCured
    | ExcessVoided
    | NoticeQueued
    | NoticeSent
    | NoticeFailed
    | ClockOdd
    | DaemonStarted
    | DaemonStopped
)
FACTS: dict[str, type[Fact]] = {fact.KIND: fact for fact in get_args(Fact)}

# (kind, v) -> the function that lifts a body of that version to the next.
UPCASTS: dict[tuple[str, int], Callable[[Body], Body]] = {}


@dataclass(frozen=True)
class Entry:
    """One link of the ledger's chain, decoded. `hash` is the SHA-256 of its bytes, `prev` that of the link before."""

    seq: int
    at: str
    prev: str
    hash: str
    fact: Fact


def encode(fact: Fact) -> Body:
    """The body of a fact as plain JSON values."""
    return {field.name: _plain(getattr(fact, field.name)) for field in fields(fact)}


def decode(kind: str, v: int, body: Body) -> Fact:
    """The fact of a body written by this or an older version of the program. Raises UnknownFactError."""
    fact = FACTS.get(kind)
    if fact is None or v > fact.V:
        raise UnknownFactError(f"entry of kind {kind!r}, version {v}")
    while v < fact.V:
        body = UPCASTS[kind, v](body)
        v += 1
    made: Fact = _typed(body, fact)
    return made


def _plain(value: object) -> Any:
    if is_dataclass(value) and not isinstance(value, type):
        return {field.name: _plain(getattr(value, field.name)) for field in fields(value)}
    if isinstance(value, Enum):
        return value.value
    if isinstance(value, date):
        return value.isoformat()
    if isinstance(value, Mapping):
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, tuple):
        return [_plain(item) for item in value]
    return value


@cache
def _hints(kind: type) -> dict[str, Any]:
    hints = get_type_hints(kind)
    return {field.name: hints[field.name] for field in fields(kind)}


def _typed(value: Any, hint: Any) -> Any:
    origin, arguments = get_origin(hint), get_args(hint)
    if origin in (Union, types.UnionType):
        return None if value is None else _typed(value, next(part for part in arguments if part is not type(None)))
    if origin is tuple:
        return tuple(_typed(item, arguments[0]) for item in value)
    if origin is not None:
        return {key: _typed(item, arguments[1]) for key, item in value.items()}
    if isinstance(hint, type) and is_dataclass(hint):
        return hint(**{name: _typed(value[name], part) for name, part in _hints(hint).items()})
    return date.fromisoformat(value) if hint is date else hint(value)
