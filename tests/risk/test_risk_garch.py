"""GARCH(1,1): the likelihood written out, the library arch, what must always hold, and poor series.

DUSKCHECK_FULL=1 compares all of the 500 simulated series with arch, not only the first 25.
"""

import math
import os
import warnings
from functools import cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.risk.figures import Lack
from monitor.risk.garch import LEAST_SESSIONS, conditional_variances, fit_garch, garch
from monitor.risk.garch_fit import OMEGA_FLOOR, PERSISTENCE_CEILING, maximise
from monitor.risk.returns import log_returns

STARTS = ("mean_square", "sample_variance", "backcast")
NUMBERS = ("mean", "omega", "alpha", "beta", "log_likelihood", "persistence")
FULL = os.environ.get("DUSKCHECK_FULL") == "1"
every_start = pytest.mark.parametrize("start", STARTS)


def clustered(seed, rows, sessions):
    """Returns of about 1 % a day, t(4) with volatility clusters: alpha .02 to .15, persistence .85 to .995."""
    random = np.random.RandomState(seed)
    alpha, persistence = random.uniform(0.02, 0.15, rows), random.uniform(0.85, 0.995, rows)
    shocks = random.standard_t(4, size=(sessions + 300, rows)) / math.sqrt(2)
    returns, h = np.empty_like(shocks), np.ones(rows)
    for t, shock in enumerate(shocks):
        returns[t] = np.sqrt(h) * shock
        h = 1 - persistence + alpha * returns[t] ** 2 + (persistence - alpha) * h
    return 0.01 * returns[300:].T


SERIES = clustered(1, 12, 400)


def written_out(row, parameters, start):
    """The log-likelihood and the variances, one session after another."""
    mean, omega, alpha, beta = parameters
    if start == "backcast":
        weights = [0.94**t for t in range(75)]
        presample = sum(w * (x - row.mean()) ** 2 for w, x in zip(weights, row, strict=False)) / sum(weights)
    else:
        presample = ((row - (mean if start == "mean_square" else row.mean())) ** 2).mean()
    squared, h, level, variances = presample, presample, 0.0, []
    for x in row:
        h = omega + alpha * squared + beta * h
        squared = (x - mean) ** 2
        level -= (math.log(2 * math.pi * h) + squared / h) / 2
        variances.append(h)
    return level, [*variances, omega + alpha * squared + beta * h]


def parameters_of(fit, place):
    return [getattr(fit, name)[place] for name in ("mean", "omega", "alpha", "beta")]


@every_start
def test_likelihood_and_variances_are_those_written_out(start):
    fit, volatility = fit_garch(SERIES, start), garch(SERIES, start)
    assert fit.converged.all()
    assert fit.start == start
    found = conditional_variances(fit, SERIES)
    assert found.shape == (12, 401)
    np.testing.assert_array_equal(fit.persistence, fit.alpha + fit.beta)
    np.testing.assert_array_equal(volatility.value, np.sqrt(found[:, -1]))
    for place, row in enumerate(SERIES):
        level, variances = written_out(row, parameters_of(fit, place), start)
        assert fit.log_likelihood[place] == pytest.approx(level, abs=1e-7)
        np.testing.assert_allclose(found[place], variances, rtol=1e-12)


@every_start
def test_no_point_nearby_is_likelier(start):
    """1e-7 covers rounding; a step of a hundredth costs far more wherever the likelihood is not flat."""
    fit = fit_garch(SERIES, start)
    dropped = []
    for place, row in enumerate(SERIES):
        best = parameters_of(fit, place)
        at_top = written_out(row, best, start)[0]
        for which, size in ((0, row.std() / 50), (1, best[1] / 100), (2, 0.01), (3, 0.01)):
            for step in (-size, size):
                other = list(best)
                other[which] += step
                if other[2] < 0 or other[3] < 0 or other[2] + other[3] > PERSISTENCE_CEILING:
                    continue
                below = at_top - written_out(row, other, start)[0]
                assert below > -1e-7, (place, which, step)
                dropped.append(below)
    assert np.median(dropped) > 1e-3


# --- the library arch ------------------------------------------------------------------------------------------------


def by_arch(row):
    """Log-likelihood, (mean, omega, alpha, beta), variances with the forecast at the end: in the unit of the row."""
    from arch import arch_model

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # arch warns of climbs that it did not finish; their likelihood stands
        model = arch_model(row * 100, mean="Constant", vol="GARCH", p=1, q=1, rescale=False)
        result = model.fit(disp="off", show_warning=False)
        ahead = result.forecast(horizon=1, reindex=False).variance.to_numpy()[-1, 0]
    parameters = np.asarray(result.params) / [100, 100**2, 1, 1]
    variances = np.append(np.asarray(result.conditional_volatility) ** 2, ahead) / 100**2
    return result.loglikelihood + len(row) * math.log(100), parameters, variances


