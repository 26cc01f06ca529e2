"""The test of expected shortfall: the statistic, its simulated distribution, critical values and p-values."""

import math
from decimal import Decimal

import numpy as np
import pytest
from scipy import stats

from monitor.risk.coverage import NoTest
from monitor.risk.randomness import random_state
from monitor.risk.shortfall_test import critical_value, p_value, shortfall_test, simulate_z2
from monitor.risk.student import standard_student_tail

NINETY_SEVEN_HALF = Decimal("0.975")
NAN = math.nan


def z2(pnl, value_at_risk, shortfall, confidence="0.975"):
    return shortfall_test(np.array(pnl), np.array(value_at_risk), np.array(shortfall), Decimal(confidence))


def test_the_statistic_by_hand():
    """Two exceptions of five days at 80 %: (-12/10 - 30/20) / (5 x 0.2) + 1."""
    found = z2([[-12.0, -8.0, 3.0, -30.0, 0.0]], [[8.0, 8, 8, 16, 16]], [[10.0, 10, 10, 20, 20]], "0.8")
    assert found.statistic == pytest.approx([1 - 1.2 - 1.5], rel=1e-14)
    assert (found.days[0], found.reason[0]) == (5, NoTest.NONE)


def test_without_exception_it_is_one_exactly():
    pnl = np.random.RandomState(1).standard_normal((20, 250))
    found = z2(pnl, np.full(pnl.shape, 10.0), np.full(pnl.shape, 12.0))
    assert found.statistic.tolist() == [1.0] * 20


def test_days_with_something_missing_do_not_count():
    whole = z2([[-12.0, 1.0]], [[8.0, 8.0]], [[10.0, 10.0]])
    for place in range(3):
        parts = [[[-12.0, -50.0, 1.0]], [[8.0, 8.0, 8.0]], [[10.0, 10.0, 10.0]]]
        for absent in (NAN, math.inf, -math.inf):
            parts[place][0][1] = absent
            found = z2(*parts)
            assert (found.statistic[0], found.days[0]) == (whole.statistic[0], 2)
    assert z2([[NAN]], [[1.0]], [[1.0]]).reason.tolist() == [NoTest.NO_DAYS]
    assert z2(np.empty((2, 0)), np.empty((2, 0)), np.empty((2, 0))).reason.tolist() == [NoTest.NO_DAYS] * 2
    assert z2(np.empty((0, 3)), np.empty((0, 3)), np.empty((0, 3))).statistic.shape == (0,)


@pytest.mark.parametrize("shortfall", [0.0, -0.0, -2.0])
def test_an_exception_without_shortfall_leaves_that_subject_without_result(shortfall):
    pnl = [[-1.0, 0.0], [1.0, 0.0], [-5.0, 0.0]]
    with np.errstate(all="raise"):
        found = z2(pnl, [[0.0, 0.0], [0.0, 0.0], [4.0, 4.0]], [[shortfall] * 2, [shortfall] * 2, [5.0, 5.0]])
    assert found.reason.tolist() == [NoTest.NO_SHORTFALL, NoTest.NONE, NoTest.NONE]
    assert np.isnan(found.statistic[0])
    assert found.statistic[1:] == pytest.approx([1.0, 1 - 1 / (2 * 0.025)])


def test_units_neighbours_and_strictness():
    random = np.random.RandomState(2)
    pnl, value_at_risk = random.standard_t(4, size=(40, 250)), random.uniform(1.5, 2.5, size=(40, 250))
    shortfall = value_at_risk * 1.3
    found = z2(pnl, value_at_risk, shortfall)
    scaled = z2(pnl * 8.0, value_at_risk * 8.0, shortfall * 8.0)
    np.testing.assert_array_equal(found.statistic, scaled.statistic)
    for row in range(40):
        alone = z2(pnl[row : row + 1], value_at_risk[row : row + 1], shortfall[row : row + 1])
        assert alone.statistic[0] == found.statistic[row]
    lower = z2(pnl - 0.01, value_at_risk, shortfall).statistic
    assert (lower <= found.statistic).all()
    assert (z2(pnl, value_at_risk, shortfall * 1.1).statistic >= found.statistic).all()
    equal = z2([[-2.0, -2.0]], [[2.0, 2.0]], [[3.0, 3.0]])
    assert equal.statistic.tolist() == [1.0]
    as_columns = shortfall_test(
        np.asfortranarray(pnl), np.asfortranarray(value_at_risk), np.asfortranarray(shortfall), NINETY_SEVEN_HALF
    )
    np.testing.assert_array_equal(as_columns.statistic, found.statistic)


@pytest.mark.parametrize("shapes", [((3,), (3,), (3,)), ((2, 3), (2, 4), (2, 3)), ((2, 3), (2, 3), (2, 4))])
def test_the_shapes_must_agree(shapes):
    with pytest.raises(ValueError, match=r"must all be \(subjects, days\)"):
        z2(*(np.zeros(shape) for shape in shapes))


