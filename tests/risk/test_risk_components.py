"""Components of value at risk and expected shortfall: what must hold of them, and that they are derivatives."""

from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import mstats

from monitor.risk.age_weighted import age_weighted, age_weights
from monitor.risk.components import (
    elliptical_components,
    group_pnl,
    historical_components,
    marginal,
    tail_weights,
    weighted_components,
)
from monitor.risk.figures import Lack
from monitor.risk.harrell_davis import harrell_davis_weights
from monitor.risk.historical import historical
from monitor.risk.normal import normal
from monitor.risk.student import student_t

often = settings(max_examples=12, deadline=None)
NINETY_NINE = Decimal("0.99")
N = 250


def factors_for(scenarios):
    """Some factors that do not change when all positions grow, as those of volatility_scaled."""
    return np.exp(0.3 * np.sin(np.arange(scenarios.shape[1])) * np.arange(1, len(scenarios) + 1)[:, np.newaxis])


def by_elliptical(method, days, drift):
    def components(pnl, owner, position, subjects):
        tail = method(group_pnl(pnl, owner, position, subjects), NINETY_NINE, days, drift)
        found = elliptical_components(pnl, owner, position, tail, days, drift)
        return [(found.value_at_risk, tail.value_at_risk), (found.expected_shortfall, tail.expected_shortfall)]

    return components


def by_historical(confidence, days, scaled):
    def components(pnl, owner, position, subjects):
        scenarios = group_pnl(pnl, owner, position, subjects)
        factors = factors_for(scenarios) if scaled else None
        tail = historical(scenarios * factors if scaled else scenarios, Decimal(confidence), days)
        found = historical_components(pnl, owner, position, subjects, Decimal(confidence), days, factors)
        return [(found.value_at_risk, tail.value_at_risk), (found.expected_shortfall, tail.expected_shortfall)]

    return components


def by_age(confidence, decay):
    def components(pnl, owner, position, subjects):
        tail = age_weighted(group_pnl(pnl, owner, position, subjects), Decimal(confidence), decay, 10)
        weights = age_weights(pnl.shape[1], decay)
        found = weighted_components(pnl, owner, position, subjects, Decimal(confidence), weights, 10)
        return [(found, tail.expected_shortfall)]

    return components


KINDS = {
    "normal": by_elliptical(normal, 1, "zero"),
    "normal, drift": by_elliptical(normal, 10, "sample"),
    "student_t": by_elliptical(student_t, 1, "zero"),
    "student_t, drift": by_elliptical(student_t, 10, "sample"),
    "historical": by_historical("0.99", 1, scaled=False),
    "historical, 97.5 %": by_historical("0.975", 10, scaled=False),
    "volatility scaled": by_historical("0.95", 10, scaled=True),
    "age weighted": by_age("0.99", 0.98),
    "age weighted, one day fills the tail": by_age("0.99", 0.9),
}
every_kind = pytest.mark.parametrize("kind", KINDS.values(), ids=KINDS.keys())


def groups(seed, positions=12, subjects=5, n=N):
    """Fat-tailed positions with a common factor, long and short, in overlapping subjects of 1 to `positions` each."""
    random = np.random.default_rng(seed)
    market = random.standard_t(4, size=n)
    exposure = random.lognormal(8, 1, size=(positions, 1)) * random.choice([-1, 1], p=[0.2, 0.8], size=(positions, 1))
    pnl = exposure * 0.01 * (market + random.standard_t(4, size=(positions, n)))
    sizes = random.integers(1, positions + 1, size=subjects)
    owner = np.repeat(np.arange(subjects), sizes)
    position = np.concatenate([random.choice(positions, size, replace=False) for size in sizes])
    return pnl, owner, position, subjects


def sums(component, owner, subjects):
    return np.bincount(owner, component, minlength=subjects)


seeds = st.integers(0, 2**32 - 1)


@every_kind
@often
@given(seed=seeds)
def test_components_add_up_to_the_figure(kind, seed):
    pnl, owner, position, subjects = groups(seed)
    for found, told in kind(pnl, owner, position, subjects):
        whole = found.lack == Lack.NONE
        assert np.isin(found.lack, [Lack.NONE, Lack.NOT_SCALABLE]).all()
        np.testing.assert_allclose(sums(found.component, owner, subjects)[whole], told.value[whole], rtol=1e-10)


