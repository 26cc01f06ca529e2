"""Is the whole forecast distribution right? The probability integral transform of outcomes, held against the uniform.

Under a right forecast the transform of each outcome is uniform on 0 to 1 (Rosenblatt 1952; Diebold, Gunther and Tay
1998, Evaluating density forecasts). A day without forecast or outcome has no transform: NaN, and it doesn't count.
"""

from __future__ import annotations

import numpy as np
from scipy.special import ndtr, stdtr

from monitor.risk.coverage import NoTest, Verdict
from monitor.risk.figures import Floats


def transform_parametric(outcomes: Floats, location: Floats, scale: Floats, nu: Floats) -> Floats:
    """F(outcome) with F the forecast: location + scale x t(nu), as `student_fit.StudentFit` has them; nu infinite is
    the normal.

    All broadcast to one shape and share one unit (nu none). NaN where the outcome or the forecast is not finite or the
    scale is not above 0: a flat book's forecast is a single point, through which nothing can be transformed. Rises
    with the outcome; the same for all four times any positive factor.
    """
    outcomes, location, scale, nu = np.broadcast_arrays(
        *(np.asarray(part, dtype=np.float64) for part in (outcomes, location, scale, nu))
    )
    with np.errstate(all="ignore"):
        z = (outcomes - location) / scale
        place = np.where(np.isinf(nu), ndtr(z), stdtr(nu, z))
    there = np.isfinite(outcomes) & np.isfinite(location) & np.isfinite(scale) & (scale > 0)
    return np.where(there, place, np.nan)


def transform_historical(outcomes: Floats, scenarios: Floats) -> Floats:
    """(r + 1/2) / (n + 1), r the scenarios below the outcome, an equal one counting half.

    outcomes: (records,). scenarios: (records, n), the window from which each outcome was forecast, without the outcome
    itself. If outcome and scenarios are alike, r is uniform on 0 ... n; its middle is taken rather than a random point
    of its step so that a replay needs no draws, which leaves the transform up to 1 / (2 (n + 1)) from uniform. NaN
    where the outcome or a scenario is not finite, or there is no scenario. Any rising function of both changes
    nothing.
    """
    outcomes, scenarios = np.asarray(outcomes, dtype=np.float64), np.asarray(scenarios, dtype=np.float64)
    n = scenarios.shape[1]
    with np.errstate(invalid="ignore"):
        below = (scenarios < outcomes[:, np.newaxis]).sum(axis=1)
        equal = (scenarios == outcomes[:, np.newaxis]).sum(axis=1)
    there = np.isfinite(outcomes) & np.isfinite(scenarios).all(axis=1) & (n > 0)
    return np.where(there, (below + equal / 2 + 0.5) / (n + 1), np.nan)


def kolmogorov_smirnov(transforms: Floats) -> Verdict:
    """The largest distance between the transforms' empirical distribution and the uniform, two-sided.

    transforms: (subjects, days), from 0 to 1 or NaN; ValueError otherwise. D = max over the n sorted values u of
    i / n - u_(i) and u_(i) - (i - 1) / n, with the exact distribution of D for n independent uniforms (Kolmogorov
    1933; Simard and L'Ecuyer 2011 as scipy has it). The p-value is only indicative: forecasts whose parameters are
    fitted to overlapping windows are not independent, ranks within a window are not continuous, and the distance
    looks at the middle more than at the tail. The order of days does not matter; a row alone is the row in a block.
    """
    from scipy.stats import kstwo

    transforms = np.asarray(transforms, dtype=np.float64)
    if transforms.ndim != 2:
        raise ValueError(f"the transforms must be (subjects, days) (got {transforms.ndim} axes)")
    with np.errstate(invalid="ignore"):
        outside = (transforms < 0) | (transforms > 1)
    if outside.any():
        raise ValueError(f"a transform must be from 0 to 1 (got {transforms[outside][0]})")
    ascending = np.sort(transforms, axis=1)  # NaN sorts last
    n = (~np.isnan(ascending)).sum(axis=1)
    at_least_one = np.maximum(n, 1)[:, np.newaxis]
    place = np.arange(ascending.shape[1])
    apart = np.maximum((place + 1) / at_least_one - ascending, ascending - place / at_least_one)
    distance = np.where(np.isnan(apart), 0.0, apart).max(axis=1, initial=0.0)
    reason = np.where(n == 0, NoTest.NO_DAYS, NoTest.NONE).astype(np.int8)
    return Verdict.of(distance, kstwo.sf(distance, np.maximum(n, 1)), reason)
