"""Bounds by the bootstrap: how a figure scatters over samples drawn anew from its own scenarios (Efron 1979,
"Bootstrap methods: another look at the jackknife").

What is drawn are places of the sample, not values, so that one set of draws serves all subjects of a call: the bounds
of a subject do not depend on its company, and two subjects with the same scenarios have the same bounds. The caller
gives the generator (`randomness.random_state`: site, date and what the draws are for); a generator in the same state
gives the same bounds. Draws are whole numbers and uniforms, which NumPy keeps to the bit, so that a replay under other
library versions agrees to a relative 1e-9. 999 resamples leave an error of simulation of about a twentieth of the
distance between the bounds.
"""

from __future__ import annotations

import math
from decimal import Decimal
from fractions import Fraction

import numpy as np
import numpy.typing as npt

from monitor.risk.age_weighted import ROUNDING, age_weighted, age_weights
from monitor.risk.bounds import RESAMPLES, BoundLack, Bounds, TailBounds, ends
from monitor.risk.cornish_fisher import cornish_fisher, standard_cornish_fisher_tail
from monitor.risk.figures import Codes, Floats, Lack, screen
from monitor.risk.historical import historical
from monitor.risk.normal import fit_normal
from monitor.risk.order_bounds import bounding_ranks, order_bounds, weighted_order_bounds, worst_of
from monitor.risk.tail import Drift, root_of_time, tail_share
from monitor.risk.volatility_scaled import Scaling, scaled_scenarios

LEAST_HORIZONS = 10  # fewer than so many horizons end to end say nothing of each other; a cautious choice, no source

_BLOCK = 64
_WIDTH = 16  # rows of one product of matrices


def historical_bounds(
    pnl: Floats, confidence: Decimal, random: np.random.RandomState, horizon_days: int = 1
) -> TailBounds:
    """Bounds of `historical`: `order_bounds` of value at risk, the studentised bootstrap of expected shortfall.

    pnl: (subjects, n), n >= 1, taken as independent and alike in distribution. With e the standard error of the
    shortfall, n e^2 = (V + (1 - a) (ES - VaR)^2) / a, a = 1 - confidence, V the variance of the losses in the tail
    (Manistre and Hancock 2005, "Variance of the CTE estimator"), and t = (ES* - ES) / e* in each resample, the bounds
    are ES - t_(975) e and ES - t_(25) e (Efron 1982, The Jackknife, the Bootstrap and Other Resampling Plans, section
    10.10; Hall 1988, "Theoretical comparison of bootstrap confidence intervals"). Where the tail has no spread, so that
    e is 0, they are the 25th from either end of the ES* themselves. ES is at least VaR: neither bound is ever put
    below that of VaR, where VaR has no upper one ES has none, and where too many resamples have a tail of one scenario
    alone to say how low ES may be, the lower bound of VaR stands for its own.

    Drawn from the ranks: a resample takes so many of the worst, of the second worst, ..., whatever their values, so
    that each subject costs a weighted sum of its few worst. Measured for n = 500 (5 in the tail at 99 %) and 1,000, at
    97.5 and 99 %: the truth lies within the bounds in 93 to 94.5 % of normal samples and in 91 to 93 % of samples of
    t(4), not in 95. The failures are upper bounds that are too low: no sample shows how fat a tail is beyond its worst
    scenario. The simpler percentile bounds covered 80 and 74 % at 99 % and n = 500, too little to be told; the price
    is width, upwards.

    Hold: positive homogeneity, translation; the order of scenarios does not matter; a row alone = the row in a block.
    """
    value_at_risk = order_bounds(pnl, confidence, horizon_days)
    shortfall = historical(pnl, confidence, horizon_days).expected_shortfall
    scenarios, _ = screen(pnl, least=1)
    subjects, n = scenarios.shape
    low, high = np.full(subjects, np.nan), np.full(subjects, np.nan)
    if n >= 1:
        share = tail_share(confidence)
        weights, last = _rank_weights(n, share, random)
        worst = worst_of(scenarios, weights.shape[0])
        root = root_of_time(horizon_days)
        with np.errstate(all="ignore"):
            for start in range(0, subjects, _BLOCK):
                rows = slice(start, start + _BLOCK)
                low[rows], high[rows] = _studentised(worst[rows], weights, last, share)
            low = np.fmax(np.where(np.isneginf(low), value_at_risk.low, low * root), value_at_risk.low)
            high = np.maximum(high * root, value_at_risk.high)
    endless = np.isposinf(high)
    high[endless] = np.nan
    reason = np.where(endless, BoundLack.TOO_FEW, value_at_risk.reason)
    return TailBounds(value_at_risk, Bounds.of(shortfall, low, high, reason))


