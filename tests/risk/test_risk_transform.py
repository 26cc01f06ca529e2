"""The probability integral transform and its distance from the uniform."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from monitor.risk.coverage import NoTest
from monitor.risk.transform import kolmogorov_smirnov, transform_historical, transform_parametric

NAN, INF = math.nan, math.inf


def test_the_parametric_transform_is_the_distribution_function():
    random = np.random.RandomState(5)
    outcomes, location, scale = random.standard_normal((3, 40)), random.standard_normal((3, 40)), np.full((3, 1), 2.5)
    nu = np.array([[3.0], [INF], [12.5]])
    found = transform_parametric(outcomes, location, scale, nu)
    assert found[0] == pytest.approx(stats.t.cdf(outcomes[0], 3, location[0], 2.5), rel=1e-12)
    assert found[1] == pytest.approx(stats.norm.cdf(outcomes[1], location[1], 2.5), rel=1e-12)
    assert found[2] == pytest.approx(stats.t.cdf(outcomes[2], 12.5, location[2], 2.5), rel=1e-12)
    np.testing.assert_array_equal(transform_parametric(outcomes * 4, location * 4, scale * 4, nu), found)
    np.testing.assert_array_equal(transform_parametric(outcomes[1:2], location[1:2], scale[1:2], nu[1:2]), found[1:2])


@pytest.mark.parametrize(
    "poor",
    [(NAN, 0, 1, 5), (INF, 0, 1, 5), (1, NAN, 1, 5), (1, 0, NAN, 5), (1, 0, 0, 5), (0, 0, 0, INF), (1, 0, -1, 5)],
)
def test_a_day_without_forecast_or_outcome_has_no_transform(poor):
    with np.errstate(all="raise"):
        found = transform_parametric(*np.array([poor, (0, 0, 1, 5)], dtype=float).T)
    assert np.isnan(found).tolist() == [True, False]
    assert found[1] == 0.5


@pytest.mark.parametrize("nu", [NAN, 0.0, -3.0])
def test_without_degrees_of_freedom_there_is_no_transform(nu):
    assert np.isnan(transform_parametric(np.zeros(1), np.zeros(1), np.ones(1), np.array([nu]))).all()


def test_the_historical_transform_is_a_middle_rank():
    window = np.array([[-3.0, -1.0, 0.0, 2.0]])
    for outcome, place in ((-9, 0.5), (-2, 1.5), (-1, 2), (1, 3.5), (2, 4), (9, 4.5)):
        assert transform_historical(np.array([float(outcome)]), window)[0] == place / 5
    assert transform_historical(np.array([0.0]), np.zeros((1, 9)))[0] == 0.5


def test_the_historical_transform_needs_a_whole_window():
    windows = np.array([[1.0, NAN], [1.0, INF], [1.0, 2.0], [1.0, 2.0]])
    with np.errstate(all="raise"):
        found = transform_historical(np.array([1.5, 1.5, NAN, 1.5]), windows)
    assert np.isnan(found).tolist() == [True, True, True, False]
    assert np.isnan(transform_historical(np.zeros(2), np.zeros((2, 0)))).all()


def test_right_forecasts_transform_to_the_uniform_and_wrong_ones_do_not():
    series = np.random.RandomState(6).standard_t(5, size=1500)
    windows = np.lib.stride_tricks.sliding_window_view(series, 250)[:-1]
    historical = transform_historical(series[250:], windows)
    fine = transform_parametric(series, np.zeros(1), np.ones(1), np.array([5.0]))
    narrow = transform_parametric(series, np.zeros(1), np.array([0.7]), np.array([5.0]))
    assert kolmogorov_smirnov(historical[np.newaxis]).p_value[0] > 0.05
    assert kolmogorov_smirnov(fine[np.newaxis]).p_value[0] > 0.05
    assert kolmogorov_smirnov(narrow[np.newaxis]).p_value[0] < 1e-4


@settings(max_examples=60, deadline=None)
@given(st.lists(st.one_of(st.floats(0, 1), st.just(NAN)), min_size=1, max_size=40))
def test_the_distance_is_the_exact_two_sided_one(row):
    there = [u for u in row if not math.isnan(u)]
    with np.errstate(all="raise"):
        found = kolmogorov_smirnov(np.array([row, [0.5] * len(row)]))
    if not there:
        assert found.reason.tolist() == [NoTest.NO_DAYS, NoTest.NONE]
        assert np.isnan(found.statistic[0])
        assert np.isnan(found.p_value[0])
        return
    want = stats.kstest(there, "uniform", method="exact")
    assert found.statistic[0] == pytest.approx(want.statistic, rel=1e-12)
    assert found.p_value[0] == pytest.approx(want.pvalue, rel=1e-9, abs=1e-12)
    assert found.statistic[1] == 0.5


def test_no_subjects_and_no_days():
    assert kolmogorov_smirnov(np.empty((0, 9))).statistic.shape == (0,)
    assert kolmogorov_smirnov(np.empty((2, 0))).reason.tolist() == [NoTest.NO_DAYS] * 2
    assert transform_historical(np.empty(0), np.empty((0, 9))).shape == (0,)


def test_what_is_no_transform_is_refused():
    with pytest.raises(ValueError, match=r"\(subjects, days\)"):
        kolmogorov_smirnov(np.zeros(5))
    for wrong in (-0.001, 1.001, INF):
        with pytest.raises(ValueError, match=f"got {wrong}"):
            kolmogorov_smirnov(np.array([[0.5, NAN, wrong]]))
