"""The results file: what is recorded is read back to the last digit, and the same standings give the same bytes."""

from __future__ import annotations

import json
from datetime import date
from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor import results
from monitor.words import Mark, MarkKind, Side, Standing, Subject, SubjectKind, Unit
from monitor.world import Answer, BookFigures, How, Standings, Unmeasured

TEXT = st.text(st.characters(exclude_categories=("Cs",)), max_size=12)
NUMBER = st.floats(allow_nan=False, allow_infinity=False)
MAYBE = st.none() | NUMBER
COUNT = st.none() | st.integers(0, 10_000)
SUBJECT = st.builds(Subject, TEXT, st.sampled_from(SubjectKind), st.none() | TEXT)
HOW = st.builds(
    How,
    st.none() | TEXT,
    st.none() | st.decimals(Decimal("0.5"), Decimal("0.9999"), allow_nan=False, places=6),
    COUNT,
    COUNT,
    st.none() | TEXT,
)
ANSWER = st.builds(
    Answer,
    rule=TEXT,
    subject=SUBJECT,
    measure=TEXT,
    standing=st.sampled_from(Standing),
    value=MAYBE,
    unit=st.sampled_from(Unit),
    currency=st.none() | TEXT,
    near=MAYBE,
    limit=MAYBE,
    limit_below=MAYBE,
    side=st.sampled_from(Side),
    distance=MAYBE,
    utilisation=MAYBE,
    low=MAYBE,
    high=MAYBE,
    n=COUNT,
    reason=st.none() | TEXT,
    marks=st.lists(st.builds(Mark, st.sampled_from(MarkKind), TEXT), max_size=3).map(tuple),
    how=HOW,
)
BOOK = st.builds(
    BookFigures,
    subject=SUBJECT,
    currency=TEXT,
    positions=st.integers(0, 10**6),
    gross=MAYBE,
    net=MAYBE,
    nav=MAYBE,
    nav_on=st.none() | st.dates(),
    value_at_risk=MAYBE,
    expected_shortfall=MAYBE,
    pnl=MAYBE,
    n=COUNT,
    how=HOW,
    reasons=st.lists(TEXT, max_size=3).map(tuple),
)
STANDINGS = st.builds(
    Standings,
    answers=st.lists(ANSWER, max_size=4).map(tuple),
    books=st.lists(BOOK, max_size=3).map(tuple),
    unmeasured=st.lists(st.builds(Unmeasured, SUBJECT, TEXT), max_size=3).map(tuple),
    uncovered=st.lists(SUBJECT, max_size=3).map(tuple),
    lacking=st.lists(TEXT, max_size=3).map(tuple),
)


@given(STANDINGS)
def test_what_is_recorded_is_read_back(standings):
    data = results.encode(standings)

    again = results.decode(data)

    assert repr(again) == repr(standings)  # repr tells -0.0 from 0.0 too
    assert results.encode(again) == data


def test_a_confidence_is_kept_as_it_was_written():
    how = How("historical", Decimal("0.990"), 1, 500, None)
    figures = BookFigures(Subject("firm", SubjectKind.FIRM, None), "EUR", 0, 0.0, 0.0, None, date(2026, 3, 6),
                          0.1 + 0.2, None, None, 500, how, ())  # fmt: skip

    data = results.encode(Standings((), (figures,), (), (), ()))

    assert str(results.decode(data).books[0].how.confidence) == "0.990"
    assert b"0.30000000000000004" in data


def test_what_is_not_a_number_is_never_a_result():
    figures = BookFigures(Subject("firm", SubjectKind.FIRM, None), "EUR", 0, float("nan"), 0.0, None, None, None, None,
                          None, None, How(), ())  # fmt: skip

    with pytest.raises(ValueError, match="JSON"):
        results.encode(Standings((), (figures,), (), (), ()))


def test_another_format_is_not_guessed_at():
    content = json.loads(results.encode(Standings((), (), (), (), ())))

    with pytest.raises(ValueError, match="results of format 3"):
        results.decode(json.dumps(content | {"format": 3}).encode())
