"""Volatility-scaled historical simulation: against the recursion written out, and what must hold of it."""

import dataclasses
import math
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
    assert_odd_rows,
    assert_same,
    assert_shortfall_not_below,
    crowd,
    fat_tailed,
    figures,
    often,
    panels,
)

from monitor.risk import volatility_scaled as module
from monitor.risk.figures import Lack
from monitor.risk.garch import conditional_variances, fit_garch
from monitor.risk.historical import historical
from monitor.risk.tail import FitNote
from monitor.risk.volatility import ewma, ewma_variances
from monitor.risk.volatility_scaled import scaled_scenarios, volatility_scaled

by_ewma = partial(volatility_scaled, confidence=NINETY_NINE, horizon_days=10, scaling="ewma", decay=0.94)
by_garch = partial(by_ewma, scaling="garch")
DECAYS = st.sampled_from([0.8, 0.94, 0.97])


def clustered(subjects, sessions, seed=1):
    """Returns whose volatility comes in clusters: GARCH(1,1) with .08 and .9, t(6) shocks, in the hundreds."""
    random = np.random.default_rng(seed)
    shocks = random.standard_t(6, size=(sessions + 100, subjects)) / math.sqrt(6 / 4)
    h, rows = np.ones(subjects), []
    for shock in shocks:
        rows.append(np.sqrt(h) * shock)
        h = 0.02 + 0.08 * rows[-1] ** 2 + 0.9 * h
    return np.ascontiguousarray(100 * np.stack(rows[100:], axis=1))


def variances_by_recursion(row, decay):
    variances = [sum(move**2 for move in row) / len(row)]
    for move in row:
        variances.append(decay * variances[-1] + (1 - decay) * move**2)
    return variances


@pytest.mark.parametrize("decay", [0.5, 0.94])
@pytest.mark.parametrize("sessions", [1, 2, 60])
def test_the_path_of_variances_is_the_recursion(decay, sessions):
    rows = clustered(5, sessions)
    path = ewma_variances(rows, decay)
    assert path.shape == (5, sessions + 1)
    assert path.flags.c_contiguous
    for found, row in zip(path, rows, strict=True):
        assert found == pytest.approx(variances_by_recursion(row.tolist(), decay), rel=1e-12)
    assert np.sqrt(path[:, -1]) == pytest.approx(ewma(rows, decay).value, rel=1e-12)


def test_each_scenario_is_scaled_by_the_forecast_made_before_it():
    rows = clustered(4, 120)
    scaled = scaled_scenarios(rows, "ewma", 0.94)
    for place, row in enumerate(rows.tolist()):
        variances = variances_by_recursion(row, 0.94)
        factors = [math.sqrt(variances[-1] / variance) for variance in variances[:-1]]
        assert scaled.factors[place] == pytest.approx(factors, rel=1e-12)
        wanted = [move * factor for move, factor in zip(row, factors, strict=True)]
        assert scaled.scenarios[place] == pytest.approx(wanted, rel=1e-12)
    assert scaled.note.tolist() == [FitNote.AS_ASKED] * 4
    assert scaled.lack.tolist() == [Lack.NONE] * 4


def test_by_garch_the_forecasts_are_those_of_its_fit():
    rows = clustered(6, 500)
    scaled = scaled_scenarios(rows, "garch", 0.94)
    fit = fit_garch(rows)
    assert fit.converged.all()
    variances = conditional_variances(fit, rows)
    np.testing.assert_array_equal(scaled.factors, np.sqrt(variances[:, -1:] / variances[:, :-1]))
    # The P&L itself is scaled, with its mean.
    np.testing.assert_array_equal(scaled.scenarios, rows * scaled.factors)
    assert scaled.note.tolist() == [FitNote.AS_ASKED] * 6


@pytest.mark.parametrize("scaling", ["ewma", "garch"])
def test_the_figures_are_those_of_historical_simulation_over_the_scaled_scenarios(scaling):
    rows = clustered(6, 500)
    wanted = historical(scaled_scenarios(rows, scaling, 0.94).scenarios, NINETY_NINE, 10)
    found = volatility_scaled(rows, NINETY_NINE, 10, scaling, 0.94)
    assert_same(found, wanted)
    assert found.exact_tail
    assert not volatility_scaled(rows[:, :99], NINETY_NINE, 10, scaling, 0.94).exact_tail


