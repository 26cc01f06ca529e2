"""Age-weighted historical simulation against exact arithmetic, and what must hold of it."""

import math
from decimal import Decimal
from fractions import Fraction
from functools import partial

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tail_rows import (
    CONFIDENCES,
    NINETY_NINE,
    ODD_ROWS,
    assert_every_subject_stands_alone,
    assert_homogeneous,
    assert_moved,
    assert_odd_rows,
    assert_shortfall_not_below,
    crowd,
    fat_tailed,
    figures,
    often,
    panels,
)

from monitor.risk.age_weighted import age_weighted, age_weights
from monitor.risk.figures import Lack
from monitor.risk.historical import historical
from monitor.risk.tail import FitNote

DECAYS = st.sampled_from([0.5, 0.94, 0.97, 0.99, 0.995])
NEARLY_ONE = math.nextafter(1, 0)


def by_definition(row, confidence, decay):
    """(value at risk, shortfall) in fractions, one scenario after another, worst first."""
    share, decay, n = 1 - Fraction(confidence), Fraction(str(decay)), len(row)
    losses = sorted(((-Fraction(pnl), n - 1 - place) for place, pnl in enumerate(row.tolist())), reverse=True)
    filled, lost, value_at_risk = Fraction(0), Fraction(0), None
    for loss, age in losses:
        weight = (1 - decay) * decay**age / (1 - decay**n)
        lost += min(weight, share - filled) * loss
        filled = min(filled + weight, share)
        if value_at_risk is None and filled >= share * (1 - Fraction(1, 10**12)):
            value_at_risk = loss
    return float(value_at_risk), float(lost / share)


def assert_by_definition(pnl, confidence, decay):
    tail = age_weighted(pnl, confidence, decay)
    wanted = [by_definition(row, confidence, decay) for row in pnl]
    assert tail.value_at_risk.value.tolist() == [value_at_risk for value_at_risk, _ in wanted]
    size = np.abs(pnl).max(initial=0)
    np.testing.assert_allclose(tail.expected_shortfall.value, [es for _, es in wanted], rtol=1e-11, atol=1e-11 * size)


@often
@given(pnl=panels(), confidence=CONFIDENCES, decay=DECAYS)
def test_few_scenarios_with_many_ties_by_definition(pnl, confidence, decay):
    assert_by_definition(pnl, confidence, decay)


# With 0.995 a fifth of the scenarios can hold the tail and is picked out first; with 0.97 all are sorted.
@pytest.mark.parametrize("decay", [0.995, 0.97])
@pytest.mark.parametrize("confidence", ["0.95", "0.99"])
def test_a_whole_window_by_definition(decay, confidence):
    random = np.random.default_rng(4)
    rows = np.round(random.standard_t(4, size=(4, 400)) * 100, 2)
    rising = np.sort(rows[:1], axis=1)  # the worst are the oldest and lightest: as many as can be are needed
    tied = np.round(rows[:2] / 100)
    assert_by_definition(np.concatenate([rows, rising, rising[:, ::-1], tied]), Decimal(confidence), decay)


def test_the_weights_fall_with_age_and_add_up_to_one():
    weights = age_weights(3, 0.5)
    assert weights.tolist() == pytest.approx([1 / 7, 2 / 7, 4 / 7], rel=1e-15)
    assert age_weights(2000, 0.995).sum() == pytest.approx(1, rel=1e-14)
    assert age_weights(5, 0.9)[-1] == pytest.approx(0.1 / (1 - 0.9**5), rel=1e-14)


@pytest.mark.parametrize("hundredths", range(1, 50))
def test_weights_that_fill_the_tail_in_decimals_fill_it_in_floats(hundredths):
    """Two scenarios, decay so chosen that the older weighs 1 - c; with it alone the tail is full, exactly."""
    decay = hundredths / (100 - hundredths)
    tail = age_weighted(np.array([[-5.0, 1.0]]), 1 - Decimal(hundredths) / 100, decay)
    assert tail.value_at_risk.value[0] == 5
    assert tail.expected_shortfall.value[0] == pytest.approx(5, rel=1e-14)
    assert tail.note.tolist() == [FitNote.AS_ASKED]


