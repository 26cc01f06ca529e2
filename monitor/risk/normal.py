"""The normal distribution fitted to scenarios."""

from __future__ import annotations

import math
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
    same = constant(scenarios)
    lack[(lack == Lack.NONE) & same & (scenarios[:, 0] != 0)] = Lack.CONSTANT
    # Squares that vanish would tell a book that moves that it cannot lose; squares that overflow say nothing either.
    lack[(lack == Lack.NONE) & ((~same & (sigma == 0)) | ~np.isfinite(sigma))] = Lack.OUT_OF_RANGE
    return NormalFit(mean if drift == "sample" else np.zeros(subjects), sigma, lack)


def standard_normal_tail(share: float) -> tuple[float, float]:
    """Quantile z and expected shortfall phi(z) / share of the standard normal, for the tail's share 1 - confidence."""
    quantile = -float(ndtri(share))
    return quantile, math.exp(-quantile * quantile / 2) / math.sqrt(2 * math.pi) / share


def normal(pnl: Floats, confidence: Decimal, horizon_days: int = 1, drift: Drift = "zero") -> Tail:
    """Value at risk -h mu + sqrt(h) sigma z; expected shortfall -h mu + sqrt(h) sigma phi(z) / (1 - confidence).

    pnl: (subjects, n), n >= 2. mu is 0 for drift zero (Jorion 2007, Value at Risk, 3rd ed.; McNeil, Frey and
    Embrechts 2015, Quantitative Risk Management, section 2.3).
    """
    root = root_of_time(horizon_days)
    quantile, mean_beyond = standard_normal_tail(float(tail_share(confidence)))
    fit = fit_normal(pnl, drift)
    with np.errstate(all="ignore"):
        return Tail(
            Figures.of(root * fit.sigma * quantile - horizon_days * fit.location, fit.lack),
            Figures.of(root * fit.sigma * mean_beyond - horizon_days * fit.location, fit.lack),
            exact_tail=True,
            note=np.zeros(len(fit.sigma), dtype=np.int8),
        )
