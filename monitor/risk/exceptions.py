"""Forecasts and outcomes side by side: on which days was the loss larger than value at risk?

A record is two matrices (subjects, days), days in time order: the profit or loss of each day, and the value at risk
that was forecast for that day before its outcome was known. A value that is not finite is missing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from monitor.risk.figures import Booleans, Floats

Counts = npt.NDArray[np.int64]


@dataclass(frozen=True)
class Exceptions:
    """What a record says of each subject. Each field is (subjects, days).

    hit: the day counts as an exception. counted: the day counts at all, so hit is nowhere without counted.
    missing: from the first forecast on, the profit or loss or the forecast of the day is missing. Such a day is
    always named here; it is counted, and a hit, only where the caller of `find_exceptions` said so.
    """

    hit: Booleans
    counted: Booleans
    missing: Booleans

    @property
    def exceptions(self) -> Counts:
        """How many days are exceptions, (subjects,), those that are missing among them where they count."""
        return _number(self.hit)

    @property
    def days(self) -> Counts:
        """How many days count, (subjects,)."""
        return _number(self.counted)

    @property
    def missing_days(self) -> Counts:
        """How many days are missing, (subjects,), whether they count or not."""
        return _number(self.missing)

    @property
    def days_until_first(self) -> Counts:
        """The place of the first exception among the days that count, from 1, (subjects,); 0 where there is none."""
        place = np.cumsum(self.counted, axis=1, dtype=np.int64)
        return np.asarray(np.where(self.hit & (_running(self.hit) == 1), place, 0).sum(axis=1, dtype=np.int64))


@dataclass(frozen=True)
class LargerCount:
    """The count of exceptions that holds, all (subjects,), and the days of the profit or loss that gave it."""

    exceptions: Counts
    days: Counts
    from_actual: Booleans


def find_exceptions(
    pnl: Floats, value_at_risk: Floats, missing_is_exception: bool = False, tried: Booleans | None = None
) -> Exceptions:
    """An exception is a day whose loss is strictly larger than value at risk: -pnl > value at risk.

    pnl, value_at_risk: (subjects, days), profit positive and value at risk positive when a loss, in one unit.
    Days before the first forecast of a subject don't count. A later day without profit or loss, or without forecast,
    is named as missing and doesn't count, unless missing_is_exception: then it is an exception (MAR32.5(2) of the
    Basel framework, for days on which either is unavailable or impossible to compute).
    tried: alike, days on which a forecast was tried, with a figure or without; the record begins with the first.
    Scaling both by one positive factor changes nothing; a larger forecast never adds an exception; a row alone is the
    row in a block. Raises ValueError when the two have different shapes or not two axes.
    """
    pnl, value_at_risk = np.asarray(pnl, dtype=np.float64), np.asarray(value_at_risk, dtype=np.float64)
    if pnl.ndim != 2 or pnl.shape != value_at_risk.shape:
        raise ValueError(
            "profit or loss and value at risk must both be (subjects, days) "
            f"(got shapes {pnl.shape} and {value_at_risk.shape})"
        )
    forecast = np.isfinite(value_at_risk)
    known = forecast & np.isfinite(pnl)
    begun = forecast if tried is None else forecast | tried
    missing = np.logical_or.accumulate(begun, axis=1) & ~known
    with np.errstate(invalid="ignore"):
        hit = known & (-pnl > value_at_risk)
    if missing_is_exception:
        return Exceptions(hit | missing, known | missing, missing)
    return Exceptions(hit, known, missing)


def larger_count(actual: Exceptions, hypothetical: Exceptions) -> LargerCount:
    """The larger of the two counts, subject by subject (MAR32.4 to 32.6 of the Basel framework).

    actual: by the profit or loss that the books report. hypothetical: by that of the positions held at the forecast,
    revalued. Where the counts are equal the hypothetical one is given.
    """
    more = actual.exceptions > hypothetical.exceptions
    return LargerCount(
        np.where(more, actual.exceptions, hypothetical.exceptions),
        np.where(more, actual.days, hypothetical.days),
        more,
    )


def _number(days: Booleans) -> Counts:
    return np.asarray(days.sum(axis=1, dtype=np.int64))


def _running(days: Booleans) -> Counts:
    return np.cumsum(days, axis=1, dtype=np.int64)
