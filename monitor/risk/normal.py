"""The normal distribution fitted to scenarios."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Decimal

import numpy as np
from scipy.special import ndtri

from monitor.risk.figures import Codes, Figures, Floats, Lack, screen
from monitor.risk.moments import constant, mean_and_deviation
from monitor.risk.tail import Drift, Tail, check_drift, root_of_time, tail_share


@dataclass(frozen=True)
class NormalFit:
    """One day's normal of each subject: location and sigma (subjects,), in the unit of the scenarios; lack."""

    location: Floats
    sigma: Floats
    lack: Codes


def fit_normal(pnl: Floats, drift: Drift) -> NormalFit:
    """Sigma about the sample mean (n - 1); location 0 for drift zero, the sample mean for drift sample.

    pnl: (subjects, n), n >= 2. A row of zeros (a flat book) has sigma 0; a row of one other value lacks a spread.
    """
    check_drift(drift)
    scenarios, lack = screen(pnl, least=2)
    subjects, n = scenarios.shape
    if n < 2:
        return NormalFit(np.zeros(subjects), np.zeros(subjects), lack)
    with np.errstate(all="ignore"):
        mean, sigma = mean_and_deviation(scenarios)
    return normal_of(scenarios, lack, mean, sigma, drift)


def normal_of(scenarios: Floats, lack: Codes, mean: Floats, sigma: Floats, drift: Drift) -> NormalFit:
    """`fit_normal` of scenarios that are screened, n >= 2, and whose mean and standard deviation are known."""
    check_drift(drift)
    lack = lack.copy()
    same = np.zeros(len(lack), dtype=np.bool_)
    spreadless = np.flatnonzero(~(sigma > 0))  # among them every row of one value
    same[spreadless] = constant(scenarios[spreadless])
    lack[(lack == Lack.NONE) & same & (scenarios[:, 0] != 0)] = Lack.CONSTANT
    # Squares that vanish would tell a book that moves that it cannot lose; squares that overflow say nothing either.
    lack[(lack == Lack.NONE) & ((~same & (sigma == 0)) | ~np.isfinite(sigma))] = Lack.OUT_OF_RANGE
    return NormalFit(mean if drift == "sample" else np.zeros(len(lack)), sigma, lack)


def standard_normal_tail(share: float) -> tuple[float, float]:
    """Quantile z and expected shortfall phi(z) / share of the standard normal, for the tail's share 1 - confidence."""
    quantile = -float(ndtri(share))
    return quantile, math.exp(-quantile * quantile / 2) / math.sqrt(2 * math.pi) / share


def normal(pnl: Floats, confidence: Decimal, horizon_days: int = 1, drift: Drift = "zero") -> Tail:
    """Value at risk -h mu + sqrt(h) sigma z; expected shortfall -h mu + sqrt(h) sigma phi(z) / (1 - confidence).

    pnl: (subjects, n), n >= 2. mu is 0 for drift zero (Jorion 2007, Value at Risk, 3rd ed.; McNeil, Frey and
    Embrechts 2015, Quantitative Risk Management, section 2.3).

    Holds for both: positive homogeneity, monotonicity in the confidence, value at risk <= shortfall, a row alone = the
    row in a block to the last bit; translation (by one day's sure gain, h times) for drift sample only; sub-additivity
    of the shortfall, and of the value at risk at 50 % or more. Not monotone in the scenarios: a larger profit widens
    sigma.

    The root of time is exact for independent normal days; it says too little where days are positively autocorrelated,
    too much where negatively.
    """
    return normal_at(pnl, [confidence], horizon_days, drift)[0]


def normal_at(
    pnl: Floats, confidences: Sequence[Decimal], horizon_days: int = 1, drift: Drift = "zero"
) -> tuple[Tail, ...]:
    """`normal` at several confidences from one fit, one tail for each."""
    root = root_of_time(horizon_days)
    standard = [standard_normal_tail(float(tail_share(confidence))) for confidence in confidences]
    fit = fit_normal(pnl, drift)
    with np.errstate(all="ignore"):
        return tuple(
            Tail(
                Figures.of(root * fit.sigma * quantile - horizon_days * fit.location, fit.lack),
                Figures.of(root * fit.sigma * mean_beyond - horizon_days * fit.location, fit.lack),
                exact_tail=True,
                note=np.zeros(len(fit.sigma), dtype=np.int8),
            )
            for quantile, mean_beyond in standard
        )
