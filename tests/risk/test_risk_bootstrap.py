"""The bootstrap against its definition, resample by resample, and how often its bounds hold."""

from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest

from monitor.risk import bootstrap
from monitor.risk.age_weighted import age_weights
from monitor.risk.bootstrap import (
    age_weighted_bounds,
    cornish_fisher_bounds,
    historical_bounds,
    overlapping_bounds,
    volatility_scaled_bounds,
)
from monitor.risk.bounds import RESAMPLES, BoundLack, ends
from monitor.risk.cornish_fisher import expansion
from monitor.risk.historical import historical
from monitor.risk.moments import skewness_and_kurtosis
from monitor.risk.normal import standard_normal_tail
from monitor.risk.order_bounds import order_bounds
from monitor.risk.randomness import random_state
from monitor.risk.student import standard_student_tail
from monitor.risk.volatility_scaled import scaled_scenarios

NINETY, NINETY_FIVE = Decimal("0.9"), Decimal("0.95")
NINETY_SEVEN_HALF, NINETY_NINE = Decimal("0.975"), Decimal("0.99")
WALK = np.random.default_rng(2).standard_t(4, size=(1, 120)) * 1e5


def draws(name="bounds"):
    return random_state("saltmere", "2026-01-02", name)


def places_of(n, columns=None):
    return draws().randint(0, n, size=(RESAMPLES, columns or n), dtype=np.int32)


def shortfall_and_error(row, confidence):
    """Expected shortfall of a row and its standard error (Manistre and Hancock 2005), times the root of a n."""
    tail = historical(row[np.newaxis], confidence)
    within, losses = float((1 - Fraction(confidence)) * len(row)), np.sort(-row)[::-1]
    counted = np.clip(within - np.arange(len(row)), 0, 1)
    shortfall, at_risk = tail.expected_shortfall.value[0], tail.value_at_risk.value[0]
    variance = np.average(np.square(losses - shortfall), weights=counted)
    return shortfall, np.sqrt(variance + float(confidence) * (shortfall - at_risk) ** 2)


def test_the_ends_are_the_25th_from_either_side():
    low, high = ends(np.random.default_rng(1).permuted(np.tile(np.arange(1.0, 1000.0), (3, 1)), axis=1))
    assert low.tolist() == [25.0] * 3
    assert high.tolist() == [975.0] * 3


@pytest.mark.parametrize("confidence", [NINETY, Decimal("0.93")])
def test_historical_shortfall_is_the_studentised_bootstrap(confidence):
    """0.07 x 120 = 8.4: the ninth scenario counts in part."""
    ascending = np.sort(WALK[0])
    shortfall, error = shortfall_and_error(WALK[0], confidence)
    resamples = [shortfall_and_error(ascending[places], confidence) for places in places_of(120)]
    t = np.sort([(drawn - shortfall) / its_error for drawn, its_error in resamples])
    bounds = historical_bounds(WALK, confidence, draws()).expected_shortfall
    at_risk = order_bounds(WALK, confidence)
    assert bounds.low[0] == pytest.approx(shortfall - t[974] * error, rel=1e-9)
    assert bounds.high[0] == pytest.approx(max(shortfall - t[24] * error, at_risk.high[0]), rel=1e-9)


def test_a_tail_without_spread_takes_the_resamples_themselves():
    """Six losses of 5 in 100 fill the tail of 95 %, but not in every resample: the percentiles go from below 5 to 5."""
    pnl = np.concatenate([np.full(6, -5.0), np.linspace(0, 1, 94)])[np.newaxis]
    drawn = np.sort(pnl[0])[places_of(100)]
    plain = np.sort(historical(drawn, NINETY_FIVE).expected_shortfall.value)
    bounds = historical_bounds(pnl, NINETY_FIVE, draws()).expected_shortfall
    assert bounds.low[0] == pytest.approx(plain[24], rel=1e-12)
    assert bounds.high[0] == pytest.approx(5.0, rel=1e-12)


def test_where_value_at_risk_has_no_upper_bound_shortfall_has_none():
    pnl = np.random.default_rng(3).standard_t(4, size=(2, 367))
    bounds = historical_bounds(pnl, NINETY_NINE, draws())
    for bound in (bounds.value_at_risk, bounds.expected_shortfall):
        assert np.isnan(bound.high).all()
        assert np.isfinite(bound.low).all()
        assert bound.reason.tolist() == [BoundLack.TOO_FEW] * 2


