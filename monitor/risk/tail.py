"""What the methods of value at risk and expected shortfall have in common: the answer, the tail, the horizon."""

from __future__ import annotations

import math
from dataclasses import dataclass
from decimal import Decimal
from enum import IntEnum
from fractions import Fraction
from typing import Literal, get_args

from monitor.risk.figures import Codes, Figures, Floats

Drift = Literal["zero", "sample"]


class FitNote(IntEnum):
    """What a reader must know about the distribution behind a subject's figure."""

    AS_ASKED = 0
    NORMAL_FOR_TIES = 1
    NORMAL_AS_LIMIT = 2
    NORMAL_FOR_TOO_FEW = 3
    NORMAL_FOR_NO_FIT = 4
    NU_AT_FLOOR = 5
    EWMA_FOR_NO_FIT = 6
    INSIDE_THRESHOLD = 7
    ONE_SCENARIO = 8
    SHAPE_AT_FLOOR = 9
    SCALED_FAR = 10


FIT_NOTE_TEXT: dict[FitNote, str] = {
    FitNote.AS_ASKED: "measured by the method asked for",
    FitNote.NORMAL_FOR_TIES: "by the normal: too many scenarios are equal to fit Student's t",
    FitNote.NORMAL_AS_LIMIT: "by the normal: the tails are no fatter, Student's t has no best degrees of freedom",
    FitNote.NORMAL_FOR_TOO_FEW: "by the normal: too few scenarios to fit Student's t",
    FitNote.NORMAL_FOR_NO_FIT: "by the normal: the fit of Student's t did not settle",
    FitNote.NU_AT_FLOOR: "Student's t with its degrees of freedom held at the lowest allowed",
    FitNote.EWMA_FOR_NO_FIT: "scaled by EWMA volatility: GARCH could not be fitted",
    FitNote.INSIDE_THRESHOLD: "historical: the confidence lies inside the threshold, where no tail is fitted",
    FitNote.ONE_SCENARIO: "one scenario alone outweighs the tail: the shortfall is that scenario, no mean of several",
    FitNote.SHAPE_AT_FLOOR: "peaks over threshold with the shape of its tail held at the lowest allowed",
    FitNote.SCALED_FAR: "a scenario of the tail is scaled more than tenfold: it comes from a time of hardly any moves",
}


@dataclass(frozen=True)
class Tail:
    """Value at risk and expected shortfall of each subject, positive when losses, in the unit of the scenarios.

    exact_tail: False when less than one scenario lies in the tail, so that the shortfall is the worst scenario and
    not the mean that its name promises. note: (subjects,) of FitNote.
    """

    value_at_risk: Figures
    expected_shortfall: Figures
    exact_tail: bool
    note: Codes


@dataclass(frozen=True)
class SimulatedTail(Tail):
    """The tail, and the standard error that each figure has from drawing only so many paths, (subjects,), in the unit
    of the scenarios, NaN where there is no figure. They say nothing of the error of the fit.
    """

    value_at_risk_error: Floats
    expected_shortfall_error: Floats


def tail_share(confidence: Decimal) -> Fraction:
    """1 - confidence, exactly. As floats 1 - 0.99 is above 0.01 and would put the 5th of 500 worst at the 6th.

    Raises TypeError when the confidence is not a Decimal, ValueError when it is not above 0 and below 1.
    """
    if not isinstance(confidence, Decimal):
        raise TypeError(f"the confidence must be a Decimal (got {confidence!r})")
    if not (confidence.is_finite() and 0 < confidence < 1 and float(1 - Fraction(confidence)) > 0):
        raise ValueError(f"the confidence must be above 0 and below 1 (got {confidence})")
    return 1 - Fraction(confidence)


def root_of_time(horizon_days: int) -> float:
    """The factor from one day to the horizon when days are independent. Raises ValueError below 1 day."""
    if horizon_days < 1:
        raise ValueError(f"the horizon must be at least 1 day (got {horizon_days})")
    return math.sqrt(horizon_days)


def check_drift(drift: str) -> None:
    """Raise ValueError when the drift is not one that the methods know."""
    if drift not in get_args(Drift):
        raise ValueError(f"the drift must be one of {', '.join(get_args(Drift))} (got {drift!r})")
