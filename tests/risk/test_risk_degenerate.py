"""Poor scenarios: a figure or the reason why there is none, for that subject alone, without a warning."""

from decimal import Decimal
from functools import partial

import numpy as np
import pytest

from monitor.risk.figures import LACK_TEXT, Figures, Lack
from monitor.risk.historical import historical
from monitor.risk.normal import normal
from monitor.risk.probability import loss_probability
from monitor.risk.returns import log_returns
from monitor.risk.student import student_t
from monitor.risk.tail import FIT_NOTE_TEXT, FitNote
from monitor.risk.volatility import annualised, ewma, ewma_variance, sample

NINETY_NINE = Decimal("0.99")
N = 250
WALK = np.random.default_rng(2).standard_t(4, size=N) * 100


def with_value(place, value):
    row = WALK.copy()
    row[place] = value
    return row


ONE_OUTLIER = with_value(100, -1e9)
MOSTLY_ZERO = np.where(np.arange(N) % 10 == 0, WALK, 0.0)
ALL_ZERO_BUT_ONE = np.where(np.arange(N) == 40, -500.0, 0.0)

OK, SHORT, NOT_FINITE = Lack.NONE, Lack.TOO_SHORT, Lack.NOT_FINITE
CONSTANT, RANGE = Lack.CONSTANT, Lack.OUT_OF_RANGE

