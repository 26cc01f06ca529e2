"""What must hold of every method whatever the scenarios."""

from decimal import Decimal
from functools import partial

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from monitor.risk.historical import historical
from monitor.risk.normal import normal
from monitor.risk.probability import loss_probability
from monitor.risk.student import student_t
from monitor.risk.volatility import ewma, sample

often = settings(max_examples=40, deadline=None)
CONFIDENCES = st.sampled_from([Decimal(text) for text in ("0.9", "0.95", "0.975", "0.99", "0.995")])
METHODS = {
    "historical": historical,
    "normal": normal,
    "normal, drift": partial(normal, drift="sample"),
    "student_t": student_t,
    "student_t, drift": partial(student_t, drift="sample"),
}
every_method = pytest.mark.parametrize("method", METHODS.values(), ids=METHODS.keys())


@st.composite
def panels(draw, least_subjects=1):
    """P&L in cents of up to a few million, with ties and zeros as real books have them."""
    shape = (draw(st.integers(least_subjects, 4)), draw(st.integers(2, 60)))
    cents = st.one_of(st.integers(-(10**9), 10**9), st.integers(-3, 3))
    return draw(hnp.arrays(np.float64, shape, elements=cents.map(float))) / 100


@st.composite
def fat_tailed(draw):
    seed = draw(st.integers(0, 2**32 - 1))
    return np.random.default_rng(seed).standard_t(draw(st.sampled_from([2.5, 4.0, 12.0])), size=(3, 120)) * 1e4


def figures(tail):
    return [tail.value_at_risk.value, tail.expected_shortfall.value]


@every_method
@often
@given(pnl=st.one_of(panels(), fat_tailed()), power=st.integers(-20, 20), confidence=CONFIDENCES)
def test_twice_the_position_is_twice_the_risk(method, pnl, power, confidence):
    for before, after in zip(
        figures(method(pnl, confidence)), figures(method(pnl * 2.0**power, confidence)), strict=True
    ):
        np.testing.assert_array_equal(after, before * 2.0**power)


@every_method
@often
@given(pnl=fat_tailed(), factor=st.floats(1e-3, 1e3))
def test_homogeneous_in_any_factor(method, pnl, factor):
    for before, after in zip(
        figures(method(pnl, Decimal("0.99"))), figures(method(pnl * factor, Decimal("0.99"))), strict=True
    ):
        np.testing.assert_allclose(after, before * factor, rtol=1e-9)


@often
@given(pnl=panels(), shift=st.integers(-(10**6), 10**6), confidence=CONFIDENCES)
def test_a_sure_gain_lowers_historical_risk_by_itself(pnl, shift, confidence):
    before, after = historical(pnl, confidence), historical(pnl + shift, confidence)
    for old, new in zip(figures(before), figures(after), strict=True):
        np.testing.assert_allclose(new, old - shift, rtol=1e-12, atol=1e-6)


@often
@given(pnl=panels(), shift=st.integers(-1000, 1000), days=st.integers(1, 20))
def test_a_sure_gain_a_day_lowers_normal_risk_with_drift_by_itself_each_day(pnl, shift, days):
    method = partial(normal, confidence=Decimal("0.99"), horizon_days=days, drift="sample")
    before, after = method(pnl), method(pnl + shift)
    measured = (before.value_at_risk.lack == 0) & (after.value_at_risk.lack == 0)
    for old, new in zip(figures(before), figures(after), strict=True):
        np.testing.assert_allclose(new[measured], (old - shift * days)[measured], rtol=1e-9, atol=1e-4)


@every_method
@often
@given(pnl=st.one_of(panels(), fat_tailed()), confidence=CONFIDENCES, days=st.integers(1, 20))
def test_shortfall_is_never_below_value_at_risk(method, pnl, confidence, days):
    tail = method(pnl, confidence, days)
    measured = tail.value_at_risk.lack == 0
    assert (tail.expected_shortfall.value >= tail.value_at_risk.value)[measured].all()


@every_method
@often
@given(pnl=st.one_of(panels(), fat_tailed()), levels=st.tuples(CONFIDENCES, CONFIDENCES))
def test_more_confidence_is_never_less_risk(method, pnl, levels):
    less, more = (method(pnl, confidence) for confidence in sorted(levels))
    for low, high in zip(figures(less), figures(more), strict=True):
        slack = 1e-12 * np.abs(low)
        assert ((high >= low - slack) | np.isnan(low)).all()


