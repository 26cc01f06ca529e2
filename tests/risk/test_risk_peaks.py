"""The generalised Pareto tail: its fit against scipy's, its figures, and what must hold of them."""

import os
import warnings
from decimal import Decimal
from fractions import Fraction
from functools import partial
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate, stats

from monitor.risk.figures import Lack
from monitor.risk.historical import historical
from monitor.risk.pareto_fit import SHAPE_FLOOR, _profile, _slope, fit_pareto
from monitor.risk.peaks_over_threshold import (
    LEAST_EXCEEDANCES,
    PeaksFit,
    fit_peaks,
    pareto_tail,
    peaks_over_threshold,
    probability_beyond,
    tail_count,
)
from monitor.risk.tail import FitNote

NINETY_NINE = Decimal("0.99")
often = settings(max_examples=15, deadline=None)
CONFIDENCES = st.sampled_from([Decimal(text) for text in ("0.9", "0.95", "0.975", "0.99", "0.995", "0.9999")])
# Set to 28 for 504 series against scipy, a few seconds; 4 keeps every build quick.
ROWS = int(os.environ.get("DUSKCHECK_SERIES_PER_FIT", "4"))


def excesses(shape, rows, k, seed):
    random = np.random.default_rng(seed)
    draws = stats.genpareto.rvs(shape, size=(rows, k), random_state=random)
    return draws * 10.0 ** random.uniform(-6, 6, size=(rows, 1))


def scipy_fit(row):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        unit = row.mean()
        shape, _, scale = stats.genpareto.fit(row / unit, floc=0)
    return shape, scale * unit


# --- the fit -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("shape", [-0.4, -0.1, 0.0, 0.25, 0.6, 1.5])
@pytest.mark.parametrize("k", [20, 60, 250])
def test_likelihood_is_never_below_scipys(shape, k):
    rows = excesses(shape, ROWS, k, seed=k)
    fit = fit_pareto(rows)
    assert fit.converged.all()
    for place, row in enumerate(rows):
        found_shape, found_scale = scipy_fit(row)
        wanted = stats.genpareto.logpdf(row, found_shape, scale=found_scale).sum()
        ours = stats.genpareto.logpdf(row, fit.shape[place], scale=fit.scale[place]).sum()
        assert fit.log_likelihood[place] == pytest.approx(ours, rel=1e-10, abs=1e-8)
        # Below -1 scipy's search runs up a likelihood that has no top.
        assert fit.log_likelihood[place] >= wanted - 1e-5 or found_shape < SHAPE_FLOOR


@pytest.mark.parametrize("shape", [-0.7, -0.3, 0.0, 0.3, 1.2])
def test_no_point_of_a_fine_grid_is_likelier(shape):
    rows = excesses(shape, 6, 25, seed=6)
    fit = fit_pareto(rows)
    for place, row in enumerate(rows):
        standard = row / row.max()
        t = np.expm1(np.linspace(-18, 12, 20_000))
        shapes = np.log1p(t[:, np.newaxis] * standard).mean(axis=1)
        allowed = shapes >= SHAPE_FLOOR
        levels = 25 * (np.log(t[allowed] / shapes[allowed]) - shapes[allowed] - 1 - np.log(row.max()))
        assert fit.log_likelihood[place] >= levels.max() - 1e-9


def test_no_fit_is_less_likely_than_the_floor():
    """Some of these rows have a lower maximum above the floor too."""
    rows = excesses(-0.5, 300, 20, seed=21)
    fit = fit_pareto(rows)
    at_floor = -20 * np.log(rows.max(axis=1))
    assert (fit.log_likelihood >= at_floor - 1e-9).all()
    assert 0 < (fit.shape == SHAPE_FLOOR).sum() < 300


def test_the_fit_is_at_the_top_to_the_last_digits():
    rows = excesses(0.2, 200, 50, seed=1)
    fit = fit_pareto(rows)
    standard = rows / rows.max(axis=1, keepdims=True)
    along = np.log1p(fit.shape / fit.scale * rows.max(axis=1))
    assert np.abs(_slope(standard, np.full(200, 50), along)).max() < 1e-13


