"""What a measure answers for the subjects of a slice: figures, their bounds and doubts, or the reasons for gaps."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from monitor.limits.slices import Denominator, Slice
from monitor.limits.subjects import Members
from monitor.risk.bounds import BOUND_LACK_TEXT, BoundLack, Bounds
from monitor.risk.figures import LACK_TEXT, Figures, Lack
from monitor.words import Mark, Unit
from monitor.world import Booleans, Floats, How, Integers

Parameters = Mapping[str, Any]


@dataclass
class Measured:
    """A measure's answer. value: (subjects,), NaN exactly where `reasons` says why. amount: in the slice's currency.

    n: (subjects,) sessions used, or None for measures of tonight alone. marks: doubts of the measure's own, by subject.
    low, high: (subjects,) sampling bounds at 95 %, NaN where `unbounded` says why there is none; None for measures that
    have none.
    """

    value: Floats
    reasons: list[str | None]
    amount: bool
    n: Integers | None = None
    how: How = field(default_factory=How)
    marks: dict[int, list[Mark]] = field(default_factory=dict)
    low: Floats | None = None
    high: Floats | None = None
    unbounded: dict[int, str] = field(default_factory=dict)

    def leave_out(self, at: int, reason: str) -> None:
        """Take the figure of one subject back and say why."""
        self.value[at] = np.nan
        self.reasons[at] = reason

    def fill(self, places: Integers, figures: Figures) -> None:
        """Enter the figures of some subjects, with the reasons of those that have none."""
        self.value[places] = figures.value
        for row in np.flatnonzero(figures.lack != Lack.NONE).tolist():
            self.reasons[int(places[row])] = LACK_TEXT[Lack(figures.lack[row])]

    def bound(self, places: Integers, bounds: Bounds) -> None:
        """Enter the sampling bounds of some subjects, with the reasons where one does not exist."""
        if self.low is None or self.high is None:
            self.low, self.high = np.full(len(self.value), np.nan), np.full(len(self.value), np.nan)
        self.low[places], self.high[places] = bounds.low, bounds.high
        for row in np.flatnonzero(bounds.reason != BoundLack.NONE).tolist():
            self.unbounded[int(places[row])] = BOUND_LACK_TEXT[BoundLack(bounds.reason[row])]

    def mark(self, at: int, marks: Iterable[Mark]) -> None:
        self.marks.setdefault(at, []).extend(marks)

    def figure(self, at: int) -> tuple[float | None, str | None]:
        """The figure of one subject, or the reason why there is none."""
        value, reason = float(self.value[at]), self.reasons[at]
        if reason is None and not math.isfinite(value):
            reason = "the figure is too large to calculate with"
        return (value, None) if reason is None else (None, reason)

    def bounds(self, at: int) -> tuple[float | None, float | None, str | None]:
        """The sampling bounds of one subject's figure, and why one of them does not exist."""
        if self.low is None or self.high is None:
            return None, None, None
        low, high = (float(own[at]) if math.isfinite(own[at]) else None for own in (self.low, self.high))
        return low, high, self.unbounded.get(at) if None in (low, high) else None


Measure = Callable[[Slice, Parameters, Unit], Measured]


def divide(measured: Measured, denominator: Denominator) -> Measured:
    """Turn amounts into shares of a denominator; a subject without one has no figure."""
    with np.errstate(all="ignore"):
        measured.value = measured.value / denominator.value
        measured.low = None if measured.low is None else measured.low / denominator.value
        measured.high = None if measured.high is None else measured.high / denominator.value
    rest_on(measured, denominator)
    return measured


def rest_on(measured: Measured, denominator: Denominator) -> None:
    """What is lacking or doubtful in the denominator is so in the figure."""
    for at, (reason, doubts) in enumerate(zip(denominator.reasons, denominator.doubts, strict=True)):
        if reason is not None and measured.reasons[at] is None:
            measured.leave_out(at, reason)
        if doubts:
            measured.mark(at, doubts)


def leave_out_troubled(part: Slice, measured: Measured, troubles: Mapping[int, str]) -> None:
    """A subject that holds a position with a trouble has no figure: a part of it would be less than the truth."""
    troubled = np.zeros(len(part.exposure), dtype=np.bool_)
    troubled[list(troubles)] = True
    found: dict[int, list[str]] = {}
    for owner, position in pairs(part.members, troubled):
        found.setdefault(owner, []).append(troubles[position])
    for owner, reasons in found.items():
        distinct = list(dict.fromkeys(reasons))
        others = len(distinct) - 1
        more = f"; and {others} more position{'' if others == 1 else 's'}" if others else ""
        measured.leave_out(owner, distinct[0] + more)


def pairs(members: Members, positions: Booleans) -> list[tuple[int, int]]:
    """Subjects and their positions, as far as these are among the positions (positions,)."""
    chosen = positions[members.position]
    return list(zip(members.owner[chosen].tolist(), members.position[chosen].tolist(), strict=True))