@often
@given(pnl=st.one_of(panels(), fat_tailed()), confidence=CONFIDENCES)
def test_with_hardly_any_decay_it_is_historical_simulation(pnl, confidence):
    if pnl.shape[1] * (1 - confidence) < 1:
        pnl = np.tile(pnl, 200)
    for one, other in zip(
        figures(age_weighted(pnl, confidence, NEARLY_ONE)), figures(historical(pnl, confidence)), strict=True
    ):
        np.testing.assert_allclose(one, other, rtol=1e-10, atol=1e-10 * np.abs(pnl).max())


@often
@given(pnl=panels(), confidence=CONFIDENCES, decay=DECAYS)
def test_in_which_order_equal_scenarios_are_taken_changes_nothing(pnl, confidence, decay):
    """Part the ties by a billionth, the newer once below and once above the older: the figures move by no more."""
    hair = 1e-9 * np.arange(pnl.shape[1])
    wanted = figures(age_weighted(pnl, confidence, decay))
    for nudge in (hair, -hair):
        for one, other in zip(wanted, figures(age_weighted(pnl + nudge, confidence, decay)), strict=True):
            np.testing.assert_allclose(one, other, rtol=0, atol=1e-7)


def test_one_scenario_that_outweighs_the_tail_is_told_for_its_subject_alone():
    old = np.where(np.arange(500) == 100, -9.0, np.linspace(-1, 1, 500))
    new = np.where(np.arange(500) == 499, -9.0, np.linspace(1, -1, 500))
    both = np.where(np.arange(500) == 100, -9.0, new)
    tail = age_weighted(np.stack([old, new, both, np.zeros(500)]), NINETY_NINE, 0.94)
    assert tail.note.tolist() == [FitNote.AS_ASKED, FitNote.ONE_SCENARIO, FitNote.AS_ASKED, FitNote.AS_ASKED]
    assert tail.exact_tail
    assert (tail.value_at_risk.value[1], tail.expected_shortfall.value[1]) == (9, 9)
    assert tail.expected_shortfall.value[0] > tail.value_at_risk.value[0]


@pytest.mark.parametrize("age", [28, 29])
def test_at_99_percent_and_decay_094_each_of_the_newest_29_outweighs_the_tail(age):
    row = np.where(np.arange(500) == 499 - age, -9.0, 0.0)[np.newaxis]
    noted = age_weighted(row, NINETY_NINE, 0.94).note[0] == FitNote.ONE_SCENARIO
    assert noted == (age < 29)


@often
@given(pnl=st.one_of(panels(), fat_tailed()), power=st.integers(-20, 20), confidence=CONFIDENCES, decay=DECAYS)
def test_homogeneous(pnl, power, confidence, decay):
    assert_homogeneous(partial(age_weighted, confidence=confidence, decay=decay), pnl, 2.0**power)
    assert_homogeneous(partial(age_weighted, confidence=confidence, decay=decay), pnl, 3.3, rtol=1e-12)


@often
@given(pnl=st.one_of(panels(), fat_tailed()), confidence=CONFIDENCES, decay=DECAYS, days=st.integers(1, 20))
def test_shortfall_is_never_below_value_at_risk(pnl, confidence, decay, days):
    assert_shortfall_not_below(age_weighted(pnl, confidence, decay, days))


@often
@given(pnl=panels(), shift=st.integers(-(10**6), 10**6), confidence=CONFIDENCES, decay=DECAYS)
def test_a_sure_gain_lowers_the_risk_by_itself(pnl, shift, confidence, decay):
    assert_moved(partial(age_weighted, confidence=confidence, decay=decay), pnl, shift, -shift)