@pytest.mark.parametrize(
    "along", [-2.0, -0.031, -0.0309, -0.0295, -1e-4, -1e-9, 0.0, 1e-9, 1e-3, 0.0295, 0.0296, 0.5, 6.0]
)
def test_the_slope_is_that_of_the_likelihood_on_both_sides_of_the_exponential(along):
    rows = excesses(0.1, 3, 40, seed=2)
    standard = rows / rows.max(axis=1, keepdims=True)
    count, h = np.full(3, 40), 1e-3

    def level(s):
        return _profile(standard, count, np.full(3, s))[2]

    with np.errstate(all="ignore"):
        far, near = level(along + 2 * h) - level(along - 2 * h), level(along + h) - level(along - h)
        slope = _slope(standard, count, np.full(3, along))
    assert slope == pytest.approx((8 * near - far) / (12 * h), rel=1e-7, abs=1e-9)


def test_excesses_of_very_different_size_settle():
    random = np.random.default_rng(22)
    rows = random.exponential(size=(100, 40))
    rows[:, 0] *= 10.0 ** random.uniform(0, 200, size=100)
    assert fit_pareto(rows).converged.all()


def test_zeros_are_no_excesses():
    row = excesses(0.3, 1, 40, seed=3)
    padded = np.concatenate([row, np.zeros((1, 15))], axis=1)
    one, other = fit_pareto(row), fit_pareto(padded)
    for field in ("shape", "scale", "log_likelihood"):
        assert getattr(other, field) == pytest.approx(getattr(one, field), rel=1e-11)


def test_excesses_spread_evenly_are_held_at_the_floor():
    row = np.linspace(0.0, 3.0, 31)[np.newaxis, 1:]
    fit = fit_pareto(row)
    assert fit.shape.tolist() == [SHAPE_FLOOR]
    assert fit.scale.tolist() == [3.0]
    assert fit.log_likelihood[0] == pytest.approx(-30 * np.log(3), rel=1e-14)
    assert fit_pareto(np.full((1, 30), 3.0)).shape.tolist() == [SHAPE_FLOOR]


def test_excesses_that_cannot_be_fitted_are_said_and_harm_no_neighbour():
    good = excesses(0.3, 1, 40, seed=4)[0]
    wide = good * 10.0 ** np.linspace(-300, 0, 40)
    with np.errstate(all="raise"):
        fit = fit_pareto(np.stack([good, np.zeros(40), np.full(40, np.nan), np.full(40, np.inf), wide, good]))
    assert fit.converged.tolist() == [True, False, False, False, True, True]
    assert np.isnan(fit.shape).tolist() == [False, True, True, True, False, False]
    assert fit.shape[0] == fit.shape[5] == fit_pareto(good[np.newaxis]).shape[0]
    assert fit_pareto(np.empty((0, 5))).shape.shape == (0,)
    assert fit_pareto(np.empty((2, 0))).converged.tolist() == [False, False]
    with pytest.raises(ValueError, match=r"\(subjects, excesses\)"):
        fit_pareto(good)


# --- the threshold -------------------------------------------------------------------------------------------------


def test_the_count_in_the_tail_is_exact():
    """As floats 0.07 x 300 is 21.000000000000004 and 0.29 x 100 is 28.999999999999996."""
    assert tail_count(Decimal("0.07"), 300) == 21
    assert tail_count(Decimal("0.29"), 100) == 29
    assert tail_count(Fraction(1, 3), 300) == 100
    assert tail_count(Decimal("0.1"), 259) == 25


def test_the_threshold_is_the_loss_after_the_worst_tenth():
    losses = np.arange(1.0, 301.0) ** 2
    fit = fit_peaks(-np.random.default_rng(0).permutation(losses)[np.newaxis])
    assert fit.threshold.tolist() == [270.0**2]
    assert fit.exceedances.tolist() == [30]
    wanted = fit_pareto(losses[np.newaxis, 270:] - 270.0**2)
    assert fit.shape == pytest.approx(wanted.shape, rel=1e-10)
    assert fit.scale == pytest.approx(wanted.scale, rel=1e-10)
    assert fit.log_likelihood == pytest.approx(wanted.log_likelihood, rel=1e-10)


