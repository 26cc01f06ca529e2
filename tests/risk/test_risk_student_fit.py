"""The fit of Student's t against scipy's, and where the normal stands in for it."""

import warnings
from decimal import Decimal

import numpy as np
import pytest
from scipy import stats
from scipy.special import polygamma

from monitor.risk.normal import fit_normal, normal
from monitor.risk.probability import loss_probability
from monitor.risk.student import student_t
from monitor.risk.student_fit import (
    NU_CEILING,
    NU_FLOOR,
    TIE_SHARE,
    _climbing,
    _derivatives,
    _solved,
    _trigamma,
    fit_student,
)
from monitor.risk.tail import FitNote

NINETY_NINE = Decimal("0.99")


def samples(nu, subjects, n, seed):
    random = np.random.default_rng(seed)
    draws = random.standard_t(nu, size=(subjects, n)) if np.isfinite(nu) else random.normal(size=(subjects, n))
    return draws * 10.0 ** random.uniform(-6, 6, size=(subjects, 1))


def log_likelihood(rows, nu, location, scale):
    return stats.t.logpdf(rows, nu[:, np.newaxis], location[:, np.newaxis], scale[:, np.newaxis]).sum(axis=1)


def scipy_fit(row, **fixed):
    """scipy's own search passes through invalid points and warns; what it finds is what is compared."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        unit = np.median(np.abs(row))
        nu, location, scale = stats.t.fit(row / unit, **fixed)
    return nu, location * unit, scale * unit


@pytest.mark.parametrize("nu", [2.6, 4.0, 8.0, 30.0, np.inf])
@pytest.mark.parametrize("n", [60, 250, 1000])
@pytest.mark.parametrize(("drift", "fixed"), [("zero", {"floc": 0}), ("sample", {})])
def test_likelihood_is_never_below_scipys(nu, n, drift, fixed):
    rows = samples(nu, 6, n, seed=n)
    if drift == "sample":
        rows += 0.3 * rows.std(axis=1, keepdims=True)
    fit = fit_student(rows, drift)
    theirs = np.array([scipy_fit(row, **fixed) for row in rows])
    wanted = log_likelihood(rows, *theirs.T)

    fitted = fit.note == FitNote.AS_ASKED
    ours = log_likelihood(rows[fitted], fit.nu[fitted], fit.location[fitted], fit.scale[fitted])
    assert (ours >= wanted[fitted] - 1e-5).all()
    assert ((fit.nu[fitted] > NU_FLOOR) & (fit.nu[fitted] < NU_CEILING)).all()

    limit = fit.note == FitNote.NORMAL_AS_LIMIT
    centre = rows[limit].mean(axis=1) if drift == "sample" else np.zeros(limit.sum())
    spread = np.sqrt(np.square(rows[limit] - centre[:, np.newaxis]).mean(axis=1))
    best_normal = stats.norm.logpdf(rows[limit], centre[:, np.newaxis], spread[:, np.newaxis]).sum(axis=1)
    assert (best_normal >= wanted[limit] - 1e-5).all()

    floor = fit.note == FitNote.NU_AT_FLOOR
    for row, location, scale in zip(rows[floor], fit.location[floor], fit.scale[floor], strict=True):
        best = scipy_fit(row, f0=NU_FLOOR, **fixed)
        at_floor = stats.t.logpdf(row, NU_FLOOR, location, scale).sum()
        assert at_floor >= stats.t.logpdf(row, *best).sum() - 1e-5
    assert (fitted | limit | floor).all()


def test_very_fat_tails_are_held_at_the_floor():
    rows = samples(1.3, 4, 500, seed=9)
    fit = fit_student(rows, "zero")
    assert fit.note.tolist() == [FitNote.NU_AT_FLOOR] * 4
    assert fit.nu == pytest.approx([NU_FLOOR] * 4, rel=1e-12)
    for row, scale in zip(rows, fit.scale, strict=True):
        _, _, best = scipy_fit(row, f0=NU_FLOOR, floc=0)
        assert stats.t.logpdf(row, NU_FLOOR, 0, scale).sum() >= stats.t.logpdf(row, NU_FLOOR, 0, best).sum() - 1e-5


def test_a_long_sample_gives_back_what_it_was_drawn_from():
    rows = 300 * np.random.default_rng(1).standard_t(5, size=(1, 200_000)) + 40
    fit = fit_student(rows, "sample")
    assert fit.nu[0] == pytest.approx(5, rel=0.02)
    assert fit.scale[0] == pytest.approx(300, rel=0.01)
    assert fit.location[0] == pytest.approx(40, abs=3)


@pytest.mark.parametrize("drift", ["zero", "sample"])
def test_figures_are_those_of_the_fitted_distribution(drift):
    rows = samples(4, 5, 500, seed=3)
    fit = fit_student(rows, drift)
    fitted = stats.t(fit.nu, fit.location, fit.scale)
    day, ten_days = student_t(rows, NINETY_NINE, 1, drift), student_t(rows, NINETY_NINE, 10, drift)
    assert day.value_at_risk.value == pytest.approx(-fitted.ppf(0.01), rel=1e-9)
    for place in range(5):
        one = stats.t(fit.nu[place], fit.location[place], fit.scale[place])
        shares = (np.arange(200_000) + 0.5) / 200_000 * 0.01
        assert day.expected_shortfall.value[place] == pytest.approx(-one.ppf(shares).mean(), rel=1e-3)
    shifted = np.sqrt(10) * (day.value_at_risk.value + fit.location) - 10 * fit.location
    assert ten_days.value_at_risk.value == pytest.approx(shifted, rel=1e-12)
    assert (fit.location == 0).all() == (drift == "zero")

    threshold = 1.7 * fit.scale
    probability = loss_probability(rows, threshold, 10, "student_t", drift)
    wanted = stats.t.cdf(-threshold, fit.nu, 10 * fit.location, np.sqrt(10) * fit.scale)
    assert probability.value == pytest.approx(wanted, rel=1e-9)


@pytest.mark.parametrize("drift", ["zero", "sample"])
def test_normal_probability_is_scipys(drift):
    rows = samples(np.inf, 5, 300, seed=8)
    mean = rows.mean(axis=1) if drift == "sample" else 0.0
    sigma = rows.std(axis=1, ddof=1)
    threshold = np.array([-1.0, 0.0, 0.5, 3.0, 8.0]) * sigma
    found = loss_probability(rows, threshold, 4, "normal", drift).value
    assert found == pytest.approx(stats.norm.sf(threshold, -4 * mean, 2 * sigma), rel=1e-9)


def test_the_normal_stands_in_and_says_why():
    base = samples(4, 1, 500, seed=21)[0]
    zeros, coarse, thin = base.copy(), base.copy(), np.linspace(-1.0, 1.0, 500)
    zeros[:101] = 0.0
    coarse[::4] = base[0]
    allowed = base.copy()
    allowed[:100] = 0.0
    rows = np.stack([zeros, coarse, thin, allowed, base])
    fit = fit_student(rows, "zero")
    assert fit.note.tolist() == [
        FitNote.NORMAL_FOR_TIES,
        FitNote.NORMAL_FOR_TIES,
        FitNote.NORMAL_AS_LIMIT,
        FitNote.AS_ASKED,
        FitNote.AS_ASKED,
    ]
    assert np.isinf(fit.nu).tolist() == [True, True, True, False, False]
    for drift in ("zero", "sample"):
        t, by_normal = student_t(rows, NINETY_NINE, 5, drift), normal(rows, NINETY_NINE, 5, drift)
        np.testing.assert_array_equal(t.value_at_risk.value[:3], by_normal.value_at_risk.value[:3])
        np.testing.assert_array_equal(t.expected_shortfall.value[:3], by_normal.expected_shortfall.value[:3])
        assert (t.value_at_risk.value[3:] != by_normal.value_at_risk.value[3:]).all()
        chance = loss_probability(rows, np.full(5, 0.5), 5, "student_t", drift)
        assert chance.note.tolist() == t.note.tolist()

    short = fit_student(base[np.newaxis, :19], "zero")
    assert short.note.tolist() == [FitNote.NORMAL_FOR_TOO_FEW]
    assert short.scale[0] == fit_normal(base[np.newaxis, :19], "zero").sigma[0]


def test_a_better_maximum_at_the_normal_is_not_missed():
    """Three clusters: a narrow t climbs to the floor on the middle one, and yet the normal is likelier."""
    sides = np.linspace(0.9, 1.1, 100)
    row = np.concatenate([np.linspace(-0.1, 0.1, 300), -sides, sides])[np.newaxis]
    at_floor = scipy_fit(row[0], f0=NU_FLOOR, floc=0)
    assert stats.t.logpdf(row, *at_floor).sum() < stats.norm.logpdf(row, 0, np.sqrt(np.square(row).mean())).sum()
    assert fit_student(row, "zero").note.tolist() == [FitNote.NORMAL_AS_LIMIT]


@pytest.mark.parametrize("drift", ["zero", "sample"])
def test_scenarios_too_far_apart_to_fit_are_left_to_the_normal(drift):
    random = np.random.default_rng(6)
    row = np.where(np.arange(250) % 5 < 3, 1e-200, 1e2) * random.normal(size=250)
    rows = np.stack([row, random.standard_t(4, size=250)])
    fit = fit_student(rows, drift)
    assert fit.note.tolist() == [FitNote.NORMAL_FOR_NO_FIT, FitNote.AS_ASKED]
    assert fit.scale[0] == fit_normal(rows, drift).sigma[0]
    assert np.isinf(fit.nu[0])


@pytest.mark.parametrize("n", [250, 2500])
@pytest.mark.parametrize("drift", ["zero", "sample"])
def test_nearly_normal_scenarios_settle(drift, n):
    """Here the likelihood hardly depends on nu, and rounding must not keep Newton's method from settling."""
    rows = samples(np.inf, 600, n, seed=n)
    fit = fit_student(rows, drift)
    assert set(fit.note.tolist()) <= {FitNote.AS_ASKED, FitNote.NORMAL_AS_LIMIT}
    assert (fit.nu[np.isfinite(fit.nu)] > 1000).any()
    at_risk, scaled = (student_t(x, NINETY_NINE, 1, drift).value_at_risk.value for x in (rows, 3.7 * rows))
    np.testing.assert_allclose(scaled, 3.7 * at_risk, rtol=1e-10)