#                     row                       historical  normal, t   sample      ewma
TABLE = {
    "ordinary": (WALK, OK, OK, OK, OK),
    "flat": (np.zeros(N), OK, OK, OK, OK),
    "flat, negative zeros": (np.full(N, -0.0), OK, OK, OK, OK),
    "constant": (np.full(N, -3.7), OK, CONSTANT, OK, OK),
    "a missing scenario": (with_value(3, np.nan), NOT_FINITE, NOT_FINITE, NOT_FINITE, NOT_FINITE),
    "an infinite profit": (with_value(4, np.inf), NOT_FINITE, NOT_FINITE, NOT_FINITE, NOT_FINITE),
    "an infinite loss": (with_value(4, -np.inf), NOT_FINITE, NOT_FINITE, NOT_FINITE, NOT_FINITE),
    "nothing but missing": (np.full(N, np.nan), NOT_FINITE, NOT_FINITE, NOT_FINITE, NOT_FINITE),
    "mostly zeros": (MOSTLY_ZERO, OK, OK, OK, OK),
    "all zero but one": (ALL_ZERO_BUT_ONE, OK, OK, OK, OK),
    "one outlier": (ONE_OUTLIER, OK, OK, OK, OK),
    "two values": (np.tile([5.0, -5.0], N // 2), OK, OK, OK, OK),
    "overflowing": (np.linspace(-1, 1, N) * 1.7e308, RANGE, RANGE, RANGE, RANGE),
    "squares overflow": (WALK * 1e200, OK, RANGE, RANGE, RANGE),
    "squares vanish": (WALK * 1e-200, OK, RANGE, OK, OK),
}
# Half the table's rows are bad, so that each good one has bad neighbours on both sides.
PANEL = np.stack([row for pair in ((TABLE[name][0], TABLE["a missing scenario"][0]) for name in TABLE) for row in pair])

CALLS = {
    "historical": (historical, 1),
    "normal": (normal, 2),
    "normal, drift": (partial(normal, drift="sample"), 2),
    "student_t": (student_t, 2),
    "student_t, drift": (partial(student_t, drift="sample"), 2),
}


def every_figure(rows):
    """(name, column of TABLE, figures) of every method over the rows."""
    for name, (method, column) in CALLS.items():
        tail = method(rows, NINETY_NINE, 10)
        yield f"{name}: value at risk", column, tail.value_at_risk
        yield f"{name}: shortfall", column, tail.expected_shortfall
    for drift in ("zero", "sample"):
        for distribution in ("normal", "student_t"):
            probability = loss_probability(rows, np.full(len(rows), 50.0), 10, distribution, drift)
            yield f"{distribution}, {drift}: probability", 2, probability
    yield "sample", 3, sample(rows)
    yield "ewma", 4, ewma(rows, 0.94)
    yield "annualised", 3, annualised(sample(rows), 252)


def test_every_row_of_the_table_gets_a_figure_or_its_reason_and_harms_no_neighbour():
    with np.errstate(all="raise"):
        in_company = list(every_figure(PANEL))
    for place, (row_name, row) in enumerate(TABLE.items()):
        with np.errstate(all="raise"):
            alone = list(every_figure(row[0][np.newaxis]))
        for (name, column, together), (_, _, single) in zip(in_company, alone, strict=True):
            about = f"{row_name}: {name}"
            assert Lack(together.lack[2 * place]) is row[column], about
            assert np.isnan(together.value[2 * place]) == (row[column] is not OK), about
            np.testing.assert_array_equal(together.value[2 * place], single.value[0], about)
            assert together.lack[2 * place + 1] == NOT_FINITE, about


@pytest.mark.parametrize("name", ["flat", "flat, negative zeros"])
def test_a_flat_book_risks_exactly_nothing(name):
    for figure_name, _, figures in every_figure(TABLE[name][0][np.newaxis]):
        assert figures.value[0] == 0, figure_name
        assert not np.signbit(figures.value[0]), figure_name


@pytest.mark.parametrize("method", [normal, student_t])
def test_a_flat_book_measured_by_a_fit_needs_no_note(method):
    assert method(np.zeros((1, N)), NINETY_NINE).note.tolist() == [FitNote.AS_ASKED]


@pytest.mark.parametrize("value", [-3.7, 0.1, 1e-9])
def test_one_value_throughout_has_no_volatility_at_all(value):
    row = np.full((1, 7), value)
    assert sample(row).value[0] == 0
    assert ewma(row, 0.94).value[0] == pytest.approx(abs(value), rel=1e-14)
    assert historical(row, NINETY_NINE).value_at_risk.value[0] == -value


def test_rounding_never_shows_in_scenarios_that_are_all_equal():
    for n in (7, 30, 250, 731):
        rows = np.repeat(np.random.default_rng(n).normal(size=(400, 1)), n, axis=1)
        tail = historical(rows, NINETY_NINE)
        assert (sample(rows).value == 0).all()
        assert (tail.value_at_risk.value == -rows[:, 0]).all()
        assert (tail.expected_shortfall.value >= tail.value_at_risk.value).all()
        assert tail.expected_shortfall.value == pytest.approx(-rows[:, 0], rel=1e-14)


def test_the_worst_scenario_stands_for_less_than_one_to_the_last_digit():
    rows = np.random.default_rng(3).normal(size=(400, 70))
    tail = historical(rows, NINETY_NINE)
    assert not tail.exact_tail
    np.testing.assert_array_equal(tail.expected_shortfall.value, -rows.min(axis=1))


def test_a_position_that_cannot_lose_has_a_negative_value_at_risk():
    row = np.arange(1.0, 501.0)[np.newaxis]
    tail = historical(row, NINETY_NINE)
    assert (tail.value_at_risk.value[0], tail.expected_shortfall.value[0]) == (-5, -3)
    assert normal(row, NINETY_NINE, drift="sample").value_at_risk.value[0] > 0
    assert normal(row + 1e6, NINETY_NINE, drift="sample").value_at_risk.value[0] < 0


@pytest.mark.parametrize(
    ("scenarios", "historical_lack", "fitted_lack"), [(0, SHORT, SHORT), (1, OK, SHORT), (2, OK, OK), (19, OK, OK)]
)
def test_few_scenarios(scenarios, historical_lack, fitted_lack):
    rows = np.stack([WALK[:scenarios], WALK[20 : 20 + scenarios], np.zeros(scenarios)])
    for name, column, figures in every_figure(rows):
        wanted = historical_lack if column in (1, 4) else fitted_lack
        assert [Lack(code) for code in figures.lack] == [wanted] * 3, name
        assert (np.isnan(figures.value) == (figures.lack != OK)).all(), name


def test_too_few_scenarios_outrank_a_missing_one():
    assert normal(np.array([[np.nan]]), NINETY_NINE).value_at_risk.lack.tolist() == [SHORT]


def test_no_subjects():
    for name, _, figures in every_figure(np.empty((0, N))):
        assert figures.value.shape == figures.lack.shape == (0,), name


def test_ten_thousand_subjects():
    rows = np.random.default_rng(4).standard_t(4, size=(10_000, 60))
    rows[::1000] = np.nan
    for name, column, figures in every_figure(rows):
        assert figures.value.shape == (10_000,), name
        assert np.flatnonzero(figures.lack).tolist() == list(range(0, 10_000, 1000)), (name, column)


def test_the_shape_and_the_parameters_are_checked():
    rows = WALK[np.newaxis]
    with pytest.raises(ValueError, match=r"\(subjects, scenarios\)"):
        historical(WALK, NINETY_NINE)
    for wrong in (Decimal(0), Decimal(1), Decimal("1.2"), Decimal("NaN"), Decimal("-0.5")):
        with pytest.raises(ValueError, match="confidence must be above 0 and below 1"):
            historical(rows, wrong)
    with pytest.raises(TypeError, match="must be a Decimal"):
        historical(rows, 0.99)
    for method in (historical, normal, student_t):
        with pytest.raises(ValueError, match="at least 1 day"):
            method(rows, NINETY_NINE, 0)
    for method in (normal, student_t):
        with pytest.raises(ValueError, match="zero, sample"):
            method(rows, NINETY_NINE, 1, "none")
    with pytest.raises(ValueError, match="normal, student_t"):
        loss_probability(rows, np.array([1.0]), 1, "empirical")
    for decay in (0.0, 1.0, -0.5, float("nan")):
        with pytest.raises(ValueError, match="decay"):
            ewma(rows, decay)
        with pytest.raises(ValueError, match="decay"):
            ewma_variance(np.ones(1), rows, decay)


def test_a_threshold_that_is_missing_is_that_subjects_lack_alone():
    rows = np.stack([WALK, WALK, WALK, np.full(N, np.nan)])
    figures = loss_probability(rows, np.array([np.nan, 50.0, np.inf, 50.0]), 1)
    assert figures.lack.tolist() == [Lack.NO_THRESHOLD, Lack.NONE, Lack.NO_THRESHOLD, Lack.NOT_FINITE]


def test_a_flat_book_loses_nothing_for_certain():
    figures = loss_probability(np.zeros((3, N)), np.array([-1.0, 0.0, 1.0]), 5)
    assert figures.value.tolist() == [1, 0, 0]


def test_returns_are_missing_only_where_a_price_is():
    prices = np.array(
        [
            [100.0, 110.0, 121.0, 110.0],
            [100.0, np.nan, 100.0, 105.0],
            [100.0, 0.0, 100.0, 100.0],
            [100.0, -5.0, -5.5, 100.0],
            [np.inf, 100.0, 100.0, 100.0],
            [1e-300, 1e300, 100.0, 100.0],
        ]
    )
    with np.errstate(all="raise"):
        returns = log_returns(prices)
    assert returns.shape == (6, 3)
    assert np.isnan(returns).tolist() == [
        [False, False, False],
        [True, True, False],
        [True, True, False],
        [True, True, True],
        [True, False, False],
        [True, False, False],
    ]
    assert returns[0] == pytest.approx(np.log([1.1, 1.1, 110 / 121]), rel=1e-14)
    assert log_returns(np.ones((2, 1))).shape == (2, 0)


def test_a_figure_that_overflows_late_is_lacking_too():
    figures = annualised(Figures.of(np.array([1e308, 1.0]), np.zeros(2, dtype=np.int8)), 252)
    assert figures.lack.tolist() == [Lack.OUT_OF_RANGE, Lack.NONE]
    assert np.isnan(figures.value).tolist() == [True, False]


def test_every_lack_and_note_can_be_read():
    assert set(LACK_TEXT) == set(Lack)
    assert set(FIT_NOTE_TEXT) == set(FitNote)
