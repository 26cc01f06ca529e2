"""Student's t distribution fitted to scenarios."""

from __future__ import annotations

from decimal import Decimal
from typing import Literal, get_args

import numpy as np
from scipy.special import gammaln, stdtrit

from monitor.risk.figures import Figures, Floats, Lack, screen
from monitor.risk.moments import four_moments
from monitor.risk.normal import fit_normal, normal_of, standard_normal_tail
from monitor.risk.student_fit import LEAST_SCENARIOS, NU_CEILING, StudentFit, fit_student
from monitor.risk.tail import Drift, FitNote, Tail, root_of_time, tail_share

FitBy = Literal["likelihood", "kurtosis"]


def standard_student_tail(nu: Floats, share: float) -> tuple[Floats, Floats]:
    """Quantile and expected shortfall of the standard t (scale 1) for the tail's share 1 - confidence, as nu.

    With f the density and q the quantile, the shortfall is f(q) / share x (nu + q^2) / (nu - 1) (McNeil, Frey and
    Embrechts 2015, Quantitative Risk Management, section 2.3). nu: above 1; infinite means the standard normal.
    """
    normal_quantile, normal_mean_beyond = standard_normal_tail(share)
    quantile, mean_beyond = np.full(nu.shape, normal_quantile), np.full(nu.shape, normal_mean_beyond)
    finite = np.isfinite(nu)
    degrees = nu[finite]
    q = -stdtrit(degrees, share)
    log_density = (
        gammaln((degrees + 1) / 2)
        - gammaln(degrees / 2)
        - np.log(degrees * np.pi) / 2
        - (degrees + 1) / 2 * np.log1p(q**2 / degrees)
    )
    quantile[finite] = q
    mean_beyond[finite] = np.exp(log_density) / share * (degrees + q**2) / (degrees - 1)
    return quantile, mean_beyond


def match_kurtosis(pnl: Floats, drift: Drift) -> StudentFit:
    """The t with the deviation and excess kurtosis K of the scenarios: nu = 4 + 6 / K, scale sigma sqrt((nu - 2) / nu).

    pnl: (subjects, n), n >= 2. Method of moments: t(nu) has variance nu / (nu - 2) and excess kurtosis 6 / (nu - 4).
    Location and sigma are those of `fit_normal`; K is that of `moments.skewness_and_kurtosis`. The normal stands in
    for a subject with too few scenarios, and where K is 0, negative or so small that nu passes NU_CEILING.

    nu is above 4 whatever the scenarios, and they can only show K up to about n - 5: tails as fat as those of t(4)
    and beyond, for which K does not exist, are measured too thin, and one outlier sways K as no other figure.
    """
    scenarios, lack = screen(pnl, least=2)
    if scenarios.shape[1] < LEAST_SCENARIOS:
        fit = fit_normal(pnl, drift)
        moving = (fit.lack == Lack.NONE) & (fit.sigma > 0)
        note = np.where(moving, FitNote.NORMAL_FOR_TOO_FEW, FitNote.AS_ASKED).astype(np.int8)
        return StudentFit(fit.location, fit.sigma, np.full(len(lack), np.inf), note, fit.lack)
    with np.errstate(all="ignore"):
        mean, sigma, _, kurtosis = four_moments(scenarios)
        matched = np.where(kurtosis > 0, 4 + 6 / kurtosis, np.inf)
    fit = normal_of(scenarios, lack, mean, sigma, drift)
    moving = (fit.lack == Lack.NONE) & (fit.sigma > 0)
    found = moving & (matched < NU_CEILING)
    nu, scale = np.where(found, matched, np.inf), sigma.copy()
    scale[found] *= np.sqrt((nu[found] - 2) / nu[found])
    note = np.where(moving & ~found, FitNote.NORMAL_AS_LIMIT, FitNote.AS_ASKED).astype(np.int8)
    return StudentFit(fit.location, scale, nu, note, fit.lack)


def student_t(
    pnl: Floats, confidence: Decimal, horizon_days: int = 1, drift: Drift = "zero", fit: FitBy = "likelihood"
) -> Tail:
    """Value at risk -h m + sqrt(h) s q with q the quantile of t(nu), s its scale (not its deviation); shortfall alike
    (McNeil, Frey and Embrechts 2015, Quantitative Risk Management, section 2.3).

    pnl: (subjects, n), n >= 2. m is 0 for drift zero. fit: by maximum likelihood (`fit_student`) or by matching
    deviation and kurtosis (`match_kurtosis`); ValueError for any other. Where the normal stands in, the note of the
    subject says so.

    Hold: positive homogeneity, VaR <= ES, more confidence never less risk, a row alone = the row in a block;
    translation with drift sample. Not: monotonicity, sub-additivity of ES.

    Beyond one day nu is kept, an approximation: sums of independent t have thinner tails and tend to the normal. From
    nu 3 up the root of time so says too much for the shortfall at 95 % and above and for value at risk at 99 % (over
    many days, at nu 5, by 9 to 29 % and by 12 %), too little for value at risk at 95 % and below (by 5 %). Positive
    autocorrelation makes it too little, negative too much.
    """
    root = root_of_time(horizon_days)
    share = float(tail_share(confidence))
    if fit not in get_args(FitBy):
        raise ValueError(f"the fit must be one of {', '.join(get_args(FitBy))} (got {fit!r})")
    fitted = match_kurtosis(pnl, drift) if fit == "kurtosis" else fit_student(pnl, drift)
    with np.errstate(all="ignore"):
        quantile, mean_beyond = standard_student_tail(fitted.nu, share)
        return Tail(
            Figures.of(root * fitted.scale * quantile - horizon_days * fitted.location, fitted.lack),
            Figures.of(root * fitted.scale * mean_beyond - horizon_days * fitted.location, fitted.lack),
            exact_tail=True,
            note=fitted.note,
        )