@pytest.mark.parametrize("scaling", ["ewma", "garch"])
def test_a_storm_raises_and_a_calm_lowers_what_history_says(scaling):
    random = np.random.default_rng(2)
    quiet, loud = random.normal(size=(3, 470)), 4 * random.normal(size=(3, 30))
    storm, calm = np.concatenate([quiet, loud], axis=1), np.concatenate([loud, quiet], axis=1)
    method = partial(volatility_scaled, confidence=NINETY_NINE, horizon_days=1, scaling=scaling, decay=0.94)
    assert (method(storm).value_at_risk.value > 1.2 * historical(storm, NINETY_NINE).value_at_risk.value).all()
    assert (method(calm).value_at_risk.value < historical(calm, NINETY_NINE).value_at_risk.value / 1.2).all()


def test_ewma_stands_in_where_garch_did_not_settle(monkeypatch):
    rows = clustered(3, 300)

    def settles_not_for_the_second(returns):
        return dataclasses.replace(fit_garch(returns), converged=np.array([True, False, True]))

    alone_by_garch = by_garch(rows)
    monkeypatch.setattr(module, "fit_garch", settles_not_for_the_second)
    tail = by_garch(rows)
    assert tail.note.tolist() == [FitNote.AS_ASKED, FitNote.EWMA_FOR_NO_FIT, FitNote.AS_ASKED]
    for found, garch, ewma_ in zip(figures(tail), figures(alone_by_garch), figures(by_ewma(rows)), strict=True):
        np.testing.assert_array_equal(found, [garch[0], ewma_[1], garch[2]])
        assert garch[1] != ewma_[1]


def test_ewma_stands_in_for_too_few_sessions():
    rows = np.concatenate([clustered(2, 50), np.zeros((1, 50)), np.full((1, 50), np.nan)])
    tail = by_garch(rows)
    assert tail.note.tolist() == [FitNote.EWMA_FOR_NO_FIT] * 2 + [FitNote.AS_ASKED] * 2
    assert tail.value_at_risk.lack.tolist() == [Lack.NONE] * 3 + [Lack.NOT_FINITE]
    for one, other in zip(figures(tail), figures(by_ewma(rows)), strict=True):
        np.testing.assert_array_equal(one, other)


@pytest.mark.parametrize("scaling", ["ewma", "garch"])
@pytest.mark.parametrize("value", [-3.7, 0.1, 1e-9, 0.0])
def test_one_value_throughout_has_one_volatility(scaling, value):
    scaled = scaled_scenarios(np.full((1, 250), value), scaling, 0.94)
    assert (scaled.factors == 1).all()
    assert (scaled.scenarios == value).all()
    assert scaled.note.tolist() == [FitNote.AS_ASKED]


@pytest.mark.parametrize("scaling", ["ewma", "garch"])
def test_rows_that_lack_have_no_scenarios(scaling):
    names = ("a missing scenario", "an infinite loss", "squares overflow", "ordinary")
    scaled = scaled_scenarios(np.stack([ODD_ROWS[name] for name in names]), scaling, 0.94)
    assert scaled.lack.tolist() == [Lack.NOT_FINITE, Lack.NOT_FINITE, Lack.OUT_OF_RANGE, Lack.NONE]
    for found in (scaled.scenarios, scaled.factors):
        assert np.isnan(found).all(axis=1).tolist() == [True, True, True, False]
        assert np.isfinite(found[3]).all()
    assert scaled.note.tolist() == [FitNote.AS_ASKED] * 4


def test_a_volatility_that_vanished_for_the_floats_tells_no_figure():
    """A book that moved once and never since: with decay .5 its variance is 0 to the floats after 1,100 sessions."""
    row = np.where(np.arange(1500) == 3, -500.0, 0.0)[np.newaxis]
    assert by_ewma(row, decay=0.5).value_at_risk.lack.tolist() == [Lack.OUT_OF_RANGE]
    assert by_ewma(row).value_at_risk.lack.tolist() == [Lack.NONE]


@often
@given(pnl=st.one_of(panels(), fat_tailed()), power=st.integers(-20, 20), confidence=CONFIDENCES, decay=DECAYS)
def test_homogeneous(pnl, power, confidence, decay):
    method = partial(by_ewma, confidence=confidence, decay=decay)
    assert_homogeneous(method, pnl, 2.0**power)
    assert_homogeneous(method, pnl, 3.3, rtol=1e-10)


def test_homogeneous_by_garch():
    """Exact in powers of two; else to what the likelihood, flat about its maximum, lets the climb tell apart."""
    rows = clustered(8, 400)
    assert_homogeneous(by_garch, rows, 2.0**7)
    assert_homogeneous(by_garch, rows, 3.3, rtol=1e-4)


