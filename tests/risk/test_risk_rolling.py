"""Historical simulation at several confidences at once and on every window at once, against one at a time."""

import math
from decimal import Decimal

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.risk import rolling
from monitor.risk.figures import Lack
from monitor.risk.historical import historical, historical_at
from monitor.risk.normal import normal, normal_at
from monitor.risk.rolling import rolling_historical
from monitor.risk.tail import tail_share

LEVELS = [Decimal(text) for text in ("0.9", "0.95", "0.975", "0.99", "0.999")]
NINETY_NINE = Decimal("0.99")


def moves(subjects, sessions, seed=1):
    """P&L with ties, zeros and rows of very different size."""
    random = np.random.default_rng(seed)
    rows = random.standard_t(3, size=(subjects, sessions)) * 10.0 ** random.integers(-2, 7, size=(subjects, 1))
    rows[::3] = np.round(rows[::3] / np.abs(rows[::3]).max(axis=1, keepdims=True, initial=1e-9), 1)
    return rows


def assert_same(one, other):
    for mine, theirs in ((one.value_at_risk, other.value_at_risk), (one.expected_shortfall, other.expected_shortfall)):
        np.testing.assert_array_equal(mine.value, theirs.value)
        np.testing.assert_array_equal(mine.lack, theirs.lack)
    assert one.exact_tail == other.exact_tail


def assert_windows_alone(pnl, window, confidence):
    """Every window of the rolling answer is `historical` on that window."""
    tail = rolling_historical(pnl, window, confidence)
    windows = max(pnl.shape[1] - window + 1, 0)
    for figures in (tail.value_at_risk, tail.expected_shortfall):
        assert figures.value.shape == figures.lack.shape == (len(pnl), windows)
    assert tail.note.shape == (len(pnl), windows)
    for start in range(windows):
        there = pnl[:, start : start + window]
        alone = historical(there, confidence)
        assert tail.exact_tail == alone.exact_tail
        np.testing.assert_array_equal(tail.value_at_risk.value[:, start], alone.value_at_risk.value)
        np.testing.assert_array_equal(tail.value_at_risk.lack[:, start], alone.value_at_risk.lack)
        np.testing.assert_array_equal(tail.expected_shortfall.lack[:, start], alone.expected_shortfall.lack)
        slack = 1e-12 * np.abs(np.where(np.isfinite(there), there, 0.0)).max(axis=1, initial=0.0)
        apart = np.abs(tail.expected_shortfall.value[:, start] - alone.expected_shortfall.value)
        assert (np.isnan(apart) | (apart <= slack)).all()
    return tail


# --- several confidences -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("n", [1, 3, 100, 250, 256, 257, 500, 1000, 2600])
def test_the_tail_is_the_sorted_row_written_out(n):
    """Rows longer than numpy sorts at once are searched in pieces; a plain sort knows no pieces."""
    pnl = moves(7, n, seed=n)
    for confidence, tail in zip(LEVELS, historical_at(pnl, LEVELS), strict=True):
        within = tail_share(confidence) * n
        counted = max(within, 1)
        for place, row in enumerate(np.sort(pnl, axis=1)):
            weights = [float(min(counted - j, 1)) for j in range(math.ceil(counted))]
            assert tail.value_at_risk.value[place] == -row[math.ceil(within) - 1]
            wanted = -math.fsum(w * x for w, x in zip(weights, row, strict=False)) / float(counted)
            slack = 1e-13 * np.abs(row[: len(weights)]).max()
            assert tail.expected_shortfall.value[place] == pytest.approx(wanted, rel=0, abs=slack)


