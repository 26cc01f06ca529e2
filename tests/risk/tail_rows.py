"""Scenarios, and what every method of value at risk must do with them, for the tests of the single methods."""

from decimal import Decimal

import numpy as np
from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from monitor.risk.figures import Lack

NINETY_NINE = Decimal("0.99")
CONFIDENCES = st.sampled_from([Decimal(text) for text in ("0.9", "0.95", "0.975", "0.99", "0.995")])
often = settings(max_examples=30, deadline=None)

N = 250
WALK = np.random.default_rng(2).standard_t(4, size=N) * 100
MISSING = np.where(np.arange(N) == 3, np.nan, WALK)
ODD_ROWS = {
    "ordinary": WALK,
    "flat": np.zeros(N),
    "flat, negative zeros": np.full(N, -0.0),
    "constant": np.full(N, -3.7),
    "a missing scenario": MISSING,
    "an infinite profit": np.where(np.arange(N) == 4, np.inf, WALK),
    "an infinite loss": np.where(np.arange(N) == 4, -np.inf, WALK),
    "mostly zeros": np.where(np.arange(N) % 10 == 0, WALK, 0.0),
    "all zero but one": np.where(np.arange(N) == 40, -500.0, 0.0),
    "one outlier": np.where(np.arange(N) == 100, -1e9, WALK),
    "two values": np.tile([5.0, -5.0], N // 2),
    "overflowing": np.linspace(-1, 1, N) * 1.7e308,
    "squares overflow": WALK * 1e200,
    "squares vanish": WALK * 1e-200,
}


@st.composite
def panels(draw, least_subjects=1):
    """P&L in cents of up to a few million, with ties and zeros as real books have them."""
    shape = (draw(st.integers(least_subjects, 4)), draw(st.integers(2, 60)))
    cents = st.one_of(st.integers(-(10**9), 10**9), st.integers(-3, 3))
    return draw(hnp.arrays(np.float64, shape, elements=cents.map(float))) / 100


@st.composite
def fat_tailed(draw):
    seed = draw(st.integers(0, 2**32 - 1))
    return np.random.default_rng(seed).standard_t(draw(st.sampled_from([4.5, 6.0, 12.0])), size=(3, 120)) * 1e4


def crowd(subjects=1000):
    """Subjects of every sort, 300 scenarios."""
    random = np.random.default_rng(11)
    rows = random.standard_t(5, size=(subjects, 300)) * 10.0 ** random.integers(-3, 8, size=(subjects, 1))
    rows[::7] = random.normal(size=rows[::7].shape)
    rows[1::50] = 0.0
    rows[2::50, :150] = 0.0
    rows[3::50, 17] = np.nan
    rows[4::50, 18] = np.inf
    rows[5::50] = 12.5
    rows[6::50, 3] *= 1e6
    rows[8::50] = np.round(rows[8::50] / np.abs(rows[8::50]).max() * 5)
    return rows


def figures(tail):
    return [tail.value_at_risk.value, tail.expected_shortfall.value]


def assert_same(one, other, places=slice(None)):
    """`one` is `other` at those places, to the bit, with reasons and notes."""
    for name in ("value_at_risk", "expected_shortfall"):
        np.testing.assert_array_equal(getattr(one, name).value, getattr(other, name).value[places])
        np.testing.assert_array_equal(getattr(one, name).lack, getattr(other, name).lack[places])
    np.testing.assert_array_equal(one.note, other.note[places])


def assert_every_subject_stands_alone(method, rows, singles):
    """Alone, in any order and in any layout: the same bits. The scenarios given stay as they were."""
    before = rows.copy()
    together = method(rows)
    for place in singles:
        assert_same(method(rows[place : place + 1]), together, slice(place, place + 1))
    order = np.random.default_rng(5).permutation(len(rows))
    assert_same(method(rows[order]), together, order)
    assert_same(method(np.asfortranarray(rows)), together)
    np.testing.assert_array_equal(rows, before)


def assert_homogeneous(method, pnl, factor, rtol=0.0):
    for before, after in zip(figures(method(pnl)), figures(method(pnl * factor)), strict=True):
        np.testing.assert_allclose(after, before * factor, rtol=rtol)


def assert_moved(method, pnl, shift, by, rtol=1e-12, atol=1e-6):
    for before, after in zip(figures(method(pnl)), figures(method(pnl + shift)), strict=True):
        np.testing.assert_allclose(after, before + by, rtol=rtol, atol=atol)


def assert_shortfall_not_below(tail):
    measured = tail.value_at_risk.lack == Lack.NONE
    assert (tail.expected_shortfall.value >= tail.value_at_risk.value)[measured].all()


def assert_odd_rows(method, wanted):
    """Each odd row, with a bad row on both sides, gets a figure or the reason wanted, and what it gets alone.

    wanted: of the rows that get no figure, the Lack.
    """
    with np.errstate(all="raise"):
        tail = method(np.stack([row for odd in ODD_ROWS.values() for row in (odd, MISSING)]))
        for place, (name, row) in enumerate(ODD_ROWS.items()):
            lack = wanted.get(name, Lack.NONE)
            for found in (tail.value_at_risk, tail.expected_shortfall):
                assert Lack(found.lack[2 * place]) is lack, name
                assert np.isnan(found.value[2 * place]) == (lack is not Lack.NONE), name
                assert found.lack[2 * place + 1] == Lack.NOT_FINITE, name
            assert_same(method(row[np.newaxis]), tail, slice(2 * place, 2 * place + 1))
            if name.startswith("flat"):
                assert [value[2 * place] for value in figures(tail)] == [0, 0]
                assert not np.signbit(figures(tail))[:, 2 * place].any()
        nobody = method(np.empty((0, N)))
        assert nobody.value_at_risk.value.shape == nobody.expected_shortfall.lack.shape == nobody.note.shape == (0,)