@every_kind
@often
@given(seed=seeds, power=st.integers(-20, 20))
def test_twice_all_positions_is_twice_every_component(kind, seed, power):
    pnl, owner, position, subjects = groups(seed)
    for (one, _), (many, _) in zip(
        kind(pnl, owner, position, subjects), kind(pnl * 2.0**power, owner, position, subjects), strict=True
    ):
        np.testing.assert_array_equal(many.component, one.component * 2.0**power)
        np.testing.assert_array_equal(many.factor, one.factor)
        np.testing.assert_array_equal(many.lack, one.lack)


@every_kind
@often
@given(seed=seeds)
def test_the_order_of_positions_and_pairs_does_not_matter(kind, seed):
    pnl, owner, position, subjects = groups(seed)
    random = np.random.default_rng(seed)
    rows = random.permutation(len(pnl))
    shuffled = random.permutation(len(owner))
    pairs = shuffled[np.argsort(owner[shuffled], kind="stable")]
    now_at = np.argsort(rows)[position]
    for (one, told), (other, _) in zip(
        kind(pnl, owner, position, subjects), kind(pnl[rows], owner[pairs], now_at[pairs], subjects), strict=True
    ):
        np.testing.assert_array_equal(other.lack, one.lack)
        slack = 1e-10 * np.nan_to_num(np.abs(told.value)).max()
        np.testing.assert_allclose(other.component, one.component[pairs], rtol=1e-9, atol=slack)


@every_kind
@often
@given(seed=seeds)
def test_a_position_in_two_halves_gets_half_each(kind, seed):
    pnl, owner, position, subjects = groups(seed)
    halved = np.concatenate([pnl, pnl[:1] / 2, pnl[:1] / 2])
    holders = np.flatnonzero(position == 0)
    as_halves = position.copy()
    as_halves[holders] = len(pnl)
    split_owner = np.insert(owner, holders + 1, owner[holders])
    split_position = np.insert(as_halves, holders + 1, len(pnl) + 1)
    second = split_position == len(pnl) + 1
    first = np.roll(second, -1)
    for (one, _), (two, _) in zip(
        kind(pnl, owner, position, subjects), kind(halved, split_owner, split_position, subjects), strict=True
    ):
        np.testing.assert_array_equal(two.component[first], two.component[second])
        np.testing.assert_allclose(two.component[first], one.component[holders] / 2, rtol=1e-9)


@every_kind
def test_the_only_position_gets_the_whole_figure(kind):
    pnl, *_ = groups(4)
    for found, told in kind(pnl, np.arange(len(pnl)), np.arange(len(pnl)), len(pnl)):
        measured = found.lack == Lack.NONE
        assert measured.sum() > len(pnl) / 2
        np.testing.assert_allclose(found.component[measured], told.value[measured], rtol=1e-12)


@every_kind
def test_poor_positions_and_subjects_harm_only_their_own(kind):
    """A row of NaN, of an infinity, of zeros; a subject without positions, and one whose positions cancel."""
    pnl, owner, position, subjects = groups(8)
    pnl = np.concatenate([pnl, np.zeros((3, N)), -pnl[:1]])
    nan, infinite, nothing, opposite = len(pnl) - 4, len(pnl) - 3, len(pnl) - 2, len(pnl) - 1
    pnl[nan, 7], pnl[infinite, 9] = np.nan, -np.inf
    more_owner = np.concatenate([owner, [5, 5, 6, 6, 8, 8, 9, 9, 9]])
    more_position = np.concatenate([position, [0, nan, infinite, 1, 0, opposite, 2, nothing, 3]])
    for (clean, _), (found, told) in zip(
        kind(pnl, owner, position, subjects), kind(pnl, more_owner, more_position, 10), strict=True
    ):
        np.testing.assert_array_equal(found.component[: len(owner)], clean.component)
        assert found.lack[5:9].tolist() == [Lack.NOT_FINITE, Lack.NOT_FINITE, Lack.NONE, Lack.NONE]
        after = found.component[len(owner) :]
        assert np.isnan(after[:4]).all()
        assert np.isnan(found.factor[5:7]).all()
        assert after[4:6].tolist() == [0, 0] and told.value[8] == 0 and found.factor[8] == 1
        assert after[7] == 0 and not np.signbit(after[7])
        assert after[6] + after[8] == pytest.approx(told.value[9], rel=1e-12)