def test_the_smallest_are_found_wherever_they_stand_in_a_long_row():
    for n, confidence in ((300, "0.98"), (500, "0.988"), (1000, "0.994")):
        for first in (0, n // 2 - 3, n - 6, 127, 250):
            row = np.arange(1.0, n + 1.0)
            row[first : first + 6] = [-1, -6, -3, -5, -2, -4]
            tail = historical(row[np.newaxis], Decimal(confidence))
            assert tail.value_at_risk.value[0] == 1
            assert tail.expected_shortfall.value[0] == pytest.approx(3.5, rel=1e-12)


@pytest.mark.parametrize("n", [60, 500, 1000])
def test_several_confidences_are_each_alone_to_the_last_bit(n):
    pnl = moves(600, n)
    pnl[5, 3], pnl[6, 4], pnl[7] = np.nan, -np.inf, 0.0
    for confidence, tail in zip(LEVELS, historical_at(pnl, LEVELS, 10), strict=True):
        assert_same(tail, historical(pnl, confidence, 10))
    for confidence, tail in zip(LEVELS, normal_at(pnl, LEVELS, 10, "sample"), strict=True):
        assert_same(tail, normal(pnl, confidence, 10, "sample"))


def test_a_row_in_pieces_is_the_same_alone_and_its_order_does_not_matter():
    pnl = moves(520, 1000)
    shuffled = np.random.default_rng(2).permutation(pnl, axis=1)
    for confidence in LEVELS:
        together = historical(pnl, confidence)
        assert_same(together, historical(shuffled, confidence))
        for place in (0, 255, 256, 519):
            alone = historical(pnl[place : place + 1], confidence)
            assert alone.expected_shortfall.value[0] == together.expected_shortfall.value[place]


def test_no_confidence_and_no_scenario():
    assert historical_at(moves(3, 50), []) == ()
    assert normal_at(moves(3, 50), []) == ()
    first, second = historical_at(np.empty((2, 0)), LEVELS[:2])
    assert first.value_at_risk.lack.tolist() == second.expected_shortfall.lack.tolist() == [Lack.TOO_SHORT] * 2
    with pytest.raises(TypeError, match="must be a Decimal"):
        historical_at(moves(3, 50), [NINETY_NINE, 0.95])


# --- every window --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("confidence", [*LEVELS, Decimal("0.5"), Decimal("0.01")])
@pytest.mark.parametrize(("sessions", "window"), [(150, 50), (130, 60), (61, 60), (60, 60), (59, 60), (40, 1), (40, 7)])
def test_every_window_is_measured_as_if_alone(sessions, window, confidence):
    assert_windows_alone(moves(4, sessions, seed=window), window, confidence)


@pytest.mark.parametrize(("window", "confidence"), [(250, "0.99"), (500, "0.99"), (500, "0.9"), (333, "0.975")])
def test_the_windows_of_a_backtest(window, confidence):
    assert_windows_alone(moves(3, 2 * window + 40), window, Decimal(confidence))


@settings(max_examples=60, deadline=None)
@given(data=st.data())
def test_any_shape_with_anything_missing(data):
    subjects, sessions = data.draw(st.integers(0, 4)), data.draw(st.integers(0, 40))
    pnl = moves(subjects, sessions, data.draw(st.integers(0, 99))) if subjects else np.empty((0, sessions))
    for bad in data.draw(st.lists(st.sampled_from([np.nan, np.inf, -np.inf]), max_size=4)):
        if pnl.size:
            pnl[data.draw(st.integers(0, subjects - 1)), data.draw(st.integers(0, sessions - 1))] = bad
    share = Decimal(data.draw(st.integers(1, 999))) / 1000
    assert_windows_alone(pnl, data.draw(st.integers(1, 45)), share)


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_a_missing_session_takes_the_windows_that_hold_it_and_no_others(bad):
    pnl = moves(3, 200)
    whole = rolling_historical(pnl, 30, NINETY_NINE)
    holed = pnl.copy()
    holed[1, 77] = bad
    with np.errstate(all="raise"):
        tail = rolling_historical(holed, 30, NINETY_NINE)
    for figures, before in (
        (tail.value_at_risk, whole.value_at_risk),
        (tail.expected_shortfall, whole.expected_shortfall),
    ):
        assert np.flatnonzero(figures.lack[1]).tolist() == list(range(48, 78))
        assert (figures.lack[1, 48:78] == Lack.NOT_FINITE).all()
        assert np.isnan(figures.value[1, 48:78]).all()
        kept = figures.lack == Lack.NONE
        assert kept[[0, 2]].all()
        np.testing.assert_array_equal(figures.value[kept], before.value[kept])


@pytest.mark.parametrize("confidence", [Decimal("0.7"), NINETY_NINE])
def test_a_row_alone_is_the_same_to_the_last_bit_in_blocks_of_any_size(monkeypatch, confidence):
    """At 70 % of 60 the shortfall adds 18: enough for numpy to add a single column in another order."""
    pnl = moves(9, 200)
    together = rolling_historical(pnl, 60, confidence)
    for rows in (1, 2, 4):
        monkeypatch.setattr(rolling, "_ROWS", rows)
        assert_same(rolling_historical(pnl, 60, confidence), together)
    monkeypatch.undo()
    monkeypatch.setattr(rolling, "_BYTES", 1)
    assert_same(rolling_historical(pnl, 60, confidence), together)
    monkeypatch.undo()
    for place in range(9):
        alone = rolling_historical(pnl[place : place + 1], 60, confidence)
        np.testing.assert_array_equal(alone.expected_shortfall.value[0], together.expected_shortfall.value[place])
    assert_same(rolling_historical(np.asfortranarray(pnl), 60, confidence), together)


def test_flat_constant_and_huge_rows():
    rows = np.stack([np.zeros(90), np.full(90, -0.0), np.full(90, -0.1), np.linspace(-1, -0.9, 90) * 1.7e308])
    with np.errstate(all="raise"):
        tail = rolling_historical(rows, 40, Decimal("0.9"))
    at_risk, shortfall = tail.value_at_risk, tail.expected_shortfall
    assert (at_risk.value[:2] == 0).all()
    assert (shortfall.value[:2] == 0).all()
    assert not np.signbit(at_risk.value[:2]).any()
    assert (at_risk.value[2] == 0.1).all()
    assert (shortfall.value >= at_risk.value)[:3].all()
    assert (at_risk.lack == Lack.NONE).all()
    assert (shortfall.lack[3] == Lack.OUT_OF_RANGE).all()


def test_the_shortfall_of_equal_losses_does_not_round_to_below_the_value_at_risk():
    rows = np.repeat(np.random.default_rng(3).normal(size=(400, 1)), 40, axis=1)
    for confidence in (Decimal("0.9"), Decimal("0.83")):
        tail = rolling_historical(rows, 30, confidence)
        assert (tail.value_at_risk.value == -rows[:, :1]).all()
        assert (tail.expected_shortfall.value >= tail.value_at_risk.value).all()


def test_the_scenarios_given_are_left_as_they_were():
    pnl = moves(3, 300)
    pnl[0, 5] = np.inf
    before = pnl.copy()
    rolling_historical(pnl, 100, NINETY_NINE)
    historical_at(pnl, LEVELS)
    normal_at(pnl, LEVELS)
    np.testing.assert_array_equal(pnl, before)


def test_the_parameters_are_checked():
    with pytest.raises(ValueError, match="at least 1 session"):
        rolling_historical(moves(2, 30), 0, NINETY_NINE)
    with pytest.raises(ValueError, match=r"\(subjects, sessions\)"):
        rolling_historical(moves(2, 30)[0], 10, NINETY_NINE)
    with pytest.raises(TypeError, match="must be a Decimal"):
        rolling_historical(moves(2, 30), 10, 0.99)
    with pytest.raises(ValueError, match="confidence must be above 0 and below 1"):
        rolling_historical(moves(2, 30), 10, Decimal(1))
