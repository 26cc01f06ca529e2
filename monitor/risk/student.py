"""Student's t distribution fitted to scenarios."""

from __future__ import annotations

from decimal import Decimal

import numpy as np
from scipy.special import gammaln, stdtrit

from monitor.risk.figures import Figures, Floats
from monitor.risk.normal import standard_normal_tail
from monitor.risk.student_fit import fit_student
from monitor.risk.tail import Drift, Tail, root_of_time, tail_share


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


def student_t(pnl: Floats, confidence: Decimal, horizon_days: int = 1, drift: Drift = "zero") -> Tail:
    """Value at risk -h m + sqrt(h) s q with q the quantile of t(nu), s its scale (not its deviation); shortfall alike.

    pnl: (subjects, n), n >= 2. m is 0 for drift zero. Beyond one day nu is kept, an approximation: sums of
    independent t have thinner tails. Where the normal stands in, the note of the subject says so.
    """
    root = root_of_time(horizon_days)
    share = float(tail_share(confidence))
    fit = fit_student(pnl, drift)
    with np.errstate(all="ignore"):
        quantile, mean_beyond = standard_student_tail(fit.nu, share)
        return Tail(
            Figures.of(root * fit.scale * quantile - horizon_days * fit.location, fit.lack),
            Figures.of(root * fit.scale * mean_beyond - horizon_days * fit.location, fit.lack),
            exact_tail=True,
            note=fit.note,
        )