@every_kind
def test_a_subject_alone_is_the_same_to_the_last_digit_as_in_a_crowd(kind):
    pnl, owner, position, subjects = groups(15, positions=400, subjects=9)
    crowd = kind(pnl, owner, position, subjects)
    for subject in range(subjects):
        pairs = owner == subject
        held = position[pairs]
        rows = np.sort(held)
        alone = kind(np.asfortranarray(pnl[rows]), np.zeros(len(held), dtype=np.int64), np.searchsorted(rows, held), 1)
        for (one, _), (many, _) in zip(alone, crowd, strict=True):
            if kind is KINDS["volatility scaled"] and subject > 0:
                continue  # the made-up factors go by the subject's number
            np.testing.assert_array_equal(one.component, many.component[pairs])
            np.testing.assert_array_equal(one.factor[0], many.factor[subject])


@pytest.mark.parametrize("name", ["normal", "historical", "historical, 97.5 %", "age weighted"])
@often
@given(seed=seeds)
def test_no_component_of_the_shortfall_is_more_than_the_position_alone(name, seed):
    kind = KINDS[name]
    pnl, owner, position, subjects = groups(seed)
    component = kind(pnl, owner, position, subjects)[-1][0].component
    alone = kind(pnl, np.arange(len(pnl)), np.arange(len(pnl)), len(pnl))[-1][1].value
    assert (component <= alone[position] * (1 + np.sign(alone[position]) * 1e-12)).all()


# --- derivatives ---------------------------------------------------------------------------------------------------


def slopes(figure, pnl, step):
    """By central differences, the change of the figure of the sum when each position grows by a small part."""
    found = []
    for at in range(len(pnl)):
        up, down = pnl.copy(), pnl.copy()
        up[at] *= 1 + step
        down[at] *= 1 - step
        found.append((figure(up.sum(axis=0)) - figure(down.sum(axis=0))) / (2 * step))
    return np.array(found)


def one_subject(seed, positions=8, n=N):
    pnl, *_ = groups(seed, positions, n=n)
    return pnl, np.zeros(positions, dtype=np.int64), np.arange(positions)


@pytest.mark.parametrize(("days", "drift"), [(1, "zero"), (10, "zero"), (1, "sample"), (10, "sample")])
def test_normal_components_are_derivatives(days, drift):
    pnl, owner, position = one_subject(21)
    pnl += np.arange(-3.0, 5.0)[:, np.newaxis]  # a mean that matters
    found = elliptical_components(
        pnl, owner, position, normal(group_pnl(pnl, owner, position, 1), NINETY_NINE, days, drift), days, drift
    )
    for component, name in (
        (found.value_at_risk.component, "value_at_risk"),
        (found.expected_shortfall.component, "expected_shortfall"),
    ):

        def figure(row, name=name):
            return getattr(normal(row[np.newaxis], NINETY_NINE, days, drift), name).value[0]

        np.testing.assert_allclose(component, slopes(figure, pnl, 1e-4), rtol=1e-6)


def test_a_large_mean_costs_no_component_its_digits():
    pnl, owner, position = one_subject(21)
    shifted = pnl + np.arange(1.0, 9.0)[:, np.newaxis] * 2.0**30
    shares = []
    for rows in (shifted, shifted - np.arange(1.0, 9.0)[:, np.newaxis] * 2.0**30):
        tail = normal(group_pnl(rows, owner, position, 1), NINETY_NINE)
        found = elliptical_components(rows, owner, position, tail).value_at_risk
        assert found.component.sum() == pytest.approx(tail.value_at_risk.value[0], rel=1e-10)
        shares.append(found.component)
    np.testing.assert_allclose(*shares, rtol=1e-8)


def test_student_components_share_out_by_beta():
    pnl, owner, position = one_subject(22)
    tail = student_t(pnl.sum(axis=0, keepdims=True), NINETY_NINE)
    found = elliptical_components(pnl, owner, position, tail)
    covariance = np.cov(np.concatenate([pnl, pnl.sum(axis=0, keepdims=True)]))
    beta = covariance[:-1, -1] / covariance[-1, -1]
    np.testing.assert_allclose(found.value_at_risk.component, beta * tail.value_at_risk.value, rtol=1e-10)
    np.testing.assert_allclose(found.expected_shortfall.component, beta * tail.expected_shortfall.value, rtol=1e-10)


