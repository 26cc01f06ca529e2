"""Mean, standard deviation, skewness and kurtosis of each row."""

from __future__ import annotations

import numpy as np

from monitor.risk.figures import Booleans, Floats

_BLOCK = 256  # rows whose temporaries stay in the processor's cache


def constant(scenarios: Floats) -> Booleans:
    """Which rows hold one value throughout. scenarios: (subjects, n), n >= 1. Returns (subjects,)."""
    return np.asarray((scenarios == scenarios[:, :1]).all(axis=1))


def mean_and_deviation(scenarios: Floats) -> tuple[Floats, Floats]:
    """The mean and the standard deviation with denominator n - 1, both (subjects,).

    scenarios: (subjects, n), finite, n >= 2. Two passes with the correction for the rounding of the mean (Chan, Golub
    and LeVeque 1983, "Algorithms for computing the sample variance"). A constant row gives exactly 0: its deviations
    are then all the same few units in the last place, whose sums and squares are exact.
    """
    subjects, n = scenarios.shape
    mean, squares = np.empty(subjects), np.empty(subjects)
    room = np.empty((min(_BLOCK, subjects), n))
    for start in range(0, subjects, _BLOCK):
        rows = slice(start, start + _BLOCK)
        mean[rows], left, deviations = _deviations(scenarios[rows], room)
        squares[rows] = np.vecdot(deviations, deviations) - n * np.square(left)
    return mean, np.sqrt(np.maximum(squares, 0.0) / (n - 1))


def skewness_and_kurtosis(scenarios: Floats) -> tuple[Floats, Floats]:
    """Skewness g1 = m3 / m2^(3/2) and excess kurtosis g2 = m4 / m2^2 - 3 with the moments m about the mean, over n.

    scenarios: (subjects, n), finite, n >= 2. Both (subjects,), without a unit; NaN for a constant row and where the
    squares overflow or vanish. Both are unchanged by a shift and by a positive factor; a negative factor turns the
    sign of g1.

    These are the moments of the scenarios themselves, not estimates corrected for bias under the normal (G1, G2 of
    Joanes and Gill 1998, "Comparing measures of sample skewness and kurtosis"). A pair (g1, g2) always belongs to a
    distribution, g2 >= g1^2 - 2; the corrected pair need not; the correction, about 6 / n for g2, is small beside the
    sampling error sqrt(24 / n) and right for the normal only. It is also the pair of Jarque and Bera (1980). With
    fat tails both are too small in the mean: g2 never exceeds n - 5 + 1 / (n - 1), whatever the distribution.
    """
    return four_moments(scenarios)[2:]


def four_moments(scenarios: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """`mean_and_deviation` and `skewness_and_kurtosis` together, to the same bits. scenarios: (subjects, n), n >= 2."""
    subjects, n = scenarios.shape
    mean, squares, skewness, kurtosis = np.empty((4, subjects))
    room, room_for_squares = np.empty((2, min(_BLOCK, subjects), n))
    for start in range(0, subjects, _BLOCK):
        rows = slice(start, start + _BLOCK)
        mean[rows], left, deviations = _deviations(scenarios[rows], room)
        squares[rows] = np.vecdot(deviations, deviations) - n * np.square(left)
        deviation = np.sqrt(squares[rows] / n)
        usable = (deviation > 0) & np.isfinite(deviation)
        deviations -= left[:, np.newaxis]  # what rounding left of the mean would skew the cubes
        # Scaled before they are raised: the fourth power of an amount overflows long before its square does.
        deviations *= np.divide(1.0, deviation, where=usable, out=np.full(len(usable), np.nan))[:, np.newaxis]
        squared = np.square(deviations, out=room_for_squares[: len(deviations)])
        skewness[rows] = np.vecdot(squared, deviations) / n
        kurtosis[rows] = np.vecdot(squared, squared) / n - 3.0
    return mean, np.sqrt(np.maximum(squares, 0.0) / (n - 1)), skewness, kurtosis


def _deviations(scenarios: Floats, room: Floats) -> tuple[Floats, Floats, Floats]:
    """The mean as rounded and the mean of the deviations from it, both (rows,), and these deviations, kept in room.

    room: (rows or more, n), one for all blocks: fresh memory costs more than the arithmetic.
    """
    n = scenarios.shape[1]
    ones = np.ones(n)  # the product with them is the sum, faster than by sum
    mean = np.vecdot(scenarios, ones) / n
    deviations = np.subtract(scenarios, mean[:, np.newaxis], out=room[: len(scenarios)])
    return mean, np.vecdot(deviations, ones) / n, deviations
