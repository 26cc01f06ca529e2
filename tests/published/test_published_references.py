"""Historical, normal, Student's t, volatility and EWMA against scipy, statsmodels, numpy and arch.

On simulated returns (Student's t with clusters of volatility, and plain) and on S&P 500 closes, 1999 to 2018, as the
package arch carries them. Forty simulated series by default, all 500 with DUSKCHECK_FULL=1 in the environment.
"""

import os
import warnings
from decimal import Decimal
from functools import cache

import numpy as np
import pytest
from scipy import integrate, stats

from monitor.risk.historical import historical_at
from monitor.risk.moments import mean_and_deviation
from monitor.risk.normal import fit_normal, normal_at, standard_normal_tail
from monitor.risk.returns import log_returns
from monitor.risk.rolling import rolling_historical
from monitor.risk.student import standard_student_tail, student_t
from monitor.risk.student_fit import fit_student
from monitor.risk.tail import FitNote
from monitor.risk.volatility import ewma_variance, sample

SERIES = 500 if os.environ.get("DUSKCHECK_FULL") == "1" else 40
LEVELS = [Decimal("0.95"), Decimal("0.975"), Decimal("0.99")]
NINETY_NINE = LEVELS[-1]


@cache
def simulated(n: int, clustered: bool) -> np.ndarray:
    """Daily returns: t with 3 to 12 degrees of freedom, scale about 1 %, volatility wandering where clustered."""
    random = np.random.RandomState(n + clustered)
    shocks = random.standard_t(random.uniform(3, 12, size=(SERIES, 1)), size=(SERIES, n))
    scale = np.full((SERIES, n), 0.01)
    for t in range(1, n if clustered else 0):
        variance = 0.02 * 0.01**2 + 0.06 * (scale[:, t - 1] * shocks[:, t - 1]) ** 2 + 0.86 * scale[:, t - 1] ** 2
        scale[:, t] = np.sqrt(variance)
    return 0.0003 + scale * shocks


@cache
def sp500() -> np.ndarray:
    """Log returns of the closes: (5030,)."""
    from arch.data import sp500 as closes

    return log_returns(closes.load()["Adj Close"].to_numpy()[np.newaxis])[0]


@cache
def sp500_windows() -> np.ndarray:
    """Ten windows of 500 days, one after the other."""
    return sp500()[:5000].reshape(10, 500)


PANELS = {
    "simulated": lambda: simulated(500, clustered=False),
    "simulated with clusters, 250 days": lambda: simulated(250, clustered=True),
    "S&P 500": sp500_windows,
}
every_panel = pytest.mark.parametrize("panel", PANELS.values(), ids=PANELS.keys())


# --- Student's t ---------------------------------------------------------------------------------------------------


def scipy_fit(row, **fixed):
    """scipy's search passes through invalid points and warns; what it finds is what is compared.

    It stops when its simplex is smaller than 1e-4, an absolute size: in units of the row's own spread.
    """
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        unit = np.median(np.abs(row))
        nu, location, scale = stats.t.fit(row / unit, **fixed)
    return nu, location * unit, scale * unit


@pytest.mark.timeout(240 if SERIES < 500 else 3600)
@every_panel
@pytest.mark.parametrize(("drift", "fixed"), [("zero", {"floc": 0}), ("sample", {})])
def test_student_t_is_at_least_as_likely_as_scipys_and_at_the_same_place(panel, drift, fixed):
    """scipy.stats.t.fit(x) for a free location, with floc=0 for drift zero.

    Likelihood: never more than 1e-5 below scipy's, that is at rounding. Parameters: scipy stops when its simplex is
    smaller than 1e-4, so 1e-4 of the scale, and of the location in scales, and 1e-3 of nu up to 30, beyond which the
    density hardly depends on it. scipy stops at a wrong point now and then, which its lower likelihood tells (by more
    than 1e-6): in up to 5 %.
    """
    rows = panel()
    fit = fit_student(rows, drift)
    theirs = np.array([scipy_fit(row, **fixed) for row in rows])
    nu, location, scale = theirs.T
    wanted = stats.t.logpdf(rows.T, nu, location, scale).sum(axis=0)

    normal = fit.note == FitNote.NORMAL_AS_LIMIT
    assert (normal | (fit.note == FitNote.AS_ASKED) | (fit.note == FitNote.NU_AT_FLOOR)).all()
    t = fit.note == FitNote.AS_ASKED
    ours = stats.t.logpdf(rows[t].T, fit.nu[t], fit.location[t], fit.scale[t]).sum(axis=0)
    assert (ours >= wanted[t] - 1e-5).all()
    centre = rows[normal].mean(axis=1, keepdims=True) if drift == "sample" else 0.0
    spread = np.sqrt(np.square(rows[normal] - centre).mean(axis=1))
    best_normal = stats.norm.logpdf(rows[normal] - centre, 0, spread[:, np.newaxis]).sum(axis=1)
    assert (best_normal >= wanted[normal] - 1e-5).all()

    level = ours - wanted[t] < 1e-6
    assert level.mean() >= 0.95
    assert fit.scale[t][level] == pytest.approx(scale[t][level], rel=1e-4)
    assert (np.abs(fit.location[t] - location[t]) / scale[t])[level].max() < 1e-4
    thin = fit.nu[t] > 30
    assert fit.nu[t][level & ~thin] == pytest.approx(nu[t][level & ~thin], rel=1e-3)


