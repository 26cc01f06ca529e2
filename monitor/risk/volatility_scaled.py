"""Historical simulation with every scenario brought to the volatility of today."""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal
from typing import Literal, get_args

import numpy as np

from monitor.risk.figures import Booleans, Codes, Figures, Floats, Lack, screen
from monitor.risk.garch import conditional_variances, fit_garch
from monitor.risk.historical import historical
from monitor.risk.moments import constant
from monitor.risk.tail import FitNote, Tail, root_of_time
from monitor.risk.volatility import check_decay, ewma_variances

Scaling = Literal["ewma", "garch"]

FAR = 10  # times that volatility has grown since; a cautious choice, no source

_BLOCK = 256


@dataclass(frozen=True)
class ScaledScenarios:
    """scenarios = factors x P&L, both (subjects, n), NaN in the rows that lack; note (FitNote) and lack (subjects,)."""

    scenarios: Floats
    factors: Floats
    note: Codes
    lack: Codes


def scaled_scenarios(pnl: Floats, scaling: Scaling, decay: float) -> ScaledScenarios:
    """Each scenario times sigma_now / sigma_t: today's forecast of volatility over the one made for its own session.

    pnl: (subjects, n), n >= 1, in time order. scaling: ewma, by the forecasts of `volatility.ewma_variances` with
    this decay; garch, by those of GARCH(1,1) fitted to the row by maximum likelihood (Bollerslev 1986). sigma_t is the
    forecast from the sessions before t, so that a storm that breaks in a calm is scaled as the surprise it was; the
    start of EWMA (mean square of the window) and the parameters of GARCH come from the whole window. What is scaled is
    the P&L itself: the fitted mean of GARCH serves its residuals only, for the mean of a day is small beside its
    volatility and badly known. A row of one value has one volatility and factors 1.

    EWMA stands in where GARCH has no fit, and the note says so: it did not settle, too few sessions. A row whose
    volatility vanished for the floats lacks as OUT_OF_RANGE too: it would seem unable to lose. ValueError for an
    unknown scaling and for a decay that is not above 0 and below 1.
    """
    if scaling not in get_args(Scaling):
        raise ValueError(f"the scaling must be one of {', '.join(get_args(Scaling))} (got {scaling!r})")
    check_decay(decay)
    scenarios, lack = screen(pnl, least=1)
    subjects, n = scenarios.shape
    factors = np.full((subjects, n), np.nan)
    note = np.full(subjects, FitNote.AS_ASKED, dtype=np.int8)
    if n >= 1:
        with np.errstate(all="ignore"):
            measured = lack == Lack.NONE
            single = constant(scenarios)
            factors[measured & single] = 1.0
            moving = measured & ~single
            by_ewma = moving
            if scaling == "garch":
                by_ewma = moving & ~_scale_by_garch(scenarios, factors, moving)
                note[by_ewma] = FitNote.EWMA_FOR_NO_FIT
            rows = np.flatnonzero(by_ewma)
            for start in range(0, len(rows), _BLOCK):
                block = rows[start : start + _BLOCK]
                factors[block] = _factors(ewma_variances(scenarios[block], decay))
            scaled = scenarios * factors
            lack[measured & ~np.isfinite(scaled).all(axis=1)] = Lack.OUT_OF_RANGE
    else:
        scaled = factors.copy()
    lacking = lack != Lack.NONE
    scaled[lacking], factors[lacking], note[lacking] = np.nan, np.nan, FitNote.AS_ASKED
    return ScaledScenarios(scaled, factors, note, lack)


def _scale_by_garch(scenarios: Floats, factors: Floats, moving: Booleans) -> Booleans:
    """Fill in the factors of the moving rows that GARCH can be fitted to; answers which (subjects,)."""
    fit = fit_garch(scenarios)
    found = _factors(conditional_variances(fit, scenarios))
    fitted = moving & fit.converged & np.isfinite(found).all(axis=1)
    factors[fitted] = found[fitted]
    return fitted


def _factors(variances: Floats) -> Floats:
    """sigma_now / sigma_t (rows, n) of the variances (rows, n + 1); not finite where one of them vanished."""
    now = np.where(variances[:, -1:] > 0, variances[:, -1:], np.nan)
    return np.sqrt(now / variances[:, :-1])


def volatility_scaled(pnl: Floats, confidence: Decimal, horizon_days: int, scaling: Scaling, decay: float) -> Tail:
    """`historical` over `scaled_scenarios` (Hull and White 1998, "Incorporating volatility updating into the historical
    simulation method for value-at-risk", Journal of Risk 1).

    pnl: (subjects, n), n >= 1, in time order. The paper scales the changes of each market price; here it is the P&L
    of the subject, which is one series for a position, a book or the firm. decay is needed with garch too, where EWMA
    stands in; the note of the subject says where it does, and where a scenario of the tail was scaled more than FAR
    times (after a calm of hardly any moves a long position can so lose more than it is worth).

    Hold: positive homogeneity, VaR <= ES, more confidence never less risk, a row alone = the row in a block. Not:
    monotonicity, translation, sub-additivity of ES (each subject has factors of its own). The order of scenarios
    matters.

    Beyond one day both grow with the square root of the horizon, from the volatility of today: too much after a
    storm, too little after a calm, for volatility reverts (GARCH could tell how fast; the root does not ask it). Too
    little too where daily P&L is positively autocorrelated, too much where negatively, and too much far out in the
    tail where the scaled days are still fat-tailed.
    """
    scaled = scaled_scenarios(pnl, scaling, decay)
    tail = historical(scaled.scenarios, confidence, horizon_days)
    return Tail(
        _with_lack(tail.value_at_risk, scaled.lack),
        _with_lack(tail.expected_shortfall, scaled.lack),
        exact_tail=tail.exact_tail,
        note=_note(scaled, tail.value_at_risk, horizon_days),
    )


def _note(scaled: ScaledScenarios, value_at_risk: Figures, horizon_days: int) -> Codes:
    """SCALED_FAR where a scenario at or beyond value at risk was scaled so far that it says little of today."""
    with np.errstate(all="ignore"):
        beyond = scaled.scenarios * root_of_time(horizon_days) <= -value_at_risk.value[:, np.newaxis]
        far = (beyond & (scaled.scenarios != 0) & (scaled.factors > FAR)).any(axis=1)
    return np.where(far & (scaled.note == FitNote.AS_ASKED), FitNote.SCALED_FAR, scaled.note).astype(np.int8)


def _with_lack(figures: Figures, lack: Codes) -> Figures:
    """The figures with the reasons known from before the scaling in place of those that follow from them."""
    return Figures(figures.value, np.where(lack == Lack.NONE, figures.lack, lack).astype(np.int8))
