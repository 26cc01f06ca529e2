"""A subject without one of its positions: the pruned answer against the whole rows, bit for bit."""

from decimal import Decimal
from functools import partial

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from monitor.risk.components import group_pnl
from monitor.risk.figures import Figures, Lack
from monitor.risk.historical import historical
from monitor.risk.leave_one_out import incremental, leave_one_out, leave_one_out_by, without_each
from monitor.risk.normal import normal
from monitor.risk.student import student_t

often = settings(max_examples=40, deadline=None)
NINETY_NINE = Decimal("0.99")
CONFIDENCES = st.sampled_from([Decimal(text) for text in ("0.5", "0.9", "0.95", "0.975", "0.99", "0.995")])


@st.composite
def holdings(draw):
    """Positions with ties, zeros and one that dwarfs the rest, in subjects that overlap; some hold nothing."""
    positions, n = draw(st.integers(1, 6)), draw(st.integers(1, 80))
    cents = st.one_of(st.integers(-(10**9), 10**9), st.integers(-3, 3), st.just(0))
    pnl = draw(hnp.arrays(np.float64, (positions, n), elements=cents.map(float))) / 100
    sizes = draw(hnp.arrays(np.float64, (positions, 1), elements=st.sampled_from([1e-6, 1.0, 1e3])))
    held = draw(hnp.arrays(np.bool_, (draw(st.integers(1, 4)), positions)))
    owner, position = np.nonzero(held)
    return pnl * sizes, owner, position


@st.composite
def fat_tailed(draw):
    random = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    pnl = random.standard_t(3, size=(30, 300)) * random.lognormal(5, 2, size=(30, 1))
    held = random.random((5, 30)) < draw(st.sampled_from([0.1, 0.5, 1.0]))
    owner, position = np.nonzero(held)
    return pnl, owner, position


def whole_of(pnl, owner, position):
    return group_pnl(np.asarray(pnl, dtype=float), owner, position, int(owner.max(initial=-1)) + 1)


def left_out(pnl, owner, position, confidence, horizon_days=1):
    return leave_one_out(whole_of(pnl, owner, position), pnl, owner, position, confidence, horizon_days)


def without_by(method, pnl, owner, position):
    return leave_one_out_by(method, whole_of(pnl, owner, position), pnl, owner, position)


def blocks_without(pnl, owner, position):
    return without_each(whole_of(pnl, owner, position), pnl, owner, position)


def assert_same(one, other):
    for name in ("value_at_risk", "expected_shortfall"):
        np.testing.assert_array_equal(getattr(one, name).value, getattr(other, name).value)
        np.testing.assert_array_equal(getattr(one, name).lack, getattr(other, name).lack)
    assert one.exact_tail == other.exact_tail
    np.testing.assert_array_equal(one.note, other.note)


@often
@given(case=st.one_of(holdings(), fat_tailed()), confidence=CONFIDENCES, days=st.sampled_from([1, 10]))
def test_the_days_left_out_change_no_digit(case, confidence, days):
    pnl, owner, position = case
    method = partial(historical, confidence=confidence, horizon_days=days)
    assert_same(left_out(pnl, owner, position, confidence, days), without_by(method, pnl, owner, position))


def test_more_pairs_than_a_block():
    random = np.random.default_rng(40)
    pnl = random.standard_t(3, size=(700, 120)) * random.lognormal(5, 2, size=(700, 1))
    owner = np.sort(random.integers(0, 9, size=1500))
    position = random.integers(0, 700, size=1500)
    method = partial(historical, confidence=Decimal("0.95"))
    found = left_out(pnl, owner, position, Decimal("0.95"))
    assert_same(found, without_by(method, pnl, owner, position))
    whole = group_pnl(pnl, owner, position, 9)
    assert_same(found, method(whole[owner] - pnl[position]))


def test_few_days_are_read(monkeypatch):
    """Small positions in a large subject: the five worst days of 500 and a few more."""
    random = np.random.default_rng(41)
    pnl = random.standard_t(4, size=(400, 500)) + 2 * random.standard_t(4, size=500)
    read = []
    partition = np.partition
    monkeypatch.setattr(
        np, "partition", lambda rows, *rest, **named: read.append(rows.size) or partition(rows, *rest, **named)
    )
    left_out(pnl, np.zeros(400, dtype=np.int64), np.arange(400), NINETY_NINE)
    assert 5 * 400 <= sum(read) < 30 * 400


