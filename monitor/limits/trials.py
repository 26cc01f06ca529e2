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

    fit: by window, (subjects, sessions) whether enough of the window that ends there is known for a forecast.
    """

    subjects: tuple[Subject, ...]
    currency: str
    calendar: str
    pnl: Floats
    fit: Mapping[int, Booleans]


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
            reasons={window: _reasons(part, window) for window in windows},
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
        lacks = np.cumsum(made.lacks & ~made.riskless[:, None], axis=1, dtype=np.int32)
        fit = {}
        for window in windows:
            within = lacks.copy()
            within[:, window:] -= lacks[:, :-window]
            unfit = within > (1 - LEAST_OF_WINDOW) * window
            fit[window] = np.asarray(part.members.sum(unfit.astype(np.float64)) == 0)
            fit[window][:, : window - 1] = False
        for at in part.exposure_troubles():
            for known in fit.values():
                known[part.members.owner[part.members.position == at]] = False
        yield Series(
            subjects=part.members.subjects,
            currency=part.currency,
            calendar=part.calendar,
            pnl=np.asarray(part.members.sum(made.pnl)),
            fit=fit,
        )


def _parts(valuation: Valuation, positions: bool) -> Iterator[Slice]:
    yield from wholes(valuation)
    if positions:
        yield from wholes(valuation, each="position")


def _reasons(part: Slice, window: int) -> list[str | None]:
    """For each subject why there is no forecast: a book that is missing, or a position without exposure or returns."""
    missing = part.world.holdings.missing
    reasons: list[str | None] = [
        next((why for book, why in missing.items() if subject.book in (None, book)), None)
        for subject in part.members.subjects
    ]
    troubles = part.exposure_troubles() | part.window_troubles(window, part.sessions_used(window))
    for owner, position in zip(part.members.owner.tolist(), part.members.position.tolist(), strict=True):
        reasons[owner] = reasons[owner] or troubles.get(position)
    return reasons