@pytest.mark.parametrize("scaling", ["ewma", "garch"])
@often
@given(pnl=st.one_of(panels(), fat_tailed()), confidence=CONFIDENCES, days=st.integers(1, 20))
def test_shortfall_is_never_below_value_at_risk(scaling, pnl, confidence, days):
    assert_shortfall_not_below(volatility_scaled(pnl, confidence, days, scaling, 0.94))


@often
@given(pnl=st.one_of(panels(), fat_tailed()), levels=st.tuples(CONFIDENCES, CONFIDENCES), decay=DECAYS)
def test_more_confidence_is_never_less_risk(pnl, levels, decay):
    less, more = (figures(by_ewma(pnl, confidence=confidence, decay=decay)) for confidence in sorted(levels))
    for low, high in zip(less, more, strict=True):
        assert (high >= low - 1e-12 * np.abs(low)).all()


def test_grows_with_the_root_of_time():
    rows = clustered(3, 300)
    for one, many in zip(figures(by_ewma(rows, horizon_days=1)), figures(by_ewma(rows)), strict=True):
        np.testing.assert_allclose(many, one * np.sqrt(10), rtol=1e-14)


def test_monotonicity_and_translation_do_not_hold():
    """A profit on the last day, and a sure gain every day, add profit only; both change the volatilities."""
    rows = clustered(1, 300)
    windfall = rows + np.where(np.arange(300) == 299, 2000.0, 0.0)
    before, after, shifted = (figures(by_ewma(pnl, horizon_days=1))[0][0] for pnl in (rows, windfall, rows + 200.0))
    assert after > 1.5 * before
    assert abs(shifted - (before - 200)) > 10


def test_subadditivity_does_not_hold():
    """Each subject has factors of its own: two that hedged each other but for small, fat-tailed rests and move together
    now have little risk each beside what scales those rests up for both."""
    random = np.random.default_rng(4)
    before, now = random.normal(size=440), random.normal(size=60)
    rest = 0.01 * random.standard_t(2.5, size=440)
    one, other = np.concatenate([before + rest, now]), np.concatenate([-before, now])
    rows = np.stack([one, other, one + other])
    found, history = (figures(method(rows))[1] for method in (by_ewma, partial(historical, confidence=NINETY_NINE)))
    assert found[2] > 1.2 * (found[0] + found[1])
    assert history[2] < history[0] + history[1]


@pytest.mark.parametrize(("method", "subjects"), [(by_ewma, 1000), (by_garch, 150)], ids=["ewma", "garch"])
def test_every_subject_stands_alone(method, subjects):
    assert_every_subject_stands_alone(method, crowd(subjects), [*range(7), subjects - 1])


@pytest.mark.parametrize("method", [by_ewma, by_garch], ids=["ewma", "garch"])
def test_odd_rows(method):
    not_finite = ("a missing scenario", "an infinite profit", "an infinite loss")
    wanted = {
        **dict.fromkeys(not_finite, Lack.NOT_FINITE),
        **dict.fromkeys(("overflowing", "squares overflow", "squares vanish"), Lack.OUT_OF_RANGE),
    }
    assert_odd_rows(method, wanted)


@pytest.mark.parametrize("scaling", ["ewma", "garch"])
def test_few_scenarios(scaling):
    def method(rows):
        return volatility_scaled(rows, NINETY_NINE, 1, scaling, 0.94)

    none = method(np.empty((2, 0)))
    assert none.value_at_risk.lack.tolist() == none.expected_shortfall.lack.tolist() == [Lack.TOO_SHORT] * 2
    one = method(np.array([[-3.0], [2.0]]))
    assert one.value_at_risk.value.tolist() == one.expected_shortfall.value.tolist() == [3, -2]


def test_the_parameters_are_checked():
    rows = np.ones((1, 5))
    for decay in (0.0, 1.0, float("nan")):
        for scaling in ("ewma", "garch"):
            with pytest.raises(ValueError, match="decay"):
                scaled_scenarios(rows, scaling, decay)
        with pytest.raises(ValueError, match="decay"):
            ewma_variances(rows, decay)
    with pytest.raises(ValueError, match="ewma, garch"):
        scaled_scenarios(rows, "sample", 0.94)
    with pytest.raises(ValueError, match="at least 1 day"):
        volatility_scaled(rows, NINETY_NINE, 0, "ewma", 0.94)
    with pytest.raises(TypeError, match="Decimal"):
        volatility_scaled(rows, 0.99, 1, "ewma", 0.94)
