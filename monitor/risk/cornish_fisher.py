"""The normal quantile corrected for skewness and kurtosis."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Decimal

import numpy as np

from monitor.risk.figures import Booleans, Codes, Figures, Floats, Lack, screen
from monitor.risk.moments import four_moments
from monitor.risk.normal import fit_normal, normal_of, standard_normal_tail
from monitor.risk.tail import Drift, Tail, root_of_time, tail_share


@dataclass(frozen=True)
class CornishFisherFit:
    """What the expansion takes from one day's scenarios, all (subjects,).

    location and sigma in the unit of the scenarios, as for the normal; skewness and excess kurtosis without a unit,
    both 0 for a flat book; lack, which is OUTSIDE_DOMAIN where the pair is outside the domain of the expansion.
    """

    location: Floats
    sigma: Floats
    skewness: Floats
    kurtosis: Floats
    lack: Codes


def fit_cornish_fisher(pnl: Floats, drift: Drift) -> CornishFisherFit:
    """Location and sigma of `fit_normal`, skewness and excess kurtosis of the scenarios. pnl: (subjects, n), n >= 2."""
    scenarios, lack = screen(pnl, least=2)
    subjects, n = scenarios.shape
    if n < 2:
        fit = fit_normal(pnl, drift)
        return CornishFisherFit(fit.location, fit.sigma, np.zeros(subjects), np.zeros(subjects), fit.lack)
    with np.errstate(all="ignore"):
        mean, sigma, skewness, kurtosis = four_moments(scenarios)
    fit = normal_of(scenarios, lack, mean, sigma, drift)
    moving = (fit.lack == Lack.NONE) & (fit.sigma > 0)
    skewness[~moving], kurtosis[~moving] = 0.0, 0.0
    lack = np.where(moving & ~in_domain(skewness, kurtosis), Lack.OUTSIDE_DOMAIN, fit.lack).astype(np.int8)
    return CornishFisherFit(fit.location, fit.sigma, skewness, kurtosis, lack)


def in_domain(skewness: Floats, kurtosis: Floats) -> Booleans:
    """Where the expansion is a quantile function at all: it never falls as z grows.

    Its derivative is the parabola a z^2 + b z + c with a = K/8 - S^2/6, b = S/3, c = 1 - K/8 + 5 S^2/36, nowhere
    negative when a >= 0, c >= 0 and b^2 <= 4 a c (Maillard 2012, "A user's guide to the Cornish Fisher expansion").
    From that follow |S| <= 6 (sqrt(2) - 1) = 2.485 and, without skewness, 0 <= K <= 8: tails thinner than the
    normal's are outside. kurtosis: excess. Both of one shape, which is the answer's; False for NaN.
    """
    skewness, kurtosis = np.asarray(skewness, dtype=np.float64), np.asarray(kurtosis, dtype=np.float64)
    with np.errstate(all="ignore"):
        square = np.square(skewness)
        a = kurtosis / 8 - square / 6
        c = 1 - kurtosis / 8 + square * 5 / 36
        return np.asarray((a >= 0) & (c >= 0) & (square / 9 <= 4 * a * c))


def expansion(z: float, skewness: Floats, kurtosis: Floats) -> Floats:
    """z + (z^2 - 1) S/6 + (z^3 - 3z) K/24 - (2z^3 - 5z) S^2/36: the quantile at the level where the normal's is z.

    Cornish and Fisher 1938, "Moments and cumulants in the specification of distributions", to the terms in S and K.
    kurtosis: excess. S and K are parameters of the expansion, close to the skewness and excess kurtosis of its result
    only when both are small (Maillard 2012).
    """
    return np.asarray(
        z + (z**2 - 1) * skewness / 6 + (z**3 - 3 * z) * kurtosis / 24 - (2 * z**3 - 5 * z) * np.square(skewness) / 36
    )


def standard_cornish_fisher_tail(skewness: Floats, kurtosis: Floats, share: float) -> tuple[Floats, Floats]:
    """Quantile of the losses and mean loss beyond it at location 0 and sigma 1, for the tail's share 1 - confidence.

    skewness: that of the P&L, negative when large losses are likelier than large profits. kurtosis: excess. Both in
    the domain. With z the normal quantile and phi its density the mean over the tail of the expansion at -z is

        phi(z) / share x (1 - z S/6 + (z^2 - 1) K/24 - (2z^2 - 1) S^2/36),

    for the integrals of u, u^2 - 1, u^3 - 3u and 2u^3 - 5u against phi up to -z are -phi(z) times 1, -z, z^2 - 1 and
    2z^2 - 1 (Hermite polynomials: each is the derivative of -phi times the one before).
    """
    z, mean_beyond = standard_normal_tail(share)
    quantile = -expansion(-z, skewness, kurtosis)
    correction = -z * skewness / 6 + (z**2 - 1) * kurtosis / 24 - (2 * z**2 - 1) * np.square(skewness) / 36
    return quantile, mean_beyond * (1 + correction)


def cornish_fisher(pnl: Floats, confidence: Decimal, horizon_days: int = 1, drift: Drift = "zero") -> Tail:
    """Value at risk -h mu + sqrt(h) sigma q with q the corrected quantile of the losses; expected shortfall alike.

    pnl: (subjects, n), n >= 2. mu is 0 for drift zero; sigma is about the sample mean (n - 1); skewness and excess
    kurtosis are those of the scenarios about their mean (`moments.skewness_and_kurtosis`). Outside the domain
    (`in_domain`) there is no figure: the expansion would tell a larger confidence less risk. That is where half of
    all normal samples lie, whose sample kurtosis is below 0; use `normal` for such subjects.

    Hold: positive homogeneity, VaR <= ES (in the domain the quantile falls nowhere, and ES is its mean over the
    tail), more confidence never less risk, a row alone = the row in a block; translation with drift sample. Not:
    monotonicity, sub-additivity of ES.

    Beyond one day both grow with the square root of the horizon and keep S and K, although for independent days they
    fall to S / sqrt(h) and K / h. With the fat tails of daily P&L (K > 0) that is too much: for ES above 84.2 %, for
    VaR above 95.9 % (z above 1 and above the square root of 3), below which it is too little; S < 0 adds to what is
    too much, S > 0 takes from it (S^2 left aside). Positive autocorrelation makes the root of time too little,
    negative too much.
    """
    return cornish_fisher_at(pnl, [confidence], horizon_days, drift)[0]


def cornish_fisher_at(
    pnl: Floats, confidences: Sequence[Decimal], horizon_days: int = 1, drift: Drift = "zero"
) -> tuple[Tail, ...]:
    """`cornish_fisher` at several confidences from one fit, one tail for each."""
    root = root_of_time(horizon_days)
    shares = [float(tail_share(confidence)) for confidence in confidences]
    fit = fit_cornish_fisher(pnl, drift)
    with np.errstate(all="ignore"):
        return tuple(
            Tail(
                Figures.of(root * fit.sigma * quantile - horizon_days * fit.location, fit.lack),
                Figures.of(root * fit.sigma * mean_beyond - horizon_days * fit.location, fit.lack),
                exact_tail=True,
                note=np.zeros(len(fit.sigma), dtype=np.int8),
            )
            for quantile, mean_beyond in (
                standard_cornish_fisher_tail(fit.skewness, fit.kurtosis, share) for share in shares
            )
        )
