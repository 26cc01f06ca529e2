"""Student's t by matching kurtosis: against scipy, and what must hold of it."""

from functools import partial

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from tail_rows import (
    CONFIDENCES,
    NINETY_NINE,
    ODD_ROWS,
    assert_every_subject_stands_alone,
    assert_homogeneous,
    assert_moved,
    assert_odd_rows,
    assert_same,
    assert_shortfall_not_below,
    crowd,
    fat_tailed,
    figures,
    often,
    panels,
)

from monitor.risk.figures import Lack
from monitor.risk.normal import normal
from monitor.risk.student import match_kurtosis, student_t
from monitor.risk.student_fit import NU_CEILING
from monitor.risk.tail import FitNote

matched = partial(student_t, fit="kurtosis")


@pytest.mark.parametrize("drift", ["zero", "sample"])
@pytest.mark.parametrize("days", [1, 10])
def test_the_t_has_the_deviation_and_the_kurtosis_of_the_scenarios(drift, days):
    rows = np.random.default_rng(1).standard_t(5, size=(60, 400)) * 1e3 + 50
    fit = match_kurtosis(rows, drift)
    tail = matched(rows, NINETY_NINE, days, drift)
    fitted = fit.note == FitNote.AS_ASKED
    assert fitted.sum() > 50
    for place in np.flatnonzero(fitted):
        row, nu = rows[place], fit.nu[place]
        law = stats.t(nu, loc=fit.location[place], scale=fit.scale[place])
        assert law.std() == pytest.approx(row.std(ddof=1), rel=1e-10)
        assert float(law.stats(moments="k")) == pytest.approx(stats.kurtosis(row), rel=1e-9)
        mean = row.mean() if drift == "sample" else 0.0
        assert fit.location[place] == pytest.approx(mean, rel=1e-12)
        wanted = -days * mean - days**0.5 * fit.scale[place] * stats.t.ppf(0.01, nu)
        assert tail.value_at_risk.value[place] == pytest.approx(wanted, rel=1e-9)


def test_tails_no_fatter_than_the_normals_are_the_normals():
    rows = np.random.default_rng(2).uniform(-1, 1, size=(3, 250))
    tail, by_normal = matched(rows, NINETY_NINE), normal(rows, NINETY_NINE)
    assert tail.note.tolist() == [FitNote.NORMAL_AS_LIMIT] * 3
    for one, other in zip(figures(tail), figures(by_normal), strict=True):
        np.testing.assert_array_equal(one, other)


