"""What a method answers: a number for each subject, or the reason why there is none."""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]
Codes = npt.NDArray[np.int8]
Booleans = npt.NDArray[np.bool_]


class Lack(IntEnum):
    """Why a subject has no figure."""

    NONE = 0
    TOO_SHORT = 1
    NOT_FINITE = 2
    CONSTANT = 3
    OUT_OF_RANGE = 4
    NO_THRESHOLD = 5
    OUTSIDE_DOMAIN = 6
    FEW_IN_TAIL = 7
    NO_FIT = 8
    INFINITE_MEAN = 9
    NO_RANGE = 10
    NOT_SCALABLE = 11
    NO_EXPOSURE = 12


LACK_TEXT: dict[Lack, str] = {
    Lack.NONE: "there is a figure",
    Lack.TOO_SHORT: "too few scenarios for this method",
    Lack.NOT_FINITE: "a scenario is missing or not a finite number",
    Lack.CONSTANT: "every scenario has the same value, which is not 0: no spread to measure",
    Lack.OUT_OF_RANGE: "the scenarios are too large or too small to calculate with",
    Lack.NO_THRESHOLD: "the loss to compare with is missing or not a finite number",
    Lack.OUTSIDE_DOMAIN: "skewness and kurtosis lie outside the domain of the Cornish-Fisher expansion",
    Lack.FEW_IN_TAIL: "too few scenarios lie beyond the threshold to fit the tail",
    Lack.NO_FIT: "the fit did not settle",
    Lack.INFINITE_MEAN: "the fitted tail is so heavy that the mean loss in it is infinite",
    Lack.NO_RANGE: "no usable high and low prices on some sessions",
    Lack.NOT_SCALABLE: "the components of the estimate cannot be scaled to the figure told",
    Lack.NO_EXPOSURE: "the exposure is 0 or unknown: nothing to reckon a unit of it from",
}


@dataclass(frozen=True)
class Figures:
    """One figure a subject. value: (subjects,), NaN exactly where lack is not NONE. lack: (subjects,) of Lack."""

    value: Floats
    lack: Codes

    @staticmethod
    def of(value: Floats, lack: Codes) -> Figures:
        """Blank the values that are lacking; a value that overflowed is lacking as OUT_OF_RANGE."""
        lack = np.where((lack == Lack.NONE) & ~np.isfinite(value), Lack.OUT_OF_RANGE, lack).astype(np.int8)
        without_negative_zero = value + 0.0
        return Figures(np.where(lack == Lack.NONE, without_negative_zero, np.nan), lack)


def screen(matrix: Floats, least: int) -> tuple[Floats, Codes]:
    """The matrix in the layout that every method works on, and what each row lacks.

    matrix: (subjects, scenarios). least: scenarios that the method needs.
    Raises ValueError when the matrix does not have two axes.
    """
    # Row by row in memory: sums over a row then add in the same order whatever the company and the caller's layout.
    matrix = np.ascontiguousarray(matrix, dtype=np.float64)
    if matrix.ndim != 2:
        raise ValueError(f"the matrix must be (subjects, scenarios) (got {matrix.ndim} axes)")
    lack = np.full(len(matrix), Lack.NONE, dtype=np.int8)
    # A finite sum has finite terms only: few rows are left to look at closely.
    with np.errstate(all="ignore"):
        doubtful = np.flatnonzero(~np.isfinite(matrix.sum(axis=1)))
    lack[doubtful[~np.isfinite(matrix[doubtful]).all(axis=1)]] = Lack.NOT_FINITE
    if matrix.shape[1] < least:
        lack[:] = Lack.TOO_SHORT
    return matrix, lack