def test_with_too_few_in_the_tail_the_lower_bound_of_value_at_risk_stands_in():
    """2.5 of 250 in the tail: in 8 % of resamples the worst scenario alone fills it."""
    pnl = np.random.default_rng(3).standard_t(4, size=(2, 250))
    bounds = historical_bounds(pnl, NINETY_NINE, draws(), 4)
    np.testing.assert_array_equal(bounds.expected_shortfall.low, bounds.value_at_risk.low)


def test_blocks_against_their_definition():
    confidence, days, n = NINETY, 3, 120
    starts = draws().randint(0, n - 5, size=(RESAMPLES, 20), dtype=np.int32)
    resamples = np.array([[WALK[0, start + step] for start in row for step in range(6)] for row in starts])
    tail = historical(resamples, confidence)
    bounds = overlapping_bounds(WALK, confidence, draws(), days)
    for bound, figures in (
        (bounds.value_at_risk, np.sort(tail.value_at_risk.value)),
        (bounds.expected_shortfall, np.sort(tail.expected_shortfall.value)),
    ):
        assert bound.low[0] == pytest.approx(figures[24], rel=1e-12)
        assert bound.high[0] == pytest.approx(figures[974], rel=1e-12)
        assert bound.reason.tolist() == [BoundLack.NONE]


@pytest.mark.parametrize(
    ("n", "days", "confidence", "low", "high"),
    [(500, 10, NINETY_NINE, True, False), (3680, 10, NINETY_NINE, True, True), (3679, 10, NINETY_NINE, True, False),
     (740, 10, NINETY_FIVE, True, True), (99, 10, NINETY_FIVE, False, False), (100, 10, NINETY_FIVE, True, False)],
)  # fmt: skip
def test_overlapping_scenarios_speak_like_their_horizons_end_to_end(n, days, confidence, low, high):
    """0.99^367 > 2.5 % > 0.99^368; 0.95^74 < 2.5 % < 0.95^10; below ten horizons nothing is told."""
    pnl = np.random.default_rng(3).normal(size=(1, n))
    for bound in vars(overlapping_bounds(pnl, confidence, draws(), days)).values():
        assert np.isfinite([bound.low[0], bound.high[0]]).tolist() == [low, high]
        assert (bound.reason[0] == BoundLack.TOO_FEW) == (not high)


def test_age_weighted_shortfall_against_its_definition():
    decay, confidence = 0.995, NINETY
    share = float(1 - confidence)
    weights = age_weights(120, decay)
    state = draws()
    state.random_sample((RESAMPLES, 120))  # those of value at risk come first
    found = []
    for places in state.randint(0, 120, size=(RESAMPLES, 120), dtype=np.int32):
        order = np.argsort(WALK[0, places])
        weight = weights[places][order] / weights[places].sum()
        before = np.cumsum(weight) - weight
        found.append(-(WALK[0, places][order] * np.clip(share - before, 0, weight)).sum() / share)
    found.sort()
    bounds = age_weighted_bounds(WALK, confidence, draws(), decay, 4)
    assert bounds.expected_shortfall.low[0] == pytest.approx(2 * found[24], rel=1e-9)
    assert bounds.expected_shortfall.high[0] == pytest.approx(
        max(2 * found[974], bounds.value_at_risk.high[0]), rel=1e-9
    )


def test_young_weights_speak_for_too_few_scenarios_to_bound_the_shortfall():
    """At 0.97 they speak like 66 equal ones, and 0.975^66 > 2.5 %; at 0.99 like 199."""
    pnl = np.random.default_rng(3).normal(size=(1, 1000))
    for decay, high in ((0.97, False), (0.99, True)):
        bounds = age_weighted_bounds(pnl, NINETY_SEVEN_HALF, draws(), decay)
        assert np.isfinite(bounds.value_at_risk.high[0])
        assert np.isfinite(bounds.expected_shortfall.high[0]) == high