def test_losses_that_tie_with_the_threshold_do_not_exceed_it():
    losses = np.concatenate([np.full(280, 5.0), 5 + excesses(0.2, 1, 20, seed=5)[0]])
    fit = fit_peaks(-losses[np.newaxis])
    assert (fit.threshold[0], fit.exceedances[0], fit.lack[0]) == (5.0, 20, Lack.NONE)
    confident = Decimal("0.94")
    inside, outside = (peaks_over_threshold(-losses[np.newaxis], c) for c in (Decimal("0.93"), confident))
    assert inside.note.tolist() == [FitNote.INSIDE_THRESHOLD]
    assert outside.note.tolist() == [FitNote.AS_ASKED]
    value_at_risk = 5 + stats.genpareto.isf(0.06 / (20 / 300), fit.shape[0], scale=fit.scale[0])
    assert outside.value_at_risk.value[0] == pytest.approx(value_at_risk, rel=1e-10)


def test_too_few_beyond_the_threshold_lack_both_figures_whatever_the_confidence():
    random = np.random.default_rng(7)
    for n, lack in ((10 * LEAST_EXCEEDANCES - 1, Lack.FEW_IN_TAIL), (10 * LEAST_EXCEEDANCES, Lack.NONE)):
        rows = random.standard_t(4, size=(3, n))
        for confidence in (Decimal("0.5"), NINETY_NINE):
            tail = peaks_over_threshold(rows, confidence)
            assert tail.value_at_risk.lack.tolist() == tail.expected_shortfall.lack.tolist() == [lack] * 3


# --- the figures ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("confidence", ["0.95", "0.99", "0.9995"])
def test_figures_are_those_of_the_fitted_tail(confidence):
    rows = np.random.default_rng(8).standard_t(5, size=(6, 500)) * 1e4
    fit = fit_peaks(rows)
    tail, four_days = (peaks_over_threshold(rows, Decimal(confidence), days) for days in (1, 4))
    share = float(1 - Decimal(confidence))
    for place in range(6):
        beyond = stats.genpareto(fit.shape[place], scale=fit.scale[place])
        quantile = fit.threshold[place] + beyond.isf(share * 10)
        assert tail.value_at_risk.value[place] == pytest.approx(quantile, rel=1e-10)
        excess = integrate.quad(lambda p, b=beyond: b.isf(10 * p), 0, share)[0] / share
        assert tail.expected_shortfall.value[place] == pytest.approx(fit.threshold[place] + excess, rel=1e-6)
        xi, beta, u = fit.shape[place], fit.scale[place], fit.threshold[place]
        closed = (tail.value_at_risk.value[place] + beta - xi * u) / (1 - xi)
        assert tail.expected_shortfall.value[place] == pytest.approx(closed, rel=1e-12)
    np.testing.assert_array_equal(four_days.value_at_risk.value, 2 * tail.value_at_risk.value)
    np.testing.assert_array_equal(four_days.expected_shortfall.value, 2 * tail.expected_shortfall.value)
    assert probability_beyond(fit, 500, tail.value_at_risk.value) == pytest.approx([share] * 6, rel=1e-10)


def fit_of(threshold, shape, scale, exceedances):
    one = np.ones(1)
    zero = np.zeros(1, dtype=np.int8)
    return PeaksFit(threshold * one, shape * one, scale * one, np.array([exceedances]), np.nan * one, zero, zero)


def test_the_exponential_is_no_gap_between_the_shapes():
    at = pareto_tail(fit_of(10.0, 0.0, 3.0, 50), 500, NINETY_NINE)
    assert at[0] == pytest.approx(10 + 3 * np.log(10), rel=1e-14)
    assert at[1] == pytest.approx(13 + 3 * np.log(10), rel=1e-14)
    assert probability_beyond(fit_of(10.0, 0.0, 3.0, 50), 500, at[0]) == pytest.approx(0.01, rel=1e-13)
    for shape in (-1e-9, 1e-9, 1e-14):
        near = pareto_tail(fit_of(10.0, shape, 3.0, 50), 500, NINETY_NINE)
        assert near[0] == pytest.approx(at[0], rel=1e-8)
        assert near[1] == pytest.approx(at[1], rel=1e-8)


