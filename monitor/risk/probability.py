"""The probability of losing more than a given amount, and the amount lost with a given probability."""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Context, Decimal, Inexact
from typing import Literal, get_args

import numpy as np
from scipy.special import ndtr, stdtr

from monitor.risk.figures import Codes, Figures, Floats, Lack, screen
from monitor.risk.historical import historical
from monitor.risk.normal import fit_normal, normal
from monitor.risk.student import student_t
from monitor.risk.student_fit import StudentFit, fit_student
from monitor.risk.tail import Drift, check_drift, root_of_time

Distribution = Literal["normal", "student_t", "historical"]


@dataclass(frozen=True)
class LossProbability(Figures):
    """Probability of each subject, 0 to 1, and what a reader must know about the fit. note: (subjects,) of FitNote."""

    note: Codes


@dataclass(frozen=True)
class ProbableLoss(Figures):
    """The loss of each subject, positive, in the unit of the scenarios. note: (subjects,) of FitNote."""

    note: Codes


def loss_probability(
    pnl: Floats, threshold: Floats, horizon_days: int, method: Distribution = "normal", drift: Drift = "zero"
) -> LossProbability:
    """P(loss > threshold over the horizon).

    pnl: (subjects, n), n >= 2 (historical: 1). threshold: (subjects,) in the unit of the scenarios, a loss positive.
    normal and student_t: days are taken as independent, location h m, scale sqrt(h) s. Student's t keeps its nu beyond
    one day, an approximation.
    historical: the share of scenarios whose loss, times sqrt(h), is strictly larger than the threshold; a multiple of
    1/n, and 0 beyond the worst scenario, which does not mean impossible. The root of time is an approximation there
    too: for scenarios of h days ask with a horizon of 1. The root errs as for value at risk: a loss is likelier than
    told where days are positively autocorrelated, less likely far out where single days are fat-tailed. The scenarios
    bring their own mean: drift does nothing.
    A flat book (all scenarios 0) loses 0 for certain.
    Properties: unchanged when scenarios and threshold are multiplied alike; does not rise with the threshold; a row
    alone is the row in a block.
    """
    root = root_of_time(horizon_days)
    threshold = np.asarray(threshold, dtype=np.float64)
    if method == "historical":
        check_drift(drift)
        return _share_beyond(pnl, threshold, root)
    fit = _fit(pnl, method, drift)
    lack = _with_threshold(fit.lack, threshold)
    with np.errstate(all="ignore"):
        beyond = -(threshold + horizon_days * fit.location)
        z = beyond / (root * fit.scale)
        probability = np.where(np.isfinite(fit.nu), stdtr(fit.nu, z), ndtr(z))
    certain = (beyond > 0).astype(np.float64)
    figures = Figures.of(np.where(fit.scale == 0, certain, probability), lack)
    return LossProbability(figures.value, figures.lack, fit.note)


def loss_with_probability(
    pnl: Floats, probability: Decimal, horizon_days: int, method: Distribution = "normal", drift: Drift = "zero"
) -> ProbableLoss:
    """The loss that is exceeded over the horizon with this probability: value at risk at confidence 1 - probability.

    pnl: (subjects, n), as the method needs. Of historical it is the smallest scenario loss that no more than that
    share of the scenarios exceed, its horizon by the root of time; drift does nothing there. The loss is exceeded, not
    bounded: beyond it nothing is said of how much.
    Properties: `loss_probability` of the answer is the probability for normal and student_t, and not above it for
    historical; else those of the method. Raises TypeError when the probability is not a Decimal, ValueError when it is
    not above 0 and below 1.
    """
    if not isinstance(probability, Decimal):
        raise TypeError(f"the probability must be a Decimal (got {probability!r})")
    if not (probability.is_finite() and 0 < probability < 1):
        raise ValueError(f"the probability must be above 0 and below 1 (got {probability})")
    check_drift(drift)
    confidence = _one_minus(probability)
    match method:
        case "historical":
            tail = historical(pnl, confidence, horizon_days)
        case "normal":
            tail = normal(pnl, confidence, horizon_days, drift)
        case "student_t":
            tail = student_t(pnl, confidence, horizon_days, drift)
        case _:
            raise _unknown(method)
    return ProbableLoss(tail.value_at_risk.value, tail.value_at_risk.lack, tail.note)


def _share_beyond(pnl: Floats, threshold: Floats, root: float) -> LossProbability:
    """The empirical probability. The root multiplies the losses as `historical` does, so that the two never differ by
    the rounding of a threshold that is itself a scenario's loss."""
    scenarios, lack = screen(pnl, least=1)
    subjects, n = scenarios.shape
    with np.errstate(all="ignore"):
        beyond = (scenarios * -root > threshold[:, np.newaxis]).sum(axis=1) / n if n else np.zeros(subjects)
    figures = Figures.of(beyond, _with_threshold(lack, threshold))
    return LossProbability(figures.value, figures.lack, np.zeros(subjects, dtype=np.int8))


def _with_threshold(lack: Codes, threshold: Floats) -> Codes:
    return np.where((lack == Lack.NONE) & ~np.isfinite(threshold), Lack.NO_THRESHOLD, lack).astype(np.int8)


def _one_minus(probability: Decimal) -> Decimal:
    """1 - probability with every digit."""
    digits = len(probability.as_tuple().digits) - probability.adjusted() + 1
    return Context(prec=digits, traps=[Inexact]).subtract(Decimal(1), probability)


def _unknown(method: str) -> ValueError:
    return ValueError(f"the method must be one of {', '.join(get_args(Distribution))} (got {method!r})")


def _fit(pnl: Floats, method: Distribution, drift: Drift) -> StudentFit:
    """The distribution asked for; the normal as Student's t with infinitely many degrees of freedom."""
    if method == "student_t":
        return fit_student(pnl, drift)
    if method != "normal":
        raise _unknown(method)
    fit = fit_normal(pnl, drift)
    subjects = len(fit.sigma)
    return StudentFit(fit.location, fit.sigma, np.full(subjects, np.inf), np.zeros(subjects, dtype=np.int8), fit.lack)
