"""What a mutation run over the methods found no test for: changes of one operator or argument that went unnoticed."""

import math
from decimal import Decimal

import numpy as np
import pytest

from monitor.risk import rolling
from monitor.risk.age_weighted import age_weighted, age_weights
from monitor.risk.bootstrap import age_weighted_bounds
from monitor.risk.bounds import RESAMPLES, BoundLack
from monitor.risk.cornish_fisher import cornish_fisher, cornish_fisher_at, fit_cornish_fisher, in_domain
from monitor.risk.coverage import (
    NoTest,
    Zone,
    basel_zone,
    christoffersen,
    kupiec,
    time_until_first_failure,
    transitions,
)
from monitor.risk.figures import Lack
from monitor.risk.historical import historical, historical_at
from monitor.risk.leave_one_out import leave_one_out
from monitor.risk.monte_carlo import monte_carlo
from monitor.risk.normal import fit_normal, normal, normal_at
from monitor.risk.order_bounds import weighted_order_bounds
from monitor.risk.peaks_over_threshold import fit_peaks, peaks_over_threshold
from monitor.risk.randomness import random_state
from monitor.risk.rolling import rolling_historical
from monitor.risk.shortfall_test import critical_value, shortfall_test, simulate_z2
from monitor.risk.student import match_kurtosis, student_t
from monitor.risk.student_fit import fit_student
from monitor.risk.tail import FitNote
from monitor.risk.transform import kolmogorov_smirnov, transform_parametric
from monitor.risk.volatility_scaled import scaled_scenarios, volatility_scaled

NINETY_NINE = Decimal("0.99")
WALK = np.random.default_rng(31).standard_t(4, size=300) * 100
PANEL = np.stack([WALK, np.zeros(300), np.full(300, 7.5), np.where(np.arange(300) == 3, np.nan, WALK)])
NAMES = [(str(row),) for row in range(len(PANEL))]


# --- codes ---------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("codes", [Lack, FitNote, NoTest, Zone, BoundLack])
def test_no_two_codes_are_one(codes):
    """Two names of one number would be one reason: a reader would be told the other."""
    assert [code.value for code in codes.__members__.values()] == list(range(len(codes.__members__)))


METHODS = {
    "historical": lambda pnl: historical(pnl, NINETY_NINE),
    "rolling": lambda pnl: rolling_historical(pnl, 250, NINETY_NINE),
    "age_weighted": lambda pnl: age_weighted(pnl, NINETY_NINE, 0.98),
    "volatility_scaled": lambda pnl: volatility_scaled(pnl, NINETY_NINE, 1, "ewma", 0.94),
    "volatility_scaled, garch": lambda pnl: volatility_scaled(pnl, NINETY_NINE, 1, "garch", 0.94),
    "normal": lambda pnl: normal(pnl, NINETY_NINE),
    "student_t": lambda pnl: student_t(pnl, NINETY_NINE),
    "student_t, kurtosis": lambda pnl: student_t(pnl, NINETY_NINE, fit="kurtosis"),
    "cornish_fisher": lambda pnl: cornish_fisher(pnl, NINETY_NINE),
    "peaks_over_threshold": lambda pnl: peaks_over_threshold(pnl, NINETY_NINE),
    "monte_carlo": lambda pnl: monte_carlo(pnl, NINETY_NINE, NAMES, paths=2000),
    "monte_carlo, student_t": lambda pnl: monte_carlo(pnl, NINETY_NINE, NAMES, paths=2000, distribution="student_t"),
}


@pytest.mark.parametrize("scenarios", [300, 5, 1, 0])
@pytest.mark.parametrize("method", METHODS.values(), ids=METHODS.keys())
def test_figures_are_doubles_and_reasons_and_notes_are_codes(method, scenarios):
    tail = method(PANEL[:, 300 - scenarios :])
    for figures in (tail.value_at_risk, tail.expected_shortfall):
        assert figures.value.dtype == np.float64
        assert figures.lack.dtype == np.int8
        np.testing.assert_array_equal(np.isnan(figures.value), figures.lack != Lack.NONE)
    assert tail.note.dtype == np.int8


@pytest.mark.parametrize("method", METHODS)
def test_only_a_tail_of_less_than_one_scenario_is_not_exact(method):
    assert METHODS[method](PANEL).exact_tail is True
    by_single_scenarios = method.startswith(("historical", "volatility_scaled"))
    assert METHODS[method](PANEL[:, :99]).exact_tail is not by_single_scenarios


