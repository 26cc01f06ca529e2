"""Which days are exceptions, which are missing, and which don't count."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from monitor.risk.exceptions import find_exceptions, larger_count

NAN, INF = math.nan, math.inf


def record(pnl, value_at_risk, **how):
    return find_exceptions(np.array([pnl]), np.array([value_at_risk]), **how)


def places(days):
    return np.flatnonzero(days[0]).tolist()


def test_only_a_loss_strictly_larger_than_value_at_risk_is_an_exception():
    limit = 100.1
    found = record([-limit, -math.nextafter(limit, INF), limit + 1, 0.0, -500.0], [limit] * 5)
    assert places(found.hit) == [1, 4]
    assert (found.exceptions[0], found.days[0], found.missing_days[0]) == (2, 5, 0)
    assert found.days_until_first.tolist() == [2]


def test_a_negative_value_at_risk_is_missed_by_too_small_a_gain():
    assert places(record([5.0, 3.0, 4.0], [-4.0] * 3).hit) == [1]


def test_a_flat_book_has_no_exception():
    assert record([0.0, -0.0], [0.0, 0.0]).exceptions.tolist() == [0]


def test_days_before_the_first_forecast_do_not_count_even_without_outcome():
    found = record([-9.0, NAN, -9.0, 1.0], [NAN, NAN, 5.0, 5.0], missing_is_exception=True)
    assert (places(found.counted), places(found.hit), places(found.missing)) == ([2, 3], [2], [])
    assert found.days_until_first.tolist() == [1]


@pytest.mark.parametrize("absent", [NAN, INF, -INF])
def test_a_day_without_outcome_or_forecast_is_named_and_counts_only_where_asked(absent):
    pnl, value_at_risk = [1.0, absent, -9.0, 1.0, 1.0], [5.0, 5.0, 5.0, absent, 5.0]
    left_out = record(pnl, value_at_risk)
    assert (places(left_out.missing), places(left_out.hit), places(left_out.counted)) == ([1, 3], [2], [0, 2, 4])
    assert (left_out.days[0], left_out.exceptions[0], left_out.missing_days[0]) == (3, 1, 2)
    assert left_out.days_until_first.tolist() == [2]
    counted = record(pnl, value_at_risk, missing_is_exception=True)
    assert (places(counted.missing), places(counted.hit), places(counted.counted)) == (
        [1, 3],
        [1, 2, 3],
        [0, 1, 2, 3, 4],
    )
    assert (counted.days[0], counted.exceptions[0], counted.missing_days[0]) == (5, 3, 2)
    assert counted.days_until_first.tolist() == [2]


def test_a_subject_that_was_never_forecast_has_no_record():
    for how in (False, True):
        found = record([-1.0, NAN], [NAN, NAN], missing_is_exception=how)
        assert (found.days[0], found.exceptions[0], found.missing_days[0], found.days_until_first[0]) == (0, 0, 0, 0)


def test_the_larger_count_holds_and_brings_its_days():
    value_at_risk = np.full((3, 4), 5.0)
    actual = find_exceptions(np.array([[-9.0, -9, -9, NAN], [1, 1, 1, 1], [-9, 1, 1, NAN]]), value_at_risk)
    hypothetical = find_exceptions(np.array([[-9.0, 1, -9, 1], [-9, 1, 1, 1], [1, -9, 1, 1]]), value_at_risk)
    found = larger_count(actual, hypothetical)
    assert found.exceptions.tolist() == [3, 1, 1]
    assert found.days.tolist() == [3, 4, 4]
    assert found.from_actual.tolist() == [True, False, False]


def test_no_subjects_and_no_days():
    for shape in ((0, 5), (3, 0), (0, 0)):
        found = find_exceptions(np.empty(shape), np.empty(shape))
        for counts in (found.exceptions, found.days, found.missing_days, found.days_until_first):
            assert counts.tolist() == [0] * shape[0]


@pytest.mark.parametrize("shapes", [((3,), (3,)), ((2, 3), (2, 4)), ((1, 3), (2, 3)), ((2, 3, 1), (2, 3, 1))])
def test_the_shapes_must_agree(shapes):
    with pytest.raises(ValueError, match=r"must both be \(subjects, days\)"):
        find_exceptions(np.zeros(shapes[0]), np.zeros(shapes[1]))


amounts = st.one_of(st.floats(-10, 10), st.sampled_from([NAN, INF, -INF, 0.0, -0.0, 5.0, -5.0]))
records = hnp.array_shapes(min_dims=2, max_dims=2, min_side=1, max_side=8).flatmap(
    lambda shape: st.tuples(
        hnp.arrays(float, shape, elements=amounts), hnp.arrays(float, shape, elements=amounts), st.booleans()
    )
)


@settings(max_examples=150, deadline=None)
@given(records)
def test_it_is_what_a_clerk_would_count(case):
    pnl, value_at_risk, missing_is_exception = case
    with np.errstate(all="raise"):
        found = find_exceptions(pnl, value_at_risk, missing_is_exception)
    for row in range(len(pnl)):
        begun, exceptions, days, missing, first = False, 0, 0, 0, 0
        for profit, forecast in zip(pnl[row].tolist(), value_at_risk[row].tolist(), strict=True):
            begun = begun or math.isfinite(forecast)
            if not begun:
                continue
            whole = math.isfinite(profit) and math.isfinite(forecast)
            missing += not whole
            days += whole or missing_is_exception
            if (whole and -profit > forecast) or (not whole and missing_is_exception):
                exceptions += 1
                first = first or days
        counted = (found.exceptions[row], found.days[row], found.missing_days[row], found.days_until_first[row])
        assert counted == (exceptions, days, missing, first)
        alone = find_exceptions(pnl[row : row + 1], value_at_risk[row : row + 1], missing_is_exception)
        np.testing.assert_array_equal(alone.hit[0], found.hit[row])