@pytest.mark.parametrize(
    "method",
    [
        partial(normal, confidence=NINETY_NINE),
        partial(normal, confidence=NINETY_NINE, horizon_days=10, drift="sample"),
        partial(student_t, confidence=NINETY_NINE),
    ],
)
def test_any_method_answers_as_for_the_rest_of_the_positions(method):
    random = np.random.default_rng(42)
    pnl = random.standard_t(4, size=(7, 250))
    owner, position = np.repeat([0, 2], [7, 3]), np.array([0, 1, 2, 3, 4, 5, 6, 1, 5, 6])
    found = without_by(method, pnl, owner, position)
    rest = np.stack(
        [
            pnl[[other for other in position[owner == who] if other != held]].sum(axis=0)
            for who, held in zip(owner, position, strict=True)
        ]
    )
    expected = method(rest)
    np.testing.assert_allclose(found.value_at_risk.value, expected.value_at_risk.value, rtol=1e-9)
    np.testing.assert_allclose(found.expected_shortfall.value, expected.expected_shortfall.value, rtol=1e-9)
    np.testing.assert_array_equal(found.note, expected.note)


def test_the_normal_by_its_closed_form():
    """sigma without x is sqrt(var(P) - 2 cov(x, P) + var(x))."""
    pnl = np.random.default_rng(43).standard_t(4, size=(6, 250))
    covariance = np.cov(np.concatenate([pnl, pnl.sum(axis=0, keepdims=True)]))
    sigma = np.sqrt(covariance[6, 6] - 2 * covariance[:6, 6] + np.diag(covariance)[:6])
    owner = np.zeros(6, dtype=np.int64)
    found = without_by(partial(normal, confidence=NINETY_NINE), pnl, owner, np.arange(6))
    np.testing.assert_allclose(found.value_at_risk.value, 2.3263478740408408 * sigma, rtol=1e-12)


def test_rows_come_in_order_and_in_blocks():
    pnl = np.arange(12.0).reshape(4, 3)
    owner, position = np.sort(np.arange(600) % 3), np.arange(600) % 4
    blocks = list(blocks_without(pnl, owner, position))
    assert [len(block) for block in blocks] == [256, 256, 88]
    whole = group_pnl(pnl, owner, position, 3)
    np.testing.assert_array_equal(np.concatenate(blocks), whole[owner] - pnl[position])
    assert list(blocks_without(pnl, owner[:0], position[:0])) == []


def test_incremental_risk_by_hand():
    """20 days; the worst two of the whole are -9 and -8, and what is left without each position can be read off."""
    first = np.array([-9.0, 0.0, 5.0] + [1.0] * 17)
    second = np.array([0.0, -8.0, -5.0] + [1.0] * 17)
    pnl, owner, position = np.stack([first, second]), np.array([0, 0]), np.array([0, 1])
    whole = historical(group_pnl(pnl, owner, position, 1), Decimal("0.9"))
    without = left_out(pnl, owner, position, Decimal("0.9"))
    assert without.value_at_risk.value.tolist() == [5, 0]
    assert without.expected_shortfall.value.tolist() == [6.5, 4.5]
    assert incremental(whole.value_at_risk, without.value_at_risk, owner).value.tolist() == [8 - 5, 8 - 0]
    added = incremental(whole.expected_shortfall, without.expected_shortfall, owner)
    assert added.value.tolist() == [8.5 - 6.5, 8.5 - 4.5]
    assert added.lack.tolist() == [Lack.NONE, Lack.NONE]


def test_without_its_only_position_a_subject_has_no_risk():
    pnl = np.random.default_rng(44).standard_t(4, size=(3, 250))
    owner = position = np.arange(3)
    without = left_out(pnl, owner, position, NINETY_NINE)
    assert without.value_at_risk.value.tolist() == without.expected_shortfall.value.tolist() == [0, 0, 0]
    whole = historical(pnl, NINETY_NINE).value_at_risk
    np.testing.assert_array_equal(incremental(whole, without.value_at_risk, owner).value, whole.value)


