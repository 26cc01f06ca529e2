"""Tests of the model's fit against scipy's and statsmodels', and the sentence for a reader without statistics."""

from decimal import Decimal

import numpy as np
import pytest
from arch.data import sp500
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from statsmodels.stats.diagnostic import acorr_ljungbox
from statsmodels.tsa.stattools import acf

from monitor.risk.figures import Lack
from monitor.risk.goodness import autocorrelation, describe_fit, jarque_bera, ljung_box_on_squares
from monitor.risk.returns import log_returns

often = settings(max_examples=12, deadline=None)


def clustered(seed, n, subjects=1):
    """t(4) with volatility clusters."""
    random = np.random.default_rng(seed)
    draws = random.standard_t(4, size=(subjects, n)) / np.sqrt(2)
    rows = np.empty((subjects, n))
    variance = np.ones(subjects)
    for day in range(n):
        rows[:, day] = np.sqrt(variance) * draws[:, day]
        variance = 0.05 + 0.15 * np.square(rows[:, day]) + 0.8 * variance
    return rows


def the_index():
    """S&P 500 closes, 1999 to 2018, as arch carries them."""
    return log_returns(sp500.load()["Adj Close"].to_numpy()[np.newaxis])


SERIES = {
    "normal": np.random.default_rng(0).normal(size=(8, 500)),
    "fat": np.random.default_rng(1).standard_t(3, size=(8, 250)) * 1e6 + 4e5,
    "clustered": clustered(2, 1000, 8) * 1e-3,
    "skewed": -np.random.default_rng(3).gamma(2, size=(8, 300)),
    "index": the_index(),
}


@pytest.mark.parametrize("name", SERIES)
def test_statistics_and_p_values_are_those_of_scipy_and_statsmodels(name):
    """To 1e-10: the same sums, in another order."""
    rows = SERIES[name]
    normality = jarque_bera(rows)
    for place, row in enumerate(rows):
        theirs = stats.jarque_bera(row)
        assert normality.value[place] == pytest.approx(theirs.statistic, rel=1e-10)
        assert normality.p_value[place] == pytest.approx(theirs.pvalue, rel=1e-10, abs=1e-300)
        assert normality.skewness[place] == pytest.approx(stats.skew(row), rel=1e-10, abs=1e-12)
        assert normality.excess_kurtosis[place] == pytest.approx(stats.kurtosis(row), rel=1e-10, abs=1e-12)
    for lags in (1, 10, 20):
        clusters = ljung_box_on_squares(rows, lags)
        for place, row in enumerate(rows):
            theirs = acorr_ljungbox(row**2, lags=[lags])
            assert clusters.value[place] == pytest.approx(theirs["lb_stat"].iloc[0], rel=1e-10)
            assert clusters.p_value[place] == pytest.approx(theirs["lb_pvalue"].iloc[0], rel=1e-9, abs=1e-300)
            correlations = acf(row**2, nlags=lags, fft=False)[1:]
            assert clusters.mean_autocorrelation[place] == pytest.approx(correlations.mean(), rel=1e-9, abs=1e-13)
            np.testing.assert_allclose(autocorrelation(row[np.newaxis] ** 2, lags)[0], correlations, atol=1e-12)


def test_the_tests_reject_the_right_hypothesis_at_the_right_rate():
    """Normal days: about 5 of 100 rejected at 5 %; clustered t(4): nearly all."""
    plain, wild = np.random.default_rng(4).normal(size=(2000, 1000)), clustered(5, 1000, 200)
    assert (jarque_bera(plain).p_value < 0.05).mean() == pytest.approx(0.05, abs=0.02)
    assert (ljung_box_on_squares(plain).p_value < 0.05).mean() == pytest.approx(0.05, abs=0.02)
    assert (jarque_bera(wild).p_value < 0.05).all()
    assert (ljung_box_on_squares(wild).p_value < 0.05).mean() > 0.95


# --- poor scenarios ------------------------------------------------------------------------------------------------