def test_probabilities_beyond_a_tail_that_ends_and_below_the_threshold():
    ends_at_sixteen = fit_of(10.0, -0.5, 3.0, 50)
    found = [probability_beyond(ends_at_sixteen, 500, np.array([loss]))[0] for loss in (10.0, 13.0, 16.0, 99.0)]
    assert found == pytest.approx([0.1, 0.025, 0.0, 0.0], abs=1e-15)
    assert np.isnan(probability_beyond(ends_at_sixteen, 500, np.array([9.9]))[0])


def test_a_tail_without_a_mean_has_a_value_at_risk_alone():
    rows = -np.abs(stats.genpareto.rvs(2.0, size=(4, 400), random_state=np.random.default_rng(9)))
    assert (fit_peaks(rows).shape >= 1).all()
    tail = peaks_over_threshold(rows, NINETY_NINE)
    assert tail.expected_shortfall.lack.tolist() == [Lack.INFINITE_MEAN] * 4
    assert tail.value_at_risk.lack.tolist() == [Lack.NONE] * 4
    inside = peaks_over_threshold(rows, Decimal("0.9"))
    assert inside.expected_shortfall.lack.tolist() == [Lack.NONE] * 4


def test_inside_the_threshold_the_figures_are_historical():
    rows = np.random.default_rng(10).standard_t(4, size=(3, 400))
    for confidence in ("0.5", "0.8", "0.9"):
        tail, plain = (f(rows, Decimal(confidence), 10) for f in (peaks_over_threshold, historical))
        assert tail.note.tolist() == [FitNote.INSIDE_THRESHOLD] * 3
        np.testing.assert_array_equal(tail.value_at_risk.value, plain.value_at_risk.value)
        np.testing.assert_array_equal(tail.expected_shortfall.value, plain.expected_shortfall.value)
    assert peaks_over_threshold(rows, Decimal("0.9001")).note.tolist() == [FitNote.AS_ASKED] * 3


def test_a_long_sample_gives_the_quantile_it_was_drawn_from():
    row = np.random.default_rng(11).standard_t(4, size=(1, 100_000))
    tail = peaks_over_threshold(row, Decimal("0.999"), tail_share=Decimal("0.02"))
    assert tail.value_at_risk.value[0] == pytest.approx(stats.t.isf(0.001, 4), rel=0.03)
    assert fit_peaks(row, Decimal("0.02")).shape[0] == pytest.approx(0.25, abs=0.06)


def test_the_parameters_are_checked():
    rows = np.random.default_rng(12).normal(size=(1, 300))
    for wrong in (Decimal(0), Decimal(1), Decimal("NaN"), Decimal("Infinity"), Fraction(3, 2), Decimal("-0.1")):
        with pytest.raises(ValueError, match="tail share must be above 0 and below 1"):
            fit_peaks(rows, wrong)
    with pytest.raises(TypeError, match="Decimal or a Fraction"):
        peaks_over_threshold(rows, NINETY_NINE, tail_share=0.1)
    with pytest.raises(ValueError, match="confidence"):
        peaks_over_threshold(rows, Decimal(1))
    with pytest.raises(ValueError, match="at least 1 day"):
        peaks_over_threshold(rows, NINETY_NINE, 0)
    with pytest.raises(ValueError, match=r"\(subjects, scenarios\)"):
        peaks_over_threshold(rows[0], NINETY_NINE)


# --- what must hold ------------------------------------------------------------------------------------------------


@st.composite
def fat_tailed(draw):
    seed = draw(st.integers(0, 2**32 - 1))
    nu = draw(st.sampled_from([1.5, 2.5, 4.0, 12.0]))
    return np.random.default_rng(seed).standard_t(nu, size=(3, draw(st.sampled_from([200, 307])))) * 1e4


@st.composite
def in_cents(draw):
    """With ties and zeros as real books have them."""
    seed, largest = draw(st.integers(0, 2**32 - 1)), draw(st.sampled_from([3, 30, 10**6]))
    return np.random.default_rng(seed).integers(-largest, largest + 1, size=(3, 240)) / 100


def figures(tail):
    return [tail.value_at_risk.value, tail.expected_shortfall.value]