@pytest.mark.parametrize("free", [False, True])
@pytest.mark.parametrize("nu", [2.5, 6.0, 60.0, 300.0])
def test_gradient_and_hessian_are_those_of_the_likelihood(nu, free):
    """By central differences of scipy's density, the location moving in units of the scale at the point."""
    rows = np.random.default_rng(12).standard_t(4, size=(3, 80))
    point = np.array([0.2, np.log(nu), 0.3 if free else 0.0])
    parameters = 3 if free else 2
    level, gradient, hessian = _derivatives(rows, np.tile(point, (3, 1)), free)

    def likelihood(*moves):
        at = point.copy()
        for axis, by in moves:
            at[axis] += by * (np.exp(point[0]) if axis == 2 else 1.0)
        return stats.t.logpdf(rows, np.exp(at[1]), at[2], np.exp(at[0])).sum(axis=1)

    assert level == pytest.approx(likelihood(), rel=1e-11)
    h = 1e-3
    for i in range(parameters):
        slope = (likelihood((i, h)) - likelihood((i, -h))) / (2 * h)
        assert gradient[:, i] == pytest.approx(slope, rel=1e-4, abs=1e-4)
        for j in range(parameters):
            bend = (
                likelihood((i, h), (j, h)) - likelihood((i, h), (j, -h))
                - likelihood((i, -h), (j, h)) + likelihood((i, -h), (j, -h))
            ) / (4 * h * h)  # fmt: skip
            assert hessian[:, i, j] == pytest.approx(bend, rel=1e-3, abs=1e-4)