@pytest.mark.parametrize("drift", ["zero", "sample"])
def test_cornish_fisher_against_its_definition(drift):
    pnl = np.random.default_rng(4).standard_t(7, size=(1, 200)) * 10 + 1
    resamples = pnl[0, places_of(200)]
    skewness, kurtosis = skewness_and_kurtosis(resamples)
    location = resamples.mean(axis=1) if drift == "sample" else 0.0
    multiple = -expansion(-standard_normal_tail(0.01)[0], skewness, kurtosis)
    figures = np.sort(2 * resamples.std(axis=1, ddof=1) * multiple - 4 * location)
    bounds = cornish_fisher_bounds(pnl, NINETY_NINE, draws(), 4, drift).value_at_risk
    assert bounds.reason.tolist() == [BoundLack.NONE]
    assert bounds.low[0] == pytest.approx(figures[24], rel=1e-9)
    assert bounds.high[0] == pytest.approx(figures[974], rel=1e-9)


def test_volatility_scaled_takes_the_scaled_scenarios():
    scaled = scaled_scenarios(WALK, "ewma", 0.94).scenarios
    for one, other in zip(
        vars(volatility_scaled_bounds(WALK, NINETY, draws(), 5, "ewma", 0.94)).values(),
        vars(historical_bounds(scaled, NINETY, draws(), 5)).values(),
        strict=True,
    ):
        np.testing.assert_array_equal(one.low, other.low)
        np.testing.assert_array_equal(one.high, other.high)


def test_the_names_decide_the_draws():
    one, again, other = (
        historical_bounds(WALK, NINETY, draws(name)).expected_shortfall for name in ("bounds", "bounds", "else")
    )
    np.testing.assert_array_equal(one.low, again.low)
    assert one.low[0] != other.low[0]
    assert one.low[0] == pytest.approx(other.low[0], rel=0.1)


def test_blocks_of_subjects_do_not_matter(monkeypatch):
    pnl = np.random.default_rng(6).standard_t(3, size=(30, 150))
    before = overlapping_bounds(pnl, NINETY, draws(), 2)
    monkeypatch.setattr(bootstrap, "_BLOCK", 7)
    after = overlapping_bounds(pnl, NINETY, draws(), 2)
    np.testing.assert_array_equal(before.expected_shortfall.high, after.expected_shortfall.high)
    np.testing.assert_array_equal(before.value_at_risk.low, after.value_at_risk.low)


# --- how often the bounds hold -------------------------------------------------------------------------------------

# Measured over 2,000 samples and said in the docstring; 1,000 samples have a standard error of 0.8 %.
SHORTFALL_COVERAGE = {("normal", 500): 0.945, ("t(4)", 500): 0.932, ("normal", 1000): 0.93, ("t(4)", 1000): 0.91}


@pytest.mark.parametrize(("distribution", "n"), SHORTFALL_COVERAGE)
def test_coverage_of_historical_shortfall_at_99(distribution, n):
    random = np.random.default_rng(n)
    if distribution == "normal":
        pnl, truth = random.normal(size=(1000, n)), standard_normal_tail(0.01)[1]
    else:
        pnl, truth = random.standard_t(4, size=(1000, n)), standard_student_tail(np.array([4.0]), 0.01)[1][0]
    bounds = historical_bounds(pnl, NINETY_NINE, draws()).expected_shortfall
    within = ((bounds.low <= truth) & (truth <= bounds.high)).mean()
    assert within == pytest.approx(SHORTFALL_COVERAGE[distribution, n], abs=0.025)
    assert (bounds.low <= truth).mean() >= 0.96


def test_coverage_of_overlapping_horizons():
    """Sums of ten t(4), 1,000 of them at 95 %: VaR about 90 %, below 95 as the docstring says; 300 samples."""
    daily = np.random.default_rng(10).standard_t(4, size=(300, 1009))
    total = np.cumsum(np.hstack([np.zeros((300, 1)), daily]), axis=1)
    truth = -np.quantile(np.random.default_rng(11).standard_t(4, size=(200_000, 10)).sum(axis=1), 0.05)
    bounds = overlapping_bounds(total[:, 10:] - total[:, :-10], NINETY_FIVE, draws(), 10).value_at_risk
    assert 0.85 <= ((bounds.low <= truth) & (truth <= bounds.high)).mean() <= 0.96
    assert (bounds.low <= truth).mean() >= 0.95
