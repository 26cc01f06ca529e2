"""What each position contributes to the value at risk and the expected shortfall of a subject that holds it.

By Euler's principle: these figures are homogeneous, twice the positions being twice the risk, and so they are the sum
of each exposure times the derivative of the figure by that exposure (Tasche 1999, "Risk contributions and performance
measurement"; McNeil, Frey and Embrechts 2015, Quantitative Risk Management, section 8.5). The derivative of the
shortfall is the mean of the position's P&L on the days of the subject's tail, that of value at risk its mean given
that the subject loses just its value at risk. component = exposure x marginal; a negative one is a hedge.

Holds for every function here: components add up to the subject's figure, to a relative 1e-10, as long as the positions
do not cancel to less than some 1e-5 of their gross (then to rounding of the gross); positive homogeneity, of all
positions together; a position in two halves gets half each, one whose P&L is 0 throughout 0, the only one the whole
figure; a subject's components are the same to the last digit alone and in any company. The shortfall of historical
(without factors) and of weighted scenarios and both figures of normal without drift are sub-additive: there no
component is more than the figure of its position alone. Elsewhere one may be.

Who holds what is told in pairs: `owner` (pairs,), ascending, the subject's number from 0, and `position` (pairs,), the
row of `pnl` that it holds whole. `pnl`: (positions, n), in time order, in the subject's currency; profit positive. A
subject whose positions cancel on every scenario has figure 0 and no derivative there: its components are 0.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction

import numpy as np
import numpy.typing as npt

from monitor.risk.figures import Booleans, Codes, Figures, Floats, Lack, screen
from monitor.risk.harrell_davis import harrell_davis_weights
from monitor.risk.historical import historical
from monitor.risk.tail import Drift, Tail, check_drift, root_of_time, tail_share

Integers = npt.NDArray[np.int64]

# Outside, the estimate that is shared out has little to do with the figure that is told (design of this program; no
# source).
LEAST_FACTOR, MOST_FACTOR = 0.8, 1.25

_BLOCK = 256


@dataclass(frozen=True)
class Components:
    """The components of one figure, positive when they add to the risk, in the unit of the scenarios.

    component: (pairs,), NaN exactly where the subject lacks one. factor: (subjects,), what the components of the
    estimate were multiplied by so that they add up to the figure told; 1 where they do so by themselves, NaN where
    there is no estimate. lack: (subjects,) of Lack.
    """

    component: Floats
    factor: Floats
    lack: Codes


@dataclass(frozen=True)
class TailComponents:
    """Of value at risk and expected shortfall."""

    value_at_risk: Components
    expected_shortfall: Components


def group_pnl(pnl: Floats, owner: Integers, position: Integers, subjects: int) -> Floats:
    """Scenario P&L of each subject, the sum over its positions: (subjects, n). A subject without a pair has zeros.

    Raises ValueError when owner and position are not two lists of one length, when the owner does not ascend, or when
    one of them names a subject or a position that is not there.
    """
    from scipy.sparse import csr_array

    if pnl.ndim != 2:
        raise ValueError(f"the matrix must be (positions, scenarios) (got {pnl.ndim} axes)")
    if owner.ndim != 1 or owner.shape != position.shape:
        raise ValueError(f"owner and position must be two lists of one length (got {owner.shape}, {position.shape})")
    for name, places, count in (("owner", owner, subjects), ("position", position, len(pnl))):
        if len(places) and not 0 <= places.min() <= places.max() < count:
            raise ValueError(f"each {name} must be from 0 to {count - 1} (got {places.min()} to {places.max()})")
    if (np.diff(owner) < 0).any():
        raise ValueError("the owner must ascend")
    with np.errstate(all="ignore"):
        held = csr_array((np.ones(len(owner)), (owner, position)), shape=(subjects, len(pnl)))
        return np.asarray(held @ np.ascontiguousarray(pnl, dtype=np.float64))


def elliptical_components(
    pnl: Floats, owner: Integers, position: Integers, tail: Tail, horizon_days: int = 1, drift: Drift = "zero"
) -> TailComponents:
    """Components of a figure V: beta V for drift zero; -h m + beta (V + h M) for drift sample.

    beta = cov(x, P) / var(P) of the position's scenarios x and the subject's P, m and M their means, h the horizon in
    days. Where P&L is elliptical this is minus the mean of x given P = -V, and so the exact derivative: for the normal
    cov(x, P) / sigma_P times the quantile (less the mean). tail: the figures told of `group_pnl`, from `normal` with
    the same horizon and drift, or from another method. For `student_t` it is an approximation: the maximum likelihood
    fits each subject alone, as if all positions shared its degrees of freedom. Skewed methods (cornish_fisher) are not
    elliptical: what they add to the normal is then shared out by beta too.
    """
    check_drift(drift)
    root_of_time(horizon_days)
    subjects = len(tail.value_at_risk.value)
    pnl = np.ascontiguousarray(pnl, dtype=np.float64)
    scenarios = group_pnl(pnl, owner, position, subjects)
    flat = _flat(scenarios)[owner]
    n = pnl.shape[1]
    means, mean = np.zeros(len(pnl)), np.zeros(subjects)
    beta = np.zeros(len(owner))
    with np.errstate(all="ignore"):
        if n >= 2:
            beta = _betas(pnl, scenarios, owner, position)
        if n >= 2 and drift == "sample":
            means, mean = pnl.mean(axis=1), scenarios.mean(axis=1)

        def share(figures: Figures) -> Components:
            spread = figures.value + horizon_days * mean
            component = beta * spread[owner] - horizon_days * means[position]
            return _told(np.where(flat, 0.0, component), owner, _ones(figures.lack), figures.lack)

        return TailComponents(share(tail.value_at_risk), share(tail.expected_shortfall))


def historical_components(
    pnl: Floats,
    owner: Integers,
    position: Integers,
    subjects: int,
    confidence: Decimal,
    horizon_days: int = 1,
    factors: Floats | None = None,
) -> TailComponents:
    """Components of the figures that `historical` tells of `group_pnl`.

    Shortfall: minus the mean of the position's P&L over the subject's tail, with the very weights of `historical`.
    Value at risk is the loss of a single scenario, whose split over positions is chance: the components are those of
    the Harrell-Davis estimate, -sum of w_j x(j) with x(j) the position's P&L on the subject's jth worst scenario,
    multiplied by the factor value at risk / estimate. Where the factor is not within 0.8 to 1.25 value at risk has no
    components: NOT_SCALABLE, with the factor still shown (NaN where the estimate alone is 0).

    Among scenarios on which the subject loses the same, the earlier counts as the worse.
    factors: (subjects, n), what each subject's scenarios are multiplied by before they are ordered (volatility_scaled,
    Hull and White 1998); they are held fixed, although they move with the subject's volatility: as they do not change
    when all positions grow alike, the components add up all the same. Beyond one day by the square root of time.
    """
    root = root_of_time(horizon_days)
    share = tail_share(confidence)
    scenarios, lack = screen(group_pnl(pnl, owner, position, subjects), least=1)
    n = scenarios.shape[1]
    with np.errstate(all="ignore"):
        if factors is not None:
            if factors.shape != scenarios.shape:
                raise ValueError(f"the factors must be {scenarios.shape}, (subjects, n) (got {factors.shape})")
            scenarios *= factors
        if n < 1:
            nothing = Components(np.full(len(owner), np.nan), np.full(subjects, np.nan), lack)
            return TailComponents(nothing, nothing)
        spread = harrell_davis_weights(share, n)
        within, counted = tail_weights(share, n)
        days = np.argsort(scenarios, axis=1, kind="stable")[:, : max(len(spread), len(within))]
        scale = np.ones(days.shape) if factors is None else np.take_along_axis(factors, days, axis=1)
        weightings = [scale[:, : len(weights)] * weights for weights in (spread, within / counted)]
        estimated, beyond = _over_days(pnl, owner, position, days, weightings)
        told = historical(scenarios, confidence, horizon_days)
        ascending = np.take_along_axis(scenarios, days[:, : len(spread)], axis=1)
        estimate = -(ascending * spread).sum(axis=1)
        flat = _flat(scenarios)[owner]
        at_risk, estimate = told.value_at_risk.value, root * estimate
        factor = np.where(at_risk == estimate, 1.0, at_risk / estimate)
        factor[~np.isfinite(factor)] = np.nan
        unlike = ~((factor >= LEAST_FACTOR) & (factor <= MOST_FACTOR))
        unscalable = told.value_at_risk.lack.copy()
        unscalable[(unscalable == Lack.NONE) & unlike] = Lack.NOT_SCALABLE
        of_at_risk = np.where(flat, 0.0, -estimated * root * factor[owner])
        of_shortfall = np.where(flat, 0.0, -beyond * root)
    return TailComponents(
        _told(of_at_risk, owner, factor, unscalable),
        _told(of_shortfall, owner, _ones(told.expected_shortfall.lack), told.expected_shortfall.lack),
    )


def weighted_components(
    pnl: Floats,
    owner: Integers,
    position: Integers,
    subjects: int,
    confidence: Decimal,
    weights: Floats,
    horizon_days: int = 1,
) -> Components:
    """Components of the expected shortfall of weighted scenarios (age_weighted: Boudoukh, Richardson, Whitelaw 1998).

    weights: (n,), of the scenarios in time order, not negative, adding up to 1 (ValueError otherwise). Worst first,
    the earlier of two equal ones first, the tail is filled to exactly 1 - confidence, the last scenario in part; the
    component is minus the position's mean over that tail. Value at risk has no components here: the estimate of
    Harrell and Davis is one of equally weighted scenarios.
    """
    root = root_of_time(horizon_days)
    share = float(tail_share(confidence))
    scenarios, lack = screen(group_pnl(pnl, owner, position, subjects), least=1)
    n = scenarios.shape[1]
    if weights.shape != (n,):
        raise ValueError(f"there must be a weight for each of the {n} scenarios (got {weights.shape})")
    if n < 1:
        return Components(np.full(len(owner), np.nan), np.full(subjects, np.nan), lack)
    if not (np.isfinite(weights).all() and (weights >= 0).all() and math.isclose(weights.sum(), 1, rel_tol=1e-9)):
        raise ValueError("the weights must not be negative and must add up to 1")
    with np.errstate(all="ignore"):
        days = np.argsort(scenarios, axis=1, kind="stable")
        weight = weights[days]
        worse = np.cumsum(weight, axis=1) - weight
        filled = np.clip(share - worse, 0.0, weight) / share
        reached = np.flatnonzero((filled > 0).any(axis=0))
        count = int(reached.max(initial=0)) + 1
        [beyond] = _over_days(pnl, owner, position, days[:, :count], [filled[:, :count]])
        return _told(np.where(_flat(scenarios)[owner], 0.0, -beyond * root), owner, _ones(lack), lack)


def marginal(component: Floats, exposure: Floats) -> Figures:
    """The figure's change for one more unit of each exposure: component / exposure, (pairs,).

    component: (pairs,), or sums of them. exposure: alike, signed, in the currency of the scenarios. Where it is 0 or
    unknown the scenarios say nothing of a unit of it: NO_EXPOSURE.
    """
    lack = np.where(np.isfinite(exposure) & (exposure != 0), Lack.NONE, Lack.NO_EXPOSURE).astype(np.int8)
    with np.errstate(all="ignore"):
        return Figures.of(component / exposure, lack)


def tail_weights(share: Fraction, n: int) -> tuple[Floats, float]:
    """How much of each of the worst scenarios lies in the tail of `historical`, worst first, and their sum.

    The sum is m = share n, exactly until it is made a double; 1, all of the worst scenario, when m < 1.
    """
    counted = max(share * n, Fraction(1))
    return np.array([float(min(counted - place, Fraction(1))) for place in range(math.ceil(counted))]), float(counted)


def _flat(scenarios: Floats) -> Booleans:
    return np.asarray((scenarios == 0).all(axis=1))


def _ones(lack: Codes) -> Floats:
    return np.where(lack == Lack.NONE, 1.0, np.nan)


def _betas(pnl: Floats, scenarios: Floats, owner: Integers, position: Integers) -> Floats:
    """cov(x, P) / var(P) of each pair, (pairs,). As both are centred the rounding of the means is of second order."""
    means = pnl.mean(axis=1)
    deviations = scenarios - scenarios.mean(axis=1)[:, np.newaxis]
    covariation = np.empty(len(owner))
    for start in range(0, len(owner), _BLOCK):
        whose, which = owner[start : start + _BLOCK], position[start : start + _BLOCK]
        own = pnl[which] - means[which, np.newaxis]
        covariation[start : start + _BLOCK] = (own * deviations[whose]).sum(axis=1)
    return np.asarray(covariation / np.square(deviations).sum(axis=1)[owner])


def _over_days(
    pnl: Floats, owner: Integers, position: Integers, days: Integers, weightings: Sequence[Floats]
) -> list[Floats]:
    """For each weighting the weighted sum of each position's P&L over its subject's days, (pairs,).

    days: (subjects, count), scenario numbers. weightings: each (subjects, up to count), of the first days.
    """
    pnl = np.ascontiguousarray(pnl, dtype=np.float64)
    sums = [np.empty(len(owner)) for _ in weightings]
    for start in range(0, len(owner), _BLOCK):
        whose, which = owner[start : start + _BLOCK], position[start : start + _BLOCK]
        taken = pnl.take(which[:, np.newaxis] * pnl.shape[1] + days[whose])  # faster than by row and column
        for total, weights in zip(sums, weightings, strict=True):
            # A running sum adds from left to right, so that zeros at the end, as many as the company makes it, leave
            # every digit alone; a plain sum would pair the terms by their number.
            total[start : start + _BLOCK] = np.cumsum(taken[:, : weights.shape[1]] * weights[whose], axis=1)[:, -1]
    return sums


def _told(component: Floats, owner: Integers, factor: Floats, lack: Codes) -> Components:
    """Blank the components of the subjects that lack them; one that overflowed costs its subject all of them."""
    lack = lack.copy()
    overflowed = np.zeros(len(lack), dtype=np.bool_)
    overflowed[owner[~np.isfinite(component)]] = True
    lack[(lack == Lack.NONE) & overflowed] = Lack.OUT_OF_RANGE
    without_negative_zero = component + 0.0
    return Components(np.where(lack[owner] == Lack.NONE, without_negative_zero, np.nan), factor, lack)
