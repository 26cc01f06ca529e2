"""Simulated value at risk and shortfall against closed forms, and what must hold of any simulation of ours."""

import math
from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest
from scipy import stats

from monitor.risk.figures import Lack
from monitor.risk.historical import historical
from monitor.risk.monte_carlo import draw_days, monte_carlo, simulate_standard_tail
from monitor.risk.normal import normal
from monitor.risk.randomness import random_state
from monitor.risk.student import standard_student_tail, student_t
from monitor.risk.student_fit import fit_student
from monitor.risk.tail import FitNote

NINETY_NINE = Decimal("0.99")
ONE_PERCENT = Fraction(1, 100)
BOOKS = np.random.RandomState(21).standard_t(5, size=(12, 300)) * np.geomspace(1, 1e6, 12)[:, np.newaxis] + 0.03


def named(books, date="2026-03-02"):
    return [("Saltmere", date, f"book-{number}") for number in range(len(books))]


def run(books, names=None, confidence=NINETY_NINE, **how):
    how.setdefault("paths", 20_000)
    return monte_carlo(books, confidence, named(books) if names is None else names, **how)


@pytest.mark.parametrize("drift", ["zero", "sample"])
@pytest.mark.parametrize("confidence", ["0.9", "0.975", "0.99", "0.999"])
@pytest.mark.parametrize(
    ("distribution", "closed_form", "horizon"),
    [("normal", normal, 1), ("normal", normal, 10), ("student_t", student_t, 1)],
)
def test_the_closed_form_lies_within_four_standard_errors(distribution, closed_form, horizon, confidence, drift):
    """Student's t beyond one day has no closed form: `student_t` keeps nu there, the simulation does not."""
    found = run(BOOKS, None, Decimal(confidence), horizon_days=horizon, drift=drift, distribution=distribution)
    want = closed_form(BOOKS, Decimal(confidence), horizon, drift)
    for figures, told, error in (
        (found.value_at_risk, want.value_at_risk, found.value_at_risk_error),
        (found.expected_shortfall, want.expected_shortfall, found.expected_shortfall_error),
    ):
        apart = (figures.value - told.value) / error
        assert (np.abs(apart) < 4).all(), apart
        assert (error > 0).all()
        assert (error < 0.3 * np.abs(told.value)).all()
    assert found.note.tolist() == want.note.tolist()


def tail_of_sum(nu, days, quantile):
    """P(sum of days independent t(nu) > quantile), by inverting the characteristic function (Gil-Pelaez 1951).

    For nu 3 and 5 it is (1 + s) exp(-s) and (1 + s + s^2 / 3) exp(-s) with s = sqrt(nu) |t| (from memory; for one day
    the answer is checked against scipy's t).
    """
    t = np.linspace(1e-9, 40 / math.sqrt(nu), 200_001)
    s = math.sqrt(nu) * t
    characteristic = ((1 + s if nu == 3 else 1 + s + s * s / 3) * np.exp(-s)) ** days
    return 0.5 - np.trapezoid(np.sin(t * quantile) / t * characteristic, t) / math.pi


@pytest.mark.parametrize("nu", [3, 5])
def test_over_several_days_student_t_is_the_true_sum(nu):
    assert tail_of_sum(nu, 1, 3.0) == pytest.approx(stats.t.sf(3.0, nu), abs=1e-7)
    for days in (2, 10):
        quantile = simulate_standard_tail(float(nu), ONE_PERCENT, days, 100_000, random_state("sum", str(nu)))[0]
        # The quantile's standard error in probability is sqrt(a (1 - a) / N).
        assert tail_of_sum(nu, days, quantile) == pytest.approx(0.01, abs=4 * math.sqrt(0.0099 / 100_000))


def test_a_book_is_its_fit_times_the_sum_of_its_days():
    fit = fit_student(BOOKS, "sample")
    found = run(BOOKS, horizon_days=4, drift="sample", distribution="student_t", paths=2000)
    assert np.isfinite(fit.nu).any()
    for book, names in enumerate(named(BOOKS)):
        if math.isfinite(fit.nu[book]):
            told = simulate_standard_tail(fit.nu[book], ONE_PERCENT, 4, 2000, random_state(*names)) * fit.scale[book]
            assert found.value_at_risk.value[book] == pytest.approx(told[0] - 4 * fit.location[book], rel=1e-12)
            assert found.expected_shortfall.value[book] == pytest.approx(told[1] - 4 * fit.location[book], rel=1e-12)
            assert found.value_at_risk_error[book] == pytest.approx(told[2], rel=1e-12)
            assert found.expected_shortfall_error[book] == pytest.approx(told[3], rel=1e-12)