@often
@given(pnl=st.one_of(fat_tailed(), in_cents()), power=st.integers(-20, 20), confidence=CONFIDENCES)
def test_twice_the_position_is_twice_the_risk(pnl, power, confidence):
    before, after = (peaks_over_threshold(rows, confidence) for rows in (pnl, pnl * 2.0**power))
    for one, other in zip(figures(before), figures(after), strict=True):
        np.testing.assert_array_equal(other, one * 2.0**power)
    np.testing.assert_array_equal(before.note, after.note)


@often
@given(pnl=fat_tailed(), factor=st.floats(1e-3, 1e3), confidence=CONFIDENCES)
def test_homogeneous_in_any_factor(pnl, factor, confidence):
    before, after = (peaks_over_threshold(rows, confidence) for rows in (pnl, pnl * factor))
    for one, other in zip(figures(before), figures(after), strict=True):
        np.testing.assert_allclose(other, one * factor, rtol=1e-8)


@often
@given(pnl=fat_tailed(), shift=st.integers(-(10**5), 10**5), confidence=CONFIDENCES)
def test_a_sure_gain_lowers_risk_by_itself(pnl, shift, confidence):
    before, after = (peaks_over_threshold(rows, confidence) for rows in (pnl, pnl + shift))
    for one, other in zip(figures(before), figures(after), strict=True):
        np.testing.assert_allclose(other, one - shift, rtol=1e-7, atol=1e-3)


@often
@given(pnl=st.one_of(fat_tailed(), in_cents()), confidence=CONFIDENCES, days=st.integers(1, 20))
def test_shortfall_is_never_below_value_at_risk(pnl, confidence, days):
    tail = peaks_over_threshold(pnl, confidence, days)
    measured = tail.expected_shortfall.lack == Lack.NONE
    assert (tail.expected_shortfall.value >= tail.value_at_risk.value)[measured].all()


@often
@given(pnl=st.one_of(fat_tailed(), in_cents()))
def test_more_confidence_beyond_the_threshold_is_never_less_risk(pnl):
    tails = [peaks_over_threshold(pnl, Decimal(c)) for c in ("0.91", "0.95", "0.975", "0.99", "0.999", "0.99999")]
    for less, more in pairwise(tails):
        beyond = less.note != FitNote.INSIDE_THRESHOLD
        for low, high in zip(figures(less), figures(more), strict=True):
            assert ((high >= low) | np.isnan(low))[beyond].all()


@often
@given(pnl=st.one_of(fat_tailed(), in_cents()), seed=st.integers(0, 99))
def test_the_order_of_scenarios_and_of_subjects_does_not_matter(pnl, seed):
    random = np.random.default_rng(seed)
    shuffled, order = random.permuted(pnl, axis=1), random.permutation(3)
    straight = peaks_over_threshold(pnl, NINETY_NINE)
    for other in (
        peaks_over_threshold(shuffled, NINETY_NINE),
        peaks_over_threshold(np.asfortranarray(pnl), NINETY_NINE),
    ):
        for one, another in zip(figures(straight), figures(other), strict=True):
            np.testing.assert_array_equal(one, another)
    for one, another in zip(figures(straight), figures(peaks_over_threshold(pnl[order], NINETY_NINE)), strict=True):
        np.testing.assert_array_equal(one[order], another)


def crowd():
    """A thousand subjects of every sort, 300 scenarios."""
    random = np.random.default_rng(13)
    rows = random.standard_t(3.5, size=(1000, 300)) * 10.0 ** random.integers(-3, 8, size=(1000, 1))
    rows[::7] = random.normal(size=rows[::7].shape)
    rows[1::50], rows[5::50] = 0.0, 12.5
    rows[2::50, :150] = 0.0
    rows[3::50, 17], rows[4::50, 18] = np.nan, np.inf
    rows[6::50, 3] *= 1e6
    rows[7::50] = random.uniform(-1, 1, size=rows[7::50].shape)
    rows[8::50] = np.round(random.normal(size=rows[8::50].shape))
    return rows