@often
@given(pnl=panels(least_subjects=2), confidence=CONFIDENCES)
def test_historical_shortfall_is_subadditive(pnl, confidence):
    together = historical(pnl.sum(axis=0, keepdims=True), confidence).expected_shortfall.value[0]
    apart = historical(pnl, confidence).expected_shortfall.value.sum()
    assert together <= apart + 1e-9 * np.abs(pnl).max() + 1e-9


@often
@given(pnl=panels(), confidence=CONFIDENCES, seed=st.integers(0, 99))
def test_the_order_of_scenarios_does_not_matter_to_historical(pnl, confidence, seed):
    shuffled = np.random.default_rng(seed).permutation(pnl, axis=1)
    for one, other in zip(figures(historical(pnl, confidence)), figures(historical(shuffled, confidence)), strict=True):
        np.testing.assert_array_equal(one, other)


@pytest.mark.parametrize("method", [historical, normal, student_t])
@often
@given(pnl=st.one_of(panels(), fat_tailed()), days=st.integers(1, 250))
def test_risk_without_drift_grows_with_the_root_of_time(method, pnl, days):
    day, longer = method(pnl, Decimal("0.99")), method(pnl, Decimal("0.99"), days)
    for one, many in zip(figures(day), figures(longer), strict=True):
        np.testing.assert_allclose(many, one * np.sqrt(days), rtol=1e-12)


@pytest.fixture(scope="module")
def crowd():
    """A thousand subjects of every sort, 300 scenarios."""
    random = np.random.default_rng(11)
    rows = random.standard_t(3.5, size=(1000, 300)) * 10.0 ** random.integers(-3, 8, size=(1000, 1))
    rows[::7] = random.normal(size=rows[::7].shape)
    rows[1::50] = 0.0
    rows[2::50, :150] = 0.0
    rows[3::50, 17] = np.nan
    rows[4::50, 18] = np.inf
    rows[5::50] = 12.5
    rows[6::50, 3] *= 1e6
    return rows


def answers(rows):
    threshold = np.full(len(rows), 2.5)
    for method in METHODS.values():
        tail = method(rows, Decimal("0.99"), 10)
        yield from (tail.value_at_risk, tail.expected_shortfall)
    for drift in ("zero", "sample"):
        for distribution in ("normal", "student_t"):
            yield loss_probability(rows, threshold, 5, distribution, drift)
    yield sample(rows)
    yield ewma(rows, 0.94)


def assert_same(one, other):
    np.testing.assert_array_equal(one.value, other.value)
    np.testing.assert_array_equal(one.lack, other.lack)


def test_a_subject_alone_is_the_same_to_the_last_digit_as_in_a_crowd(crowd):
    in_crowd = list(answers(crowd))
    for place in [*range(16), 255, 256, 511, 999]:
        for alone, together in zip(answers(crowd[place : place + 1]), in_crowd, strict=True):
            np.testing.assert_array_equal(alone.value[0], together.value[place])
            assert alone.lack[0] == together.lack[place]


def test_the_order_of_subjects_does_not_matter(crowd):
    order = np.random.default_rng(5).permutation(len(crowd))
    for straight, shuffled in zip(answers(crowd), answers(crowd[order]), strict=True):
        np.testing.assert_array_equal(straight.value[order], shuffled.value)
        np.testing.assert_array_equal(straight.lack[order], shuffled.lack)


def test_the_layout_in_memory_does_not_matter(crowd):
    for straight, transposed in zip(answers(crowd), answers(np.asfortranarray(crowd)), strict=True):
        assert_same(straight, transposed)


def test_the_scenarios_given_are_left_as_they_were(crowd):
    before = crowd.copy()
    list(answers(crowd))
    np.testing.assert_array_equal(crowd, before)


@often
@given(pnl=fat_tailed(), confidence=CONFIDENCES, days=st.integers(1, 20))
@pytest.mark.parametrize("drift", ["zero", "sample"])
@pytest.mark.parametrize(("name", "method"), [("normal", normal), ("student_t", student_t)])
def test_the_probability_of_losing_more_than_value_at_risk_is_the_rest(name, method, drift, pnl, confidence, days):
    at_risk = method(pnl, confidence, days, drift).value_at_risk
    probability = loss_probability(pnl, at_risk.value, days, name, drift)
    np.testing.assert_allclose(probability.value, float(1 - confidence), rtol=1e-9)