@pytest.mark.parametrize("confidence", ["0.99", "0.975", "0.95", "0.999"])
def test_historical_shortfall_components_are_derivatives(confidence):
    """The order of the scenarios does not change for so small a step, so that the shortfall is linear there."""
    pnl, owner, position = one_subject(23)
    found = historical_components(pnl, owner, position, 1, Decimal(confidence), 10).expected_shortfall

    def figure(row):
        return historical(row[np.newaxis], Decimal(confidence), 10).expected_shortfall.value[0]

    np.testing.assert_allclose(found.component, slopes(figure, pnl, 1e-6), rtol=1e-7)


@pytest.mark.parametrize("confidence", ["0.99", "0.95", "0.9"])
def test_historical_value_at_risk_components_are_scaled_derivatives_of_the_estimate(confidence):
    """The estimate by scipy's hdquantiles, which is independent of ours."""
    pnl, owner, position = one_subject(24, n=120)
    found = historical_components(pnl, owner, position, 1, Decimal(confidence)).value_at_risk
    told = historical(pnl.sum(axis=0, keepdims=True), Decimal(confidence)).value_at_risk.value[0]

    def estimate(row):
        return -float(mstats.hdquantiles(row, [1 - float(confidence)])[0])

    assert found.lack.tolist() == [Lack.NONE]
    assert found.factor[0] == pytest.approx(told / estimate(pnl.sum(axis=0)), rel=1e-10)
    assert abs(found.factor[0] - 1) > 1e-4
    np.testing.assert_allclose(found.component, slopes(estimate, pnl, 1e-6) * found.factor[0], rtol=1e-6)


def test_age_weighted_components_are_derivatives():
    pnl, owner, position = one_subject(25)
    found = weighted_components(pnl, owner, position, 1, NINETY_NINE, age_weights(N, 0.98), 10)

    def figure(row):
        return age_weighted(row[np.newaxis], NINETY_NINE, 0.98, 10).expected_shortfall.value[0]

    np.testing.assert_allclose(found.component, slopes(figure, pnl, 1e-6), rtol=1e-6)


def test_scaled_components_are_those_of_scaled_positions():
    """With one factor a day for all, scaling the positions beforehand is the same."""
    pnl, owner, position = one_subject(26)
    factors = np.linspace(0.5, 2, N)[np.newaxis]
    scaled = historical_components(pnl, owner, position, 1, NINETY_NINE, 10, factors)
    before = historical_components(pnl * factors, owner, position, 1, NINETY_NINE, 10)
    for name in ("value_at_risk", "expected_shortfall"):
        np.testing.assert_allclose(getattr(scaled, name).component, getattr(before, name).component, rtol=1e-12)


# --- the weights ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("confidence", ["0.5", "0.9", "0.99", "0.999"])
@pytest.mark.parametrize("n", [1, 2, 7, 100, 500, 2500])
def test_harrell_davis_weights_add_up_and_agree_with_scipy(n, confidence):
    share = 1 - Fraction(confidence)
    weights = harrell_davis_weights(share, n)
    assert len(weights) <= n
    assert (weights >= 0).all()
    assert weights.sum() == pytest.approx(1, rel=1e-13)
    losses = np.random.default_rng(n).standard_t(4, size=n)
    if n > 1:  # scipy answers NaN for one scenario
        expected = float(mstats.hdquantiles(losses, [float(share)])[0])
        assert (np.sort(losses)[: len(weights)] * weights).sum() == pytest.approx(expected, rel=1e-10, abs=1e-12)


def test_few_scenarios_of_a_long_window_are_kept():
    """What is left out weighs less than 1e-18, and the first one left out would still have been below that."""
    share = Fraction(1, 100)
    kept = harrell_davis_weights(share, 500)
    assert 40 < len(kept) < 70
    from scipy.special import betaincc

    beyond = betaincc(5.01, 495.99, np.array([len(kept), len(kept) - 1]) / 500)
    assert beyond[0] < 1e-18 <= beyond[1]


