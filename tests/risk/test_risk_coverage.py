"""Zones, coverage and independence of exceptions: formulas, edges and reasons."""

import math
from decimal import Decimal
from itertools import product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from monitor.risk.coverage import (
    NO_TEST_TEXT,
    NoTest,
    Transitions,
    Verdict,
    Zone,
    basel_zone,
    christoffersen,
    kupiec,
    time_until_first_failure,
    transitions,
)

NINETY_NINE = Decimal("0.99")
CONFIDENCES = ["0.9", "0.95", "0.975", "0.99", "0.995"]


def each(number):
    return np.array([number])


def power_log(base, times):
    """ln(base^times) with 0^0 = 1."""
    return times * math.log(base) if times else 0.0


# --- traffic light -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("confidence", CONFIDENCES)
@pytest.mark.parametrize("n", [1, 5, 60, 250, 251, 1000])
def test_zones_follow_the_binomial_exactly(confidence, n):
    count = np.arange(n + 1)
    found = basel_zone(count, np.array(n), Decimal(confidence))
    law = stats.binom(n, float(1 - Decimal(confidence)))
    assert found.at_most == pytest.approx(law.cdf(count), rel=1e-12)
    assert found.at_least == pytest.approx(law.sf(count - 1), rel=1e-10, abs=1e-200)
    want = np.where(law.cdf(count) >= 0.9999, Zone.RED, np.where(law.cdf(count) >= 0.95, Zone.YELLOW, Zone.GREEN))
    want[0] = Zone.GREEN
    assert found.zone.tolist() == want.tolist()
    assert (np.diff(found.zone) >= 0).all()


def test_no_exception_is_green_however_few_the_days():
    assert basel_zone(np.zeros(7, dtype=int), np.arange(7), NINETY_NINE).zone.tolist() == [Zone.GREEN] * 7
    assert basel_zone(each(0), each(5), NINETY_NINE).at_most[0] >= 0.95


def test_the_printed_factors_belong_to_250_days_at_99_percent_alone():
    for days, confidence in ((249, "0.99"), (251, "0.99"), (250, "0.975"), (250, "0.9900001")):
        found = basel_zone(each(5), each(days), Decimal(confidence))
        assert np.isnan(found.plus_factor).all(), days
        assert np.isnan(found.multiplier).all(), days
    found = basel_zone(np.array([4, 5, 11, 250]), each(250), Decimal("0.990"))
    assert found.plus_factor.tolist() == [0, 0.4, 1, 1]
    assert found.multiplier.tolist() == [1.5, 1.7, 2, 2]


# --- Kupiec --------------------------------------------------------------------------------------------------------


@settings(max_examples=150, deadline=None)
@given(st.integers(1, 3000), st.data(), st.sampled_from(CONFIDENCES))
def test_kupiec_is_the_formula_as_written(n, data, confidence):
    x = data.draw(st.integers(0, n))
    p = float(1 - Decimal(confidence))
    found = kupiec(each(x), each(n), Decimal(confidence))
    likelihood = power_log(x / n, x) + power_log(1 - x / n, n - x)
    want = -2 * (power_log(p, x) + power_log(1 - p, n - x)) + 2 * likelihood
    assert found.statistic[0] == pytest.approx(want, rel=1e-9, abs=1e-9)
    assert found.statistic[0] >= 0
    assert found.p_value[0] == pytest.approx(stats.chi2.sf(found.statistic[0], 1), rel=1e-9, abs=1e-300)


def test_kupiec_is_zero_where_the_share_is_the_promised_one():
    found = kupiec(np.array([1, 5, 25]), np.array([100, 500, 2500]), NINETY_NINE)
    assert found.statistic == pytest.approx(np.zeros(3), abs=1e-12)
    assert found.p_value == pytest.approx(np.ones(3), abs=1e-5)
    assert (found.statistic >= 0).all()


def test_kupiec_at_the_edges():
    found = kupiec(np.array([0, 0, 250]), np.array([0, 250, 250]), NINETY_NINE)
    assert found.reason.tolist() == [NoTest.NO_DAYS, NoTest.NONE, NoTest.NONE]
    assert np.isnan(found.statistic).tolist() == np.isnan(found.p_value).tolist() == [True, False, False]
    assert found.statistic[1] == pytest.approx(-2 * 250 * math.log(0.99), rel=1e-13)
    assert found.statistic[2] == pytest.approx(-2 * 250 * math.log(0.01), rel=1e-13)


