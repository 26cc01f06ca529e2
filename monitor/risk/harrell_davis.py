"""The weights of Harrell and Davis, which spread a quantile over the scenarios around it."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
from scipy.special import betainc, betaincc

from monitor.risk.figures import Floats

NEGLIGIBLE = 1e-18  # the weight of all scenarios left out together


def harrell_davis_weights(share: Fraction, n: int) -> Floats:
    """The weights of the ordered scenarios in the estimate of the quantile at `share`, worst scenario first.

    share: of the tail, 1 - confidence. n: scenarios, at least 1. Returns (kept,), kept <= n, positive or 0; they add up
    to 1. With a = share (n + 1) and b = (1 - share)(n + 1) the jth worst has the weight I(j / n; a, b) -
    I((j - 1) / n; a, b), I the distribution function of Beta(a, b) (Harrell and Davis 1982, "A new distribution-free
    quantile estimator", Biometrika 69).

    The best scenarios are left out where all of them together weigh less than 1e-18: that moves the estimate by less
    than 1e-12 of itself unless a scenario is more than a million times as large.
    """
    if n < 1:
        raise ValueError(f"there must be at least 1 scenario (got {n})")
    edges = np.arange(n + 1) / n
    a, b = float(share * (n + 1)), float((1 - share) * (n + 1))
    worse, better = betainc(a, b, edges), betaincc(a, b, edges)
    # Each weight is the difference of the smaller pair: next to 1 a difference has no digits left.
    weights = np.where(worse[1:] < 0.5, np.diff(worse), -np.diff(better))
    kept = np.count_nonzero(better[:-1] >= NEGLIGIBLE)
    return np.asarray(weights[:kept])