def _rank_weights(n: int, share: Fraction, random: np.random.RandomState) -> tuple[Floats, npt.NDArray[np.intp]]:
    """What each scenario, worst first, weighs in the shortfall of each resample, and the last rank that weighs.

    Returns (deepest, 1 + RESAMPLES) and (1 + RESAMPLES,); the first column is the sample itself. A draw is a rank. The
    deepest rank in the tail of any resample depends on the draws alone.
    """
    within = max(share * n, Fraction(1))
    rank = math.ceil(within)
    drawn = random.randint(0, n, size=(RESAMPLES, n), dtype=np.int32)
    taken = np.vstack([np.arange(rank), np.sort(np.partition(drawn, rank - 1, axis=1)[:, :rank], axis=1)])
    weights = np.zeros((int(taken.max()) + 1, 1 + RESAMPLES))
    resample = np.arange(1 + RESAMPLES)
    for place in range(rank):
        weights[taken[:, place], resample] += float(min(within - place, Fraction(1)))
    return weights / float(within), taken[:, -1].astype(np.intp)


def _studentised(worst: Floats, weights: Floats, last: npt.NDArray[np.intp], share: Fraction) -> tuple[Floats, Floats]:
    """Ends of the shortfall (rows,); see `historical_bounds`. worst: (rows, deepest), worst first."""
    # From the value at risk, in units of the distance across the tail: squares then neither overflow nor cancel.
    origin = -worst[:, last[0]]
    excess = -worst - origin[:, np.newaxis]
    unit = np.abs(excess).max(axis=1)
    excess /= np.where(unit > 0, unit, 1.0)[:, np.newaxis]
    mean = np.zeros((len(worst), 1 + RESAMPLES))
    square = np.zeros_like(mean)
    part = np.empty_like(mean)
    for place in range(len(weights)):
        np.multiply(excess[:, place, np.newaxis], weights[place], out=part)
        mean += part
        part *= excess[:, place, np.newaxis]
        square += part
    spread = np.maximum(square - np.square(mean), 0.0) + float(1 - share) * np.square(mean - excess[:, last])
    error = np.sqrt(spread)
    strayed = mean[:, 1:] - mean[:, :1]
    t = np.where(strayed == 0, 0.0, strayed / error[:, 1:])
    least, most = ends(t)
    low, high = mean[:, 0] - most * error[:, 0], mean[:, 0] - least * error[:, 0]
    even = error[:, 0] == 0
    if even.any():
        low[even], high[even] = ends(mean[even, 1:])
    return origin + unit * low, origin + unit * high


def volatility_scaled_bounds(
    pnl: Floats, confidence: Decimal, random: np.random.RandomState, horizon_days: int, scaling: Scaling, decay: float
) -> TailBounds:
    """Bounds of `volatility_scaled`: those of `historical` over the scaled scenarios.

    The volatilities by which the scenarios were scaled are taken as known: their own error, of which today's alone
    (EWMA with decay L rests on about (1 + L) / (1 - L) sessions) is often the larger, is not in the bounds. To their
    credit the scaled scenarios are nearer to being alike in distribution than the plain ones. Hold: positive
    homogeneity; a row alone = the row in a block. The order of scenarios matters.
    """
    return historical_bounds(scaled_scenarios(pnl, scaling, decay).scenarios, confidence, random, horizon_days)


def overlapping_bounds(
    pnl: Floats, confidence: Decimal, random: np.random.RandomState, horizon_days: int
) -> TailBounds:
    """Bounds of `historical` over the P&L of overlapping horizons, by blocks drawn whole, percentile method.

    pnl: (subjects, n), n >= 1, each scenario the P&L over horizon_days sessions, one session after the one before;
    figures are those of the scenarios as they stand, nothing is scaled. Neighbours share all sessions but one, so that
    blocks of neighbours are drawn (Künsch 1989, "The jackknife and the bootstrap for general stationary observations"),
    of two horizons' length: blocks of one horizon keep only two thirds of the variance of a mean of overlapping sums,
    of two five sixths. The bounds are the 25th from either end of 999 resamples.

    The n scenarios say little more than their n / h horizons end to end. Where so many independent scenarios would have
    no exact upper bound there is none here either: at 99 % and 500 sessions of ten-day horizons the upper ends held in
    64 % of samples for VaR, 34 % for ES, instead of 97.5. Below 10 horizons there is no bound at all. Measured on sums
    of ten t(4): lower bounds hold in 96 to 99.5 % of samples; upper ones, where they are given, in 91 (1,000 scenarios,
    95 %) to 94 % (2,500) for VaR, in 80 to 90 % for ES, which is then likely to be higher than its bound admits.

    Hold: positive homogeneity, translation; a row alone = the row in a block. The order of scenarios matters.
    """
    tail = historical(pnl, confidence)
    scenarios, _ = screen(pnl, least=1)
    subjects, n = scenarios.shape
    share = tail_share(confidence)
    horizons = n // horizon_days
    lower, upper = bounding_ranks(horizons, share) if horizons >= LEAST_HORIZONS else (None, None)
    simulated = np.full((4, subjects), np.nan)
    if lower is not None:
        length = 2 * horizon_days
        starts = random.randint(0, n - length + 1, size=(RESAMPLES, math.ceil(n / length)), dtype=np.int32)
        places = np.add.outer(starts, np.arange(length, dtype=np.int32)).reshape(RESAMPLES, -1)[:, :n]
        within = max(share * n, Fraction(1))
        simulated = _resampled(scenarios, _counts(places, n), float(math.ceil(within)), float(within))
    if upper is None:
        simulated[[1, 3]] = np.nan
    reason = np.full(subjects, BoundLack.TOO_FEW if lower is None or upper is None else BoundLack.NONE)
    return TailBounds(
        Bounds.of(tail.value_at_risk, simulated[0], simulated[1], reason),
        Bounds.of(tail.expected_shortfall, simulated[2], simulated[3], reason),
    )


