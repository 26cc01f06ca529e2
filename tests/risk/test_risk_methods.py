"""Every method that a rule can name, asked by name: the properties that its docstring claims, and poor scenarios."""

from dataclasses import replace
from decimal import Decimal
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tail_rows import ODD_ROWS, crowd, fat_tailed, panels

from monitor.risk import age_weighted, cornish_fisher, historical, monte_carlo, normal, peaks_over_threshold, student
from monitor.risk import volatility_scaled as scaled
from monitor.risk.bounds import BoundLack
from monitor.risk.figures import LACK_TEXT, Lack
from monitor.risk.methods import TOLERANCE, TailCall, bound_tail, incremental_tail, measure_tail, tail_components
from monitor.risk.tail import FIT_NOTE_TEXT, FitNote

NINETY_NINE = Decimal("0.99")
CALLS = {
    "historical": TailCall("historical", NINETY_NINE),
    "historical, ten days": TailCall("historical", NINETY_NINE, horizon_days=10),
    "historical, overlapping": TailCall("historical", NINETY_NINE, overlapping=5),
    "age_weighted": TailCall("age_weighted", NINETY_NINE, decay=0.99),
    "age_weighted, quick": TailCall("age_weighted", NINETY_NINE, decay=0.94),
    "volatility_scaled by ewma": TailCall("volatility_scaled", NINETY_NINE),
    "volatility_scaled by garch": TailCall("volatility_scaled", NINETY_NINE, scaling="garch"),
    "normal": TailCall("normal", NINETY_NINE),
    "normal, drift, ten days": TailCall("normal", NINETY_NINE, horizon_days=10, drift="sample"),
    "student_t": TailCall("student_t", NINETY_NINE),
    "student_t, drift": TailCall("student_t", NINETY_NINE, drift="sample"),
    "student_t by kurtosis": TailCall("student_t", NINETY_NINE, fit="kurtosis"),
    "student_t by kurtosis, drift": TailCall("student_t", NINETY_NINE, fit="kurtosis", drift="sample"),
    "cornish_fisher": TailCall("cornish_fisher", NINETY_NINE),
    "cornish_fisher, drift": TailCall("cornish_fisher", NINETY_NINE, drift="sample"),
    "peaks_over_threshold": TailCall("peaks_over_threshold", NINETY_NINE),
    "peaks_over_threshold, inside": TailCall("peaks_over_threshold", Decimal("0.8")),
    "monte_carlo": TailCall("monte_carlo", NINETY_NINE, paths=2_000),
    "monte_carlo, t, drift, two days": TailCall(
        "monte_carlo", NINETY_NINE, horizon_days=2, drift="sample", distribution="student_t", paths=2_000
    ),
}
SCALED = TailCall("volatility_scaled", NINETY_NINE)
SEVERAL_DAYS = "monte_carlo, t, drift, two days"
every_call = pytest.mark.parametrize("call", CALLS.values(), ids=CALLS.keys())
often = settings(max_examples=15, deadline=None)
FIGURES = ("value_at_risk", "expected_shortfall")
CONFIDENCES = st.sampled_from([Decimal(text) for text in ("0.9", "0.975", "0.99")])
SEED = ("Small Trust", "2026-03-06", "bounds")


METHODS_OF_CALLS = sorted({call.method for call in CALLS.values()})


def those(*methods):
    """The calls of these methods."""
    chosen = {name: call for name, call in CALLS.items() if call.method in methods}
    return pytest.mark.parametrize("call", chosen.values(), ids=chosen.keys())


def names_of(subjects):
    return [("Small Trust", "2026-03-06", f"book:{at}") for at in range(subjects)]


def measured(pnl, call, names=None):
    return measure_tail(pnl, call, names_of(len(pnl)) if names is None else names)


def values(tail):
    return [getattr(tail, figure).value for figure in FIGURES]


def assert_same_answers(one, other):
    for figure in FIGURES:
        np.testing.assert_array_equal(getattr(one, figure).value, getattr(other, figure).value)
        np.testing.assert_array_equal(getattr(one, figure).lack, getattr(other, figure).lack)
    np.testing.assert_array_equal(one.note, other.note)


def picked(tail, places):
    """The answers of some subjects alone."""
    figures = {figure: getattr(tail, figure) for figure in FIGURES}
    chosen = {name: replace(own, value=own.value[places], lack=own.lack[places]) for name, own in figures.items()}
    return replace(tail, note=tail.note[places], **chosen)


