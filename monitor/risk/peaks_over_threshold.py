"""Value at risk and expected shortfall from a generalised Pareto tail over a high threshold."""

from __future__ import annotations

import math
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction

import numpy as np
import numpy.typing as npt
from scipy.special import exprel

from monitor.risk.figures import Codes, Figures, Floats, Lack, screen
from monitor.risk.historical import historical
from monitor.risk.moments import constant
from monitor.risk.pareto_fit import SHAPE_FLOOR, fit_pareto
from monitor.risk.tail import FitNote, Tail, root_of_time
from monitor.risk.tail import tail_share as share_beyond

TENTH = Decimal("0.1")  # McNeil and Frey 2000 take the worst 100 of 1,000 scenarios

# Of samples drawn from the exponential (shape 0) 35 in 100 end at the lowest shape allowed with ten exceedances, 4 with
# twenty (own simulation); the standard error of the shape is then still 1 / sqrt(20). A cautious choice, no source.
LEAST_EXCEEDANCES = 20

Counts = npt.NDArray[np.int64]

_BLOCK = 256


@dataclass(frozen=True)
class PeaksFit:
    """The tail of each subject's losses over its threshold, all (subjects,).

    threshold: u, a loss positive, in the unit of the scenarios. shape: xi, no unit. scale: beta, in the unit of the
    scenarios. exceedances: N_u, the losses strictly larger than u. log_likelihood: of the excesses. note: FitNote.
    Where lack is not NONE, shape, scale and log_likelihood are NaN. A flat book (all scenarios 0) has threshold,
    shape, scale and exceedances 0. Standard errors by the second derivative of the likelihood exist for shape above
    -0.5 only.
    """

    threshold: Floats
    shape: Floats
    scale: Floats
    exceedances: Counts
    log_likelihood: Floats
    note: Codes
    lack: Codes


def tail_count(tail_share: Decimal | Fraction, scenarios: int) -> int:
    """How many of the worst scenarios make up the share, rounded down: floor(tail_share x scenarios), exactly.

    Raises TypeError when the share is neither Decimal nor Fraction, ValueError when it is not above 0 and below 1.
    """
    if not isinstance(tail_share, Decimal | Fraction):
        raise TypeError(f"the tail share must be a Decimal or a Fraction (got {tail_share!r})")
    if (isinstance(tail_share, Decimal) and not tail_share.is_finite()) or not 0 < tail_share < 1:
        raise ValueError(f"the tail share must be above 0 and below 1 (got {tail_share})")
    return math.floor(Fraction(tail_share) * scenarios)


def worst_losses(scenarios: Floats, rows: npt.NDArray[np.intp], k: int) -> Floats:
    """The k + 1 largest losses of each of these rows, largest first, (rows, k + 1). scenarios: (subjects, n), n > k."""
    worst = np.empty((len(rows), k + 1))
    for start in range(0, len(rows), _BLOCK):
        block = slice(start, start + _BLOCK)
        worst[block] = np.partition(scenarios[rows[block]], k, axis=1)[:, : k + 1]
    worst.sort(axis=1)
    return -worst


def fit_peaks(pnl: Floats, tail_share: Decimal | Fraction = TENTH) -> PeaksFit:
    """Fit the generalised Pareto distribution to the losses beyond the threshold, by maximum likelihood.

    pnl: (subjects, n). The threshold u is the (k + 1)-th worst loss, k = floor(tail_share n); the k losses beyond it
    are the exceedances, fewer where losses tie with the threshold. A subject with fewer than LEAST_EXCEEDANCES lacks a
    fit as FEW_IN_TAIL. The shape is held at -1 or above (`pareto_fit`), and the note says where.
    """
    scenarios, lack = screen(pnl, least=1)
    subjects, n = scenarios.shape
    k = tail_count(tail_share, n)
    threshold, shape, scale = np.full(subjects, np.nan), np.full(subjects, np.nan), np.full(subjects, np.nan)
    level, exceedances = np.full(subjects, np.nan), np.zeros(subjects, dtype=np.int64)
    note = np.full(subjects, FitNote.AS_ASKED, dtype=np.int8)
    if n < 1:
        return PeaksFit(threshold, shape, scale, exceedances, level, note, lack)
    same = constant(scenarios)
    flat = (lack == Lack.NONE) & same & (scenarios[:, 0] == 0)
    threshold[flat], shape[flat], scale[flat] = 0.0, 0.0, 0.0
    lack[(lack == Lack.NONE) & same & ~flat] = Lack.CONSTANT
    candidates = np.flatnonzero((lack == Lack.NONE) & ~flat)
    with np.errstate(all="ignore"):
        worst = worst_losses(scenarios, candidates, k)
        excesses = worst[:, :k] - worst[:, k:]
        beyond = (excesses > 0).sum(axis=1)
        fit = fit_pareto(excesses)
    threshold[candidates], exceedances[candidates] = worst[:, k], beyond
    few, overflowing = beyond < LEAST_EXCEEDANCES, np.isinf(excesses).any(axis=1)
    why = np.where(fit.converged, Lack.NONE, Lack.NO_FIT)
    why = np.where(overflowing, Lack.OUT_OF_RANGE, why)
    lack[candidates] = np.where(few, Lack.FEW_IN_TAIL, why)
    fitted = lack[candidates] == Lack.NONE
    took = candidates[fitted]
    shape[took], scale[took], level[took] = fit.shape[fitted], fit.scale[fitted], fit.log_likelihood[fitted]
    note[took[fit.shape[fitted] == SHAPE_FLOOR]] = FitNote.SHAPE_AT_FLOOR
    return PeaksFit(threshold, shape, scale, exceedances, level, note, lack)


