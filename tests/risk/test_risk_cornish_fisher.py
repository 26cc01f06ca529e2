"""Cornish-Fisher and the moments behind it: against scipy and quadrature, and what must hold of them."""

from decimal import Decimal
from functools import partial

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import integrate, stats
from tail_rows import (
    CONFIDENCES,
    NINETY_NINE,
    assert_every_subject_stands_alone,
    assert_homogeneous,
    assert_moved,
    assert_odd_rows,
    assert_same,
    assert_shortfall_not_below,
    crowd,
    fat_tailed,
    figures,
    often,
    panels,
)

from monitor.risk.cornish_fisher import (
    cornish_fisher,
    cornish_fisher_at,
    expansion,
    fit_cornish_fisher,
    in_domain,
    standard_cornish_fisher_tail,
)
from monitor.risk.figures import Lack
from monitor.risk.moments import skewness_and_kurtosis
from monitor.risk.normal import normal


def inside(skewness, part):
    """Excess kurtosis at that part of the way through the domain, whose bounds are the roots of 4 a c = S^2 / 9."""
    square = skewness**2
    middle = (1 - square / 36) / 2
    half = np.sqrt(max(middle**2 - square / 36, 0.0))
    return 8 * (square / 6 + middle + (2 * part - 1) * half)


PAIRS = st.tuples(st.floats(-2.48, 2.48), st.floats(0.001, 0.999)).map(lambda pair: (pair[0], inside(*pair)))


def standard_tail(skewness, kurtosis, share):
    quantile, shortfall = standard_cornish_fisher_tail(np.array([skewness]), np.array([kurtosis]), share)
    return quantile[0], shortfall[0]


# --- the moments ---------------------------------------------------------------------------------------------------


def test_moments_of_scenarios_agree_with_scipy():
    random = np.random.default_rng(6)
    rows = np.concatenate([random.standard_t(4, size=(50, 250)) * 1e5, random.exponential(size=(50, 250)) + 1e6])
    skewness, kurtosis = skewness_and_kurtosis(rows)
    np.testing.assert_allclose(skewness, stats.skew(rows, axis=1), rtol=1e-8, atol=1e-12)
    np.testing.assert_allclose(kurtosis, stats.kurtosis(rows, axis=1), rtol=1e-8, atol=1e-12)


def test_moments_worked_by_hand():
    """0, 0, 0, 4: mean 1, m2 = 3, m3 = 6, m4 = 21, so that g1 = 2 / sqrt(3) and g2 = 7 / 3 - 3."""
    skewness, kurtosis = skewness_and_kurtosis(np.array([[0.0, 0.0, 0.0, 4.0], [4.0, 4.0, 4.0, 0.0]]))
    assert skewness == pytest.approx([2 / 3**0.5, -2 / 3**0.5], rel=1e-14)
    assert kurtosis == pytest.approx([-2 / 3] * 2, rel=1e-14)


@pytest.mark.parametrize("n", [5, 30, 250])
def test_one_outlier_has_the_largest_kurtosis_that_so_many_scenarios_can_show(n):
    """n - 5 + 1 / (n - 1): the bound that the docstring names, worked out for 1 of n scenarios."""
    _, kurtosis = skewness_and_kurtosis(np.eye(1, n))
    assert kurtosis[0] == pytest.approx(n - 5 + 1 / (n - 1), rel=1e-12)


def test_a_level_far_from_zero_hardly_touches_the_moments():
    """NumAcc4 of NIST StRD shifted likewise: 0.1 about 10,000,000. Two values in equal parts have g1 = 0, g2 = -2."""
    row = 1e7 + np.tile([0.25, -0.25], 500)
    skewness, kurtosis = skewness_and_kurtosis(np.stack([row, row + np.arange(1000) % 3 * 1e-3]))
    assert (skewness[0], kurtosis[0]) == (0, -2)
    exact = np.tile([0.25, -0.25], 500) + np.arange(1000) % 3 * 1e-3
    assert skewness[1] == pytest.approx(stats.skew(exact), abs=1e-8)
    assert kurtosis[1] == pytest.approx(stats.kurtosis(exact), abs=1e-6)