def walks(subjects, n=260, seed=4):
    """Books as they are: fat tails, volatility that comes and goes, a market that all of them share."""
    random = np.random.default_rng(seed)
    storm = np.exp(0.4 * np.cumsum(random.normal(size=n)) / np.sqrt(np.arange(1, n + 1)))
    shared = random.standard_t(5, size=n)
    own = random.standard_t(5, size=(subjects, n))
    return (0.6 * shared + own) * storm * 10.0 ** random.integers(2, 6, size=(subjects, 1))


# What holds of all methods


@every_call
def test_in_cents_the_risk_is_a_hundredfold(call):
    """Units: the same book in another unit has the same risk, with the same reasons and notes."""
    pnl = walks(12)
    before = measured(pnl, call)
    for factor in (2.0**-30, 100.0, 1 / 157.3):
        after = measured(pnl * factor, call)
        for one, other in zip(values(before), values(after), strict=True):
            # A power of two changes no digit of what is read and added up; a fit may take another last step.
            np.testing.assert_allclose(other, one * factor, rtol=max(TOLERANCE[call.method], 1e-10))
        np.testing.assert_array_equal(before.value_at_risk.lack, after.value_at_risk.lack)
        np.testing.assert_array_equal(before.note, after.note)


@every_call
@settings(max_examples=8, deadline=None)
@given(pnl=st.one_of(panels(), fat_tailed()), confidence=CONFIDENCES, power=st.integers(-20, 20))
def test_twice_the_position_is_twice_the_risk_and_the_shortfall_is_not_below_value_at_risk(
    call, pnl, confidence, power
):
    call = replace(call, confidence=confidence)
    tail, scaled_tail = measured(pnl, call), measured(pnl * 2.0**power, call)

    at_risk, shortfall = values(tail)
    both = np.isfinite(at_risk) & np.isfinite(shortfall)
    # Two multiples of one fitted scale may differ by rounding where they are equal; scenarios are read as they are.
    slack = 0 if call.method in ("historical", "age_weighted", "volatility_scaled") else 1e-12
    assert (shortfall >= at_risk - slack * np.abs(at_risk))[both].all()
    for one, other in zip(values(tail), values(scaled_tail), strict=True):
        np.testing.assert_allclose(other, one * 2.0**power, rtol=TOLERANCE[call.method])


@pytest.fixture(scope="module")
def thousand():
    return crowd()


@pytest.fixture(scope="module")
def of_thousand(thousand):
    """The answers for a thousand subjects by name of the call, each method run once."""
    return {name: measured(thousand, call) for name, call in CALLS.items()}


@pytest.mark.parametrize("name", CALLS)
def test_a_subject_alone_is_the_same_to_the_last_digit_as_in_a_block_of_a_thousand(name, thousand, of_thousand):
    names = names_of(len(thousand))
    for at in (0, 1, 2, 3, 4, 5, 6, 7, 8, 255, 256, 511, 998, 999):
        alone = measured(thousand[at : at + 1], CALLS[name], names[at : at + 1])
        assert_same_answers(alone, picked(of_thousand[name], slice(at, at + 1)))


@pytest.mark.parametrize("name", CALLS)
def test_the_order_of_subjects_does_not_matter(name, thousand, of_thousand):
    order = np.random.default_rng(3).permutation(len(thousand))[:150]
    names = names_of(len(thousand))
    before = thousand.copy()

    shuffled = measured(thousand[order], CALLS[name], [names[at] for at in order])

    assert_same_answers(shuffled, picked(of_thousand[name], order))
    np.testing.assert_array_equal(thousand, before)  # what was given is left alone


@those(*(method for method in METHODS_OF_CALLS if method != "monte_carlo"))
def test_more_confidence_is_never_less_risk(call):
    """Beyond the threshold: peaks over threshold goes over from scenarios to a fitted tail there, with a step.

    Not of Monte Carlo, whose draws depend on the confidence.
    """
    pnl = walks(6)
    levels = ("0.95", "0.99", "0.995") if call.method == "peaks_over_threshold" else ("0.9", "0.95", "0.99", "0.995")
    rising = [values(measured(pnl, replace(call, confidence=Decimal(level)))) for level in levels]
    for less, more in pairwise(rising):
        for low, high in zip(less, more, strict=True):
            assert (high[np.isfinite(low)] >= low[np.isfinite(low)]).all()