@pytest.mark.parametrize("method", [historical, partial(age_weighted, decay=0.97)], ids=["historical", "age_weighted"])
@often
@given(pnl=panels(), confidence=CONFIDENCES, seed=st.integers(0, 999))
def test_what_never_pays_less_never_risks_more(method, pnl, confidence, seed):
    random = np.random.default_rng(seed)
    better = pnl + np.where(random.uniform(size=pnl.shape) < 0.5, 0.0, random.exponential(1e3, size=pnl.shape))
    before, after = (figures(method(rows, confidence=confidence)) for rows in (pnl, better))
    assert (after[0] <= before[0]).all()
    assert (after[1] <= before[1] + 1e-12 * np.abs(pnl).max()).all()


@often
@given(pnl=panels(least_subjects=2), confidence=CONFIDENCES, decay=DECAYS)
def test_shortfall_is_subadditive(pnl, confidence, decay):
    together = age_weighted(pnl.sum(axis=0, keepdims=True), confidence, decay).expected_shortfall.value[0]
    apart = age_weighted(pnl, confidence, decay).expected_shortfall.value.sum()
    assert together <= apart + 1e-9 * np.abs(pnl).max() + 1e-9


@often
@given(pnl=st.one_of(panels(), fat_tailed()), levels=st.tuples(CONFIDENCES, CONFIDENCES), decay=DECAYS)
def test_more_confidence_is_never_less_risk(pnl, levels, decay):
    less, more = (figures(age_weighted(pnl, confidence, decay)) for confidence in sorted(levels))
    for low, high in zip(less, more, strict=True):
        assert (high >= low - 1e-12 * np.abs(pnl).max()).all()


@often
@given(pnl=panels(), days=st.integers(2, 250))
def test_grows_with_the_root_of_time(pnl, days):
    day, longer = (figures(age_weighted(pnl, NINETY_NINE, 0.97, horizon)) for horizon in (1, days))
    for one, many in zip(day, longer, strict=True):
        np.testing.assert_allclose(many, one * np.sqrt(days), rtol=1e-14)


@pytest.mark.parametrize("decay", [0.94, 0.995])
def test_every_subject_stands_alone(decay):
    method = partial(age_weighted, confidence=NINETY_NINE, decay=decay, horizon_days=10)
    assert_every_subject_stands_alone(method, crowd(), [*range(16), 255, 256, 511, 999])


@pytest.mark.parametrize("decay", [0.94, 0.995])
def test_odd_rows(decay):
    not_finite = dict.fromkeys(("a missing scenario", "an infinite profit", "an infinite loss"), Lack.NOT_FINITE)
    wanted = {**not_finite, "overflowing": Lack.OUT_OF_RANGE}
    assert_odd_rows(partial(age_weighted, confidence=NINETY_NINE, decay=decay, horizon_days=10), wanted)
    noted = age_weighted(np.stack([ODD_ROWS[name] for name in not_finite]), NINETY_NINE, decay).note
    assert noted.tolist() == [FitNote.AS_ASKED] * 3


def test_few_scenarios():
    assert age_weighted(np.empty((2, 0)), NINETY_NINE, 0.94).value_at_risk.lack.tolist() == [Lack.TOO_SHORT] * 2
    one = age_weighted(np.array([[-3.0], [2.0]]), NINETY_NINE, 0.94)
    assert one.value_at_risk.value.tolist() == one.expected_shortfall.value.tolist() == [3, -2]
    assert one.note.tolist() == [FitNote.ONE_SCENARIO] * 2


def test_the_parameters_are_checked():
    rows = np.ones((1, 5))
    for decay in (0.0, 1.0, -0.5, 1.5, float("nan")):
        with pytest.raises(ValueError, match="decay"):
            age_weighted(rows, NINETY_NINE, decay)
        with pytest.raises(ValueError, match="decay"):
            age_weighted(np.empty((1, 0)), NINETY_NINE, decay)
    with pytest.raises(ValueError, match="at least 1 day"):
        age_weighted(rows, NINETY_NINE, 0.94, 0)
    with pytest.raises(TypeError, match="Decimal"):
        age_weighted(rows, 0.99, 0.94)
    with pytest.raises(ValueError, match=r"\(subjects, scenarios\)"):
        age_weighted(rows[0], NINETY_NINE, 0.94)
