"""Hill's index of the tail of the losses, and the chance of it under the normal."""

from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate, stats

from monitor.risk.figures import Lack
from monitor.risk.tail_index import LEAST_LOSSES, _of_normal, tail_index

often = settings(max_examples=20, deadline=None)


def test_the_index_is_hills_as_he_writes_it():
    row = np.random.default_rng(0).standard_t(4, size=259) * 1e5
    losses = np.sort(-row)[::-1]
    logs = [np.log(losses[place]) - np.log(losses[25]) for place in range(25)]
    found = tail_index(row[np.newaxis])
    assert found.value[0] == pytest.approx(25 / sum(logs), rel=1e-12)
    assert found.standard_error[0] == pytest.approx(found.value[0] / 5, rel=1e-14)
    assert found.losses.tolist() == [25]


@pytest.mark.parametrize("index", [1.5, 3.0, 6.0])
def test_a_power_tail_gives_back_its_power(index):
    rows = -stats.pareto.rvs(index, size=(400, 500), random_state=np.random.default_rng(1))
    found = tail_index(rows)
    away = (1 / found.value - 1 / index) * index * np.sqrt(50)
    # 1 / index is a mean of 50 exponentials: unbiased, relative deviation 1 / sqrt(50).
    assert abs(away.mean()) < 4 / np.sqrt(400)
    assert away.std() == pytest.approx(1, abs=0.15)
    assert np.median(found.standard_error / found.value) == pytest.approx(1 / np.sqrt(50), rel=1e-12)


@pytest.mark.parametrize(("n", "tail_share"), [(250, "0.1"), (1000, "0.05"), (1000, "0.1")])
def test_the_p_value_of_normal_losses_is_as_often_small_as_it_says(n, tail_share):
    rows = np.random.default_rng(n).normal(size=(4000, n))
    found = tail_index(rows, Decimal(tail_share))
    for level in (0.01, 0.05, 0.5):
        error = 4 * np.sqrt(level * (1 - level) / 4000)
        assert (found.p_value < level).mean() == pytest.approx(level, abs=error)
    assert 1 / np.mean(1 / found.value) == pytest.approx(found.under_normal, rel=0.02)


def test_the_p_value_of_fat_tails_is_small():
    fat = tail_index(np.random.default_rng(2).standard_t(3, size=(200, 1000)))
    thin = tail_index(np.random.default_rng(2).uniform(-1, 1, size=(200, 1000)))
    assert (fat.p_value < 0.05).mean() > 0.95
    assert (thin.p_value > 0.95).all()
    assert (fat.value < fat.under_normal).mean() > 0.95


@pytest.mark.parametrize(("k", "n"), [(25, 250), (50, 1000), (199, 1000)])
def test_what_the_normal_has_is_the_integral(k, n):
    """By quadrature of the density beyond the quantile."""
    share = (k + 1) / (n + 1)
    z = stats.norm.isf(share)
    moments = [
        integrate.quad(lambda x, p=power: np.log(x / z) ** p * stats.norm.pdf(x), z, 20)[0] / share for power in (1, 2)
    ]
    mean, variance = _of_normal(k, n)
    assert mean == pytest.approx(moments[0], rel=1e-9)
    h = 1e-5
    slope = (
        integrate.quad(lambda x: np.log(x / (z + h)) * stats.norm.pdf(x), z + h, 20)[0] / stats.norm.sf(z + h)
        - integrate.quad(lambda x: np.log(x / (z - h)) * stats.norm.pdf(x), z - h, 20)[0] / stats.norm.sf(z - h)
    ) / (2 * h)
    of_threshold = slope**2 * share * (1 - share) / (n * stats.norm.pdf(z) ** 2)
    assert variance == pytest.approx(moments[1] - moments[0] ** 2 + k * of_threshold, rel=1e-6)


def test_losses_that_tie_with_the_threshold_do_not_count():
    losses = np.concatenate([np.full(150, 2.0), 2.0 * np.exp(np.arange(1, 13) / 10), -np.ones(38)])
    found = tail_index(-losses[np.newaxis])
    assert found.losses.tolist() == [12]
    assert found.value[0] == pytest.approx(12 / (np.arange(1, 13) / 10).sum(), rel=1e-12)


