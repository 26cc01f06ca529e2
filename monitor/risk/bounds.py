"""Sampling bounds: how far a figure may lie from the truth because the scenarios are a sample."""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum
from fractions import Fraction

import numpy as np

from monitor.risk.figures import Codes, Figures, Floats, Lack
from monitor.risk.tail import SimulatedTail, Tail

EACH_SIDE = Fraction(1, 40)  # 2.5 % on each side: two-sided bounds at 95 %
NORMAL_QUANTILE = 1.959963984540054  # of the standard normal at 97.5 %
RESAMPLES = 999  # 2.5 % of 999 + 1 are a whole 25 (Davison and Hinkley 1997, Bootstrap Methods, section 2.4)


class BoundLack(IntEnum):
    """Why a figure lacks a bound."""

    NONE = 0
    NO_FIGURE = 1
    TOO_FEW = 2
    IRREGULAR = 3
    OUT_OF_RANGE = 4
    OVERLAPPING = 5
    SEVERAL_DAYS = 6


BOUND_LACK_TEXT: dict[BoundLack, str] = {
    BoundLack.NONE: "there are both bounds",
    BoundLack.NO_FIGURE: "there is no figure to bound",
    BoundLack.TOO_FEW: "too few scenarios for a bound at this confidence",
    BoundLack.IRREGULAR: "the fitted tail ends so abruptly that the errors of its fit are not known",
    BoundLack.OUT_OF_RANGE: "a bound is too large to calculate with",
    BoundLack.OVERLAPPING: "the bounds of this method need scenarios that do not overlap",
    BoundLack.SEVERAL_DAYS: "no bounds are known of several simulated days of Student's t",
}


@dataclass(frozen=True)
class Bounds:
    """Two-sided bounds at 95 % of one figure a subject, 2.5 % each side, in the unit and sign of the figure.

    low, high: (subjects,), low <= figure <= high, NaN on a side that has no bound. reason: (subjects,) of BoundLack,
    NONE exactly where both sides are numbers. A flat book (all scenarios 0) has the bounds 0 where it has any.
    """

    low: Floats
    high: Floats
    reason: Codes

    @staticmethod
    def of(figures: Figures, low: Floats, high: Floats, reason: Codes) -> Bounds:
        """Bounds around these figures. NaN in low or high: none there, and reason says why, else it overflowed.

        Rounding, and the bias of a bootstrap, may put an end just past the figure: it is then moved to the figure.
        """
        lacking = figures.lack != Lack.NONE
        complete = np.isfinite(low) & np.isfinite(high)
        reason = np.where(complete, BoundLack.NONE, np.where(reason == BoundLack.NONE, BoundLack.OUT_OF_RANGE, reason))
        return Bounds(
            np.where(lacking | ~np.isfinite(low), np.nan, np.minimum(low, figures.value) + 0.0),
            np.where(lacking | ~np.isfinite(high), np.nan, np.maximum(high, figures.value) + 0.0),
            np.where(lacking, BoundLack.NO_FIGURE, reason).astype(np.int8),
        )


@dataclass(frozen=True)
class TailBounds:
    """The bounds of value at risk and of expected shortfall of each subject."""

    value_at_risk: Bounds
    expected_shortfall: Bounds


def no_bounds(tail: Tail, reason: BoundLack) -> TailBounds:
    """No bound of any figure of a tail, and why."""

    def none(figures: Figures) -> Bounds:
        blank = np.full(len(figures.value), np.nan)
        return Bounds.of(figures, blank, blank, np.full(len(blank), reason, dtype=np.int8))

    return TailBounds(none(tail.value_at_risk), none(tail.expected_shortfall))


def moved_bounds(bounds: TailBounds, of: Tail, tail: Tail) -> TailBounds:
    """The bounds of one tail as those of another that estimates the same: each as far from its figure as it was.

    Where the other is simulated, its own standard errors are added in squares on each side (Zou and Donner 2008).
    """

    def moved(own: Bounds, figures: Figures, to: Figures, error: Floats) -> Bounds:
        down, up = (np.hypot(side - figures.value, NORMAL_QUANTILE * error) for side in (own.low, own.high))
        return Bounds.of(to, to.value - down, to.value + up, own.reason)

    none = np.zeros(len(tail.note))
    at_risk, beyond = none, none
    if isinstance(tail, SimulatedTail):
        at_risk, beyond = np.nan_to_num(tail.value_at_risk_error), np.nan_to_num(tail.expected_shortfall_error)
    with np.errstate(all="ignore"):
        return TailBounds(
            moved(bounds.value_at_risk, of.value_at_risk, tail.value_at_risk, at_risk),
            moved(bounds.expected_shortfall, of.expected_shortfall, tail.expected_shortfall, beyond),
        )


def ends(simulated: Floats) -> tuple[Floats, Floats]:
    """The 25th from either end of each row, (subjects,) each. simulated: (subjects, RESAMPLES)."""
    outside = int(EACH_SIDE * (RESAMPLES + 1))
    places = outside - 1, RESAMPLES - outside
    ordered = np.partition(simulated, places, axis=1)
    return ordered[:, places[0]], ordered[:, places[1]]