@cache
def compared():
    """500 simulated series of 1,000 sessions (the first 25 of them in short): ours and arch's."""
    returns = clustered(2024, 500, 1000)[: 500 if FULL else 25]
    fit = fit_garch(returns, "backcast")
    return fit, conditional_variances(fit, returns), [by_arch(row) for row in returns]


def test_arch_is_seldom_likelier():
    """At most 1 % of series more than 0.1 below the better likelihood (another maximum; 3 of the 500, one of them in
    the first 25), and none between 0.01 and 0.1: at the same maximum arch stops about 1e-7 short and we 1e-9."""
    fit, _, reference = compared()
    behind = np.array([level for level, _, _ in reference]) - fit.log_likelihood
    assert fit.converged.all()
    assert (behind > 0.1).sum() <= max(0.01 * len(behind), 1)
    assert not ((behind > 0.01) & (behind <= 0.1)).any()


def test_parameters_and_volatilities_are_archs_where_the_maximum_is_the_same():
    """The same maximum: log-likelihoods within 1e-4. Around a maximum a likelihood 1e-4 lower can lie
    sqrt(2 x 1e-4) = 0.014 standard errors away; these are about 0.02 to 0.05 for alpha and beta, so that 1e-3 is their
    tolerance; the same of 0.03 deviations for the mean; for the volatility, whose error is a tenth or less, 1e-3."""
    fit, variances, reference = compared()
    same = [place for place, (level, _, _) in enumerate(reference) if abs(level - fit.log_likelihood[place]) < 1e-4]
    assert len(same) >= 0.9 * len(reference)
    for place in same:
        _, parameters, theirs = reference[place]
        assert fit.mean[place] == pytest.approx(parameters[0], abs=1e-3 * math.sqrt(theirs.mean()))
        assert fit.omega[place] == pytest.approx(parameters[1], rel=1e-2)
        assert [fit.alpha[place], fit.beta[place]] == pytest.approx(list(parameters[2:]), abs=1e-3)
        np.testing.assert_allclose(np.sqrt(variances[place]), np.sqrt(theirs), rtol=1e-3)


@pytest.mark.parametrize("sessions", [5030, 2500, 1000, 500])
def test_arch_on_the_closes_of_the_s_and_p_500(sessions):
    """arch.data.sp500, 1999 to 2018, log returns. Tolerances as above; real clusters are plain, so both stop within
    1e-6 of one maximum and a tenth of the tolerances is enough."""
    from arch.data import sp500

    returns = log_returns(sp500.load()["Adj Close"].to_numpy()[np.newaxis])[:, -sessions:]
    fit = fit_garch(returns, "backcast")
    level, parameters, theirs = by_arch(returns[0])
    assert fit.log_likelihood[0] == pytest.approx(level, abs=1e-5)
    assert [fit.alpha[0], fit.beta[0]] == pytest.approx(list(parameters[2:]), abs=1e-4)
    assert parameters_of(fit, 0)[:2] == pytest.approx(list(parameters[:2]), rel=1e-3)
    np.testing.assert_allclose(np.sqrt(conditional_variances(fit, returns)[0]), np.sqrt(theirs), rtol=1e-4)


# --- what must hold --------------------------------------------------------------------------------------------------

often = settings(max_examples=4, deadline=None)
SEEDS = st.integers(0, 2**32 - 1)


@every_start
@often
@given(seed=SEEDS, power=st.integers(-30, 30))
def test_twice_the_returns_are_twice_the_volatility(start, seed, power):
    returns = clustered(seed, 3, 150)
    before, after = fit_garch(returns, start), fit_garch(returns * 2.0**power, start)
    np.testing.assert_array_equal(after.mean, before.mean * 2.0**power)
    np.testing.assert_array_equal(after.omega, before.omega * 4.0**power)
    np.testing.assert_array_equal(after.alpha, before.alpha)
    np.testing.assert_array_equal(after.beta, before.beta)
    np.testing.assert_allclose(after.log_likelihood, before.log_likelihood - 150 * power * math.log(2), atol=1e-8)