@pytest.mark.parametrize("nu", [3.5, 8.0, math.inf])
@pytest.mark.parametrize(("days", "confidence"), [(250, "0.975"), (60, "0.99"), (500, "0.95")])
def test_right_forecasts_have_expectation_zero(nu, days, confidence):
    simulated = simulate_z2(days, Decimal(confidence), nu, random_state("mean"), 20_000)
    assert abs(simulated.mean()) < 4 * simulated.std() / math.sqrt(len(simulated))
    assert (np.diff(simulated) >= 0).all()
    no_exception = float(Decimal(confidence)) ** days
    spread = 4 * math.sqrt(no_exception * (1 - no_exception) / 20_000) + 1e-4
    assert (simulated == 1).mean() == pytest.approx(no_exception, abs=spread)
    assert simulated[-1] <= 1


@pytest.mark.parametrize("nu", [4.0, math.inf])
def test_drawing_the_tail_alone_is_drawing_every_day(nu):
    """Against whole records run through the statistic itself, by the two-sample test of Kolmogorov and Smirnov."""
    days, share = 120, 0.05
    quantile, shortfall = standard_student_tail(np.array([nu]), share)
    random = np.random.RandomState(11)
    pnl = random.standard_normal((8000, days)) if math.isinf(nu) else random.standard_t(nu, size=(8000, days))
    whole = shortfall_test(pnl, np.full(pnl.shape, quantile[0]), np.full(pnl.shape, shortfall[0]), Decimal("0.95"))
    tail = simulate_z2(days, Decimal("0.95"), nu, random_state("tail"), 8000)
    assert stats.ks_2samp(whole.statistic, tail).pvalue > 0.01


def test_a_replay_draws_the_same_and_t_tends_to_the_normal():
    first = simulate_z2(250, NINETY_SEVEN_HALF, 5.0, random_state("site", "z2"), 3000)
    np.testing.assert_array_equal(first, simulate_z2(250, NINETY_SEVEN_HALF, 5.0, random_state("site", "z2"), 3000))
    assert (first != simulate_z2(250, NINETY_SEVEN_HALF, 5.0, random_state("other", "z2"), 3000)).any()
    normal = simulate_z2(250, NINETY_SEVEN_HALF, math.inf, random_state("site", "z2"), 3000)
    nearly = simulate_z2(250, NINETY_SEVEN_HALF, 1e7, random_state("site", "z2"), 3000)
    assert nearly == pytest.approx(normal, abs=1e-5)


def test_long_records_are_simulated_in_pieces_that_all_count():
    simulated = simulate_z2(50_000, Decimal("0.5"), math.inf, random_state("long"), 100)
    assert len(simulated) == 100
    assert np.isfinite(simulated).all()
    assert len(set(simulated.tolist())) == 100
    assert abs(simulated.mean()) < 4 * simulated.std() / 10


def test_what_cannot_be_simulated_is_refused():
    for days, nu, paths in ((0, 5.0, 100), (250, 1.0, 100), (250, NAN, 100), (250, 5.0, 0)):
        with pytest.raises(ValueError, match="nu above 1"):
            simulate_z2(days, NINETY_SEVEN_HALF, nu, random_state(), paths)


def test_a_critical_value_is_an_order_statistic_with_its_error():
    found = critical_value(np.arange(10_000.0), 0.05)
    assert (found.value, found.paths) == (499, 10_000)
    assert found.standard_error == pytest.approx(math.sqrt(10_000 * 0.05 * 0.95), rel=1e-12)
    edge = critical_value(np.arange(1000.0), 0.01)
    assert edge.value == 9
    assert edge.standard_error == pytest.approx(math.sqrt(9.9), rel=1e-12)
    for level in (0.0, 1.0, -0.1, 0.0099):
        with pytest.raises(ValueError, match="10 of the 1000 paths"):
            critical_value(np.arange(1000.0), level)


def test_the_standard_error_is_what_repeating_shows():
    found = [
        critical_value(simulate_z2(250, NINETY_SEVEN_HALF, 5.0, random_state("again", str(turn)), 4000), 0.05)
        for turn in range(100)
    ]
    seen = np.std([one.value for one in found], ddof=1)
    told = np.mean([one.standard_error for one in found])
    assert seen == pytest.approx(told, rel=0.25)


def test_a_p_value_counts_the_record_itself():
    simulated = np.array([-2.0, -1.0, -1.0, 0.5, 1.0])
    found = p_value(np.array([-3.0, -2.0, -1.0, 0.0, 1.0, NAN]), simulated)
    assert found[:5] == pytest.approx(np.array([1, 2, 4, 4, 6]) / 6, rel=1e-14)
    assert np.isnan(found[5])