def age_weighted_bounds(
    pnl: Floats, confidence: Decimal, random: np.random.RandomState, decay: float, horizon_days: int = 1
) -> TailBounds:
    """Bounds of `age_weighted`: `weighted_order_bounds` of value at risk, the percentile bootstrap of the shortfall.

    pnl: (subjects, n), n >= 1, in time order, taken as independent and alike in distribution. Pairs of a scenario and
    its weight are drawn and the weights brought to a sum of 1 again; the bounds of the shortfall are the 25th from
    either end of 999 resamples. Weights w speak like 1 / sum w^2 equal ones, at most (1 + L) / (1 - L) with decay L
    (199 at 0.99). Where so many scenarios would have no upper bound of value at risk (`bounding_ranks`), or where value
    at risk has none, the shortfall has none, and it is never put below that of value at risk.

    Measured on the normal and on t(4), the lower bound of the shortfall holds in 99.5 % of samples and more, the upper,
    where there is one, in 70 (decay 0.99, 97.5 %; 0.995, 99 %) to 86 % only: the shortfall is then likely to be
    higher than its bound admits.

    Hold: positive homogeneity, translation; a row alone = the row in a block. The order of scenarios matters.
    """
    value_at_risk = weighted_order_bounds(pnl, confidence, random, decay, horizon_days)
    shortfall = age_weighted(pnl, confidence, decay, horizon_days).expected_shortfall
    scenarios, _ = screen(pnl, least=1)
    subjects, n = scenarios.shape
    low, high = np.full(subjects, np.nan), np.full(subjects, np.nan)
    reason: Codes = value_at_risk.reason
    if n >= 1:
        share = tail_share(confidence)
        weights = age_weights(n, decay)
        speaking = int(1 / np.square(weights).sum())
        drawn = _counts(random.randint(0, n, size=(RESAMPLES, n), dtype=np.int32), n) * weights[:, np.newaxis]
        drawn /= drawn.sum(axis=0)
        simulated = _resampled(scenarios, drawn, float(share) * (1 - ROUNDING), float(share))
        with np.errstate(all="ignore"):
            low, high = simulated[2:] * root_of_time(horizon_days)
            low, high = np.fmax(low, value_at_risk.low), np.maximum(high, value_at_risk.high)
        if bounding_ranks(speaking, share)[1] is None:
            high[:] = np.nan
            reason = np.full(subjects, BoundLack.TOO_FEW, dtype=np.int8)
    return TailBounds(value_at_risk, Bounds.of(shortfall, low, high, reason))


def _counts(drawn: npt.NDArray[np.int32], n: int) -> Floats:
    """How often each resample took each place, (n, RESAMPLES). drawn: (RESAMPLES, draws) of places."""
    cell = drawn.astype(np.int64) * RESAMPLES + np.arange(RESAMPLES)[:, np.newaxis]
    return np.bincount(cell.ravel(), minlength=n * RESAMPLES).reshape(n, RESAMPLES).astype(np.float64)