def of_three_values(nonzero, n):
    """-1, 0 and 1 in a symmetric row whose excess kurtosis is n / nonzero - 3."""
    return np.repeat([-1.0, 0.0, 1.0], [nonzero // 2, n - nonzero, nonzero // 2])


def test_between_the_t_and_the_normal_lies_the_ceiling_of_nu():
    """Excess kurtosis 6 / (nu - 4): 0 and 6e-4 and less are the normal's, twice as much is not."""
    # n / nonzero - 3 = 3 k / nonzero for n = 3 (nonzero + k)
    rows = [of_three_values(nonzero, 30_000) for nonzero in (10_000, 9_998, 9_996)]
    fit = match_kurtosis(np.stack(rows), "zero")
    assert 4 + 6 / (30_000 / 9_998 - 3) > NU_CEILING > 4 + 6 / (30_000 / 9_996 - 3)
    assert fit.note.tolist() == [FitNote.NORMAL_AS_LIMIT, FitNote.NORMAL_AS_LIMIT, FitNote.AS_ASKED]
    assert np.isinf(fit.nu).tolist() == [True, True, False]
    assert fit.scale[1] == pytest.approx(rows[1].std(ddof=1), rel=1e-12)


@pytest.mark.parametrize(("n", "note"), [(19, FitNote.NORMAL_FOR_TOO_FEW), (20, FitNote.AS_ASKED)])
def test_too_few_scenarios_say_nothing_about_tails(n, note):
    row = np.zeros((2, n))
    row[0, 3] = -4.0
    tail = matched(row, NINETY_NINE)
    assert tail.note.tolist() == [note, FitNote.AS_ASKED]
    same = tail.value_at_risk.value[0] == normal(row, NINETY_NINE).value_at_risk.value[0]
    assert same == (n < 20)


def test_nu_is_above_4_even_with_one_gigantic_outlier():
    fit = match_kurtosis(ODD_ROWS["one outlier"][np.newaxis], "zero")
    assert 4 < fit.nu[0] == pytest.approx(4 + 6 / (250 - 5 + 1 / 249), rel=1e-6)


def test_by_default_it_is_maximum_likelihood():
    rows = np.random.default_rng(3).standard_t(4, size=(5, 250))
    default = student_t(rows, NINETY_NINE)
    assert_same(default, student_t(rows, NINETY_NINE, fit="likelihood"))
    assert (default.value_at_risk.value != matched(rows, NINETY_NINE).value_at_risk.value).all()
    with pytest.raises(ValueError, match="likelihood, kurtosis"):
        student_t(rows, NINETY_NINE, fit="moments")
    with pytest.raises(ValueError, match="zero, sample"):
        matched(rows, NINETY_NINE, drift="none")


@pytest.mark.parametrize("drift", ["zero", "sample"])
@often
@given(pnl=st.one_of(panels(), fat_tailed()), power=st.integers(-20, 20), confidence=CONFIDENCES)
def test_homogeneous(drift, pnl, power, confidence):
    assert_homogeneous(partial(matched, confidence=confidence, drift=drift), pnl, 2.0**power)


@often
@given(pnl=fat_tailed(), factor=st.floats(1e-3, 1e3))
def test_homogeneous_in_any_factor(pnl, factor):
    assert_homogeneous(partial(matched, confidence=NINETY_NINE), pnl, factor, rtol=1e-9)


@often
@given(pnl=fat_tailed(), shift=st.floats(-1e5, 1e5), days=st.integers(1, 20))
def test_a_sure_gain_a_day_moves_the_figure_with_drift_and_not_without(pnl, shift, days):
    method = partial(matched, confidence=NINETY_NINE, horizon_days=days)
    assert_moved(partial(method, drift="sample"), pnl, shift, -shift * days, rtol=1e-8, atol=1e-4)
    assert_moved(method, pnl, shift, 0.0, rtol=1e-8, atol=1e-4)


@pytest.mark.parametrize("drift", ["zero", "sample"])
@often
@given(pnl=st.one_of(panels(), fat_tailed()), confidence=CONFIDENCES, days=st.integers(1, 20))
def test_shortfall_is_never_below_value_at_risk(drift, pnl, confidence, days):
    assert_shortfall_not_below(matched(pnl, confidence, days, drift))


@often
@given(pnl=st.one_of(panels(), fat_tailed()), levels=st.tuples(CONFIDENCES, CONFIDENCES))
def test_more_confidence_is_never_less_risk(pnl, levels):
    less, more = (figures(matched(pnl, confidence)) for confidence in sorted(levels))
    for low, high in zip(less, more, strict=True):
        assert ((high >= low - 1e-12 * np.abs(low)) | np.isnan(low)).all()


@pytest.mark.parametrize("drift", ["zero", "sample"])
def test_every_subject_stands_alone(drift):
    method = partial(matched, confidence=NINETY_NINE, horizon_days=10, drift=drift)
    assert_every_subject_stands_alone(method, crowd(), [*range(16), 255, 256, 511, 999])


@pytest.mark.parametrize("drift", ["zero", "sample"])
def test_odd_rows(drift):
    not_finite = ("a missing scenario", "an infinite profit", "an infinite loss")
    wanted = {
        **dict.fromkeys(not_finite, Lack.NOT_FINITE),
        **dict.fromkeys(("overflowing", "squares overflow", "squares vanish"), Lack.OUT_OF_RANGE),
        "constant": Lack.CONSTANT,
    }
    assert_odd_rows(partial(matched, confidence=NINETY_NINE, horizon_days=10, drift=drift), wanted)
    assert matched(np.zeros((1, 250)), NINETY_NINE).note.tolist() == [FitNote.AS_ASKED]


@pytest.mark.parametrize(("nu", "by_day"), [(3, 1.127), (5, 1.120), (10, 1.063)])
def test_which_way_the_root_of_time_errs(nu, by_day):
    """Over many independent days the sum is normal: z in place of the t's quantile in units of its deviation."""
    unit = np.sqrt((nu - 2) / nu)
    assert stats.t.ppf(0.99, nu) * unit / stats.norm.ppf(0.99) == pytest.approx(by_day, abs=5e-4)
    assert stats.t.ppf(0.95, nu) * unit < stats.norm.ppf(0.95)