def test_where_there_is_no_spread_there_are_no_moments():
    apart = np.array([1.0, -1.0, 0.0, 0.0, 0.0, 0.0, 1.0])
    with np.errstate(all="ignore"):
        skewness, kurtosis = skewness_and_kurtosis(
            np.stack([apart * 0 + 0.1, apart * 0, apart * 1e200, apart * 1e-200])
        )
    assert np.isnan(skewness).all()
    assert np.isnan(kurtosis).all()


# --- the expansion -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("skewness", [-1.5, -0.5, 0.0, 0.5, 1.5])
@pytest.mark.parametrize("share", [0.1, 0.01, 0.001])
@pytest.mark.parametrize("part", [0.1, 0.9])
def test_shortfall_is_the_integral_of_the_expansion_over_the_tail(skewness, share, part):
    kurtosis = inside(skewness, part)
    quantile, shortfall = standard_tail(skewness, kurtosis, share)
    mean, _ = integrate.quad(
        lambda u: float(expansion(u, skewness, kurtosis)) * stats.norm.pdf(u), -40, stats.norm.ppf(share), epsabs=1e-13
    )
    assert shortfall == pytest.approx(-mean / share, rel=1e-9)
    assert quantile == pytest.approx(-float(expansion(stats.norm.ppf(share), skewness, kurtosis)), rel=1e-12)


@often
@given(thousandths=st.tuples(st.integers(-3000, 3000), st.integers(-2000, 14_000)))
def test_the_domain_is_where_the_expansion_never_falls(thousandths):
    skewness, kurtosis = thousandths[0] / 1000, thousandths[1] / 1000
    far = np.geomspace(20, 1e6, 2000)
    z = np.concatenate([-far, np.linspace(-20, 20, 20_001), far])
    # The derivative of each term of the formula, term by term.
    slope = 1 + skewness * z / 3 + kurtosis * (z**2 - 1) / 8 - skewness**2 * (6 * z**2 - 5) / 36
    lowest = slope.min()
    if abs(lowest) > 1e-3:
        assert in_domain(np.array([skewness]), np.array([kurtosis])).tolist() == [lowest > 0]


def test_the_ends_of_the_domain():
    skewness = np.array([0.0, 0.0, 0.0, 0.0, 6.5, -6.5, 15.0, np.nan, 0.0])
    kurtosis = np.array([0.0, 8.0, -1e-9, 8 + 1e-9, 55.0, 55.0, 275.0, 3.0, np.nan])
    assert in_domain(skewness, kurtosis).tolist() == [True, True] + [False] * 7


@often
@given(pair=PAIRS, share=st.floats(1e-5, 0.9))
def test_in_the_domain_shortfall_is_never_below_value_at_risk(pair, share):
    assert in_domain(*map(np.array, pair))
    quantile, shortfall = standard_tail(*pair, share)
    assert shortfall >= quantile - 1e-12 * abs(quantile)


@often
@given(pair=PAIRS)
def test_in_the_domain_more_confidence_is_never_less_risk(pair):
    tails = np.array([standard_tail(*pair, share) for share in np.geomspace(0.9, 1e-6, 200)])
    assert (np.diff(tails, axis=0) >= -1e-12).all()


def test_outside_the_domain_shortfall_can_be_below_value_at_risk():
    """Why nothing is told there: skewness 0, excess kurtosis -2 at 99.9 %."""
    quantile, shortfall = standard_tail(0.0, -2.0, 0.001)
    assert shortfall < quantile - 0.3
    assert not in_domain(np.array(0.0), np.array(-2.0))


def test_without_skewness_and_kurtosis_it_is_the_normal():
    quantile, shortfall = standard_tail(0.0, 0.0, 0.01)
    assert (quantile, shortfall) == pytest.approx((2.3263478740408408, 2.6652142203), rel=1e-10)


# --- the method ----------------------------------------------------------------------------------------------------


def mostly_inside(seed, subjects=200):
    random = np.random.default_rng(seed)
    return random.standard_t(8, size=(subjects, 120)) * random.uniform(1, 1e5, size=(subjects, 1)) + random.normal(
        size=(subjects, 1)
    )


