"""Every method of value at risk and expected shortfall by name: figures, sampling bounds, components."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from decimal import Decimal
from functools import partial

import numpy as np

from monitor.risk.age_weighted import age_weighted, age_weights
from monitor.risk.bootstrap import (
    age_weighted_bounds,
    cornish_fisher_bounds,
    historical_bounds,
    overlapping_bounds,
    volatility_scaled_bounds,
)
from monitor.risk.bounds import BoundLack, TailBounds, moved_bounds, no_bounds
from monitor.risk.components import (
    Components,
    elliptical_components,
    group_pnl,
    historical_components,
    weighted_components,
)
from monitor.risk.cornish_fisher import cornish_fisher
from monitor.risk.delta_bounds import normal_bounds, peaks_over_threshold_bounds, student_t_bounds
from monitor.risk.figures import Figures, Floats
from monitor.risk.historical import historical
from monitor.risk.leave_one_out import incremental, leave_one_out, leave_one_out_by
from monitor.risk.monte_carlo import PATHS, monte_carlo
from monitor.risk.normal import fit_normal, normal
from monitor.risk.peaks_over_threshold import TENTH, peaks_over_threshold
from monitor.risk.probability import Distribution
from monitor.risk.randomness import random_state
from monitor.risk.student import FitBy, match_kurtosis, student_t
from monitor.risk.student_fit import fit_student
from monitor.risk.tail import Drift, Tail
from monitor.risk.transform import transform_historical, transform_parametric
from monitor.risk.volatility_scaled import Scaling, scaled_scenarios, volatility_scaled

ROUNDING = 1e-9  # sums added in another order, also where positions nearly cancel
FITTED = 1e-6  # the last step of an iteration that climbs to a maximum
# By method, the relative difference within which a replay under other versions of the libraries must agree.
TOLERANCE: Mapping[str, float] = {
    "historical": ROUNDING,
    "age_weighted": ROUNDING,
    "volatility_scaled": 1e-4,  # GARCH's likelihood is flat about its maximum
    "normal": ROUNDING,
    "student_t": FITTED,
    "cornish_fisher": ROUNDING,
    "peaks_over_threshold": FITTED,
    "monte_carlo": FITTED,
    "sample": ROUNDING,
    "ewma": ROUNDING,
    "garch": 1e-4,
    "parkinson": ROUNDING,
    "garman_klass": ROUNDING,
}


@dataclass(frozen=True)
class TailCall:
    """A method by name and everything it is told; what does not go with it is not looked at.

    overlapping: the scenarios are already profits over runs of so many days, so that horizon_days is 1; else 1.
    """

    method: str
    confidence: Decimal
    horizon_days: int = 1
    overlapping: int = 1
    drift: Drift = "zero"
    decay: float = 0.94
    scaling: Scaling = "ewma"
    fit: FitBy = "likelihood"
    tail_share: Decimal = TENTH
    distribution: Distribution = "normal"
    paths: int = PATHS


Names = Sequence[str]

_TAILS: Mapping[str, Callable[[Floats, TailCall, Sequence[Names]], Tail]] = {
    "historical": lambda pnl, to, _: historical(pnl, to.confidence, to.horizon_days),
    "age_weighted": lambda pnl, to, _: age_weighted(pnl, to.confidence, to.decay, to.horizon_days),
    "volatility_scaled": lambda pnl, to, _: volatility_scaled(
        pnl, to.confidence, to.horizon_days, to.scaling, to.decay
    ),
    "normal": lambda pnl, to, _: normal(pnl, to.confidence, to.horizon_days, to.drift),
    "student_t": lambda pnl, to, _: student_t(pnl, to.confidence, to.horizon_days, to.drift, to.fit),
    "cornish_fisher": lambda pnl, to, _: cornish_fisher(pnl, to.confidence, to.horizon_days, to.drift),
    "peaks_over_threshold": lambda pnl, to, _: peaks_over_threshold(pnl, to.confidence, to.horizon_days, to.tail_share),
    "monte_carlo": lambda pnl, to, names: monte_carlo(
        pnl, to.confidence, names, to.horizon_days, to.drift, to.distribution, to.paths
    ),
}
_BOUNDS: Mapping[str, Callable[[Floats, TailCall, np.random.RandomState], TailBounds]] = {
    "historical": lambda pnl, to, random: historical_bounds(pnl, to.confidence, random, to.horizon_days),
    "age_weighted": lambda pnl, to, random: age_weighted_bounds(pnl, to.confidence, random, to.decay, to.horizon_days),
    "volatility_scaled": lambda pnl, to, random: volatility_scaled_bounds(
        pnl, to.confidence, random, to.horizon_days, to.scaling, to.decay
    ),
    "normal": lambda pnl, to, _: normal_bounds(pnl, to.confidence, to.horizon_days, to.drift),
    "student_t": lambda pnl, to, _: student_t_bounds(pnl, to.confidence, to.horizon_days, to.drift),
    "cornish_fisher": lambda pnl, to, random: cornish_fisher_bounds(
        pnl, to.confidence, random, to.horizon_days, to.drift
    ),
    "peaks_over_threshold": lambda pnl, to, random: peaks_over_threshold_bounds(
        pnl, to.confidence, random, to.horizon_days, to.tail_share
    ),
}


def measure_tail(pnl: Floats, call: TailCall, names: Sequence[Names] = ()) -> Tail:
    """The figures of a method.

    pnl: (subjects, n). names: of each subject, what its draws are seeded from; only Monte Carlo draws.
    """
    return _TAILS[call.method](pnl, call, names)


def bound_tail(pnl: Floats, call: TailCall, tail: Tail, names: Names) -> TailBounds:
    """Sampling bounds at 95 % of the tail that `measure_tail` tells. names: what a bootstrap's draws are seeded from.

    Monte Carlo: those of the closed form that it simulates, moved to the simulated figures, whose own error is small
    beside them; none of several days of Student's t, which has no closed form. Student's t fitted to the kurtosis:
    those of the fit by likelihood, moved likewise; the kurtosis is the rougher estimate, so that they are rather too
    narrow. Over overlapping periods historical alone has bounds.
    """
    random = random_state(*names)
    if call.overlapping > 1:
        if call.method != "historical":
            return no_bounds(tail, BoundLack.OVERLAPPING)
        return overlapping_bounds(pnl, call.confidence, random, call.overlapping)
    closed = call
    if call.method == "monte_carlo" and call.distribution == "student_t" and call.horizon_days > 1:
        return no_bounds(tail, BoundLack.SEVERAL_DAYS)
    if call.method == "monte_carlo":
        closed = replace(call, method=call.distribution, fit="likelihood")
    elif call.fit == "kurtosis":
        closed = replace(call, fit="likelihood")
    bounds = _BOUNDS[closed.method](pnl, closed, random)
    return bounds if closed == call else moved_bounds(bounds, measure_tail(pnl, closed), tail)


def tail_components(pnl: Floats, call: TailCall, of: str) -> Components:
    """What each position adds to a figure of all of them together, `of` value_at_risk or expected_shortfall.

    pnl: (positions, n). ValueError for methods without components.
    """
    owner, position = np.zeros(len(pnl), dtype=np.int64), np.arange(len(pnl))
    whole = group_pnl(pnl, owner, position, 1)
    confidence, days = call.confidence, call.horizon_days
    match call.method:
        case "historical":
            made = historical_components(pnl, owner, position, 1, confidence, days)
        case "volatility_scaled":
            factors = scaled_scenarios(whole, call.scaling, call.decay).factors
            made = historical_components(pnl, owner, position, 1, confidence, days, factors)
        case "normal" | "student_t":
            made = elliptical_components(pnl, owner, position, measure_tail(whole, call), days, call.drift)
        case "age_weighted" if of == "expected_shortfall":
            weights = age_weights(pnl.shape[1], call.decay)
            return weighted_components(pnl, owner, position, 1, confidence, weights, days)
        case _:
            raise ValueError(f"{call.method} has no components of {of}")
    return made.value_at_risk if of == "value_at_risk" else made.expected_shortfall


def incremental_tail(whole: Floats, own: Floats, call: TailCall, of: str) -> Figures:
    """A figure of the whole less that of the whole without each of some parts, (parts,); `of` as above.

    whole: (n,) scenario P&L. own: (parts, n), that of the parts, which need not add up to the whole. Not for
    monte_carlo: two simulations differ by their draws too.
    """
    owner, position = np.zeros(len(own), dtype=np.int64), np.arange(len(own))
    wholes = whole[np.newaxis, :]
    if call.method == "historical":
        without = leave_one_out(wholes, own, owner, position, call.confidence, call.horizon_days)
    else:
        without = leave_one_out_by(partial(measure_tail, call=call), wholes, own, owner, position)
    tail = measure_tail(wholes, call)
    if of == "value_at_risk":
        return incremental(tail.value_at_risk, without.value_at_risk, owner)
    return incremental(tail.expected_shortfall, without.expected_shortfall, owner)


def transform_outcomes(outcomes: Floats, pnl: Floats, call: TailCall) -> Floats | None:
    """Where each outcome lies in the distribution that a method forecast from the scenarios before it, 0 to 1.

    outcomes: (records,). pnl: (records, n). None for methods that say nothing of the whole distribution.
    """
    match call.method:
        case "historical":
            return transform_historical(outcomes, pnl)
        case "volatility_scaled":
            return transform_historical(outcomes, scaled_scenarios(pnl, call.scaling, call.decay).scenarios)
        case "normal":
            fit = fit_normal(pnl, call.drift)
            return transform_parametric(outcomes, fit.location, fit.sigma, np.full(len(pnl), np.inf))
        case "student_t":
            fitted = fit_student(pnl, call.drift) if call.fit == "likelihood" else match_kurtosis(pnl, call.drift)
            return transform_parametric(outcomes, fitted.location, fitted.scale, fitted.nu)
    return None
