"""The probability of a loss, empirical too, and the loss with a given probability."""

from decimal import Decimal

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.risk.figures import Lack
from monitor.risk.historical import historical
from monitor.risk.normal import normal
from monitor.risk.probability import loss_probability, loss_with_probability
from monitor.risk.student import student_t

often = settings(max_examples=20, deadline=None)
PROBABILITIES = st.sampled_from([Decimal(p) for p in ("0.5", "0.1", "0.05", "0.025", "0.01", "0.001", "0.07", "0.29")])


@st.composite
def scenarios(draw):
    """Fat-tailed, and in cents with ties and zeros as real books have them."""
    random = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    n = draw(st.sampled_from([2, 30, 100, 257]))
    if draw(st.booleans()):
        return random.standard_t(3, size=(3, n)) * 1e4
    largest = draw(st.sampled_from([3, 10**5]))
    return random.integers(-largest, largest + 1, size=(3, n)) / 100


# --- historical ----------------------------------------------------------------------------------------------------


def test_the_empirical_probability_counts_the_losses_strictly_larger():
    rows = np.array([[-5.0, -3.0, -3.0, 0.0, 2.0, 4.0, 6.0, 8.0]] * 6)
    thresholds = np.array([5.0, 4.99, 3.0, 2.0, -2.0, -9.0])
    found = loss_probability(rows, thresholds, 1, "historical")
    assert found.value.tolist() == [0, 1 / 8, 1 / 8, 3 / 8, 4 / 8, 1]
    assert found.note.tolist() == [0] * 6


def test_over_days_the_losses_grow_with_the_root_of_time():
    rows = np.arange(-50.0, 50.0)[np.newaxis]
    day = loss_probability(rows, np.array([12.0]), 1, "historical")
    four_days = loss_probability(rows, np.array([24.0]), 4, "historical")
    assert day.value.tolist() == four_days.value.tolist() == [0.38]
    assert loss_probability(rows, np.array([24.0]), 1, "historical").value.tolist() == [0.26]


@often
@given(pnl=scenarios(), power=st.integers(-20, 20), thresholds=st.tuples(st.floats(-3e4, 3e4), st.floats(0, 3e4)))
@pytest.mark.parametrize("method", ["historical", "normal", "student_t"])
def test_no_unit_and_no_rise_with_the_threshold(method, pnl, power, thresholds):
    threshold = np.full(3, thresholds[0])
    before = loss_probability(pnl, threshold, 5, method)
    after = loss_probability(pnl * 2.0**power, threshold * 2.0**power, 5, method)
    np.testing.assert_array_equal(after.value, before.value)
    further = loss_probability(pnl, threshold + thresholds[1], 5, method)
    assert ((further.value <= before.value) | np.isnan(before.value)).all()
    assert ((before.value >= 0) & (before.value <= 1) | np.isnan(before.value)).all()


@often
@given(pnl=scenarios(), threshold=st.floats(-1e4, 1e4), seed=st.integers(0, 99))
def test_a_subject_alone_in_any_order_is_as_in_company(pnl, threshold, seed):
    random = np.random.default_rng(seed)
    order = random.permutation(3)
    together = loss_probability(pnl, np.full(3, threshold), 2, "historical").value
    shuffled = random.permuted(np.asfortranarray(pnl)[order], axis=1)
    np.testing.assert_array_equal(
        loss_probability(shuffled, np.full(3, threshold), 2, "historical").value, together[order]
    )
    for place in range(3):
        alone = loss_probability(pnl[place : place + 1], np.array([threshold]), 2, "historical")
        assert alone.value[0] == together[place]


WALK = np.random.default_rng(0).standard_t(4, size=250) * 100


def test_poor_scenarios_are_said_and_harm_no_neighbour():
    missing = np.where(np.arange(250) == 3, np.nan, WALK)
    rows = np.stack([WALK, missing, np.zeros(250), np.full(250, -3.7), WALK, WALK * 1e305, WALK])
    thresholds = np.array([50.0, 50.0, -1.0, 3.0, np.nan, 0.0, 50.0])
    with np.errstate(all="raise"):
        found = loss_probability(rows, thresholds, 10, "historical")
    assert [Lack(code) for code in found.lack] == [
        Lack.NONE,
        Lack.NOT_FINITE,
        *[Lack.NONE] * 2,
        Lack.NO_THRESHOLD,
        *[Lack.NONE] * 2,
    ]
    assert np.isnan(found.value).tolist() == [False, True, False, False, True, False, False]
    assert found.value[0] == found.value[6]
    assert found.value[[2, 3]].tolist() == [1, 1]
    assert found.value[5] == (WALK < 0).mean()
    assert loss_probability(np.zeros((2, 9)), np.array([0.0, 1.0]), 3, "historical").value.tolist() == [0, 0]
    assert loss_probability(np.empty((2, 0)), np.zeros(2), 1, "historical").lack.tolist() == [Lack.TOO_SHORT] * 2
    assert loss_probability(np.ones((2, 1)), np.zeros(2), 1, "historical").value.tolist() == [0, 0]
    assert loss_probability(np.empty((0, 9)), np.empty(0), 1, "historical").value.shape == (0,)
    many = np.tile(WALK, (10_000, 1))
    assert (loss_probability(many, np.full(10_000, 50.0), 10, "historical").value == found.value[0]).all()


