"""Sampling bounds of a quantile against published standard errors."""

from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest
from scipy.special import ndtri

from monitor.risk.bounds import NORMAL_QUANTILE
from monitor.risk.order_bounds import bounding_ranks, order_bounds

# Kupiec 1995, FEDS 95-24, eq. (9): the standard error of a sampled normal quantile, in sigma / sqrt(n). He prints
# 3.7689 at 1 % and 2.1304 at 5 %, with z rounded to 2.33 and 1.65; exact, sqrt(a (1 - a)) / phi(z), recomputed:
EXACT = {"0.99": 3.7332, "0.95": 2.1132}
PRINTED = {"0.99": 3.7689, "0.95": 2.1304}


@pytest.mark.parametrize("confidence", EXACT)
def test_width_of_the_order_statistic_bounds_in_large_samples(confidence):
    """Over normal scores the bounds lie 1.96 standard errors on either side of the quantile, as n grows."""
    n = 1_000_000  # the bounds are some 400 ranks apart, of which rounding to whole ranks adds up to two: 0.5 %
    scores = ndtri((np.arange(n) + 0.5) / n)[np.newaxis]
    bounds = order_bounds(scores, Decimal(confidence))
    error = (bounds.high[0] - bounds.low[0]) / (2 * NORMAL_QUANTILE) * np.sqrt(n)
    assert error == pytest.approx(EXACT[confidence], rel=5e-3)
    assert abs(error - EXACT[confidence]) < abs(error - PRINTED[confidence])


# Kupiec 1995, Table 3: deviation of the simulated 1 % quantile of so many normal draws. His quantile lies half a rank
# to one rank further in than ours (his means are -2.148, -2.256, -2.285, -2.307, -2.317, those of the 2nd of 100 and
# the 6th of 500), so that the means do not belong to our convention; the scatter of neighbouring ranks is nearly
# the same.
TABLE_3 = {500: 0.159, 1000: 0.116, 2500: 0.074}


@pytest.mark.parametrize("n", TABLE_3)
def test_bounds_are_never_narrower_than_the_simulated_scatter(n):
    """They move in whole ranks, so they are wider, the less so the more scenarios. No upper bound at 100, 250."""
    samples = np.random.default_rng(n).normal(size=(1000, n))
    bounds = order_bounds(samples, Decimal("0.99"))
    error = (bounds.high - bounds.low).mean() / (2 * NORMAL_QUANTILE)
    widest = {500: 1.7, 1000: 1.3, 2500: 1.15}
    assert TABLE_3[n] < error < widest[n] * TABLE_3[n]


@pytest.mark.parametrize("n", [100, 250, 367])
def test_no_upper_bound_at_99_below_368(n):
    """0.99^367 = 2.5002 %, 0.99^368 = 2.4752 %: arithmetic."""
    assert bounding_ranks(n, Fraction(1, 100))[1] is None
    assert bounding_ranks(368, Fraction(1, 100))[1] == 1