@pytest.mark.parametrize("free", [False, True])
def test_derivatives_are_the_same_in_memory_used_again(free):
    rows = np.random.default_rng(13).standard_t(4, size=(5, 300))
    at = np.tile([0.1, np.log(5.0), 0.2 if free else 0.0], (5, 1))
    room = np.full((3, 9, 300), np.nan)
    for fresh, again in zip(_derivatives(rows, at, free), _derivatives(rows, at, free, room[:, :5]), strict=True):
        np.testing.assert_array_equal(fresh, again)


def test_trigamma_is_scipys():
    x = np.concatenate([np.linspace(1.0, 60.0, 500), [1e3, 1e4]])
    assert _trigamma(x) == pytest.approx(polygamma(1, x), rel=1e-12)


@pytest.mark.parametrize("parameters", [2, 3])
def test_elimination_is_newtons_step_where_every_curvature_is_negative_and_says_so(parameters):
    random = np.random.default_rng(14)
    axes = np.linalg.qr(random.normal(size=(400, parameters, parameters)))[0]
    curvature = random.uniform(-5, 1, size=(400, parameters))
    hessian = (axes * curvature[:, np.newaxis, :]) @ axes.swapaxes(1, 2)
    gradient = random.normal(size=(400, parameters))
    with np.errstate(all="ignore"):
        step, concave = _solved(gradient, hessian)
    np.testing.assert_array_equal(concave, (curvature < 0).all(axis=1))
    assert 0 < concave.sum() < 400
    newton = -np.linalg.solve(hessian, gradient[:, :, np.newaxis])[:, :, 0]
    np.testing.assert_allclose(step[concave], newton[concave], rtol=1e-8, atol=1e-8)
    climbing = _climbing(gradient, hessian)
    np.testing.assert_allclose(climbing[concave], newton[concave], rtol=1e-8, atol=1e-8)
    assert ((climbing * gradient).sum(axis=1) > 0).all()