def test_harrell_davis_needs_a_scenario():
    with pytest.raises(ValueError, match=r"there must be at least 1 scenario \(got 0\)"):
        harrell_davis_weights(Fraction(1, 100), 0)


@pytest.mark.parametrize(
    ("share", "n", "weights", "total"),
    [
        (Fraction(1, 100), 250, [1, 1, 0.5], 2.5),
        (Fraction(1, 100), 500, [1] * 5, 5),
        (Fraction(1, 40), 250, [1] * 6 + [0.25], 6.25),
        (Fraction(1, 100), 99, [1], 1),
        (Fraction(1, 100), 100, [1], 1),
    ],
)
def test_the_tail_of_the_shortfall(share, n, weights, total):
    """The cases of the historical shortfall (Acerbi and Tasche 2002)."""
    found, counted = tail_weights(share, n)
    assert found.tolist() == weights
    assert counted == total


# --- edges ---------------------------------------------------------------------------------------------------------


def test_of_equal_scenarios_the_earlier_counts_as_the_worse():
    whole = np.array([[-1.0, -5.0, 2.0, -5.0, -5.0, 3.0] + [4.0] * 14])
    first = np.arange(20.0)[np.newaxis]
    pnl = np.concatenate([first, whole - first])
    owner, position = np.zeros(2, dtype=np.int64), np.arange(2)
    historical_one = historical_components(pnl, owner, position, 1, Decimal("0.9")).expected_shortfall
    assert historical_one.component.tolist() == [-(1 + 3) / 2, 5 + (1 + 3) / 2]
    weighted = weighted_components(pnl, owner, position, 1, Decimal("0.9"), np.full(20, 0.05))
    np.testing.assert_allclose(weighted.component, [-2, 7], rtol=1e-14)


def losses(level, rest, n=500):
    """Five losses of `level`, all others `rest`: value at risk at 99 % is `level`."""
    return -np.concatenate([np.full(5, level), np.full(n - 5, rest)])


@pytest.mark.parametrize(
    ("factor", "scalable"),
    [(0.799, False), (0.801, True), (1.0, True), (1.249, True), (1.251, False), (-1.0, False), (0.0, False)],
)
def test_value_at_risk_has_components_only_where_the_factor_is_near_one(factor, scalable):
    """The worst loss moves the estimate alone, and so do the scenarios better than value at risk."""
    weights = harrell_davis_weights(Fraction(1, 100), 500)
    tail = weights[:5].sum()
    if factor == 0:
        row = losses(0.0, 0.0)
        row[0] = -1.0
    elif 0 < factor < 1:
        row = losses(1.0, 1.0)
        row[0] = -(1 + (1 / factor - 1) / weights[0])
    else:
        row = losses(1.0, (1 / factor - tail) / (1 - tail))
    found = historical_components(row[np.newaxis], np.array([0]), np.array([0]), 1, NINETY_NINE)
    told = historical(row[np.newaxis], NINETY_NINE)
    assert found.value_at_risk.factor[0] == pytest.approx(factor, rel=1e-9)
    if scalable:
        assert found.value_at_risk.lack.tolist() == [Lack.NONE]
        assert found.value_at_risk.component[0] == pytest.approx(told.value_at_risk.value[0], rel=1e-12)
    else:
        assert found.value_at_risk.lack.tolist() == [Lack.NOT_SCALABLE]
        assert np.isnan(found.value_at_risk.component[0])
    assert found.expected_shortfall.component[0] == pytest.approx(told.expected_shortfall.value[0], rel=1e-12)


def test_no_factor_where_the_estimate_is_zero():
    """The median of a loss and of as large a profit is estimated at 0, while value at risk is the loss."""
    worse, better = harrell_davis_weights(Fraction(1, 2), 2)
    row = np.array([[-1.0, worse / better]])
    assert -worse + better * row[0, 1] == 0
    found = historical_components(row, np.array([0]), np.array([0]), 1, Decimal("0.5")).value_at_risk
    assert found.lack.tolist() == [Lack.NOT_SCALABLE]
    assert np.isnan(found.factor).tolist() == [True]


