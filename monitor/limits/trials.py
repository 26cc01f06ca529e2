"""Evenings as trials of the loss model: what a forecast would have rested on, and what the positions then made."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass, replace

import numpy as np

from monitor.limits.measures import day_loss
from monitor.limits.slices import Slice
from monitor.limits.subjects import with_past
from monitor.limits.valuation import LEAST_OF_WINDOW, Valuation
from monitor.limits.wholes import wholes
from monitor.words import MarkKind, Subject, Unit
from monitor.world import Booleans, Floats, Integers


@dataclass(frozen=True)
class Observation:
    """The subjects of one currency and calendar on one evening.

    pnl: (subjects, n) what tonight's positions would have made on the newest sessions. sessions: (subjects,) since the
    first return of any of them. reasons: by window, for each subject why no forecast can be made, or None.
    """

    subjects: tuple[Subject, ...]
    currency: str
    calendar: str
    pnl: Floats
    sessions: Integers
    reasons: Mapping[int, list[str | None]]


@dataclass(frozen=True)
class Outcome:
    """What a subject's positions of the evening before made on the session just ended, or why that is not known.

    carried: it rests in part on an older price or rate.
    """

    pnl: float | None
    reason: str | None
    carried: bool


@dataclass(frozen=True)
class Series:
    """What tonight's positions would have made on every session known, (subjects, sessions), oldest first.

    carried: (subjects, sessions) it rests in part on an older price or rate. sessions: (subjects,) since the first
    return of any position. fit: by window, (subjects, sessions) whether enough of the window that ends there is known
    for a forecast. reasons: for each subject why no forecast can be made at all, or None.
    """

    subjects: tuple[Subject, ...]
    currency: str
    calendar: str
    pnl: Floats
    carried: Booleans
    sessions: Integers
    fit: Mapping[int, Booleans]
    reasons: list[str | None]


def observe(valuation: Valuation, windows: Collection[int], positions: bool) -> Iterator[Observation]:
    """Each book and the firm tonight, and each position where asked for."""
    longest = max(windows)
    for part in _parts(valuation, positions):
        yield Observation(
            subjects=part.members.subjects,
            currency=part.currency,
            calendar=part.calendar,
            pnl=np.asarray(part.members.sum(part.scenarios(longest).pnl)),
            sessions=part.sessions_used(longest),
            reasons={window: _reasons(part, _troubles(part, window)) for window in windows},
        )


def outcomes(valuation: Valuation, positions: bool) -> dict[str, Outcome]:
    """By subject, also for those that hold nothing any more."""
    found = {}
    for part in _parts(valuation, positions):
        members = with_past(part.rule, part.world, part.members)
        loss = day_loss(replace(part, members=members), {}, Unit.AMOUNT)
        for at, subject in enumerate(members.subjects):
            value, reason = loss.figure(at)
            carried = any(mark.kind is MarkKind.CARRIED for mark in loss.marks.get(at, ()))
            found[subject.key] = Outcome(None if value is None else 0.0 - value, reason, carried)
    return found


def series(valuation: Valuation, windows: Collection[int], positions: bool) -> Iterator[Series]:
    """Each book and the firm with tonight's positions over all of the past, and each position where asked for."""
    for part in _parts(valuation, positions):
        made = valuation.scenarios(part.calendar, part.currency)
        count = made.pnl.shape[1]
        lacks = made.lacks & ~made.riskless[:, None]
        carried = lacks.copy()
        carried[:, 1:] |= lacks[:, :-1]
        sessions = part.sessions_used(count)
        reasons = _reasons(part, part.exposure_troubles())
        begins = np.where([reason is None for reason in reasons], count - sessions, count)
        yield Series(
            subjects=part.members.subjects,
            currency=part.currency,
            calendar=part.calendar,
            pnl=np.asarray(part.members.sum(made.pnl)),
            carried=_any_of(part, carried),
            sessions=sessions,
            fit={window: _fit(part, lacks, begins, window) for window in windows},
            reasons=reasons,
        )


def _fit(part: Slice, lacks: Booleans, begins: Integers, window: int) -> Booleans:
    """(subjects, sessions) whether a window that ends there is full, and each position has enough returns in it.

    lacks: (positions, sessions). begins: (subjects,) the first session that may lie in a window.
    """
    within = np.cumsum(lacks, axis=1, dtype=np.int32)
    within[:, window:] -= within[:, :-window].copy()
    unfit = window - within < LEAST_OF_WINDOW * window
    full = np.arange(lacks.shape[1]) >= begins[:, None] + window - 1
    return np.asarray(full & ~_any_of(part, unfit))


def _any_of(part: Slice, positions: Booleans) -> Booleans:
    """(positions, n) to (subjects, n): whether it holds of any position of the subject."""
    return np.asarray(part.members.sum(positions.astype(np.float64)) > 0)


def _parts(valuation: Valuation, positions: bool) -> Iterator[Slice]:
    yield from wholes(valuation)
    if positions:
        yield from wholes(valuation, each="position")


def _troubles(part: Slice, window: int) -> Mapping[int, str]:
    return part.window_troubles(window, part.sessions_used(window)) | part.exposure_troubles()


def _reasons(part: Slice, troubles: Mapping[int, str]) -> list[str | None]:
    """For each subject why there is no forecast: a book that is missing, or a position with a trouble."""
    missing = part.world.holdings.missing
    reasons: list[str | None] = [
        next((why for book, why in missing.items() if subject.book in (None, book)), None)
        for subject in part.members.subjects
    ]
    for owner, position in zip(part.members.owner.tolist(), part.members.position.tolist(), strict=True):
        reasons[owner] = reasons[owner] or troubles.get(position)
    return reasons