WALK = np.random.default_rng(3).standard_t(4, size=250) * 100
POOR = {
    "ordinary": (WALK, Lack.NONE),
    "flat": (np.zeros(250), Lack.FEW_IN_TAIL),
    "constant loss": (np.full(250, -3.7), Lack.FEW_IN_TAIL),
    "missing": (np.where(np.arange(250) == 3, np.nan, WALK), Lack.NOT_FINITE),
    "infinite": (np.where(np.arange(250) == 3, -np.inf, WALK), Lack.NOT_FINITE),
    "mostly zeros": (np.where(np.arange(250) % 10 == 0, WALK, 0.0), Lack.FEW_IN_TAIL),
    "25 losses, none to be the threshold": (np.where(np.arange(250) % 10 == 0, -np.abs(WALK), 1.0), Lack.FEW_IN_TAIL),
    "26 losses": (np.where((np.arange(250) % 10 == 0) | (np.arange(250) == 1), -np.abs(WALK), 1.0), Lack.NONE),
    "never a loss": (np.abs(WALK), Lack.FEW_IN_TAIL),
    "one outlier": (np.where(np.arange(250) == 9, -1e12, WALK), Lack.NONE),
    "huge": (WALK * 1e200, Lack.NONE),
    "tiny": (WALK * 1e-200, Lack.NONE),
    "a ratio that overflows": (np.where(np.arange(250) < 20, -1e300, -1e-300), Lack.OUT_OF_RANGE),
}


def test_every_poor_row_gets_an_index_or_its_reason_and_harms_no_neighbour():
    panel = np.stack([row for row, _ in POOR.values() for row in (row, POOR["missing"][0])])
    with np.errstate(all="raise"):
        found = tail_index(panel)
    assert [Lack(code) for code in found.lack[::2]] == [lack for _, lack in POOR.values()]
    assert (found.lack[1::2] == Lack.NOT_FINITE).all()
    for each in (found.value, found.standard_error, found.p_value):
        np.testing.assert_array_equal(np.isnan(each), found.lack != Lack.NONE)
    assert ((found.p_value >= 0) & (found.p_value <= 1))[found.lack == Lack.NONE].all()
    for place, row in enumerate(panel):
        alone = tail_index(row[np.newaxis])
        for field in ("value", "lack", "standard_error", "p_value", "losses"):
            np.testing.assert_array_equal(getattr(alone, field)[0], getattr(found, field)[place])


def test_few_scenarios_none_and_ten_thousand_subjects():
    random = np.random.default_rng(4)
    assert tail_index(np.empty((2, 0))).lack.tolist() == [Lack.TOO_SHORT] * 2
    assert tail_index(random.normal(size=(2, 10 * LEAST_LOSSES - 1))).lack.tolist() == [Lack.FEW_IN_TAIL] * 2
    assert tail_index(random.normal(size=(2, 10 * LEAST_LOSSES))).lack.tolist() == [Lack.NONE] * 2
    assert tail_index(np.empty((0, 250))).value.shape == (0,)
    rows = random.standard_t(4, size=(10_000, 100))
    rows[::1000] = np.inf
    assert np.flatnonzero(tail_index(rows).lack).tolist() == list(range(0, 10_000, 1000))


def test_the_tail_share_is_checked():
    for wrong in (Decimal("0.21"), Fraction(1, 2), Decimal(0), Decimal(1)):
        with pytest.raises(ValueError, match="tail share"):
            tail_index(WALK[np.newaxis], wrong)
    assert tail_index(WALK[np.newaxis], Fraction(1, 5)).lack.tolist() == [Lack.NONE]
    with pytest.raises(TypeError, match="Decimal or a Fraction"):
        tail_index(WALK[np.newaxis], 0.1)


@often
@given(seed=st.integers(0, 2**32 - 1), power=st.integers(-20, 20), factor=st.floats(1e-3, 1e3))
def test_free_of_the_unit_and_of_the_order(seed, power, factor):
    random = np.random.default_rng(seed)
    rows = np.round(random.standard_t(3, size=(3, 200)) * 1e3)
    before = tail_index(rows)
    for same in (tail_index(rows * 2.0**power), tail_index(random.permuted(rows, axis=1))):
        for field in ("value", "lack", "standard_error", "p_value"):
            np.testing.assert_array_equal(getattr(same, field), getattr(before, field))
    scaled = tail_index(rows * factor)
    np.testing.assert_allclose(scaled.value, before.value, rtol=1e-9)
    np.testing.assert_allclose(scaled.p_value, before.p_value, rtol=1e-8, atol=1e-300)
    order = random.permutation(3)
    np.testing.assert_array_equal(tail_index(rows[order]).value, before.value[order])


@often
@given(seed=st.integers(0, 2**32 - 1), stretch=st.floats(1.01, 10))
def test_a_worst_loss_made_worse_lowers_the_index_and_its_p_value(seed, stretch):
    row = np.random.default_rng(seed).standard_t(4, size=(1, 200))
    worse = row.copy()
    worse[0, row.argmin()] *= stretch
    before, after = tail_index(row), tail_index(worse)
    assert after.value[0] < before.value[0]
    assert after.p_value[0] < before.p_value[0]
