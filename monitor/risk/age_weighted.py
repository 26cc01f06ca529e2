"""Historical simulation in which a scenario counts for less the older it is."""

from __future__ import annotations

from decimal import Decimal

import numpy as np

from monitor.risk.figures import Figures, Floats, Lack, screen
from monitor.risk.tail import FitNote, Tail, root_of_time, tail_share
from monitor.risk.volatility import check_decay

ROUNDING = 1e-12  # of the tail's share: weights that add up to it in decimals fall short of it in floats

_BLOCK = 256
_FEW = 0.25  # of the scenarios: up to there finding the worst and sorting them is faster than sorting all


def age_weights(scenarios: int, decay: float) -> Floats:
    """The weight (1 - L) L^age / (1 - L^n) of each of n scenarios in time order, the last of age 0; they add up to 1.

    scenarios: n, at least 1. decay: L, above 0 and below 1; ValueError otherwise.
    """
    check_decay(decay)
    weights = decay ** np.arange(scenarios - 1, -1, -1.0)
    return np.asarray(weights / weights.sum())


def age_weighted(pnl: Floats, confidence: Decimal, decay: float, horizon_days: int = 1) -> Tail:
    """Value at risk and expected shortfall of scenarios weighted by `age_weights`, the last column being the newest.

    pnl: (subjects, n), n >= 1, in time order. Worst first, value at risk is the first loss at which the cumulative
    weight reaches (1 - confidence)(1 - 1e-12); expected shortfall is the mean loss of the tail filled to exactly
    1 - confidence, the last scenario in it counting with the part of its weight that still fits (Boudoukh,
    Richardson and Whitelaw 1998, "The best of both worlds", Risk 11).

    Equal scenarios are one loss with the sum of their weights: in which order they are taken changes neither figure.
    Where one scenario alone outweighs the tail (at 99 % and a decay of 0.94 each of the newest 29 does) both figures
    are that scenario, and the note of the subject says so; exact_tail, which speaks of all subjects, is always True.

    Hold: positive homogeneity, VaR <= ES, monotonicity, translation, sub-additivity of ES (the weights are the same
    for all subjects), a row alone = the row in a block. The order of scenarios matters: it is their age.

    Beyond one day both grow with the square root of the horizon. That is too little where daily P&L is positively
    autocorrelated and too much where it is negatively so; too much far out in the tail where single days are
    fat-tailed, for sums of them are less so; and too much after a storm, too little after a calm, for the weights
    speak of the next days and volatility reverts over longer ones.
    """
    share = float(tail_share(confidence))
    root = root_of_time(horizon_days)
    check_decay(decay)
    scenarios, lack = screen(pnl, least=1)
    subjects, n = scenarios.shape
    note = np.full(subjects, FitNote.AS_ASKED, dtype=np.int8)
    value_at_risk, shortfall = np.zeros(subjects), np.zeros(subjects)
    if n >= 1:
        weights = age_weights(n, decay)
        with np.errstate(all="ignore"):
            for start in range(0, subjects, _BLOCK):
                rows = slice(start, start + _BLOCK)
                value_at_risk[rows] = _first_to_fill(scenarios[rows], weights, share)
                # The scenarios worse than the value at risk, by what they are worse: it needs neither their order nor
                # the part of the last one that still fits, and is never below 0.
                beyond = np.maximum(-scenarios[rows] - value_at_risk[rows, np.newaxis], 0.0)
                shortfall[rows] = value_at_risk[rows] + (beyond * weights).sum(axis=1) / share
        # The first of equal ones is the oldest and lightest; if that fills the tail, any of them does.
        alone = weights[scenarios.argmin(axis=1)] > share * (1 + ROUNDING)
        note[alone & (lack == Lack.NONE)] = FitNote.ONE_SCENARIO
    with np.errstate(all="ignore"):
        return Tail(
            Figures.of(value_at_risk * root, lack), Figures.of(shortfall * root, lack), exact_tail=True, note=note
        )


def _first_to_fill(scenarios: Floats, weights: Floats, share: float) -> Floats:
    """The loss of each row (rows,) at which the weight, worst scenario first, reaches the share."""
    n = len(weights)
    reach = share * (1 - ROUNDING)
    # Even when the worst scenarios are the lightest, which are the oldest, so many of them fill the tail.
    deepest = min(int(np.searchsorted(np.cumsum(weights), reach)) + 1, n)
    if deepest <= _FEW * n:
        places = np.argpartition(scenarios, deepest - 1, axis=1)[:, :deepest]
        worst = np.take_along_axis(scenarios, places, axis=1)
        order = np.argsort(worst, axis=1)
        places, worst = np.take_along_axis(places, order, axis=1), np.take_along_axis(worst, order, axis=1)
    else:
        places = np.argsort(scenarios, axis=1)
        worst = np.take_along_axis(scenarios, places, axis=1)
    filled = np.cumsum(weights[places], axis=1) >= reach
    filled[:, -1] = True  # whatever rounding left out of the sum
    return np.asarray(-worst[np.arange(len(worst)), filled.argmax(axis=1)])
