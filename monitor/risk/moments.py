"""Mean and standard deviation of each row."""

from __future__ import annotations

import numpy as np

from monitor.risk.figures import Booleans, Floats


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
