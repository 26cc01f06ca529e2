"""GARCH(1,1) with a constant mean (Bollerslev 1986): parameters, variances and the volatility to expect next."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np

from monitor.risk.figures import Booleans, Codes, Figures, Floats, Lack, screen
from monitor.risk.garch_fit import maximise, variances
from monitor.risk.moments import constant, mean_and_deviation

Start = Literal["mean_square", "sample_variance", "backcast"]

LEAST_SESSIONS = 100  # fewer cannot tell four parameters apart; a cautious choice, no source

_BLOCK = 256
_BACKCAST_SESSIONS, _BACKCAST_DECAY = 75, 0.94
_NO_BETTER = 1e-7  # above the log-likelihood of one variance: rounding, not an effect
_TINY = 1e-280  # of a variance, and 1 / _TINY its largest: squares and products of it are then exact enough


@dataclass(frozen=True)
class GarchFit:
    """r = mean + e, h(t) = omega + alpha e(t-1)^2 + beta h(t-1), for each subject; all (subjects,) but start.

    mean is in the unit of the returns, omega in its square. persistence is alpha + beta. log_likelihood is that of the
    normal with variance h. converged says that the likelihood was climbed to a maximum within the bounds. All numbers
    are NaN where lack is not NONE, and nowhere else. start: the rule for h before the first session.
    """

    mean: Floats
    omega: Floats
    alpha: Floats
    beta: Floats
    log_likelihood: Floats
    persistence: Floats
    converged: Booleans
    lack: Codes
    start: Start


def fit_garch(returns: Floats, start: Start = "mean_square") -> GarchFit:
    """Gaussian maximum likelihood of mean, omega > 0, alpha >= 0, beta >= 0 with alpha + beta < 1 (Bollerslev 1986).

    returns: (subjects, sessions), at least LEAST_SESSIONS. start says what stands for both e(0)^2 and h(0) before the
    first session; the estimates depend on it (omega of a much used sample by 8 %):
    mean_square: the mean of e^2 at the current mean (Fiorentini, Calzolari and Panattoni 1996);
    sample_variance: the mean of e^2 at the sample's mean, held fixed;
    backcast: the weighted mean of the first 75 squared deviations from the sample's mean, each weight 0.94 of the one
    before, held fixed (common practice, no source).

    The ends of the range:
    - One value throughout: omega, alpha and beta are 0, the log-likelihood is infinite. No lack: a flat book is flat.
    - No ARCH effect, nothing likelier than one variance throughout: alpha and beta are 0 (beta is not identified where
      alpha is 0) and omega is the mean square.
    - Persistence beyond 1 - 1e-6 would be likelier: held there.
    - The likelihood grows without end towards a variance of 0 (omega at 1e-8 of the sample's variance and still
      falling), as for a price that has stopped moving or one gigantic outlier beside next to nothing: NO_FIT. NO_FIT
      too where the climb does not settle. A large outlier short of that is fitted as it is: nothing is trimmed.
    - Squares too large or too small for a float: OUT_OF_RANGE.

    Near no ARCH effect the likelihood can have several maxima. Up to three climbs, from a long, a middling and a short
    memory, compete there; they find the best maximum nearly always, not always.

    Holds: omega scales with the square of the returns, mean with the returns, alpha and beta not at all; a shift moves
    the mean alone (both exactly for powers of 2, else to about 1e-5, as flat as the likelihood is); a row alone is the
    row in a block, bit for bit. Returns have fatter tails than the normal: the estimates stand all the same
    (quasi-maximum likelihood, Bollerslev and Wooldridge 1992), the usual standard errors would not, and none is given.
    Raises ValueError for an unknown start.
    """
    if start not in get_args(Start):
        raise ValueError(f"the start must be one of {', '.join(get_args(Start))} (got {start!r})")
    scenarios, lack = screen(returns, least=LEAST_SESSIONS)
    found, level = np.full((len(lack), 4), np.nan), np.full(len(lack), np.nan)
    if (lack == Lack.NONE).any():
        with np.errstate(all="ignore"):
            _fit(scenarios, lack, start, found, level)
    return GarchFit(
        mean=found[:, 0],
        omega=found[:, 1],
        alpha=found[:, 2],
        beta=found[:, 3],
        log_likelihood=level,
        persistence=found[:, 2] + found[:, 3],
        converged=np.asarray(lack == Lack.NONE),
        lack=lack,
        start=start,
    )


def _fit(scenarios: Floats, lack: Codes, start: Start, found: Floats, level: Floats) -> None:
    """Fill in what is found (rows, 4), its log-likelihood (rows,) and what is lacking (rows,)."""
    n = scenarios.shape[1]
    usable = np.flatnonzero(lack == Lack.NONE)
    single = constant(scenarios[usable])
    one_value, moving = usable[single], usable[~single]
    found[one_value], found[one_value, 0], level[one_value] = 0.0, scenarios[one_value, 0], np.inf

    mean, unit = _mean_and_unit(scenarios[moving])
    fits = (np.square(unit) > _TINY) & (np.square(unit) < 1 / _TINY)
    lack[moving[~fits]] = Lack.OUT_OF_RANGE
    moving, mean, unit = moving[fits], mean[fits], unit[fits]
    series = scenarios[moving]
    presample = np.ones(len(moving)) if start != "backcast" else _backcast(series, mean) / np.square(unit)
    points, height = maximise(series, mean, unit, presample, follows=start == "mean_square")

    one_variance = -n / 2 * (np.log(2 * np.pi) + 1)
    no_effect = height <= one_variance + _NO_BETTER
    points[no_effect], height[no_effect] = (0.0, 1.0, 0.0, 0.0), one_variance
    settled = np.isfinite(height)
    lack[moving[~settled]] = Lack.NO_FIT
    moving, mean, unit = moving[settled], mean[settled], unit[settled]
    points, height = points[settled], height[settled]
    found[moving] = points * np.stack([unit, np.square(unit), np.ones(len(unit)), np.ones(len(unit))], axis=1)
    found[moving, 0] += mean
    level[moving] = height - n * np.log(unit)


def conditional_variances(fit: GarchFit, returns: Floats) -> Floats:
    """The variance h expected for each session from those before it; the last is the forecast for the next session.

    returns: (subjects, sessions), those that the fit was made of, or others of the same subjects to run its parameters
    over (then the presample is theirs). Returns (subjects, sessions + 1), in the square of the returns' unit; NaN in
    the rows where the fit lacks, 0 where there is one value throughout. Raises ValueError when the subjects are not
    those of the fit.
    """
    scenarios, _ = screen(returns, least=1)
    rows, n = scenarios.shape
    if rows != len(fit.mean):
        raise ValueError(f"the fit is of {len(fit.mean)} subjects, the returns are of {rows}")
    result = np.empty((rows, n + 1))
    with np.errstate(all="ignore"):
        for first in range(0, rows, _BLOCK):
            block = slice(first, first + _BLOCK)
            residuals = scenarios[block] - fit.mean[block, np.newaxis]
            presample = _presample(scenarios[block], residuals, fit.start)
            h = variances(
                np.ascontiguousarray(residuals.T), presample, fit.omega[block], fit.alpha[block], fit.beta[block]
            )
            result[block] = h.T
    return result


def garch(returns: Floats, start: Start = "mean_square") -> Figures:
    """Volatility by GARCH(1,1), the forecast for the session after the last, in the unit of the returns.

    The root of omega + alpha e(n)^2 + beta h(n). returns: (subjects, sessions), at least LEAST_SESSIONS; a row of one
    value has volatility 0. See `fit_garch` for the start, the lacks and which properties hold. It is a forecast for one
    session: further ahead it tends to the long-run variance omega / (1 - alpha - beta), so that the root of time
    overstates the volatility of a longer horizon after a turbulent day and understates it after a calm one.
    """
    fit = fit_garch(returns, start)
    with np.errstate(all="ignore"):
        return Figures.of(np.sqrt(conditional_variances(fit, returns)[:, -1]), fit.lack)


def _mean_and_unit(scenarios: Floats) -> tuple[Floats, Floats]:
    """Mean and root mean square deviation, what a row is standardised with."""
    n = scenarios.shape[1]
    mean, deviation = mean_and_deviation(scenarios)
    return mean, deviation * np.sqrt((n - 1) / n)


def _presample(scenarios: Floats, residuals: Floats, start: Start) -> Floats:
    """What stands for e(0)^2 and h(0) under the rule, (rows,). residuals: the scenarios less the fitted mean."""
    n = scenarios.shape[1]
    if start == "mean_square":
        return np.asarray(np.square(residuals).sum(axis=1) / n)
    mean = scenarios.sum(axis=1) / n
    if start == "backcast":
        return _backcast(scenarios, mean)
    return np.asarray(np.square(scenarios - mean[:, np.newaxis]).sum(axis=1) / n)


def _backcast(scenarios: Floats, mean: Floats) -> Floats:
    """The weighted mean of the first squared deviations, (rows,)."""
    first = np.square(scenarios[:, :_BACKCAST_SESSIONS] - mean[:, np.newaxis])
    weights = _BACKCAST_DECAY ** np.arange(first.shape[1])
    return np.asarray((first * (weights / weights.sum())).sum(axis=1))