@pytest.mark.parametrize(("nu", "of_value_at_risk", "of_shortfall"), [(3.0, 0.07, 0.20), (5.0, 0.09, 0.21)])
def test_the_overstatement_that_the_docstring_tells(nu, of_value_at_risk, of_shortfall):
    """Nu kept and scaled by the root of ten days against the true sum, at 99 %."""
    true = simulate_standard_tail(nu, ONE_PERCENT, 10, 400_000, random_state("told"))
    quantile, shortfall = standard_student_tail(np.array([nu]), 0.01)
    for kept, figure, error, told in (
        (quantile[0], true[0], true[2], of_value_at_risk),
        (shortfall[0], true[1], true[3], of_shortfall),
    ):
        assert kept * math.sqrt(10) / figure - 1 == pytest.approx(told, abs=0.005 + 4 * error / figure)


@pytest.mark.parametrize("nu", [2.01, 5.0, 300.0, math.inf])
def test_draws_have_the_distribution_that_they_are_named_after(nu):
    draws = draw_days(nu, 1, 50_000, random_state("draws", str(nu)))
    law = stats.norm if math.isinf(nu) else stats.t(nu)
    assert stats.kstest(draws, law.cdf).pvalue > 0.01
    assert np.corrcoef(draws[1:] > 0, draws[:-1] > 0)[0, 1] == pytest.approx(0, abs=0.02)


def every_draw_of_a_day(nu, share, paths):
    """What the simulation of one day would draw if it left none out: largest u first, each with its angle."""
    random = random_state("all")
    u = random.random_sample(paths)
    near = u >= 1 - 10 * float(share)
    radii = 1 - np.concatenate([u[near], u[~near]])
    angles = 2 * np.pi * random.random_sample(paths)
    lengths = -2 * np.log(radii) if math.isinf(nu) else nu * (radii ** (-2 / nu) - 1)
    return np.sqrt(lengths) * np.cos(angles)


@pytest.mark.parametrize("days", [1, 3])
@pytest.mark.parametrize("nu", [2.01, 4.0, math.inf])
@pytest.mark.parametrize("confidence", ["0.00001", "0.0005", "0.5", "0.9", "0.95", "0.9875", "0.99", "0.999", "0.9995"])
def test_the_tail_is_that_of_historical_on_all_draws(confidence, nu, days):
    """Leaving out draws that cannot be in the tail changes nothing; at 99.95 % all have to be looked at."""
    share = 1 - Fraction(Decimal(confidence))
    for paths in (20_000, 20_123):
        found = simulate_standard_tail(nu, share, days, paths, random_state("all"))
        draws = every_draw_of_a_day(nu, share, paths) if days == 1 else draw_days(nu, days, paths, random_state("all"))
        want = historical(draws[np.newaxis], Decimal(confidence))
        assert found[0] == pytest.approx(want.value_at_risk.value[0], rel=1e-12)
        assert found[1] == pytest.approx(want.expected_shortfall.value[0], rel=1e-12)
        assert found[0] <= found[1]
        spread = math.sqrt(float(share * (1 - share) * paths))
        rank = math.ceil(share * paths)
        losses = np.sort(-draws)[::-1]
        step = max(1, round(spread))
        lower, upper = losses[rank - 1 - step], losses[min(rank - 1 + step, paths - 1)]
        assert found[2] == pytest.approx((lower - upper) / 2 * spread / step, rel=1e-9)
        beyond = losses[:rank]
        variance = beyond.var() + float(1 - share) * (found[1] - found[0]) ** 2
        assert found[3] == pytest.approx(math.sqrt(variance / float(share * paths)), rel=1e-9)


@pytest.mark.parametrize(("nu", "days"), [(6.0, 1), (6.0, 4), (math.inf, 1)])
def test_the_standard_errors_are_what_repeating_shows(nu, days):
    found = np.array(
        [simulate_standard_tail(nu, ONE_PERCENT, days, 5000, random_state("again", str(turn))) for turn in range(200)]
    )
    assert found[:, 0].std(ddof=1) == pytest.approx(found[:, 2].mean(), rel=0.2)
    assert found[:, 1].std(ddof=1) == pytest.approx(found[:, 3].mean(), rel=0.25)


@pytest.mark.parametrize("distribution", ["normal", "student_t"])
def test_a_replay_draws_again_and_company_does_not_matter(distribution):
    how = {"distribution": distribution, "horizon_days": 2, "drift": "sample", "paths": 3000}
    names = named(BOOKS)
    first, again = run(BOOKS, **how), run(BOOKS, **how)
    turned = run(BOOKS[::-1], names[::-1], **how)
    other = run(BOOKS, named(BOOKS, "2026-03-03"), **how)
    for pick in (
        lambda tail: tail.value_at_risk.value,
        lambda tail: tail.expected_shortfall.value,
        lambda tail: tail.value_at_risk_error,
        lambda tail: tail.expected_shortfall_error,
    ):
        np.testing.assert_array_equal(pick(first), pick(again))
        np.testing.assert_array_equal(pick(first), pick(turned)[::-1])
        assert (pick(first) != pick(other)).all()
        for row in (0, 7):
            assert pick(run(BOOKS[row : row + 1], names[row : row + 1], **how))[0] == pick(first)[row]


