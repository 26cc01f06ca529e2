"""Parkinson's, and Garman and Klass's volatility: by hand, on simulated sessions, what must hold, poor prices."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.risk.figures import Lack
from monitor.risk.ranges import garman_klass, parkinson

often = settings(max_examples=30, deadline=None)


def sessions_of(seed, rows, sessions, sigma=0.02, steps=400, night=0.0):
    """Open, high, low and close of geometric Brownian motion without drift: `steps` moves a session, one at night."""
    random = np.random.RandomState(seed)
    prices = []
    for _ in range(rows):
        paths = np.cumsum(random.normal(scale=sigma / math.sqrt(steps), size=(sessions, steps)), axis=1)
        nights = random.normal(scale=night, size=sessions) if night else np.zeros(sessions)
        opens = np.concatenate([[0.0], np.cumsum(paths[:, -1])[:-1]]) + np.cumsum(nights)
        whole = np.concatenate([np.zeros((sessions, 1)), paths], axis=1)
        prices.append(100 * np.exp([opens, opens + whole.max(axis=1), opens + whole.min(axis=1), opens + paths[:, -1]]))
    return np.moveaxis(np.array(prices), 1, 0)


def both(open_, high, low, close):
    return parkinson(high, low), garman_klass(open_, high, low, close)


def test_the_formulas_by_hand():
    """Parkinson 1980: ln(H/L)^2 / (4 ln 2); Garman and Klass 1980: ln(H/L)^2 / 2 - (2 ln 2 - 1) ln(C/O)^2; means."""
    open_, close = np.array([[100.0, 101.0]]), np.array([[101.0, 100.5]])
    high, low = np.array([[102.0, 103.0]]), np.array([[99.0, 100.0]])
    ranges, moves = np.log(high / low)[0], np.log(close / open_)[0]
    made_of_ranges, made_of_both = both(open_, high, low, close)
    assert made_of_ranges.value[0] == pytest.approx(math.sqrt((ranges**2).mean() / 2.772588722239781), rel=1e-14)
    by_hand = ((ranges**2).sum() / 2 - 0.386294361119891 * (moves**2).sum()) / 2
    assert made_of_both.value[0] == pytest.approx(math.sqrt(by_hand), rel=1e-14)


def test_efficiency_on_simulated_brownian_motion():
    """Variance of the squared move from open to close over that of each estimate of one session: about 5.2 (Parkinson
    1980) and 7.4 (Garman and Klass 1980), both from memory. With 600 moves a session the range is seen about 3 % too
    small, so that the estimates lie 6 and 8 % low; the ratios of 12,000 sessions have an error of about 4 %."""
    sigma, steps, count = 0.02, 600, 12_000
    random = np.random.RandomState(1)
    logs = []
    for _ in range(12):
        paths = np.cumsum(random.normal(scale=sigma / math.sqrt(steps), size=(count // 12, steps)), axis=1)
        logs.append([np.maximum(paths.max(axis=1), 0), np.minimum(paths.min(axis=1), 0), paths[:, -1]])
    high, low, close = np.exp(np.concatenate(logs, axis=1))[:, :, np.newaxis]
    plain = np.log(close[:, 0]) ** 2
    made_of_ranges, made_of_both = both(np.ones((count, 1)), high, low, close)
    for figures, efficiency in ((made_of_ranges, 5.2), (made_of_both, 7.4)):
        variances = figures.value**2
        assert not figures.lack.any()
        assert 0.9 * sigma**2 < variances.mean() < sigma**2
        assert plain.var() / variances.var() == pytest.approx(efficiency, rel=0.15)


def test_both_miss_the_move_at_night():
    """Half of the variance comes at night: the figures are those of the session alone, short of close to close."""
    open_, high, low, close = sessions_of(2, 1, 4000, sigma=0.02, night=0.02)
    from_close_to_close = np.diff(np.log(close[0])).std()
    assert from_close_to_close == pytest.approx(0.02 * math.sqrt(2), rel=0.05)
    for figures in both(open_, high, low, close):
        assert figures.value[0] == pytest.approx(0.02, rel=0.05)


@often
@given(seed=st.integers(0, 2**32 - 1), power=st.integers(-20, 20), order=st.integers(0, 99))
def test_neither_the_unit_of_prices_nor_the_order_of_sessions_matters(seed, power, order):
    prices = sessions_of(seed, 3, 20, steps=20)
    shuffled = np.random.RandomState(order).permutation(20)
    for plain, scaled, moved in zip(
        both(*prices), both(*(prices * 2.0**power)), both(*prices[:, :, shuffled]), strict=True
    ):
        assert (plain.value > 0).all()
        np.testing.assert_array_equal(scaled.value, plain.value)
        np.testing.assert_allclose(moved.value, plain.value, rtol=1e-13)


@often
@given(seed=st.integers(0, 2**32 - 1))
def test_wherever_open_and_close_lie_the_variance_is_not_negative(seed):
    random = np.random.RandomState(seed)
    low, high = np.sort(random.lognormal(size=(2, 5, 1)), axis=0)
    open_, close = low + (high - low) * random.randint(0, 2, size=(2, 5, 1))
    figures = garman_klass(np.clip(open_, low, high), high, low, np.clip(close, low, high))
    assert not figures.lack.any()
    assert (figures.value > 0).all()


def test_a_subject_alone_is_the_same_to_the_last_digit_as_in_a_crowd_of_any_order():
    prices = sessions_of(3, 200, 61, steps=10)
    prices[1, ::7, 5] = np.nan
    order = np.random.RandomState(5).permutation(200)
    turned = [np.asfortranarray(matrix) for matrix in prices]
    for together, shuffled, other_layout in zip(both(*prices), both(*prices[:, order]), both(*turned), strict=True):
        np.testing.assert_array_equal(shuffled.value, together.value[order])
        np.testing.assert_array_equal(other_layout.value, together.value)
        assert np.flatnonzero(together.lack).tolist() == list(range(0, 200, 7))
    for place in (0, 1, 17, 199):
        for alone, together in zip(both(*prices[:, place : place + 1]), both(*prices), strict=True):
            np.testing.assert_array_equal(alone.value[0], together.value[place])
            assert alone.lack[0] == together.lack[place]


#                                open   high   low    close       parkinson      garman_klass
POOR = {
    "ordinary": ((100.0, 102.0, 99.0, 101.0), Lack.NONE, Lack.NONE),
    "no range": ((100.0, 100.0, 100.0, 100.0), Lack.NONE, Lack.NONE),
    "high missing": ((100.0, np.nan, 99.0, 101.0), Lack.NO_RANGE, Lack.NO_RANGE),
    "low missing": ((100.0, 102.0, np.nan, 101.0), Lack.NO_RANGE, Lack.NO_RANGE),
    "open missing": ((np.nan, 102.0, 99.0, 101.0), Lack.NONE, Lack.NO_RANGE),
    "close missing": ((100.0, 102.0, 99.0, np.nan), Lack.NONE, Lack.NO_RANGE),
    "high infinite": ((100.0, np.inf, 99.0, 101.0), Lack.NO_RANGE, Lack.NO_RANGE),
    "low zero": ((100.0, 102.0, 0.0, 101.0), Lack.NO_RANGE, Lack.NO_RANGE),
    "low negative": ((100.0, 102.0, -1.0, 101.0), Lack.NO_RANGE, Lack.NO_RANGE),
    "high below low": ((100.0, 98.0, 99.0, 98.5), Lack.NO_RANGE, Lack.NO_RANGE),
    "open above high": ((103.0, 102.0, 99.0, 101.0), Lack.NONE, Lack.NO_RANGE),
    "open below low": ((98.0, 102.0, 99.0, 101.0), Lack.NONE, Lack.NO_RANGE),
    "close above high": ((100.0, 102.0, 99.0, 103.0), Lack.NONE, Lack.NO_RANGE),
    "close below low": ((100.0, 102.0, 99.0, 98.0), Lack.NONE, Lack.NO_RANGE),
    "range beyond floats": ((1.0, 1e300, 1e-300, 1.0), Lack.OUT_OF_RANGE, Lack.OUT_OF_RANGE),
}


def test_one_poor_session_is_its_subjects_lack_alone():
    prices = np.tile(np.array([100.0, 102.0, 99.0, 101.0])[:, np.newaxis, np.newaxis], (1, len(POOR), 9))
    for place, (session, _, _) in enumerate(POOR.values()):
        prices[:, place, 4] = session
    with np.errstate(all="raise"):
        found = both(*prices)
    for figures, column in zip(found, (1, 2), strict=True):
        for place, (name, row) in enumerate(POOR.items()):
            assert Lack(figures.lack[place]) is row[column], name
            assert np.isnan(figures.value[place]) == (row[column] is not Lack.NONE), name


def test_no_range_at_all_is_no_volatility():
    for figures in both(*np.full((4, 2, 30), 12.5)):
        assert figures.value.tolist() == [0, 0]
        assert figures.lack.tolist() == [Lack.NONE, Lack.NONE]


def test_no_sessions_and_no_subjects():
    for figures in both(*np.empty((4, 3, 0))):
        assert figures.lack.tolist() == [Lack.TOO_SHORT] * 3
    for figures in both(*np.empty((4, 0, 10))):
        assert figures.value.shape == (0,)


def test_the_shapes_are_checked():
    prices = np.ones((2, 3))
    with pytest.raises(ValueError, match="one shape"):
        parkinson(prices, prices[:, :2])
    with pytest.raises(ValueError, match="one shape"):
        garman_klass(prices[:1], prices, prices, prices)
    with pytest.raises(ValueError, match=r"\(subjects, scenarios\)"):
        parkinson(np.ones(3), np.ones(3))
