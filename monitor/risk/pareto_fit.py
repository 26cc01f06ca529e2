"""The generalised Pareto distribution fitted to excesses by maximum likelihood, many subjects at once.

In t = shape / scale the likelihood has one dimension: given t the best shape is the mean of log(1 + t y) (Davison 1984,
"Modelling excesses over high thresholds"; Grimshaw 1993, "Computing maximum likelihood estimates for the generalized
Pareto distribution"). The best point of a grid brackets the maximum; the root of the slope inside the bracket is the
fit. The search runs along s = log(1 + t max y), which is 0 at the exponential, and where every s is allowed.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from monitor.risk.figures import Booleans, Floats

# Below -1 the likelihood grows without bound as the end of the distribution nears the largest excess (Grimshaw 1993).
SHAPE_FLOOR = -1.0

_BLOCK = 256
_LOWEST = -20.0  # the end of the distribution is then within 2 parts in 10^9 of the largest excess
_HIGHEST = 700.0
_STEPS_DOWN, _STEPS_UP = 40, 40
_ROUNDS = 60
_NARROW = 4 * float(np.finfo(np.float64).eps)
_NEAR_EXPONENTIAL = 0.03  # nearer, the slope is summed as a series of which _TERMS terms reach a double's precision
_TERMS = 12


@dataclass(frozen=True)
class ParetoFit:
    """Generalised Pareto distribution of each subject, all (subjects,).

    P(excess > y) = (1 + shape y / scale)^(-1 / shape), exp(-y / scale) for shape 0. shape has no unit and is never
    below SHAPE_FLOOR; scale has the unit of the excesses. log_likelihood: natural logarithm, over all excesses.
    converged: False where there is no excess, where they cannot be calculated with, or where the search did not
    settle; the other fields are then NaN.
    """

    shape: Floats
    scale: Floats
    log_likelihood: Floats
    converged: Booleans


def fit_pareto(excesses: Floats) -> ParetoFit:
    """Maximum likelihood of shape and scale over shapes of at least SHAPE_FLOOR.

    excesses: (subjects, k), above 0; entries that are 0 or less are no excesses, so that subjects with fewer of them
    fill their rows with zeros. Where no shape above the floor has a maximum that is likelier, the floor itself is the
    answer: excesses spread evenly up to the largest. At shapes of -0.5 and below the estimate stands, but standard
    errors by the second derivative of the likelihood do not exist (Smith 1985, "Maximum likelihood estimation in a
    class of nonregular cases").
    Properties: the shape does not depend on the unit, the scale is positively homogeneous; neither depends on the
    company of the row. With few excesses the shape is biased low.
    """
    excesses = np.ascontiguousarray(excesses, dtype=np.float64)
    if excesses.ndim != 2:
        raise ValueError(f"the excesses must be (subjects, excesses) (got {excesses.ndim} axes)")
    subjects = len(excesses)
    shape, scale, level = np.full(subjects, np.nan), np.full(subjects, np.nan), np.full(subjects, np.nan)
    with np.errstate(all="ignore"):
        counted = np.where(np.isnan(excesses), np.nan, np.maximum(excesses, 0.0))
        unit = counted.max(axis=1, initial=0.0)
        usable = np.flatnonzero(np.isfinite(unit) & (unit > 0))
        for start in range(0, len(usable), _BLOCK):
            block = usable[start : start + _BLOCK]
            standard = counted[block] / unit[block, np.newaxis]
            shape[block], in_units, per_excess = _fit_block(standard)
            scale[block] = in_units * unit[block]
            count = (standard > 0).sum(axis=1)
            level[block] = count * (per_excess - np.log(unit[block]))
    return ParetoFit(shape, scale, level, np.isfinite(shape) & np.isfinite(scale) & np.isfinite(level))


def _fit_block(standard: Floats) -> tuple[Floats, Floats, Floats]:
    """Shape, scale and mean log-likelihood (rows,), NaN where the search fails. standard: (rows, k), largest 1."""
    excess = standard > 0
    count = excess.sum(axis=1)
    mean = standard.sum(axis=1) / count
    least = np.where(excess, standard, np.inf).min(axis=1)
    low, high, on_grid = _bracket(standard, count, mean, least)
    along = _root(standard, count, low, high)
    shape, scale, level = _profile(standard, count, along)
    # At the floor the likeliest scale is the largest excess, here 1: the density is 1 all over, its logarithm 0.
    at_floor = ((on_grid <= 0) & ~(level > 0)) | (shape < SHAPE_FLOOR)
    return np.where(at_floor, SHAPE_FLOOR, shape), np.where(at_floor, 1.0, scale), np.where(at_floor, 0.0, level)


def _bracket(standard: Floats, count: Floats, mean: Floats, least: Floats) -> tuple[Floats, Floats, Floats]:
    """Where the slope changes its sign about the likeliest point of the grid, and the likelihood there; (rows,) each.

    No maximum has t above 2 (mean - least) / least^2 (Grimshaw 1993).
    """
    top = np.minimum(np.log1p(2 * (mean - least) / np.square(least)), _HIGHEST) + 1.0
    down = np.tile(np.linspace(_LOWEST, 0.0, _STEPS_DOWN, endpoint=False), (len(standard), 1))
    grid = np.hstack([down, top[:, np.newaxis] * np.linspace(0.0, 1.0, _STEPS_UP)])
    levels = np.empty(grid.shape)
    for place in range(grid.shape[1]):
        shape, _, level = _profile(standard, count, grid[:, place])
        levels[:, place] = np.where(shape >= SHAPE_FLOOR, level, -np.inf)
    best = levels.argmax(axis=1)
    row = np.arange(len(standard))
    rising = _slope(standard, count, grid[row, best]) > 0
    below = np.clip(np.where(rising, best, best - 1), 0, grid.shape[1] - 2)
    return grid[row, below], grid[row, below + 1], levels[row, best]


def _root(standard: Floats, count: Floats, low: Floats, high: Floats) -> Floats:
    """Where the slope falls through 0 between low and high, NaN where it does not.

    False position with the Illinois rule (Dowell and Jarratt 1971, "A modified regula falsi method"): an end that
    stays twice counts half.
    """
    root = np.full(len(standard), np.nan)
    slope_low, slope_high = _slope(standard, count, low), _slope(standard, count, high)
    root[slope_low == 0] = low[slope_low == 0]
    row = np.flatnonzero((slope_low > 0) & (slope_high <= 0))
    low, high, slope_low, slope_high = low[row], high[row], slope_low[row], slope_high[row]
    side = np.zeros(len(row))
    for _ in range(_ROUNDS):
        if not len(row):
            break
        trial = np.clip(low + (high - low) * (slope_low / (slope_low - slope_high)), low, high)
        slope = _slope(standard[row], count[row], trial)
        settled = (slope == 0) | (trial == low) | (trial == high) | (high - low <= _NARROW * np.maximum(np.abs(low), 1))
        root[row[settled]] = trial[settled]
        rises = slope > 0
        slope_high = np.where(rises & (side > 0), slope_high / 2, slope_high)
        slope_low = np.where(~rises & (side < 0), slope_low / 2, slope_low)
        low, slope_low = np.where(rises, trial, low), np.where(rises, slope, slope_low)
        high, slope_high = np.where(rises, high, trial), np.where(rises, slope_high, slope)
        side = np.where(rises, 1.0, -1.0)
        left = ~settled
        row, low, high, side = row[left], low[left], high[left], side[left]
        slope_low, slope_high = slope_low[left], slope_high[left]
    return root


def _profile(standard: Floats, count: Floats, along: Floats) -> tuple[Floats, Floats, Floats]:
    """The best shape, its scale and the mean log-likelihood (rows,) for t = exp(along) - 1."""
    t = np.expm1(along)
    shape = np.log1p(t[:, np.newaxis] * standard).sum(axis=1) / count
    scale = np.where(t == 0, standard.sum(axis=1) / count, shape / t)
    return shape, scale, -np.log(scale) - shape - 1


def _slope(standard: Floats, count: Floats, along: Floats) -> Floats:
    """The derivative of the mean log-likelihood of `_profile` by `along`, (rows,).

    With P = mean t y / (1 + t y) it is (1 + 1/t) (1 - P / shape - P).
    """
    t = np.expm1(along)
    shape, scale, _ = _profile(standard, count, along)
    scaled = t[:, np.newaxis] * standard
    pulled = (scaled / (1 + scaled)).sum(axis=1) / count
    slope = np.asarray((1 + 1 / t) * (1 - pulled / shape - pulled))
    near = np.abs(t) < _NEAR_EXPONENTIAL
    if near.any():
        slope[near] = _slope_near_exponential(standard[near], count[near], t[near], scale[near])
    return slope


def _slope_near_exponential(standard: Floats, count: Floats, t: Floats, scale: Floats) -> Floats:
    """`_slope` without its cancellation: (1 + t) (C / A - B), A the scale and B = mean y / (1 + t y).

    C = (A - B) / t is the sum over j >= 2 of (1 - 1/j) mean y^j (-t)^(j - 2).
    """
    power = np.square(standard)
    total = np.zeros(len(standard))
    for j in range(2, 2 + _TERMS):
        total += (1 - 1 / j) * (power.sum(axis=1) / count)
        power = power * standard * -t[:, np.newaxis]
    pulled = (standard / (1 + t[:, np.newaxis] * standard)).sum(axis=1) / count
    return np.asarray((1 + t) * (total / scale - pulled))