def test_where_figure_and_estimate_are_zero_there_is_nothing_to_scale():
    """Two positions that cancel but for one profit, far from the tail: value at risk and estimate are 0."""
    pnl = np.arange(500.0) - 250
    pnl = np.stack([pnl, np.where(np.arange(500) == 300, 8.0, -pnl)])
    found = historical_components(pnl, np.array([0, 0]), np.array([0, 1]), 1, NINETY_NINE)
    assert found.value_at_risk.lack.tolist() == found.expected_shortfall.lack.tolist() == [Lack.NONE]
    assert found.value_at_risk.factor.tolist() == [1.0]
    assert found.value_at_risk.component[0] == -found.value_at_risk.component[1] > 200
    assert found.expected_shortfall.component.tolist() == [248, -248]


def test_marginals_are_components_by_exposure_or_say_why_not():
    pnl, *_ = one_subject(30, positions=4)
    bad = np.concatenate([pnl, np.full((1, N), np.nan)])
    found = historical_components(
        bad, np.array([0, 0, 0, 0, 1]), np.array([0, 1, 2, 3, 4]), 2, NINETY_NINE
    ).expected_shortfall
    rate = marginal(found.component, np.array([200.0, -50.0, 0.0, np.nan, 0.0]))
    assert rate.value[:2].tolist() == [found.component[0] / 200, found.component[1] / -50]
    assert rate.lack.tolist() == [Lack.NONE, Lack.NONE, *[Lack.NO_EXPOSURE] * 3]
    assert np.isnan(rate.value[2:]).all()
    assert found.lack.tolist() == [Lack.NONE, Lack.NOT_FINITE]


def test_a_sum_has_the_rows_of_its_pairs_alone():
    pnl = np.array([[1.0, 2.0], [10.0, 20.0], [np.nan, 5.0]])
    found = group_pnl(pnl, np.array([0, 0, 2, 3]), np.array([1, 0, 1, 2]), 5)
    np.testing.assert_array_equal(found, [[11, 22], [0, 0], [10, 20], [np.nan, 5], [0, 0]])


def test_an_overflow_is_out_of_range_for_its_subject_alone():
    pnl, owner, position, _ = groups(31)
    huge = np.where(np.arange(N) % 50 == 7, -1.7e308, 1.0)
    pnl = np.concatenate([pnl, huge[np.newaxis], np.where(huge < 0, -huge, 5.0)[np.newaxis]])
    pairs = np.concatenate([owner, [5, 6, 6]]), np.concatenate([position, [12, 12, 13]])
    found = historical_components(pnl, *pairs, 7, NINETY_NINE, 10)
    for part in (found.value_at_risk, found.expected_shortfall):
        assert part.lack[5] == Lack.OUT_OF_RANGE
        assert np.isnan(part.component[-3])
        assert (part.lack[:5] != Lack.OUT_OF_RANGE).all()
    # The P&L of subject 6 is ordinary, but ten days of either of its positions are not.
    assert found.expected_shortfall.lack[6] == Lack.OUT_OF_RANGE
    tail = normal(group_pnl(pnl, *pairs, 7), NINETY_NINE)
    assert elliptical_components(pnl, *pairs, tail).value_at_risk.lack[5] == Lack.OUT_OF_RANGE


@every_kind
@pytest.mark.parametrize("n", [0, 1])
def test_too_few_scenarios(kind, n):
    pnl = -np.ones((3, n))
    if n == 0 and kind in (KINDS["age weighted"], KINDS["age weighted, one day fills the tail"]):
        found = weighted_components(pnl, np.array([0, 1]), np.array([0, 2]), 2, NINETY_NINE, np.empty(0))
        assert found.lack.tolist() == [Lack.TOO_SHORT] * 2
        assert np.isnan(found.component).all()
        return
    for found, told in kind(pnl, np.array([0, 1]), np.array([0, 2]), 2):
        np.testing.assert_array_equal(found.lack, told.lack)
        np.testing.assert_array_equal(np.isnan(found.component), told.lack != Lack.NONE)
        if n == 0:
            assert found.lack.tolist() == [Lack.TOO_SHORT] * 2