def pareto_tail(fit: PeaksFit, scenarios: int, confidence: Decimal) -> tuple[Floats, Floats]:
    """Value at risk and expected shortfall of one day from a fit, (subjects,) each; see `peaks_over_threshold`.

    scenarios: n, of which fit.exceedances lie beyond the threshold. Means something where 1 - confidence is below
    their share; the shortfall is infinite for shapes of 1 and above. NaN where the fit lacks.
    """
    with np.errstate(all="ignore"):
        rarer = float(share_beyond(confidence)) * scenarios / fit.exceedances
        steps = -np.log(rarer)
        # exprel(x) = (exp(x) - 1) / x and 1 at 0, where the tail is exponential.
        value_at_risk = fit.threshold + fit.scale * steps * exprel(fit.shape * steps)
        mean_beyond = fit.scale * np.exp(fit.shape * steps) / (1 - fit.shape)
        flat = fit.scale == 0
        value_at_risk = np.where(flat, fit.threshold, value_at_risk)
        mean_beyond = np.where(flat, 0.0, np.where(fit.shape < 1, mean_beyond, np.inf))
        return value_at_risk, value_at_risk + mean_beyond


def probability_beyond(fit: PeaksFit, scenarios: int, loss: Floats) -> Floats:
    """P(one day's loss > loss) = N_u / n (1 + xi (loss - u) / beta)^(-1 / xi), (subjects,); the inverse of the above.

    loss: (subjects,), in the unit of the scenarios. NaN below the threshold, where the fit says nothing, and where
    the fit lacks.
    """
    with np.errstate(all="ignore"):
        standard = (loss - fit.threshold) / fit.scale
        powered = np.where(fit.shape == 0, standard, np.log1p(np.maximum(fit.shape * standard, -1)) / fit.shape)
        return np.where(standard >= 0, fit.exceedances / scenarios * np.exp(-powered), np.nan)


def peaks_over_threshold(
    pnl: Floats, confidence: Decimal, horizon_days: int = 1, tail_share: Decimal | Fraction = TENTH
) -> Tail:
    """Value at risk and expected shortfall by a generalised Pareto tail beyond a threshold.

    pnl: (subjects, n). With u, xi, beta and N_u of `fit_peaks` and c the confidence:
    value at risk = u + beta / xi ((n / N_u (1 - c))^(-xi) - 1);
    expected shortfall = (value at risk + beta - xi u) / (1 - xi), where xi < 1, else it lacks as INFINITE_MEAN
    (McNeil and Frey 2000, "Estimation of tail-related risk measures for heteroscedastic financial time series";
    McNeil, Frey and Embrechts 2015, Quantitative Risk Management, section 5.2).
    Where 1 - c is not below N_u / n the quantile lies inside the threshold: both figures are then those of
    `historical` and the note says so. A subject without a fit lacks both figures whatever the confidence. A flat book
    risks 0.

    Beyond one day both grow with the square root of the horizon. For independent days with tail index a = 1 / xi the
    far quantile of the sum grows as h^(1/a) only (Danielsson and de Vries 2000, "Value-at-risk and extreme returns"):
    the root of time overstates where xi < 1/2, the usual case, and understates above. Volatility that clusters and is
    now above its mean errs the same way, below its mean the other way.

    Properties: positively homogeneous; value at risk <= shortfall; neither falls as the confidence grows while it
    lies beyond the threshold; translation (a sure gain lowers both by itself at one day); the order of the scenarios
    does not matter; a row alone is the row in a block. Not sub-additive, nor monotone: a smaller loss among the
    exceedances can make the fitted tail heavier.
    """
    share = share_beyond(confidence)
    root = root_of_time(horizon_days)
    fit = fit_peaks(pnl, tail_share)
    scenarios = np.asarray(pnl).shape[1]
    value_at_risk, shortfall = pareto_tail(fit, scenarios, confidence)
    note, lack = fit.note.copy(), fit.lack
    moving = (lack == Lack.NONE) & (fit.exceedances > 0)
    inside = np.flatnonzero(moving & (fit.exceedances <= math.floor(share * scenarios)))
    if len(inside):
        empirical = historical(np.asarray(pnl)[inside], confidence)
        value_at_risk[inside], shortfall[inside] = empirical.value_at_risk.value, empirical.expected_shortfall.value
        note[inside] = FitNote.INSIDE_THRESHOLD
    endless = (fit.shape >= 1) & np.isposinf(shortfall) & np.isfinite(value_at_risk)
    with np.errstate(all="ignore"):
        return Tail(
            Figures.of(root * value_at_risk, lack),
            Figures.of(root * shortfall, np.where(endless, Lack.INFINITE_MEAN, lack).astype(np.int8)),
            exact_tail=True,
            note=note,
        )
