from __future__ import annotations

from decimal import Decimal

import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from notices_scene import make_answer

from monitor.notices import figures
from monitor.words import Side, Unit
from monitor.world import How


@pytest.mark.parametrize(
    ("value", "unit", "currency", "text"),
    [
        (1_312_400.0, Unit.AMOUNT, "EUR", "EUR 1,312,400"),
        (-1_312_400.49, Unit.AMOUNT, "EUR", "EUR -1,312,400"),
        (12.5, Unit.AMOUNT, "JPY", "JPY 12.50"),
        (0.0, Unit.AMOUNT, "EUR", "EUR 0.00"),
        (-0.0, Unit.AMOUNT, "EUR", "EUR 0.00"),
        (0.0031, Unit.AMOUNT, "EUR", "EUR 0.0031"),
        (0.1032, Unit.OF_NAV, None, "10.32 % of NAV"),
        (0.000012, Unit.OF_GROSS, None, "0.0012 % of gross"),
        (2.4, Unit.RATIO, None, "2.40"),
        (41.0, Unit.NUMBER, None, "41"),
        (1.0, Unit.DAYS, None, "1 day"),
        (3.5, Unit.DAYS, None, "3.5 days"),
    ],
)
def test_a_figure_carries_its_unit_and_no_more_digits_than_help(
    value: float, unit: Unit, currency: str | None, text: str
) -> None:
    assert figures.figure(value, unit, currency) == text


def test_a_level_reads_as_it_was_written() -> None:
    assert figures.level(0.1, Unit.OF_NAV) == "10 % of NAV"
    assert figures.level(0.07, Unit.OF_NAV) == "7 % of NAV"
    assert figures.level(1_250_000.0, Unit.AMOUNT, "EUR") == "EUR 1,250,000"
    assert figures.level(0.15, Unit.RATIO, None, "volatility") == "15 %"


def test_a_value_that_is_over_is_not_printed_as_its_limit() -> None:
    assert figures.against(1_250_000.3, 1_250_000.0, Unit.AMOUNT, "EUR") == ("EUR 1,250,000.3", "EUR 1,250,000")
    assert figures.against(0.100001, 0.1, Unit.OF_NAV) == ("10.0001 % of NAV", "10 % of NAV")
    assert figures.utilisation(1.0000004) == "100.00004 %"
    assert figures.utilisation(1.0) == "100.0 %"


@given(limit=st.floats(1e-6, 1e12), beyond=st.floats(1e-12, 1e3, exclude_min=True), unit=st.sampled_from(list(Unit)))
def test_over_and_its_limit_always_differ_and_in_the_right_order(limit: float, beyond: float, unit: Unit) -> None:
    value = limit * (1 + beyond)
    assume((value - limit) > 1e-12 * limit)

    shown, shown_limit = (_number(text) for text in figures.against(value, limit, unit, "EUR"))

    assert shown > shown_limit
    share = figures.utilisation(value / limit)
    assert value / limit == 1.0 or _number(share) > 100.0


@given(value=st.floats(-1e12, 1e12), unit=st.sampled_from(list(Unit)))
def test_what_is_printed_is_near_what_was_meant(value: float, unit: Unit) -> None:
    scale = 100.0 if unit in (Unit.OF_NAV, Unit.OF_GROSS) else 1.0

    shown = _number(figures.figure(value, unit, "EUR"))

    assert shown == pytest.approx(value * scale, rel=0.06)


def _number(text: str) -> float:
    return float("".join(c for c in text if c.isdigit() or c in ".-"))


def test_how_a_figure_was_made_is_said_in_words() -> None:
    assert figures.how_made(How("historical", Decimal("0.99"), 1, 500), 500) == (
        "historical, 99 %, 1 day, 500 sessions, n = 500"
    )
    assert figures.how_made(How("student_t", Decimal("0.975"), 10, 250), 243) == (
        "student t, 97.5 %, 10 days, 250 sessions, n = 243"
    )
    assert figures.how_made(How()) == ""


def test_an_answer_on_its_lower_side_is_held_against_the_lower_limit() -> None:
    answer = make_answer(value=0.499996, unit=Unit.RATIO, side=Side.BELOW, limit=3.0, limit_below=0.5)

    assert (figures.value_of(answer), figures.limit_of(answer)) == ("0.499996", "0.5")


def test_missing_bounds_are_said_to_be_missing() -> None:
    assert figures.bounds_of(make_answer(low=None, high=None)) is None
    assert figures.bounds_of(make_answer(high=None)) == "at least EUR 1,190,000 (95 % sampling bounds)"