@pytest.mark.parametrize("drift", ["zero", "sample"])
def test_two_scenarios_are_enough_for_elliptical_components(drift):
    pnl = np.array([[1.0, -3.0], [2.0, 1.0]])
    tail = normal(group_pnl(pnl, np.array([0, 0]), np.array([0, 1]), 1), NINETY_NINE, 1, drift)
    found = elliptical_components(pnl, np.array([0, 0]), np.array([0, 1]), tail, 1, drift).value_at_risk
    means = np.array([-1.0, 1.5]) if drift == "sample" else np.zeros(2)
    np.testing.assert_allclose(found.component, 2.3263478740408408 * np.array([4, 1]) / np.sqrt(2) - means, rtol=1e-12)


@every_kind
def test_no_subject_no_pair_and_no_position(kind):
    nobody = np.empty(0, dtype=np.int64)
    for positions, subjects in ((0, 0), (3, 0), (3, 2), (0, 2)):
        for found, _ in kind(np.ones((positions, N)), nobody, nobody, subjects):
            assert found.component.shape == (0,)
            assert found.factor.tolist() == [1.0] * subjects
            assert found.lack.tolist() == [Lack.NONE] * subjects


def test_ten_thousand_subjects():
    pnl = np.random.default_rng(32).standard_t(4, size=(10_000, 60))
    each = np.arange(10_000)
    found = historical_components(pnl, each, each, 10_000, Decimal("0.95"))
    told = historical(pnl, Decimal("0.95"))
    np.testing.assert_allclose(found.expected_shortfall.component, told.expected_shortfall.value, rtol=1e-12)


@every_kind
def test_what_is_given_is_left_as_it_was(kind):
    pnl, owner, position, subjects = groups(33)
    before = pnl.copy(), owner.copy(), position.copy()
    kind(pnl, owner, position, subjects)
    for one, other in zip(before, (pnl, owner, position), strict=True):
        np.testing.assert_array_equal(one, other)


def test_what_cannot_be_asked():
    pnl, one = np.ones((3, 4)), np.array([0])
    with pytest.raises(ValueError, match=r"must be \(positions, scenarios\) \(got 1 axes\)"):
        group_pnl(pnl[0], one, one, 1)
    with pytest.raises(ValueError, match=r"two lists of one length \(got \(1,\), \(2,\)\)"):
        group_pnl(pnl, one, np.array([0, 1]), 1)
    with pytest.raises(ValueError, match=r"two lists of one length"):
        group_pnl(pnl, one[np.newaxis], one[np.newaxis], 1)
    with pytest.raises(ValueError, match=r"each owner must be from 0 to 1 \(got 0 to 2\)"):
        group_pnl(pnl, np.array([0, 2]), np.array([0, 1]), 2)
    with pytest.raises(ValueError, match=r"each position must be from 0 to 2 \(got -1 to 1\)"):
        group_pnl(pnl, np.array([0, 1]), np.array([-1, 1]), 2)
    with pytest.raises(ValueError, match="the owner must ascend"):
        group_pnl(pnl, np.array([1, 0]), np.array([0, 1]), 2)
    with pytest.raises(ValueError, match=r"the factors must be \(1, 4\), \(subjects, n\) \(got \(4,\)\)"):
        historical_components(pnl, one, one, 1, NINETY_NINE, factors=np.ones(4))
    for weights, words in (
        (np.full(3, 1 / 3), "a weight for each of the 4"),
        (np.full(4, 0.3), "add up to 1"),
        (np.array([-0.5, 0.5, 0.5, 0.5]), "not be negative"),
        (np.array([np.nan, 0.5, 0.5, 0.5]), "add up to 1"),
    ):
        with pytest.raises(ValueError, match=words):
            weighted_components(pnl, one, one, 1, NINETY_NINE, weights)
    with pytest.raises(ValueError, match="the horizon must be at least 1 day"):
        historical_components(pnl, one, one, 1, NINETY_NINE, 0)
    with pytest.raises(ValueError, match="the horizon must be at least 1 day"):
        weighted_components(pnl, one, one, 1, NINETY_NINE, np.full(4, 0.25), 0)
    tail = normal(pnl[:1], NINETY_NINE)
    with pytest.raises(ValueError, match="the horizon must be at least 1 day"):
        elliptical_components(pnl, one, one, tail, 0)
    with pytest.raises(ValueError, match="the drift must be one of"):
        elliptical_components(pnl, one, one, tail, 1, "mean")
    with pytest.raises(TypeError, match="the confidence must be a Decimal"):
        historical_components(pnl, one, one, 1, 0.99)