@pytest.mark.parametrize("drift", ["zero", "sample"])
@pytest.mark.parametrize("days", [1, 10])
def test_a_row_is_measured_by_its_own_moments(drift, days):
    rows = mostly_inside(1)
    tail = cornish_fisher(rows, NINETY_NINE, days, drift)
    z = stats.norm.ppf(0.01)
    for place in np.flatnonzero(tail.value_at_risk.lack == Lack.NONE)[:40]:
        row = rows[place]
        mean, sigma = (row.mean() if drift == "sample" else 0.0), row.std(ddof=1)
        quantile = float(expansion(z, stats.skew(row), stats.kurtosis(row)))
        wanted = -days * mean - days**0.5 * sigma * quantile
        assert tail.value_at_risk.value[place] == pytest.approx(wanted, rel=1e-10)


def test_outside_the_domain_there_is_no_figure():
    rows = mostly_inside(2)
    found = in_domain(stats.skew(rows, axis=1), stats.kurtosis(rows, axis=1))
    assert 20 < found.sum() < 190
    tail = cornish_fisher(rows, NINETY_NINE)
    for answer in (tail.value_at_risk, tail.expected_shortfall):
        np.testing.assert_array_equal(answer.lack, np.where(found, Lack.NONE, Lack.OUTSIDE_DOMAIN))
        np.testing.assert_array_equal(np.isnan(answer.value), ~found)


def test_several_confidences_from_one_fit_are_the_same_to_the_bit():
    rows = mostly_inside(3, subjects=20)
    levels = [Decimal("0.95"), NINETY_NINE]
    for level, tail in zip(levels, cornish_fisher_at(rows, levels, 10, "sample"), strict=True):
        assert_same(tail, cornish_fisher(rows, level, 10, "sample"))


def test_losses_that_are_fatter_than_profits_risk_more():
    random = np.random.default_rng(3)
    losing = -random.gamma(4, size=(1, 2000)) + random.standard_t(6, size=(1, 2000))
    losing -= losing.mean()
    both = np.concatenate([losing, -losing])
    fit = fit_cornish_fisher(both, "zero")
    assert fit.lack.tolist() == [Lack.NONE] * 2
    assert fit.skewness[0] == pytest.approx(-fit.skewness[1], rel=1e-12)
    assert fit.skewness[0] < -0.3
    by_normal, corrected = normal(both, NINETY_NINE), cornish_fisher(both, NINETY_NINE)
    for one, other in zip(figures(by_normal), figures(corrected), strict=True):
        assert other[0] > one[0] > other[1]


@often
@given(pnl=st.one_of(panels(), fat_tailed()), power=st.integers(-20, 20), confidence=CONFIDENCES)
@pytest.mark.parametrize("drift", ["zero", "sample"])
def test_homogeneous(drift, pnl, power, confidence):
    assert_homogeneous(partial(cornish_fisher, confidence=confidence, drift=drift), pnl, 2.0**power)


@often
@given(pnl=fat_tailed(), factor=st.floats(1e-3, 1e3))
def test_homogeneous_in_any_factor(pnl, factor):
    assert_homogeneous(partial(cornish_fisher, confidence=NINETY_NINE), pnl, factor, rtol=1e-9)


@often
@given(pnl=fat_tailed(), shift=st.floats(-1e5, 1e5), days=st.integers(1, 20))
def test_a_sure_gain_a_day_moves_the_figure_with_drift_and_not_without(pnl, shift, days):
    method = partial(cornish_fisher, confidence=NINETY_NINE, horizon_days=days)
    assert_moved(partial(method, drift="sample"), pnl, shift, -shift * days, rtol=1e-8, atol=1e-4)
    assert_moved(method, pnl, shift, 0.0, rtol=1e-8, atol=1e-4)


@often
@given(pnl=st.one_of(panels(), fat_tailed()), confidence=CONFIDENCES, days=st.integers(1, 20))
@pytest.mark.parametrize("drift", ["zero", "sample"])
def test_shortfall_is_never_below_value_at_risk(drift, pnl, confidence, days):
    assert_shortfall_not_below(cornish_fisher(pnl, confidence, days, drift))


