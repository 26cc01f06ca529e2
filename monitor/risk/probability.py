"""The probability of losing more than a given amount."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np
from scipy.special import ndtr, stdtr

from monitor.risk.figures import Codes, Figures, Floats, Lack
from monitor.risk.normal import fit_normal
from monitor.risk.student_fit import StudentFit, fit_student
from monitor.risk.tail import Drift, root_of_time

Distribution = Literal["normal", "student_t"]


@dataclass(frozen=True)
class LossProbability(Figures):
    """Probability of each subject, 0 to 1, and what a reader must know about the fit. note: (subjects,) of FitNote."""

    note: Codes


def loss_probability(
    pnl: Floats, threshold: Floats, horizon_days: int, method: Distribution = "normal", drift: Drift = "zero"
) -> LossProbability:
    """P(loss > threshold over the horizon).

    pnl: (subjects, n), n >= 2. threshold: (subjects,) in the unit of the scenarios, a loss positive. Days are taken as
    independent: location h m, scale sqrt(h) s. Student's t keeps its nu beyond one day, an approximation. A flat book
    (all scenarios 0) loses 0 for certain.
    """
    root = root_of_time(horizon_days)
    fit = _fit(pnl, method, drift)
    threshold = np.asarray(threshold, dtype=np.float64)
    lack = np.where((fit.lack == Lack.NONE) & ~np.isfinite(threshold), Lack.NO_THRESHOLD, fit.lack).astype(np.int8)
    with np.errstate(all="ignore"):
        beyond = -(threshold + horizon_days * fit.location)
        z = beyond / (root * fit.scale)
        probability = np.where(np.isfinite(fit.nu), stdtr(fit.nu, z), ndtr(z))
    certain = (beyond > 0).astype(np.float64)
    figures = Figures.of(np.where(fit.scale == 0, certain, probability), lack)
    return LossProbability(figures.value, figures.lack, fit.note)


def _fit(pnl: Floats, method: Distribution, drift: Drift) -> StudentFit:
    """The distribution asked for; the normal as Student's t with infinitely many degrees of freedom."""
    if method == "student_t":
        return fit_student(pnl, drift)
    if method != "normal":
        raise ValueError(f"the method must be one of {', '.join(get_args(Distribution))} (got {method!r})")
    fit = fit_normal(pnl, drift)
    subjects = len(fit.sigma)
    return StudentFit(fit.location, fit.sigma, np.full(subjects, np.inf), np.zeros(subjects, dtype=np.int8), fit.lack)