def _resampled(scenarios: Floats, weights: Floats, reach: float, share: float) -> Floats:
    """Ends of value at risk (low, high) and of expected shortfall (low, high) over the resamples, (4, subjects).

    scenarios: (subjects, n) in time order. weights: (n, RESAMPLES), of each place in each resample. Worst first, value
    at risk is the first loss at which the weight reaches `reach`, expected shortfall the mean of the tail filled to
    `share`. A resample whose tail is full adds exact zeros while others of the block go on.
    """
    subjects, n = scenarios.shape
    found = np.empty((4, subjects))
    with np.errstate(all="ignore"):
        for start in range(0, subjects, _BLOCK):
            rows = slice(start, start + _BLOCK)
            order = np.argsort(scenarios[rows], axis=1, kind="stable")
            ascending = np.take_along_axis(scenarios[rows], order, axis=1)
            weight = np.zeros((len(order), RESAMPLES))
            filled, total = np.zeros_like(weight), np.zeros_like(weight)
            rank = np.zeros(weight.shape, dtype=np.intp)
            for place in range(n):
                weight += weights[order[:, place]]
                rank += weight < reach
                now = np.minimum(weight, share)
                total -= (now - filled) * ascending[:, place, np.newaxis]
                filled = now
                if filled.min() >= share:
                    break
            value_at_risk = -np.take_along_axis(ascending, np.minimum(rank, n - 1), axis=1)
            found[:2, rows] = ends(value_at_risk)
            found[2:, rows] = ends(total / share)
    return found


def cornish_fisher_bounds(
    pnl: Floats, confidence: Decimal, random: np.random.RandomState, horizon_days: int = 1, drift: Drift = "zero"
) -> TailBounds:
    """Bounds of `cornish_fisher` by the percentile bootstrap of mean, deviation, skewness and kurtosis together.

    pnl: (subjects, n), n >= 2, taken as independent and alike in distribution. A resample whose skewness and kurtosis
    lie outside the domain counts with what the expansion gives for them, a smooth polynomial there too: to leave such
    resamples out would leave out those with the fattest and the thinnest tails and make the bounds too narrow.

    The bounds speak of the sampling error alone: the expansion does not become exact as the sample grows, and a figure
    is told only where the sample lies in the domain. So they cover the true value at risk of normal scenarios in 94 to
    97 % of the samples that have a figure, that of t(4), whose fourth moment is infinite, in 82 to 90 %, its shortfall
    in 78 to 89 % (n of 250 to 1,000).

    Hold: positive homogeneity; translation with drift sample; the order of scenarios matters only to the draws.
    The moments of all resamples are products of the counts with the powers of the standardised scenarios, 16 rows at a
    time, filled up with zeros: the shape is always the same, and a row alone agrees with the row in any company to
    a relative 1e-12 (to the bit where the library of linear algebra treats all columns alike).
    """
    tail = cornish_fisher(pnl, confidence, horizon_days, drift)
    fit = fit_normal(pnl, drift)
    scenarios, _ = screen(pnl, least=2)
    subjects, n = scenarios.shape
    simulated = np.zeros((4, subjects))
    moving = np.flatnonzero((tail.value_at_risk.lack == Lack.NONE) & (fit.sigma > 0))
    if len(moving):
        counts = _counts(random.randint(0, n, size=(RESAMPLES, n), dtype=np.int32), n)
        root, share = root_of_time(horizon_days), float(tail_share(confidence))
        with np.errstate(all="ignore"):
            for start in range(0, len(moving), _WIDTH):
                rows = moving[start : start + _WIDTH]
                centre, sigma = scenarios[rows].mean(axis=1, keepdims=True), fit.sigma[rows, np.newaxis]
                mean, deviation, skewness, kurtosis = _moments((scenarios[rows] - centre) / sigma, counts)
                location = centre + sigma * mean if drift == "sample" else np.zeros_like(mean)
                for place, multiple in enumerate(standard_cornish_fisher_tail(skewness, kurtosis, share)):
                    figure = root * sigma * deviation * multiple - horizon_days * location
                    simulated[2 * place : 2 * place + 2, rows] = ends(figure)
    reason = np.full(subjects, BoundLack.NONE)
    return TailBounds(
        Bounds.of(tail.value_at_risk, simulated[0], simulated[1], reason),
        Bounds.of(tail.expected_shortfall, simulated[2], simulated[3], reason),
    )


def _moments(standard: Floats, counts: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """Mean, deviation (n - 1), skewness and excess kurtosis of each resample, (rows, RESAMPLES) each.

    standard: (rows, n), rows <= _WIDTH, with mean 0 and deviation 1, so that central moments come from raw ones without
    loss. counts: (n, RESAMPLES).
    """
    rows, n = standard.shape
    powers = np.zeros((4, _WIDTH, n))
    powers[:, :rows] = standard ** np.arange(1, 5)[:, np.newaxis, np.newaxis]
    first, second, third, fourth = (powers.reshape(4 * _WIDTH, n) @ counts).reshape(4, _WIDTH, RESAMPLES)[:, :rows] / n
    variance = second - first**2
    skewed = third - 3 * first * second + 2 * first**3
    peaked = fourth - 4 * first * third + 6 * first**2 * second - 3 * first**4
    return first, np.sqrt(variance * n / (n - 1)), skewed / variance**1.5, peaked / variance**2 - 3