@pytest.mark.parametrize("test", [kupiec, basel_zone])
def test_counts_must_make_sense(test):
    for x, n in ((-1, 250), (251, 250), (0, -1)):
        with pytest.raises(ValueError, match=f"got {x} of {n}"):
            test(np.array([1, x]), np.array([250, n]), NINETY_NINE)
    with pytest.raises(TypeError, match="whole numbers"):
        test(each(1.0), each(250), NINETY_NINE)
    with pytest.raises(TypeError, match="whole numbers"):
        test(each(1), each(250.0), NINETY_NINE)
    with pytest.raises(TypeError, match="Decimal"):
        test(each(1), each(250), 0.99)


def test_no_subjects():
    none = np.zeros(0, dtype=int)
    assert basel_zone(none, none, NINETY_NINE).zone.shape == (0,)
    assert kupiec(none, none, NINETY_NINE).statistic.shape == (0,)
    assert time_until_first_failure(none, NINETY_NINE).p_value.shape == (0,)
    for shape in ((0, 250), (0, 0)):
        empty = np.zeros(shape, dtype=bool)
        found = christoffersen(transitions(empty, empty), kupiec(none, none, NINETY_NINE))
        assert found.conditional_coverage.reason.shape == (0,)


# --- Christoffersen ------------------------------------------------------------------------------------------------


def counted_by_hand(row, counted):
    found = dict.fromkeys(product((0, 1), repeat=2), 0)
    for day in range(1, len(row)):
        if counted[day - 1] and counted[day]:
            found[row[day - 1], row[day]] += 1
    return tuple(found.values())


@settings(max_examples=100, deadline=None)
@given(st.lists(st.tuples(st.booleans(), st.booleans()), max_size=30))
def test_transitions_are_pairs_of_neighbouring_days_that_count(days):
    counted = np.array([[count for count, _ in days]], dtype=bool)
    hit = counted & np.array([[value for _, value in days]], dtype=bool)
    both = transitions(np.vstack([hit, hit]), np.vstack([counted, counted]))
    for row in (0, 1):
        found = (both.t00[row], both.t01[row], both.t10[row], both.t11[row])
        assert found == counted_by_hand(hit[0], counted[0])


def test_a_day_that_does_not_count_breaks_the_chain():
    hit = np.array([[True, False, True, True]])
    counted = np.array([[True, False, True, True]])
    found = transitions(hit, counted)
    assert (found.t00[0], found.t01[0], found.t10[0], found.t11[0]) == (0, 0, 0, 1)


counts = st.integers(0, 300)


@settings(max_examples=150, deadline=None)
@given(counts, counts, counts, counts)
def test_christoffersen_is_the_formula_as_written(t00, t01, t10, t11):
    coverage = kupiec(each(t01 + t11), each(t00 + t01 + t10 + t11), NINETY_NINE)
    with np.errstate(all="raise"):
        found = christoffersen(Transitions(each(t00), each(t01), each(t10), each(t11)), coverage)
    independence, both = found.independence, found.conditional_coverage
    if not (t00 + t01 and t10 + t11):
        want = NoTest.NOTHING_TO_COMPARE if t00 + t01 + t10 + t11 else NoTest.NO_DAYS
        for test in (independence, both):
            assert test.reason.tolist() == [want]
            assert np.isnan(test.statistic[0])
            assert np.isnan(test.p_value[0])
        return
    every = t00 + t01 + t10 + t11
    pi01, pi11, pi = t01 / (t00 + t01), t11 / (t10 + t11), (t01 + t11) / every
    apart = power_log(1 - pi01, t00) + power_log(pi01, t01) + power_log(1 - pi11, t10) + power_log(pi11, t11)
    together = power_log(1 - pi, t00 + t10) + power_log(pi, t01 + t11)
    assert independence.statistic[0] == pytest.approx(2 * (apart - together), rel=1e-9, abs=1e-9)
    assert independence.statistic[0] >= 0
    assert independence.p_value[0] == pytest.approx(stats.chi2.sf(independence.statistic[0], 1), rel=1e-9, abs=1e-300)
    assert both.statistic[0] == pytest.approx(coverage.statistic[0] + independence.statistic[0], rel=1e-12)
    assert both.p_value[0] == pytest.approx(stats.chi2.sf(both.statistic[0], 2), rel=1e-9, abs=1e-300)