@often
@given(pnl=fat_tailed(), days=st.integers(2, 250))
def test_without_drift_it_grows_with_the_root_of_time(pnl, days):
    day, longer = (figures(cornish_fisher(pnl, NINETY_NINE, horizon)) for horizon in (1, days))
    for one, many in zip(day, longer, strict=True):
        np.testing.assert_allclose(many, one * np.sqrt(days), rtol=1e-14)


@pytest.mark.parametrize(("confidence", "too_much"), [("0.99", True), ("0.96", True), ("0.955", False), ("0.9", False)])
def test_which_way_the_root_of_time_errs_with_fat_tails(confidence, too_much):
    """Ten independent days have K / 10; keeping K is too much from 95.9 % up, for the shortfall from 84.2 % up."""
    share = float(1 - Decimal(confidence))
    (kept, kept_mean), (right, right_mean) = standard_tail(0.0, 3.0, share), standard_tail(0.0, 0.3, share)
    assert (kept > right) == too_much
    assert kept_mean > right_mean


def test_monotonicity_does_not_hold():
    """A windfall on the best day only adds profit, and yet it adds risk: it widens sigma and fattens the tails."""
    row = np.random.default_rng(8).standard_t(8, size=(1, 250))
    richer = row.copy()
    richer[0, np.argmax(row)] += 0.2
    before, after = (cornish_fisher(rows, NINETY_NINE).value_at_risk for rows in (row, richer))
    assert before.lack.tolist() == after.lack.tolist() == [Lack.NONE]
    assert after.value[0] > before.value[0] + 0.02


def test_subadditivity_does_not_hold():
    """Two series alike; together they have another skewness and kurtosis than either, and more risk than both."""
    random = np.random.default_rng(2005)
    one = random.standard_t(6, size=250)
    other = one * random.uniform(0.5, 1) + random.standard_t(6, size=250) * random.uniform(0, 0.3)
    shortfall = cornish_fisher(np.stack([one, other, one + other]), NINETY_NINE).expected_shortfall.value
    assert shortfall[2] > 1.02 * (shortfall[0] + shortfall[1])


@pytest.mark.parametrize("drift", ["zero", "sample"])
def test_every_subject_stands_alone(drift):
    rows = crowd()
    method = partial(cornish_fisher, confidence=NINETY_NINE, horizon_days=10, drift=drift)
    assert (method(rows).value_at_risk.lack == Lack.NONE).sum() > 400
    assert_every_subject_stands_alone(method, rows, [*range(16), 255, 256, 511, 999])


@pytest.mark.parametrize("drift", ["zero", "sample"])
def test_odd_rows(drift):
    outside = ("mostly zeros", "all zero but one", "one outlier", "two values")
    not_finite = ("a missing scenario", "an infinite profit", "an infinite loss")
    wanted = {
        **dict.fromkeys(outside, Lack.OUTSIDE_DOMAIN),
        **dict.fromkeys(not_finite, Lack.NOT_FINITE),
        **dict.fromkeys(("overflowing", "squares overflow", "squares vanish"), Lack.OUT_OF_RANGE),
        "constant": Lack.CONSTANT,
    }
    assert_odd_rows(partial(cornish_fisher, confidence=NINETY_NINE, horizon_days=10, drift=drift), wanted)


def test_few_scenarios():
    for n, lack in ((0, Lack.TOO_SHORT), (1, Lack.TOO_SHORT), (2, Lack.OUTSIDE_DOMAIN)):
        tail = cornish_fisher(np.arange(2.0 * n).reshape(2, n), NINETY_NINE)
        assert tail.value_at_risk.lack.tolist() == [lack] * 2
    assert cornish_fisher(np.zeros((1, 2)), NINETY_NINE).value_at_risk.value.tolist() == [0]


def test_the_parameters_are_checked():
    rows = np.ones((1, 5))
    with pytest.raises(ValueError, match="zero, sample"):
        cornish_fisher(rows, NINETY_NINE, 1, "none")
    with pytest.raises(ValueError, match="at least 1 day"):
        cornish_fisher(rows, NINETY_NINE, 0)
    with pytest.raises(TypeError, match="Decimal"):
        cornish_fisher(rows, 0.99)