# What holds of some


@those("historical", "age_weighted")
@often
@given(pnl=panels(), less=st.integers(0, 10**6), at=st.integers(0, 59))
def test_whoever_loses_more_on_some_day_never_risks_less(call, pnl, less, at):
    worse = pnl.copy()
    worse[:, at % pnl.shape[1]] -= less
    for before, after in zip(values(measured(pnl, call)), values(measured(worse, call)), strict=True):
        assert (after >= before - 1e-9 * np.abs(before)).all()


MOVED = {
    name: call
    for name, call in CALLS.items()
    if call.method in ("historical", "age_weighted", "peaks_over_threshold") or call.drift == "sample"
}


@pytest.mark.parametrize("call", MOVED.values(), ids=MOVED.keys())
@often
@given(pnl=fat_tailed(), shift=st.integers(-10_000, 10_000))
def test_a_sure_gain_a_day_lowers_the_risk_by_itself(call, pnl, shift):
    """Of the methods that read the scenarios at one day, by one day's gain; with a drift by that of every day."""
    days = call.horizon_days if call.drift == "sample" else 1
    call = replace(call, horizon_days=days)
    before, after = measured(pnl, call), measured(pnl + shift, call)
    np.testing.assert_array_equal(before.value_at_risk.lack, after.value_at_risk.lack)
    for one, other in zip(values(before), values(after), strict=True):
        # A fit is good for its tolerance of the spread, whose size the figure itself may not show.
        slack = max(TOLERANCE[call.method], 1e-9) * 20 * pnl.std()
        np.testing.assert_allclose(other, one - shift * days, atol=slack, rtol=0)


@pytest.mark.parametrize("name", ["historical", "age_weighted", "age_weighted, quick", "normal"])
@often
@given(pnl=panels(least_subjects=2), confidence=CONFIDENCES)
def test_the_shortfall_of_a_whole_is_no_more_than_that_of_its_parts(name, pnl, confidence):
    call = replace(CALLS[name], confidence=confidence)
    apart = measured(pnl, call).expected_shortfall
    together = measured(pnl.sum(axis=0, keepdims=True), call).expected_shortfall
    if (apart.lack == Lack.NONE).all() and together.lack[0] == Lack.NONE:
        assert together.value[0] <= apart.value.sum() + 1e-9 * np.abs(pnl).max()


# Bounds


@pytest.fixture(scope="module")
def fifty(thousand):
    return thousand[:50]


BOUNDS_ALONE = {"cornish_fisher": 1e-9}  # relative: the docstring of its bounds says why


@every_call
def test_bounds_lie_around_the_figure_and_are_those_of_the_subject_alone(call, fifty):
    tail = measured(fifty, call)
    bounds = bound_tail(fifty, call, tail, SEED)
    for figure in FIGURES:
        told, own = getattr(tail, figure), getattr(bounds, figure)
        assert (np.isnan(own.low) | (own.low <= told.value)).all()
        assert (np.isnan(own.high) | (own.high >= told.value)).all()
        complete = np.isfinite(own.low) & np.isfinite(own.high)
        np.testing.assert_array_equal(complete, own.reason == BoundLack.NONE)
        np.testing.assert_array_equal(own.reason == BoundLack.NO_FIGURE, told.lack != Lack.NONE)
        assert np.isnan(own.low[told.lack != Lack.NONE]).all()
    rtol = BOUNDS_ALONE.get(call.method, 0)
    for at in range(9):
        alone = bound_tail(
            fifty[at : at + 1], call, measured(fifty[at : at + 1], call, names_of(50)[at : at + 1]), SEED
        )
        for figure in FIGURES:
            one, other = getattr(alone, figure), getattr(bounds, figure)
            assert one.reason[0] == other.reason[at]
            for side in ("low", "high"):
                np.testing.assert_allclose(getattr(one, side)[0], getattr(other, side)[at], rtol=rtol)


@every_call
def test_bounds_of_twice_the_position_are_twice_as_far(call, fifty):
    rows = fifty[[0, 6, 9]]
    before = bound_tail(rows, call, measured(rows, call), SEED)
    after = bound_tail(rows * 8, call, measured(rows * 8, call), SEED)
    for figure in FIGURES:
        for side in ("low", "high"):
            one, other = (getattr(getattr(bounds, figure), side) for bounds in (before, after))
            np.testing.assert_allclose(other, one * 8, rtol=max(TOLERANCE[call.method], 1e-9))