@every_panel
def test_student_t_figures_are_scipys_quantile_and_a_quadrature_of_its_density(panel):
    """Tolerance of the quantile: scipy inverts the t itself, 1e-10. Of the shortfall: of the quadrature, 1e-8."""
    rows = panel()[:10]
    fit = fit_student(rows, "sample")
    tail = student_t(rows, NINETY_NINE, 1, "sample")
    for place in np.flatnonzero(np.isfinite(fit.nu)):
        fitted = stats.t(fit.nu[place], fit.location[place], fit.scale[place])
        assert tail.value_at_risk.value[place] == pytest.approx(-fitted.ppf(0.01), rel=1e-10)
        beyond, _ = integrate.quad(fitted.ppf, 0, 0.01, epsabs=0, epsrel=1e-10, limit=200)
        assert tail.expected_shortfall.value[place] == pytest.approx(-beyond / 0.01, rel=1e-8)


# --- normal --------------------------------------------------------------------------------------------------------


@every_panel
@pytest.mark.parametrize("drift", ["zero", "sample"])
def test_normal_figures_are_scipys_quantile_and_a_quadrature_of_its_density(panel, drift):
    """Tolerance: both evaluate the same closed forms, rounding only, 1e-12; of the quadrature 1e-9."""
    rows = panel()
    mean = rows.mean(axis=1) if drift == "sample" else np.zeros(len(rows))
    sigma = stats.tstd(rows, axis=1)
    for confidence, tail in zip(LEVELS, normal_at(rows, LEVELS, 10, drift), strict=True):
        share = float(1 - confidence)
        ten_days = stats.norm(10 * mean, np.sqrt(10) * sigma)
        np.testing.assert_allclose(tail.value_at_risk.value, -ten_days.ppf(share), rtol=1e-12)
        beyond, _ = integrate.quad(lambda x: x * stats.norm.pdf(x), stats.norm.isf(share), 40, epsabs=0, epsrel=1e-11)
        wanted = np.sqrt(10) * sigma * beyond / share - 10 * mean
        np.testing.assert_allclose(tail.expected_shortfall.value, wanted, rtol=1e-9)


@pytest.mark.parametrize("share", [0.1, 0.05, 0.025, 0.01, 0.005, 0.001])
def test_standard_tails_are_scipys(share):
    """Tolerances: quantiles 1e-12 (normal) and 1e-9 (t, inverted by search); shortfalls by quadrature 1e-8."""
    quantile, beyond = standard_normal_tail(share)
    assert quantile == pytest.approx(stats.norm.isf(share), rel=1e-12)
    assert beyond == pytest.approx(stats.norm.expect(lambda x: x, lb=quantile, conditional=True), rel=1e-8)
    degrees = np.array([2.05, 3.0, 4.5, 10.0, 200.0])
    quantiles, means_beyond = standard_student_tail(degrees, share)
    np.testing.assert_allclose(quantiles, stats.t.isf(share, degrees), rtol=1e-9)
    for nu, q, found in zip(degrees, quantiles, means_beyond, strict=True):
        # Of u = 1/x, so that the quadrature ends; the share beyond q is divided out.
        mass, _ = integrate.quad(lambda u, nu=nu: stats.t.pdf(1 / u, nu) / u**3, 0, 1 / q, epsabs=0, epsrel=1e-10)
        assert found == pytest.approx(mass / share, rel=1e-8)