@pytest.mark.parametrize("drift", ["zero", "sample"])
@pytest.mark.parametrize("n", [250, 500, 1000])
def test_ties_are_found_however_they_are_spread(drift, n):
    """One value in just over a fifth of the scenarios, all together or evenly apart; opposite values are no tie."""
    allowed = int(TIE_SHARE * n)
    base = np.random.default_rng(15).standard_t(4, size=n)
    rows, wanted = [], []
    for places in (np.arange(n), np.arange(n)[::-1], np.random.default_rng(16).permutation(n)):
        for count in (allowed, allowed + 1):
            row = base.copy()
            row[places[:count]] = 0.4
            rows.append(row)
            wanted.append(FitNote.NORMAL_FOR_TIES if count > allowed else FitNote.AS_ASKED)
    opposite = base.copy()
    opposite[: n // 2] = -base[n - n // 2 :]
    mirrored = base.copy()
    mirrored[: allowed * 2] = np.where(np.arange(allowed * 2) % 2 == 0, 0.4, -0.4)
    fit = fit_student(np.stack([*rows, opposite, mirrored]), drift)
    assert fit.note.tolist() == [*wanted, FitNote.AS_ASKED, FitNote.AS_ASKED]


@pytest.mark.parametrize("drift", ["zero", "sample"])
def test_a_long_row_is_fitted_the_same_alone_and_wherever_its_search_begins(drift):
    """Long rows begin in pieces: another order of the same scenarios begins elsewhere and ends at the same maximum."""
    rows = samples(4, 300, 1300, seed=17)
    fit = fit_student(rows, drift)
    for place in (0, 255, 256, 299):
        alone = fit_student(rows[place : place + 1], drift)
        assert (alone.nu[0], alone.scale[0], alone.location[0]) == (
            fit.nu[place],
            fit.scale[place],
            fit.location[place],
        )
    ordered = fit_student(np.sort(rows, axis=1), drift)
    np.testing.assert_allclose(ordered.nu, fit.nu, rtol=2e-9)
    np.testing.assert_allclose(ordered.scale, fit.scale, rtol=1e-9)