OPEN_ABOVE = {  # at 99 % of 500: 100 spans end to end, and weights that leave too few scenarios to a shortfall
    "historical, overlapping": FIGURES,
    "age_weighted": ("expected_shortfall",),
    "age_weighted, quick": ("expected_shortfall",),
}


@pytest.mark.parametrize("name", [name for name in CALLS if name != SEVERAL_DAYS])
def test_ordinary_subjects_have_the_bounds_that_their_method_can_have(name):
    """Lest the tests above pass because there are none."""
    pnl = walks(4, n=500)
    bounds = bound_tail(pnl, CALLS[name], measured(pnl, CALLS[name]), SEED)
    for figure in FIGURES:
        own, is_open = getattr(bounds, figure), figure in OPEN_ABOVE.get(name, ())
        assert np.isfinite(own.low).all()
        assert (np.isnan(own.high) == is_open).all()
        assert (own.reason == (BoundLack.TOO_FEW if is_open else BoundLack.NONE)).all()


def test_several_simulated_days_of_t_have_no_bounds():
    pnl, call = walks(3, n=500), CALLS[SEVERAL_DAYS]
    bounds = bound_tail(pnl, call, measured(pnl, call), SEED)
    for figure in FIGURES:
        own = getattr(bounds, figure)
        assert np.isnan(own.low).all()
        assert np.isnan(own.high).all()
        assert (own.reason == BoundLack.SEVERAL_DAYS).all()


T_DRAWS = TailCall("monte_carlo", NINETY_NINE, distribution="student_t", paths=2_000)
STAND_INS = {
    "monte_carlo": (CALLS["monte_carlo"], CALLS["normal"]),
    "monte_carlo, t": (T_DRAWS, CALLS["student_t"]),
    "student_t by kurtosis": (CALLS["student_t by kurtosis"], CALLS["student_t"]),
}


@pytest.mark.parametrize(("call", "closed"), STAND_INS.values(), ids=STAND_INS.keys())
def test_bounds_of_a_like_method_are_as_far_from_the_figure_as_they_were_from_its_own(call, closed):
    pnl = walks(6, n=500)
    told, like = measured(pnl, call), measured(pnl, closed)
    bounds, of_like = bound_tail(pnl, call, told, SEED), bound_tail(pnl, closed, like, SEED)
    for figure in FIGURES:
        here, there = getattr(told, figure).value, getattr(like, figure).value
        assert (here != there).all()
        for side in ("low", "high"):
            by, as_far = getattr(getattr(bounds, figure), side) - here, getattr(getattr(of_like, figure), side) - there
            # What is simulated bears the error of its draws besides, added in squares.
            error = getattr(told, f"{figure}_error", np.zeros(6))
            np.testing.assert_allclose(np.abs(by), np.hypot(as_far, 1.959964 * error), rtol=1e-6)


def test_bounds_of_a_simulation_of_few_paths_are_wider():
    pnl = walks(4, n=2500)
    few, many = (TailCall("monte_carlo", NINETY_NINE, paths=paths) for paths in (2_000, 100_000))
    width = [
        bounds.value_at_risk.high - bounds.value_at_risk.low
        for bounds in (bound_tail(pnl, call, measured(pnl, call), SEED) for call in (few, many))
    ]
    assert (width[0] > 1.5 * width[1]).all()


def test_the_lower_bound_of_the_shortfall_is_not_below_that_of_value_at_risk():
    pnl = np.random.RandomState(4).standard_t(4, size=(50, 500))
    for call in (CALLS["historical"], CALLS["age_weighted"], SCALED):
        bounds = bound_tail(pnl, call, measured(pnl, call), SEED)
        assert (bounds.expected_shortfall.low >= bounds.value_at_risk.low).all()


def test_a_scenario_from_a_dead_calm_is_noted():
    calm = np.concatenate([np.tile([1.0, -1.0], 75), np.zeros(99), [-5.0]])[np.newaxis]
    call = SCALED
    ordinary = np.random.RandomState(3).standard_normal((1, 250))
    assert measured(calm, call).note.tolist() == [FitNote.SCALED_FAR]
    assert measured(ordinary, call).note.tolist() == [FitNote.AS_ASKED]