# --- moments and EWMA ----------------------------------------------------------------------------------------------


@every_panel
def test_mean_and_deviation_are_those_of_scipy_and_statsmodels(panel):
    """Tolerance: the mean of returns near 0 loses digits to cancellation, so 1e-15 absolute of a scale of 1e-2; the
    deviation to 1e-12."""
    from statsmodels.stats.weightstats import DescrStatsW

    rows = panel()
    mean, deviation = mean_and_deviation(rows)
    described = stats.describe(rows, axis=1)
    weighted = DescrStatsW(rows.T, ddof=1)
    for their_mean, their_variance in ((described.mean, described.variance), (weighted.mean, weighted.var)):
        np.testing.assert_allclose(mean, their_mean, rtol=0, atol=1e-15)
        np.testing.assert_allclose(deviation, np.sqrt(their_variance), rtol=1e-12)
    np.testing.assert_allclose(sample(rows).value, weighted.std, rtol=1e-12)
    np.testing.assert_array_equal(fit_normal(rows, "zero").sigma, sample(rows).value)


@every_panel
@pytest.mark.parametrize("decay", [0.94, 0.97])
def test_ewma_is_archs_from_archs_own_start(panel, decay):
    """arch starts with a weighted mean square of the first 75 days, this program with the mean square of the window:
    started alike the recursion is the same, and the rounding of a sum in another order is left, 1e-12."""
    from arch.univariate import EWMAVariance

    theirs = EWMAVariance(decay)
    rows = panel()
    starts = np.array([theirs.backcast(row) for row in rows])
    for row, start, ours in zip(rows, starts, ewma_variance(starts, rows, decay), strict=True):
        path = np.empty(len(row) + 1)
        forecast_day = np.append(row, 0.0)
        theirs.compute_variance(np.empty(0), forecast_day, path, start, theirs.variance_bounds(forecast_day))
        assert path[0] == pytest.approx(start, rel=1e-14)
        assert ours == pytest.approx(path[-1], rel=1e-12)


# --- historical ----------------------------------------------------------------------------------------------------


@every_panel
def test_historical_is_numpys_inverted_distribution_and_rockafellars_minimum(panel):
    """Value at risk: numpy's quantile by `inverted_cdf`, the same order statistic, so to the last bit.

    Shortfall: the least over v of v + E max(loss - v, 0) / (1 - c) (Rockafellar and Uryasev 2000), which is reached at
    one of the losses; another order of summing the same few losses, so 1e-12.
    """
    rows = panel()
    for confidence, tail in zip(LEVELS, historical_at(rows, LEVELS), strict=True):
        share = float(1 - confidence)
        np.testing.assert_array_equal(tail.value_at_risk.value, -np.quantile(rows, share, 1, method="inverted_cdf"))
        least = [min(v + np.maximum(-row - v, 0).mean() / share for v in -np.sort(row)[:60]) for row in rows]
        np.testing.assert_allclose(tail.expected_shortfall.value, least, rtol=1e-12)


@pytest.mark.parametrize(("window", "tested", "exceptions", "crisis"), [(250, 4780, 67, 10), (500, 4530, 63, 15)])
def test_every_window_of_the_sp500_is_that_of_pandas_and_gives_the_known_count_of_exceptions(
    window, tested, exceptions, crisis
):
    """Exceptions at 99 %, in all and from 2008-07-01 to 2009-06-30: recomputed, nothing published to compare with.

    pandas takes the order statistic by interpolating downwards, so to the last bit.
    """
    import pandas as pd
    from arch.data import sp500 as closes

    returns = sp500()
    days = closes.load().index[1:]
    tail = rolling_historical(returns[np.newaxis], window, NINETY_NINE)
    rank = {250: 3, 500: 5}[window]
    theirs = pd.Series(returns).rolling(window).quantile((rank - 1) / (window - 1) + 1e-12, interpolation="lower")
    np.testing.assert_array_equal(tail.value_at_risk.value[0], -theirs.to_numpy()[window - 1 :])

    beyond = -returns[window:] > tail.value_at_risk.value[0, :-1]
    assert (len(beyond), beyond.sum()) == (tested, exceptions)
    dates = days[window:][beyond]
    assert ((dates >= "2008-07-01") & (dates <= "2009-06-30")).sum() == crisis