# --- the loss with a probability -----------------------------------------------------------------------------------


@pytest.mark.parametrize("drift", ["zero", "sample"])
@pytest.mark.parametrize("method", ["normal", "student_t"])
@often
@given(pnl=scenarios(), probability=PROBABILITIES, days=st.integers(1, 20))
def test_there_and_back_by_a_distribution(method, drift, pnl, probability, days):
    loss = loss_with_probability(pnl, probability, days, method, drift)
    back = loss_probability(pnl, loss.value, days, method, drift)
    moving = (loss.lack == Lack.NONE) & (pnl != pnl[:, :1]).any(axis=1)
    np.testing.assert_allclose(back.value[moving], float(probability), rtol=1e-9)
    np.testing.assert_array_equal(back.note, loss.note)


@often
@given(pnl=scenarios(), probability=PROBABILITIES, days=st.integers(1, 20))
def test_there_and_back_by_history(pnl, probability, days):
    """Never more often than asked, and no smaller scenario loss would do."""
    loss = loss_with_probability(pnl, probability, days, "historical")
    back = loss_probability(pnl, loss.value, days, "historical")
    assert (back.value <= float(probability)).all()
    smaller = loss_probability(pnl, np.nextafter(loss.value, -np.inf), days, "historical")
    assert (smaller.value * pnl.shape[1] >= float(probability) * pnl.shape[1] - 1e-9).all()


@pytest.mark.parametrize(("name", "method"), [("historical", historical), ("normal", normal), ("student_t", student_t)])
def test_it_is_the_value_at_risk_at_the_rest(name, method):
    rows = np.stack([WALK, np.full(250, np.nan), np.zeros(250), np.tile([1.0, -1.0], 125)])
    loss, tail = loss_with_probability(rows, Decimal("0.01"), 10, name), method(rows, Decimal("0.99"), 10)
    np.testing.assert_array_equal(loss.value, tail.value_at_risk.value)
    np.testing.assert_array_equal(loss.lack, tail.value_at_risk.lack)
    np.testing.assert_array_equal(loss.note, tail.note)
    if method is not historical:
        drifting = loss_with_probability(rows, Decimal("0.01"), 10, name, "sample")
        np.testing.assert_array_equal(drifting.value, method(rows, Decimal("0.99"), 10, "sample").value_at_risk.value)


def test_the_probability_keeps_every_digit():
    """In the 28 digits of a plain Decimal, 1 - 1e-30 is 1; and 0.07 of 100 is the 7th worst, as floats the 8th."""
    rows = np.arange(-100.0, 0.0)[np.newaxis]
    assert loss_with_probability(rows, Decimal("1e-30"), 1, "historical").value.tolist() == [100]
    assert loss_with_probability(rows, Decimal("0.07"), 1, "historical").value.tolist() == [94]
    just_above = Decimal("0.0700000000000000000000000000000001")
    assert loss_with_probability(rows, just_above, 1, "historical").value.tolist() == [93]
    assert loss_with_probability(rows, Decimal("0.999999999999999999999999999999"), 1, "historical").value.tolist() == [
        1
    ]


def test_the_parameters_are_checked():
    rows = WALK[np.newaxis]
    for wrong in (Decimal(0), Decimal(1), Decimal("NaN"), Decimal("-0.1"), Decimal("Infinity")):
        with pytest.raises(ValueError, match="probability must be above 0 and below 1"):
            loss_with_probability(rows, wrong, 1)
    with pytest.raises(TypeError, match="probability must be a Decimal"):
        loss_with_probability(rows, 0.01, 1)
    for method in ("historical", "normal", "student_t"):
        for call in (loss_probability, loss_with_probability):
            asked = np.array([1.0]) if call is loss_probability else Decimal("0.01")
            with pytest.raises(ValueError, match="zero, sample"):
                call(rows, asked, 1, method, "none")
            with pytest.raises(ValueError, match="at least 1 day"):
                call(rows, asked, 0, method)
            with pytest.raises(ValueError, match="normal, student_t, historical"):
                call(rows, asked, 1, "empirical")