def test_subjects_do_not_disturb_each_other():
    hit = np.random.RandomState(3).random_sample((50, 250)) < 0.02
    hit[7] = False
    hit[8] = True
    counted = np.ones_like(hit)
    counted[9] = False
    hit &= counted
    with np.errstate(all="raise"):
        coverage = kupiec(hit.sum(axis=1), counted.sum(axis=1), NINETY_NINE)
        together = christoffersen(transitions(hit, counted), coverage)
    odd = [together.independence.reason[row] for row in (7, 8, 9)]
    assert odd == [NoTest.NOTHING_TO_COMPARE, NoTest.NOTHING_TO_COMPARE, NoTest.NO_DAYS]
    for row in range(50):
        one = slice(row, row + 1)
        alone = christoffersen(
            transitions(hit[one], counted[one]), kupiec(hit[one].sum(axis=1), counted[one].sum(axis=1), NINETY_NINE)
        )
        for name in ("independence", "conditional_coverage"):
            for part in ("statistic", "p_value", "reason"):
                np.testing.assert_array_equal(
                    getattr(getattr(together, name), part)[row], getattr(getattr(alone, name), part)[0]
                )


def test_conditional_coverage_lacks_what_coverage_lacks():
    nothing = Verdict.of(each(0.0), each(1.0), np.array([NoTest.NO_DAYS], dtype=np.int8))
    found = christoffersen(Transitions(each(10), each(2), each(2), each(1)), nothing)
    assert found.independence.reason.tolist() == [NoTest.NONE]
    assert found.conditional_coverage.reason.tolist() == [NoTest.NO_DAYS]
    assert np.isnan(found.conditional_coverage.p_value[0])


def test_clusters_are_found_and_lone_exceptions_are_not():
    """20 exceptions of 500: in pairs, or far apart."""
    pairs, apart = np.zeros((1, 500), dtype=bool), np.zeros((1, 500), dtype=bool)
    pairs[0, 10::50] = pairs[0, 11::50] = True
    apart[0, 10::25] = True
    whole = np.ones((1, 500), dtype=bool)
    coverage = kupiec(each(20), each(500), Decimal("0.96"))
    assert coverage.p_value[0] == pytest.approx(1)
    assert christoffersen(transitions(pairs, whole), coverage).independence.p_value[0] < 1e-6
    assert christoffersen(transitions(apart, whole), coverage).independence.p_value[0] > 0.1


# --- time until first failure --------------------------------------------------------------------------------------


@settings(max_examples=100, deadline=None)
@given(st.integers(1, 5000), st.sampled_from(CONFIDENCES))
def test_time_until_first_failure_is_the_formula_as_written(v, confidence):
    p = float(1 - Decimal(confidence))
    found = time_until_first_failure(each(v), Decimal(confidence))
    want = -2 * (math.log(p) + power_log(1 - p, v - 1)) + 2 * (math.log(1 / v) + power_log(1 - 1 / v, v - 1))
    assert found.statistic[0] == pytest.approx(want, rel=1e-9, abs=1e-9)
    assert found.p_value[0] == pytest.approx(stats.chi2.sf(found.statistic[0], 1), rel=1e-9)


def test_without_exception_there_is_no_time_until_it():
    found = time_until_first_failure(np.array([0, 1, 100]), NINETY_NINE)
    assert found.reason.tolist() == [NoTest.NO_EXCEPTION, NoTest.NONE, NoTest.NONE]
    assert np.isnan(found.statistic).tolist() == [True, False, False]
    assert found.statistic[1] == pytest.approx(-2 * math.log(0.01), rel=1e-13)
    assert found.statistic[2] == pytest.approx(0, abs=1e-10)
    with pytest.raises(ValueError, match="got -3"):
        time_until_first_failure(np.array([4, -3]), NINETY_NINE)


def test_every_reason_can_be_read():
    assert set(NO_TEST_TEXT) == set(NoTest)