@pytest.mark.parametrize("confidence", [Decimal("0.92"), NINETY_NINE])
def test_a_subject_alone_is_the_same_to_the_last_digit_as_in_a_crowd(confidence):
    rows = crowd()
    before = rows.copy()
    with np.errstate(all="raise"):
        together = peaks_over_threshold(rows, confidence)
    np.testing.assert_array_equal(rows, before)
    for place in [*range(16), 255, 256, 511, 999]:
        alone = peaks_over_threshold(rows[place : place + 1], confidence)
        for one, other in zip(figures(alone), figures(together), strict=True):
            np.testing.assert_array_equal(one[0], other[place])
        assert alone.value_at_risk.lack[0] == together.value_at_risk.lack[place]
        assert alone.expected_shortfall.lack[0] == together.expected_shortfall.lack[place]
        assert alone.note[0] == together.note[place]


# --- poor scenarios ------------------------------------------------------------------------------------------------

WALK = np.random.default_rng(14).standard_t(4, size=250) * 100
POOR = {
    "ordinary": (WALK, Lack.NONE),
    "flat": (np.zeros(250), Lack.NONE),
    "flat, negative zeros": (np.full(250, -0.0), Lack.NONE),
    "constant": (np.full(250, -3.7), Lack.CONSTANT),
    "missing": (np.where(np.arange(250) == 3, np.nan, WALK), Lack.NOT_FINITE),
    "infinite": (np.where(np.arange(250) == 3, -np.inf, WALK), Lack.NOT_FINITE),
    "mostly zeros": (np.where(np.arange(250) % 10 == 0, WALK, 0.0), Lack.FEW_IN_TAIL),
    "two values": (np.tile([5.0, -5.0], 125), Lack.FEW_IN_TAIL),
    "one outlier": (np.where(np.arange(250) == 9, -1e12, WALK), Lack.NONE),
    "squares overflow": (WALK * 1e200, Lack.NONE),
    "squares vanish": (WALK * 1e-200, Lack.NONE),
    "overflowing": (np.linspace(-1, 1, 250) ** 9 * 1.7e308, Lack.OUT_OF_RANGE),
    "never a loss": (np.abs(WALK) + 1, Lack.NONE),
}


def test_every_poor_row_gets_a_figure_or_its_reason_and_harms_no_neighbour():
    panel = np.stack([row for row, _ in POOR.values() for row in (row, POOR["missing"][0])])
    with np.errstate(all="raise"):
        tail = peaks_over_threshold(panel, NINETY_NINE, 10)
    assert [Lack(code) for code in tail.value_at_risk.lack[::2]] == [lack for _, lack in POOR.values()]
    assert (tail.value_at_risk.lack[1::2] == Lack.NOT_FINITE).all()
    for each in (tail.value_at_risk, tail.expected_shortfall):
        np.testing.assert_array_equal(np.isnan(each.value), each.lack != Lack.NONE)
    flat = list(POOR).index("flat") * 2
    for each in figures(tail):
        assert each[[flat, flat + 2]].tolist() == [0, 0]
        assert not np.signbit(each[[flat, flat + 2]]).any()
    assert tail.note[[flat, flat + 2]].tolist() == [FitNote.AS_ASKED] * 2
    gain = list(POOR).index("never a loss") * 2
    assert tail.value_at_risk.value[gain] < 0


def test_losses_capped_evenly_are_held_at_the_lowest_shape_and_say_so():
    row = np.linspace(-1, 1, 300)[np.newaxis]
    tail = peaks_over_threshold(row, NINETY_NINE)
    assert tail.note.tolist() == [FitNote.SHAPE_AT_FLOOR]
    assert tail.value_at_risk.value[0] == pytest.approx(0.98, abs=0.004)


@pytest.mark.parametrize("method", [peaks_over_threshold, partial(peaks_over_threshold, horizon_days=5)])
def test_no_scenario_no_subject_and_ten_thousand(method):
    assert method(np.empty((2, 0)), NINETY_NINE).value_at_risk.lack.tolist() == [Lack.TOO_SHORT] * 2
    assert method(np.ones((2, 1)), NINETY_NINE).value_at_risk.lack.tolist() == [Lack.CONSTANT] * 2
    assert method(np.empty((0, 300)), NINETY_NINE).value_at_risk.value.shape == (0,)
    rows = np.random.default_rng(15).standard_t(4, size=(10_000, 200))
    rows[::1000] = np.nan
    assert np.flatnonzero(method(rows, NINETY_NINE).value_at_risk.lack).tolist() == list(range(0, 10_000, 1000))