def test_a_position_without_risk_adds_none():
    random = np.random.default_rng(45)
    pnl = np.concatenate([random.standard_t(4, size=(3, 250)), np.zeros((1, 250))])
    owner, position = np.zeros(4, dtype=np.int64), np.arange(4)
    without = left_out(pnl, owner, position, NINETY_NINE)
    whole = historical(group_pnl(pnl, owner, position, 1), NINETY_NINE)
    assert incremental(whole.value_at_risk, without.value_at_risk, owner).value[3] == 0
    assert incremental(whole.expected_shortfall, without.expected_shortfall, owner).value[3] == 0


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_a_poor_position_harms_only_those_who_hold_it(bad):
    pnl = np.random.default_rng(46).standard_t(4, size=(5, 250))
    clean = left_out(pnl, np.array([0, 0, 2, 2]), np.array([0, 1, 2, 3]), NINETY_NINE)
    pnl[4, 100] = bad
    owner, position = np.array([0, 0, 1, 1, 2, 2]), np.array([0, 1, 0, 4, 2, 3])
    found = left_out(pnl, owner, position, NINETY_NINE)
    for name in ("value_at_risk", "expected_shortfall"):
        figures = getattr(found, name)
        assert figures.lack.tolist() == [0, 0, Lack.NOT_FINITE, Lack.NOT_FINITE, 0, 0]
        np.testing.assert_array_equal(figures.value[[0, 1, 4, 5]], getattr(clean, name).value)
    by_rows = without_by(partial(historical, confidence=NINETY_NINE), pnl, owner, position)
    np.testing.assert_array_equal(by_rows.value_at_risk.value, found.value_at_risk.value)
    whole = historical(group_pnl(pnl, owner, position, 3), NINETY_NINE).value_at_risk
    assert incremental(whole, found.value_at_risk, owner).lack.tolist() == [
        0,
        0,
        Lack.NOT_FINITE,
        Lack.NOT_FINITE,
        0,
        0,
    ]


def test_the_reason_of_the_subject_comes_before_that_of_the_rest():
    figures = Figures(np.array([np.nan, 3.0, 3.0]), np.array([Lack.TOO_SHORT, 0, 0], dtype=np.int8))
    without = Figures(np.array([np.nan, np.nan, 1.0]), np.array([Lack.CONSTANT, Lack.CONSTANT, 0], dtype=np.int8))
    found = incremental(figures, without, np.arange(3))
    assert found.lack.tolist() == [Lack.TOO_SHORT, Lack.CONSTANT, Lack.NONE]
    np.testing.assert_array_equal(found.value, [np.nan, np.nan, 2.0])


def test_nothing_to_leave_out():
    nobody = np.empty(0, dtype=np.int64)
    for pnl in (np.ones((3, 250)), np.ones((0, 250))):
        for found in (
            left_out(pnl, nobody, nobody, NINETY_NINE),
            without_by(partial(historical, confidence=NINETY_NINE), pnl, nobody, nobody),
        ):
            assert found.value_at_risk.value.shape == found.expected_shortfall.lack.shape == found.note.shape == (0,)
            assert found.exact_tail
    empty = left_out(np.ones((2, 0)), np.array([0, 0]), np.array([0, 1]), NINETY_NINE)
    assert empty.value_at_risk.lack.tolist() == empty.expected_shortfall.lack.tolist() == [Lack.TOO_SHORT] * 2
    assert np.isnan(empty.value_at_risk.value).all()
    assert not empty.exact_tail


def test_huge_positions_give_a_figure_or_a_reason():
    """Twice the largest overflows the bound: every day is then read."""
    pnl = np.stack([np.linspace(-1, 1, 250) * 1.2e308, np.linspace(1, -1, 250) * 1.19e308])
    owner, position = np.array([0, 0]), np.array([0, 1])
    found = left_out(pnl, owner, position, NINETY_NINE)
    assert_same(found, without_by(partial(historical, confidence=NINETY_NINE), pnl, owner, position))
    ten_days = left_out(pnl, owner, position, NINETY_NINE, 10)
    assert ten_days.value_at_risk.lack.tolist() == [Lack.OUT_OF_RANGE] * 2


def test_what_cannot_be_asked():
    pnl, one = np.ones((3, 4)), np.array([0])
    with pytest.raises(ValueError, match="the owner must ascend"):
        left_out(pnl, np.array([1, 0]), np.array([0, 1]), NINETY_NINE)
    with pytest.raises(ValueError, match="each position must be from 0 to 2"):
        next(blocks_without(pnl, one, np.array([3])))
    with pytest.raises(TypeError, match="the confidence must be a Decimal"):
        left_out(pnl, one, one, 0.99)
    with pytest.raises(ValueError, match="the horizon must be at least 1 day"):
        left_out(pnl, one, one, NINETY_NINE, 0)