@every_start
def test_homogeneous_in_any_factor_and_blind_to_a_shift(start):
    """Where the maximum is plain. 1e-5: a climb that stops when 1e-9 is left to gain is within 4e-5 standard errors."""
    returns = clustered(6, 20, 1000)
    plain = fit_garch(returns, start)
    for other, factor, shift in ((returns * 37.3, 37.3, 0.0), (returns + 0.02, 1.0, 0.02)):
        fit = fit_garch(other, start)
        np.testing.assert_allclose(fit.alpha, plain.alpha, atol=1e-5)
        np.testing.assert_allclose(fit.beta, plain.beta, atol=1e-5)
        np.testing.assert_allclose(fit.omega, plain.omega * factor**2, rtol=1e-4)
        np.testing.assert_allclose(fit.mean, plain.mean * factor + shift, atol=1e-7 * factor)
        np.testing.assert_allclose(garch(other, start).value, garch(returns, start).value * factor, rtol=1e-5)


@pytest.fixture(scope="module")
def crowd():
    """300 subjects of every sort, more than the columns that are worked on at once."""
    random = np.random.RandomState(11)
    rows = clustered(3, 300, 120) * 10.0 ** random.randint(-3, 8, size=(300, 1))
    rows[::7] = random.normal(size=rows[::7].shape)
    rows[1::50] = 0.0
    rows[2::50, 60:] = 0.0
    rows[3::50, 17] = np.nan
    rows[4::50, 18] = np.inf
    rows[5::50] = 12.5
    rows[6::50, 3] *= 1e6
    return rows


def answers(rows, start):
    fit = fit_garch(rows, start)
    return [*(getattr(fit, name) for name in NUMBERS), fit.lack, conditional_variances(fit, rows)]


@every_start
def test_a_subject_alone_is_the_same_to_the_last_digit_as_in_a_crowd(crowd, start):
    in_crowd = answers(crowd, start)
    for place in (*range(8), 127, 128, 299):
        for alone, together in zip(answers(crowd[place : place + 1], start), in_crowd, strict=True):
            np.testing.assert_array_equal(alone[0], together[place])
    for some in (slice(0, 9), slice(100, 240)):
        for fewer, together in zip(answers(crowd[some], start), in_crowd, strict=True):
            np.testing.assert_array_equal(fewer, together[some])


def test_neither_the_order_of_subjects_nor_the_layout_in_memory_matters(crowd):
    straight = answers(crowd, "mean_square")
    order = np.random.RandomState(5).permutation(len(crowd))
    for one, shuffled in zip(straight, answers(crowd[order], "mean_square"), strict=True):
        np.testing.assert_array_equal(one[order], shuffled)
    for one, transposed in zip(straight, answers(np.asfortranarray(crowd), "mean_square"), strict=True):
        np.testing.assert_array_equal(one, transposed)


def test_the_returns_given_are_left_as_they_were(crowd):
    before = crowd.copy()
    answers(crowd, "backcast")
    np.testing.assert_array_equal(crowd, before)


# --- poor series -----------------------------------------------------------------------------------------------------

N = 300
WALK = clustered(4, 1, N)[0]


def with_value(place, value):
    row = WALK.copy()
    row[place] = value
    return row