N = 250
WALK = np.random.default_rng(6).standard_t(4, size=N) * 100
OK, CONSTANT, RANGE, NOT_FINITE = Lack.NONE, Lack.CONSTANT, Lack.OUT_OF_RANGE, Lack.NOT_FINITE
POOR = {
    # row, Jarque-Bera, Ljung-Box on squares
    "ordinary": (WALK, OK, OK),
    "flat": (np.zeros(N), OK, OK),
    "flat, negative zeros": (np.full(N, -0.0), OK, OK),
    "constant": (np.full(N, -0.1), CONSTANT, CONSTANT),
    "missing": (np.where(np.arange(N) == 3, np.nan, WALK), NOT_FINITE, NOT_FINITE),
    "infinite": (np.where(np.arange(N) == 3, np.inf, WALK), NOT_FINITE, NOT_FINITE),
    "two values": (np.tile([0.1, -0.1], N // 2), OK, CONSTANT),
    "mostly zeros": (np.where(np.arange(N) % 10 == 0, WALK, 0.0), OK, OK),
    "all zero but one": (np.where(np.arange(N) == 40, -500.0, 0.0), OK, OK),
    "one outlier": (np.where(np.arange(N) == 40, -1e12, WALK), OK, OK),
    "squares overflow": (WALK * 1e200, OK, OK),
    "squares vanish": (WALK * 1e-200, OK, OK),
    "overflowing": (np.linspace(0.9, 1, N) * 1.7e308, RANGE, OK),
}


def test_every_poor_row_is_tested_or_has_its_reason_and_harms_no_neighbour():
    panel = np.stack([row for row, _, _ in POOR.values() for row in (row, POOR["missing"][0])])
    with np.errstate(all="raise"):
        normality, clusters = jarque_bera(panel), ljung_box_on_squares(panel)
        sentences = describe_fit(panel).sentences
    assert [Lack(code) for code in normality.lack[::2]] == [lack for _, lack, _ in POOR.values()]
    assert [Lack(code) for code in clusters.lack[::2]] == [lack for _, _, lack in POOR.values()]
    for found, fields in (
        (normality, ("value", "p_value", "skewness", "excess_kurtosis")),
        (clusters, ("value", "p_value", "mean_autocorrelation")),
    ):
        assert (found.lack[1::2] == NOT_FINITE).all()
        for field in fields:
            np.testing.assert_array_equal(np.isnan(getattr(found, field)), found.lack != Lack.NONE)
    for place, row in enumerate(panel):
        np.testing.assert_array_equal(jarque_bera(row[np.newaxis]).value[0], normality.value[place])
        np.testing.assert_array_equal(ljung_box_on_squares(row[np.newaxis]).value[0], clusters.value[place])
        assert describe_fit(row[np.newaxis]).sentences == (sentences[place],)
    for found in (normality, clusters):
        assert found.value[2:5:2].tolist() == [0, 0]
        assert found.p_value[2:5:2].tolist() == [1, 1]


def test_few_scenarios_none_and_ten_thousand_subjects():
    for n, wanted in ((0, Lack.TOO_SHORT), (3, Lack.TOO_SHORT), (4, OK)):
        assert jarque_bera(WALK[np.newaxis, :n]).lack.tolist() == [wanted]
    for n, wanted in ((0, Lack.TOO_SHORT), (10, Lack.TOO_SHORT), (11, OK)):
        assert ljung_box_on_squares(WALK[np.newaxis, :n]).lack.tolist() == [wanted]
    assert describe_fit(np.empty((0, N))).sentences == ()
    rows = np.random.default_rng(7).normal(size=(10_000, 60))
    rows[::1000] = np.nan
    for found in (jarque_bera(rows), ljung_box_on_squares(rows)):
        assert np.flatnonzero(found.lack).tolist() == list(range(0, 10_000, 1000))
    with pytest.raises(ValueError, match="at least 1"):
        ljung_box_on_squares(WALK[np.newaxis], 0)


# --- what must hold ------------------------------------------------------------------------------------------------


@often
@given(seed=st.integers(0, 2**32 - 1), power=st.integers(-20, 20), factor=st.floats(1e-3, 1e3))
def test_free_of_the_unit_and_indifferent_to_the_order_of_subjects(seed, power, factor):
    random = np.random.default_rng(seed)
    rows = random.standard_t(3, size=(3, 150)) * 1e3
    order = random.permutation(3)
    for test in (jarque_bera, ljung_box_on_squares):
        before = test(rows)
        np.testing.assert_array_equal(test(rows * 2.0**power).value, before.value)
        np.testing.assert_array_equal(test(np.asfortranarray(rows[order])).value, before.value[order])
        np.testing.assert_allclose(test(rows * factor).value, before.value, rtol=1e-9)


@often
@given(seed=st.integers(0, 2**32 - 1), shift=st.floats(-1e4, 1e4))
def test_normality_is_free_of_a_sure_gain_and_of_the_order_of_scenarios(seed, shift):
    random = np.random.default_rng(seed)
    rows = random.standard_t(3, size=(3, 150)) * 1e3
    before = jarque_bera(rows)
    np.testing.assert_allclose(jarque_bera(rows + shift).value, before.value, rtol=1e-8)
    np.testing.assert_allclose(jarque_bera(random.permuted(rows, axis=1)).value, before.value, rtol=1e-9)


# --- the sentence --------------------------------------------------------------------------------------------------


def sentence(row, **parameters):
    (said,) = describe_fit(row[np.newaxis], **parameters).sentences
    return said


def test_the_sentence_on_the_index():
    assert sentence(the_index()[0]) == (
        "Profits and losses have fatter tails than the normal (Jarque-Bera p < 0.001, excess kurtosis 8.2; tail index "
        "of losses 2.2, about 3.4 in samples of the normal, p < 0.001); large moves cluster (Ljung-Box on squares, 10 "
        "lags, p < 0.001): a normal figure "
        "understates rare losses and an equally weighted figure lags behind a turn from calm to wild."
    )


def test_the_sentence_when_nothing_is_rejected():
    said = sentence(SERIES["normal"][1])
    assert said.startswith("Nothing speaks against the normal (Jarque-Bera p = 0.")
    assert "; large moves show no clusters (Ljung-Box on squares, 10 lags, p = 0." in said
    assert said.endswith(").")
    assert ":" not in said


def test_the_sentence_names_what_is_rejected_and_nothing_else():
    even = np.random.default_rng(18).permutation(np.linspace(-1, 1, N))
    assert sentence(even).startswith("Profits and losses are not normal, though not for fat tails (Jarque-Bera p < 0.0")
    assert sentence(even).endswith(": a normal figure is rough.")
    calm_then_wild = np.random.default_rng(9).normal(size=N) * np.repeat([1, 1.7], N // 2)
    said = sentence(calm_then_wild, lags=5)
    assert "large moves cluster (Ljung-Box on squares, 5 lags, p " in said
    assert said.endswith("lags behind a turn from calm to wild.")
    in_turns = np.random.default_rng(10).normal(size=N) * np.tile([0.2, 1.0], N // 2)
    assert "large moves follow a pattern in time, though not in clusters (" in sentence(in_turns, lags=1)
    assert "large moves cluster" not in sentence(in_turns, lags=1)


def test_the_sentence_says_what_is_not_tested_and_why():
    assert sentence(np.zeros(N)) == "Every scenario is 0: there is nothing to test."
    assert sentence(POOR["missing"][0]) == "Not tested: a scenario is missing or not a finite number."
    assert sentence(WALK[:3]) == "Not tested: too few scenarios for this method."
    short = sentence(WALK[:8])
    assert "no tail index: too few scenarios lie beyond the threshold to fit the tail" in short
    assert "; not tested whether large moves cluster (too few scenarios for this method)" in short
    assert sentence(POOR["overflowing"][0]).startswith("Not tested whether normal (the scenarios are too large or too")


def test_the_report_carries_the_tests_it_speaks_of():
    rows = SERIES["fat"]
    report = describe_fit(rows, Decimal("0.05"), 7)
    np.testing.assert_array_equal(report.normality.value, jarque_bera(rows).value)
    np.testing.assert_array_equal(report.clusters.value, ljung_box_on_squares(rows, 7).value)
    assert report.tail.losses.tolist() == [12] * 8
    assert len(report.sentences) == 8