FITS = {
    "normal": (lambda pnl: fit_normal(pnl, "zero"), ("location", "sigma"), ("lack",)),
    "student_t": (lambda pnl: fit_student(pnl, "zero"), ("location", "scale", "nu"), ("note", "lack")),
    "kurtosis": (lambda pnl: match_kurtosis(pnl, "zero"), ("location", "scale", "nu"), ("note", "lack")),
    "cornish_fisher": (
        lambda pnl: fit_cornish_fisher(pnl, "zero"),
        ("location", "sigma", "skewness", "kurtosis"),
        ("lack",),
    ),
    "peaks": (fit_peaks, ("threshold", "shape", "scale", "log_likelihood"), ("note", "lack")),
    "ewma": (lambda pnl: scaled_scenarios(pnl, "ewma", 0.94), ("scenarios", "factors"), ("note", "lack")),
    "garch": (lambda pnl: scaled_scenarios(pnl, "garch", 0.94), ("scenarios", "factors"), ("note", "lack")),
}


@pytest.mark.parametrize("scenarios", [300, 5, 1, 0])
@pytest.mark.parametrize(("fit", "doubles", "codes"), FITS.values(), ids=FITS.keys())
def test_fits_are_doubles_and_codes(fit, doubles, codes, scenarios):
    found = fit(PANEL[:, 300 - scenarios :])
    assert {getattr(found, name).dtype for name in doubles} == {np.dtype(np.float64)}
    assert {getattr(found, name).dtype for name in codes} == {np.dtype(np.int8)}


def test_what_peaks_lack_is_nan():
    found = fit_peaks(PANEL)
    assert found.lack.tolist() == [Lack.NONE, Lack.NONE, Lack.CONSTANT, Lack.NOT_FINITE]
    for part in (found.shape, found.scale, found.log_likelihood):
        assert np.isnan(part[2:]).all()
    assert np.isfinite(found.log_likelihood[0])


def test_reasons_of_backtests_are_codes():
    hit, counted = np.array([[False, True, True, False]] * 2), np.array([[True] * 4, [False] * 4])
    hit &= counted
    coverage = kupiec(hit.sum(axis=1), counted.sum(axis=1), NINETY_NINE)
    both = christoffersen(transitions(hit, counted), coverage)
    shortfall = shortfall_test(np.zeros((2, 4)), np.ones((2, 4)), np.ones((2, 4)), NINETY_NINE)
    for found in (
        coverage,
        both.independence,
        both.conditional_coverage,
        time_until_first_failure(np.array([0, 3]), NINETY_NINE),
        kolmogorov_smirnov(np.array([[0.5], [math.nan]])),
        shortfall,
    ):
        assert found.reason.dtype == np.int8
    assert basel_zone(np.array([0, 9]), np.array([250, 250]), NINETY_NINE).zone.dtype == np.int8
    assert shortfall.days.dtype == np.int64


@pytest.mark.parametrize(
    ("method", "several"), [(historical, historical_at), (normal, normal_at), (cornish_fisher, cornish_fisher_at)]
)
def test_unless_asked_otherwise_figures_are_of_one_day_without_drift(method, several):
    told = method(WALK[np.newaxis] + 20, NINETY_NINE, 1, *(() if method is historical else ("zero",)))
    assert told.value_at_risk.lack.tolist() == [Lack.NONE]
    for found in (method(WALK[np.newaxis] + 20, NINETY_NINE), *several(WALK[np.newaxis] + 20, [NINETY_NINE])):
        assert found.value_at_risk.value.tolist() == told.value_at_risk.value.tolist()
        assert found.expected_shortfall.value.tolist() == told.expected_shortfall.value.tolist()


# --- edges ---------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("days", "paths"), [(250, 1), (1, 250)])
def test_one_record_and_records_of_one_day_can_be_simulated(days, paths):
    simulated = simulate_z2(days, NINETY_NINE, 5.0, random_state("one"), paths)
    assert simulated.shape == (paths,)
    assert (simulated <= 1).all()


def test_without_each_of_large_positions_the_tail_of_many_days_is_that_of_historical():
    """So many days that finding the kth worst leaves its neighbours unsorted."""
    random = np.random.default_rng(36)
    own = random.standard_t(4, size=(240, 2000))
    whole = own + 0.3 * random.standard_t(4, size=own.shape)
    pairs = np.arange(len(own))
    found = leave_one_out(whole, own, pairs, pairs, Decimal("0.9"))
    want = historical(whole - own, Decimal("0.9"))
    np.testing.assert_array_equal(found.value_at_risk.value, want.value_at_risk.value)
    np.testing.assert_array_equal(found.expected_shortfall.value, want.expected_shortfall.value)


def test_the_error_of_a_critical_value_near_the_top_takes_one_neighbour():
    """The deviation of the count is 0.32 there: one order statistic before, none after the last."""
    found = critical_value(np.square(np.arange(1000.0)), 0.9999)
    assert found.value == 999**2
    assert found.standard_error == pytest.approx((999**2 - 998**2) / 2 * math.sqrt(0.09999), rel=1e-9)