def test_over_overlapping_periods_others_than_historical_have_a_figure_and_no_bounds():
    call = replace(CALLS["normal"], overlapping=5)
    pnl = walks(2)
    bounds = bound_tail(pnl, call, measured(pnl, call), SEED)
    assert (bounds.value_at_risk.reason == BoundLack.OVERLAPPING).all()
    assert np.isnan(bounds.expected_shortfall.low).all()


# Components and incremental figures

COMPONENT_METHODS = ("historical", "age_weighted", "volatility_scaled", "normal", "student_t")


@every_call
@pytest.mark.parametrize("of", FIGURES)
def test_components_add_up_to_the_figure_of_the_whole(call, of):
    if call.method not in COMPONENT_METHODS or (call.method, of) == ("age_weighted", "value_at_risk"):
        with pytest.raises(ValueError, match=f"{call.method} has no components of {of}"):
            tail_components(walks(3), call, of)
        return
    told = 0
    for seed in range(4):
        pnl = walks(8, seed=seed)
        pnl[5] = -pnl[2] * 0.7  # a hedge
        pnl[6] = 0.0
        whole = getattr(measured(pnl.sum(axis=0, keepdims=True), call), of)
        made = tail_components(pnl, call, of)
        assert whole.lack[0] == Lack.NONE
        if made.lack[0] == Lack.NOT_SCALABLE:
            assert not 0.8 <= made.factor[0] <= 1.25
            assert np.isnan(made.component).all()
            continue
        told += 1
        assert made.component.sum() == pytest.approx(whole.value[0], rel=1e-10)
        assert made.component[6] == 0
        assert made.component[2] * made.component[5] <= 0
        assert 0.8 <= made.factor[0] <= 1.25
        assert made.factor[0] == 1 or (of == "value_at_risk" and call.method in ("historical", "volatility_scaled"))
    assert told >= 2


@pytest.mark.parametrize("of", FIGURES)
def test_with_a_drift_each_position_brings_its_own_mean(of):
    """By hand: -h m + beta (V + h M), m and M the means of the position and of the whole, beta = cov(x, P) / var(P)."""
    call, pnl = CALLS["normal, drift, ten days"], walks(4)
    whole = pnl.sum(axis=0)
    told = getattr(measured(whole[np.newaxis], call), of).value[0]
    beta = np.array([np.cov(own, whole)[0, 1] for own in pnl]) / whole.var(ddof=1)

    made = tail_components(pnl, call, of).component

    np.testing.assert_allclose(made, beta * (told + 10 * whole.mean()) - 10 * pnl.mean(axis=1), rtol=1e-9)


@every_call
@pytest.mark.parametrize("of", FIGURES)
def test_incremental_is_the_difference_of_two_figures(call, of):
    if call.method == "monte_carlo":  # draws of its own for each of two books would be most of the difference
        return
    own = walks(5)
    own[3] = np.nan
    whole = np.delete(own, 3, axis=0).sum(axis=0) + walks(1, seed=9)[0]  # the parts need not add up to the whole
    told = getattr(measured(whole[np.newaxis], call), of)

    found = incremental_tail(whole, own, call, of)

    for at in (0, 1, 2, 4):
        without = getattr(measured((whole - own[at])[np.newaxis], call), of)
        assert found.lack[at] == (told.lack[0] or without.lack[0])
        np.testing.assert_array_equal(found.value[at], told.value[0] - without.value[0])
    assert found.lack[3] != Lack.NONE
    assert np.isnan(found.value[3])


@every_call
def test_nobody_to_leave_out_is_no_trouble(call):
    if call.method != "monte_carlo":
        assert incremental_tail(walks(1)[0], np.empty((0, 260)), call, "value_at_risk").value.shape == (0,)


# Poor scenarios