OK = Lack.NONE
TABLE = {
    "ordinary": (WALK, OK),
    "flat": (np.zeros(N), OK),
    "flat, negative zeros": (np.full(N, -0.0), OK),
    "constant": (np.full(N, -3.7), OK),
    "a missing return": (with_value(3, np.nan), Lack.NOT_FINITE),
    "an infinite return": (with_value(4, -np.inf), Lack.NOT_FINITE),
    "mostly zeros": (np.where(np.arange(N) % 10 == 0, WALK, 0.0), OK),
    "all zero but one": (np.where(np.arange(N) == 40, -5.0, 0.0), OK),
    "two values": (np.tile([5.0, -5.0], N // 2), OK),
    "it stops moving": (np.where(np.arange(N) < 150, WALK, 0.0), Lack.NO_FIT),
    "it starts to move": (np.where(np.arange(N) < 150, 0.0, WALK), OK),
    "one outlier": (with_value(100, -1.0), OK),
    "an outlier at the end": (with_value(-1, -1.0), OK),
    "one gigantic outlier": (with_value(100, -1e9), OK),
    "overflowing": (np.linspace(-1, 1, N) * 1.7e308, Lack.OUT_OF_RANGE),
    "squares overflow": (WALK * 1e200, Lack.OUT_OF_RANGE),
    "squares vanish": (WALK * 1e-200, Lack.OUT_OF_RANGE),
    "squares nearly vanish": (WALK * 1e-150, Lack.OUT_OF_RANGE),
}


@every_start
def test_every_row_of_the_table_gets_a_fit_or_its_reason(start):
    rows = np.stack([row for row, _ in TABLE.values()])
    with np.errstate(all="raise"):
        fit, volatility = fit_garch(rows, start), garch(rows, start)
        variances = conditional_variances(fit, rows)
    for place, (name, (_, lack)) in enumerate(TABLE.items()):
        assert Lack(fit.lack[place]) is Lack(volatility.lack[place]) is lack, name
        assert fit.converged[place] == (lack is OK), name
        for number in NUMBERS:
            assert np.isnan(getattr(fit, number)[place]) == (lack is not OK), (name, number)
        assert np.isnan(volatility.value[place]) == np.isnan(variances[place, -1]) == (lack is not OK), name
    fitted = fit.lack == OK
    assert (fit.alpha[fitted] >= 0).all()
    assert (fit.beta[fitted] >= 0).all()
    assert (fit.persistence[fitted] <= PERSISTENCE_CEILING + 1e-15).all()
    one_value = [name in {"flat", "flat, negative zeros", "constant"} for name in TABLE]
    np.testing.assert_array_equal((fit.omega == 0)[fitted], np.array(one_value)[fitted])


def test_one_value_throughout_has_no_volatility_at_all():
    fit = fit_garch(np.array([np.zeros(N), np.full(N, 0.1)]))
    assert fit.mean.tolist() == [0, 0.1]
    assert fit.omega.tolist() == fit.alpha.tolist() == fit.beta.tolist() == [0, 0]
    assert fit.log_likelihood.tolist() == [np.inf, np.inf]
    assert garch(np.full((1, N), 0.1)).value.tolist() == [0]
    assert not conditional_variances(fit, np.array([np.zeros(N), np.full(N, 0.1)])).any()


def test_no_arch_effect_is_one_variance_throughout():
    """Moves of one size: no other variance is likelier anywhere, whatever came before."""
    row = 0.3 + np.tile([5.0, -5.0, -5.0, 5.0], 50)[np.newaxis]
    fit = fit_garch(row)
    assert (fit.alpha[0], fit.beta[0], fit.persistence[0]) == (0, 0, 0)
    assert (fit.mean[0], fit.omega[0]) == pytest.approx((0.3, 25), rel=1e-12)
    assert fit.log_likelihood[0] == pytest.approx(-100 * (math.log(2 * math.pi * 25) + 1), rel=1e-12)
    assert garch(row).value[0] == pytest.approx(5, rel=1e-12)


def test_persistence_is_held_below_one():
    """Volatility that grows a hundredfold and stays: the likelihood would rather have a persistence above 1."""
    random = np.random.RandomState(8)
    row = random.normal(size=(1, 600)) * np.geomspace(1, 100, 600)
    fit = fit_garch(row)
    assert fit.converged[0]
    assert fit.persistence[0] == pytest.approx(PERSISTENCE_CEILING, abs=1e-12)
    assert fit.persistence[0] < 1
    assert fit.omega[0] >= OMEGA_FLOOR * row.var() * (1 - 1e-9)


def test_few_sessions():
    rows = np.stack([WALK, WALK[::-1], np.zeros(N)])
    for sessions in (0, 1, 2, LEAST_SESSIONS - 1):
        for figures in (garch(rows[:, :sessions]), fit_garch(rows[:, :sessions])):
            assert [Lack(code) for code in figures.lack] == [Lack.TOO_SHORT] * 3
    for start in STARTS:
        assert fit_garch(rows[:, :LEAST_SESSIONS], start).converged.all()


def test_no_subjects():
    assert garch(np.empty((0, N))).value.shape == (0,)
    assert conditional_variances(fit_garch(np.empty((0, N))), np.empty((0, N))).shape == (0, N + 1)


def test_other_returns_of_the_same_subjects_can_be_run_through_a_fit():
    fit = fit_garch(SERIES)
    later = clustered(9, 12, 30)
    for place, found in enumerate(conditional_variances(fit, later)):
        np.testing.assert_allclose(found, written_out(later[place], parameters_of(fit, place), "mean_square")[1])
    with pytest.raises(ValueError, match="the fit is of 12 subjects, the returns are of 3"):
        conditional_variances(fit, later[:3])


def test_the_start_and_the_shape_are_checked():
    with pytest.raises(ValueError, match="mean_square, sample_variance, backcast"):
        fit_garch(SERIES, "zero")
    with pytest.raises(ValueError, match=r"\(subjects, scenarios\)"):
        garch(WALK)


def test_a_climb_that_does_not_settle_gives_no_fit(monkeypatch):
    monkeypatch.setattr("monitor.risk.garch_fit._ROUNDS", 2)
    fit = fit_garch(SERIES)
    assert [Lack(code) for code in fit.lack] == [Lack.NO_FIT] * 12
    assert not fit.converged.any()
    assert np.isnan(maximise(SERIES, SERIES.mean(axis=1), SERIES.std(axis=1), np.ones(12), True)[1]).all()
