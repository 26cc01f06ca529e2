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
    n = scenarios.shape[1]
    mean = scenarios.mean(axis=1)
    deviations = scenarios - mean[:, np.newaxis]
    squares = np.square(deviations).sum(axis=1) - np.square(deviations.sum(axis=1)) / n
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
    skewness, kurtosis = np.empty(len(scenarios)), np.empty(len(scenarios))
    for start in range(0, len(scenarios), _BLOCK):
        rows = slice(start, start + _BLOCK)
        deviations = scenarios[rows] - scenarios[rows].mean(axis=1)[:, np.newaxis]
        deviations -= deviations.mean(axis=1)[:, np.newaxis]  # what rounding left of the mean would skew the cubes
        squares = np.square(deviations)
        deviation = np.sqrt(squares.mean(axis=1))
        measurable = ~constant(scenarios[rows]) & (deviation > 0) & np.isfinite(deviation)
        # Divided before they are raised: the fourth power of an amount overflows long before its square does.
        deviations /= np.where(measurable, deviation, np.nan)[:, np.newaxis]
        np.square(deviations, out=squares)
        deviations *= squares
        np.square(squares, out=squares)
        skewness[rows], kurtosis[rows] = deviations.mean(axis=1), squares.mean(axis=1) - 3.0
    return skewness, kurtosis