def test_single_precision_is_transformed_as_doubles():
    parts = np.array([[0.3, -1.7], [0.1, 0.1], [1.3, 0.7], [4.5, math.inf]], dtype=np.float32)
    found = transform_parametric(*parts)
    assert found.dtype == np.float64
    np.testing.assert_array_equal(found, transform_parametric(*parts.astype(np.float64)))


def test_excesses_that_overflow_cost_their_row_the_fit_and_no_other():
    """At a tail of nine tenths the threshold is a gain, from which the worst loss is farther than a double reaches."""
    rows = np.stack([np.linspace(-1, 1, 250) * 1.7e308, WALK[:250]])
    with np.errstate(all="raise"):
        found = fit_peaks(rows, Decimal("0.9"))
    assert found.lack.tolist() == [Lack.OUT_OF_RANGE, Lack.NONE]
    assert found.exceedances.tolist() == [225, 225]


def test_a_drift_beyond_the_doubles_is_no_warning():
    """The sum of the ten scenarios is a double, twenty days of their mean are not."""
    rows = np.stack([np.full(10, 1.7e307), WALK[:10]])
    with np.errstate(all="raise"):
        found = monte_carlo(rows, NINETY_NINE, NAMES[:2], horizon_days=20, drift="sample", paths=2000)
    assert found.value_at_risk.lack.tolist() == [Lack.CONSTANT, Lack.NONE]


def test_squares_beyond_the_doubles_are_outside_the_domain_without_a_warning():
    with np.errstate(all="raise"):
        found = in_domain(np.array([1e200, 0.0, 1e200]), np.array([1e200, 1e308, 1.0]))
    assert found.tolist() == [False, False, False]


def test_room_for_rows_is_reckoned_in_bytes(monkeypatch):
    """Room for the lists of two rows, three of 61 sessions by 18 doubles, takes two rows at a time."""
    pnl = np.random.default_rng(32).standard_t(4, size=(7, 200))
    together = rolling_historical(pnl, 60, Decimal("0.7"))
    plain, taken = rolling._roll, []

    def roll(rows, counted, lists):
        taken.append((len(rows), lists.shape))
        return plain(rows, counted, lists)

    monkeypatch.setattr(rolling, "_roll", roll)
    monkeypatch.setattr(rolling, "_BYTES", 2 * 3 * 61 * 18 * 8)
    again = rolling_historical(pnl, 60, Decimal("0.7"))
    assert taken == [(rows, (3, 61, 18, 2)) for rows in (2, 2, 2, 1)]
    np.testing.assert_array_equal(again.expected_shortfall.value, together.expected_shortfall.value)


def test_one_scenario_is_a_lower_bound_of_both_figures():
    """At 99 % one scenario is worse than the true value at risk with 1 % only; above it nothing is known."""
    found = age_weighted_bounds(np.array([[-5.0]]), NINETY_NINE, random_state("one"), 0.98)
    for bounds in (found.value_at_risk, found.expected_shortfall):
        assert bounds.low.tolist() == [5]
        assert np.isnan(bounds.high).all()
        assert bounds.reason.tolist() == [BoundLack.TOO_FEW]


def test_location_and_scale_of_the_t_meet_the_equations_of_the_likelihood():
    """With z = (x - m) / s and w = (nu + 1) / (nu + z^2): sum w z = 0 and sum w z^2 = n at the top."""
    pnl = np.random.default_rng(34).standard_t(3, size=(60, 250)) * 50 + 20
    fit = fit_student(pnl, "sample")
    fitted = np.isfinite(fit.nu)
    assert fitted.sum() > 50
    location, scale, nu = (part[fitted, np.newaxis] for part in (fit.location, fit.scale, fit.nu))
    z = (pnl[fitted] - location) / scale
    w = (nu + 1) / (nu + np.square(z))
    assert np.abs((w * z).mean(axis=1)).max() < 1e-9
    assert np.abs((w * np.square(z)).mean(axis=1) - 1).max() < 1e-9


def test_weighted_bounds_stand_where_the_weight_is_reached_or_exceeded_to_rounding():
    """The scenarios of the draw that makes an end are taken as the worst, whose weights then add up to it exactly."""
    n, share, decay = 300, 0.05, 0.99
    weights = age_weights(n, decay)
    below = random_state("ends").random_sample((RESAMPLES, n)) < share
    order = np.argsort((below * weights).sum(axis=1))
    least, most = below[order[24]], below[order[-25]]
    for fewest, turn in ((least, 0), (least, 1), (most, 0), (most, 1)):
        losses = np.random.default_rng(turn).permutation(np.arange(1.0, n + 1))
        losses[fewest] += n
        worst_first = np.sort(losses)[::-1]
        found = weighted_order_bounds(-losses[np.newaxis], Decimal("0.95"), random_state("ends"), decay)
        if fewest is least:
            assert found.high[0] == worst_first[fewest.sum() - 1]
        else:
            assert found.low[0] == worst_first[fewest.sum()]