@every_call
def test_poor_scenarios_give_a_figure_or_a_reason_and_never_harm_their_neighbours(call):
    rows = np.stack(list(ODD_ROWS.values()))
    names = names_of(len(rows))
    with np.errstate(all="raise"):
        tail = measured(rows, call)
        bounds = bound_tail(rows, call, tail, SEED)
    for at, (name, row) in enumerate(ODD_ROWS.items()):
        assert_same_answers(measured(row[np.newaxis], call, names[at : at + 1]), picked(tail, slice(at, at + 1)))
        for figure in FIGURES:
            told, around = getattr(tail, figure), getattr(bounds, figure)
            lack = Lack(told.lack[at])
            assert np.isfinite(told.value[at]) == (lack is Lack.NONE), name
            assert LACK_TEXT[lack]
            assert not np.isinf([around.low[at], around.high[at]]).any()
            assert np.isnan([around.low[at], around.high[at]]).any() == (around.reason[at] != BoundLack.NONE), name
        assert FIT_NOTE_TEXT[FitNote(tail.note[at])]
        told = tail.value_at_risk
        if name.startswith("flat"):
            assert (told.lack[at], told.value[at], np.signbit(told.value[at])) == (Lack.NONE, 0, False)
            assert np.nan_to_num([bounds.value_at_risk.low[at], bounds.value_at_risk.high[at]]).tolist() == [0, 0]
        elif not np.isfinite(row).all():
            assert told.lack[at] == tail.expected_shortfall.lack[at] == Lack.NOT_FINITE
        elif name == "ordinary" and call.method != "cornish_fisher":
            assert told.lack[at] == Lack.NONE


LEAST = {"historical": 1, "age_weighted": 1, "volatility_scaled": 1}


@every_call
@pytest.mark.parametrize("n", [0, 1, 2, 3])
def test_too_few_scenarios(call, n):
    pnl = walks(3)[:, :n]
    tail = measured(pnl, call)
    bounds = bound_tail(pnl, call, tail, SEED)
    for figure in FIGURES:
        told = getattr(tail, figure)
        assert np.isfinite(told.value[told.lack == Lack.NONE]).all()
        assert np.isnan(told.value[told.lack != Lack.NONE]).all()
        assert np.isnan(getattr(bounds, figure).high).all() or n > 1
        if n < LEAST.get(call.method, 2):
            few = {Lack.TOO_SHORT, Lack.FEW_IN_TAIL, Lack.CONSTANT}
            assert {Lack(lack) for lack in told.lack} <= few


@every_call
def test_no_subject_is_no_trouble(call):
    nobody = np.empty((0, 250))
    tail = measured(nobody, call)
    bounds = bound_tail(nobody, call, tail, SEED)
    shapes = [own.shape for own in (*values(tail), tail.note, bounds.value_at_risk.low, bounds.expected_shortfall.high)]
    assert set(shapes) == {(0,)}


QUICK = {
    name: CALLS[name]
    for name in ("historical", "age_weighted", "volatility_scaled by ewma", "normal", "cornish_fisher", "student_t")
}


@pytest.mark.parametrize("call", QUICK.values(), ids=QUICK.keys())
def test_ten_thousand_subjects_are_as_good_as_one(call):
    pnl = np.tile(crowd(100)[:, :100], (100, 1))
    tail = measured(pnl, call)
    first = picked(tail, slice(0, 100))
    for start in (100, 5_000, 9_900):
        assert_same_answers(picked(tail, slice(start, start + 100)), first)


# What the docstrings say

METHODS = {
    "historical": historical.historical,
    "age_weighted": age_weighted.age_weighted,
    "volatility_scaled": scaled.volatility_scaled,
    "normal": normal.normal,
    "student_t": student.student_t,
    "cornish_fisher": cornish_fisher.cornish_fisher,
    "peaks_over_threshold": peaks_over_threshold.peaks_over_threshold,
    "monte_carlo": monte_carlo.monte_carlo,
}
PROPERTIES = {
    "positive homogeneity": ("positive homogeneity", "positively homogeneous"),
    "VaR <= ES": ("var <= es", "value at risk <= shortfall"),
    "monotonicity": ("monoton",),
    "translation": ("translation",),
    "sub-additivity": ("sub-additiv",),
    "row alone": ("a row alone",),
}


def test_every_method_by_name_is_asked_here():
    from monitor.limits.parameters import COMPONENT_METHODS as OF_RULES
    from monitor.limits.parameters import TAIL_METHODS

    assert {call.method for call in CALLS.values()} == set(TAIL_METHODS) == set(METHODS)
    assert set(COMPONENT_METHODS) == set(OF_RULES)
    assert set(TAIL_METHODS) <= set(TOLERANCE)


@pytest.mark.parametrize("name", METHODS)
def test_the_docstring_says_which_properties_hold(name):
    said = " ".join(METHODS[name].__doc__.lower().split())
    missing = [prop for prop, words in PROPERTIES.items() if not any(word in said for word in words)]
    assert missing == []