def test_a_replay_whose_fit_differs_in_the_last_digits_draws_the_same_paths():
    here = simulate_standard_tail(5.0, ONE_PERCENT, 3, 20_000, random_state("near"))
    there = simulate_standard_tail(5.0 * (1 + 1e-9), ONE_PERCENT, 3, 20_000, random_state("near"))
    assert there == pytest.approx(here, rel=1e-7)
    assert (there != here).any()


@pytest.mark.parametrize("distribution", ["normal", "student_t"])
def test_units_and_sure_gains(distribution):
    how = {"distribution": distribution, "horizon_days": 3, "drift": "sample", "paths": 3000}
    plain, scaled, shifted = run(BOOKS, **how), run(BOOKS * 1000, **how), run(BOOKS + 50.0, **how)
    for figure in ("value_at_risk", "expected_shortfall"):
        here = getattr(plain, figure).value
        assert getattr(scaled, figure).value == pytest.approx(here * 1000, rel=1e-6)
        assert getattr(shifted, figure).value == pytest.approx(here - 3 * 50.0, rel=1e-6, abs=1e-4)
    assert (plain.value_at_risk.value <= plain.expected_shortfall.value).all()


def test_poor_books_get_a_figure_or_their_reason_and_harm_no_neighbour():
    walk = BOOKS[0]
    n = len(walk)
    table = [
        (walk, Lack.NONE, Lack.NONE),
        (np.zeros(n), Lack.NONE, Lack.NONE),
        (np.full(n, -0.0), Lack.NONE, Lack.NONE),
        (np.full(n, 2.5), Lack.CONSTANT, Lack.CONSTANT),
        (np.where(np.arange(n) == 4, math.nan, walk), Lack.NOT_FINITE, Lack.NOT_FINITE),
        (np.where(np.arange(n) == 4, -math.inf, walk), Lack.NOT_FINITE, Lack.NOT_FINITE),
        (np.where(np.arange(n) % 10 == 0, walk, 0.0), Lack.NONE, Lack.NONE),
        (np.where(np.arange(n) == 9, -1e9, walk), Lack.NONE, Lack.NONE),
        (walk * 1e200, Lack.OUT_OF_RANGE, Lack.OUT_OF_RANGE),
        (walk * 1e-200, Lack.OUT_OF_RANGE, Lack.OUT_OF_RANGE),
    ]
    books = np.stack([row for row, _, _ in table])
    for distribution, column in (("normal", 1), ("student_t", 2)):
        with np.errstate(all="raise"):
            found = run(books, distribution=distribution, horizon_days=2, paths=2000)
        for row, entry in enumerate(table):
            for figures, error in (
                (found.value_at_risk, found.value_at_risk_error),
                (found.expected_shortfall, found.expected_shortfall_error),
            ):
                assert Lack(figures.lack[row]) is entry[column], row
                lacking = entry[column] is not Lack.NONE
                assert (np.isnan(figures.value[row]), np.isnan(error[row])) == (lacking, lacking)
            alone = run(
                books[row : row + 1], named(books)[row : row + 1], distribution=distribution, horizon_days=2, paths=2000
            )
            np.testing.assert_array_equal(alone.value_at_risk.value[0], found.value_at_risk.value[row])
        for row in (1, 2):
            assert found.value_at_risk.value[row] == found.expected_shortfall.value[row] == 0
            assert not np.signbit(found.value_at_risk.value[row])
            assert found.note[row] == FitNote.AS_ASKED
    assert found.note[6] == FitNote.NORMAL_FOR_TIES


@pytest.mark.parametrize("distribution", ["normal", "student_t"])
def test_few_scenarios_and_no_subjects(distribution):
    assert run(np.empty((0, 50)), distribution=distribution).value_at_risk.value.shape == (0,)
    for scenarios in (0, 1):
        found = run(BOOKS[:2, :scenarios], distribution=distribution)
        assert found.value_at_risk.lack.tolist() == [Lack.TOO_SHORT] * 2
    few = run(BOOKS[:2, :5], distribution=distribution)
    assert (few.value_at_risk.value > 0).all()
    assert few.note.tolist() == [FitNote.NORMAL_FOR_TOO_FEW if distribution == "student_t" else FitNote.AS_ASKED] * 2


def test_what_cannot_be_simulated_is_refused():
    with pytest.raises(ValueError, match="got 11 for 12"):
        run(BOOKS, named(BOOKS)[:-1])
    with pytest.raises(ValueError, match=r"at least 10 paths must lie in the tail \(got 9.99 of 999\)"):
        run(BOOKS, paths=999)
    assert run(BOOKS[:1], paths=1000).exact_tail
    with pytest.raises(ValueError, match="normal, student_t"):
        run(BOOKS, distribution="historical")
    with pytest.raises(ValueError, match="zero, sample"):
        run(BOOKS, drift="none")
    with pytest.raises(ValueError, match="at least 1 day"):
        run(BOOKS, horizon_days=0)
    with pytest.raises(TypeError, match="Decimal"):
        run(BOOKS, confidence=0.99)
