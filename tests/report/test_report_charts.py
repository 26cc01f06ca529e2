"""The chart of VaR against P&L, and the figures beside it."""

from __future__ import annotations

import re
import time
import xml.etree.ElementTree as ET
from datetime import date, timedelta
from decimal import Decimal

import pytest
from report_scene import DAY, HISTORICAL, book, figures_of, series

from monitor.report.charts import DARK, EXCEPTION, chart, darkened
from monitor.report.comparison import comparisons
from monitor.report.page import Series
from monitor.world import How


def made(*pairs: tuple[float | None, float | None]) -> Series:
    """A series of (VaR, P&L)."""
    days = tuple(date(2026, 3, 2) + timedelta(days=ahead) for ahead in range(len(pairs)))
    return Series(book("b"), "EUR", days, tuple(var for var, _ in pairs), tuple(pnl for _, pnl in pairs))


def diamonds(svg: bytes) -> int:
    return len(re.findall(rb"<use [^>]*fill: " + EXCEPTION.encode(), svg))


def test_an_exception_is_a_loss_strictly_larger_than_the_var() -> None:
    found = made((10, -10), (10, -10.001), (10, 11), (None, -99), (10, None), (-2, 1), (-2, 3))
    assert found.exceptions == (1, 5)
    assert found.compared == 5


def test_each_exception_is_marked_by_its_shape() -> None:
    found = series(book("b"), "EUR", 1e6)
    assert len(found.exceptions) >= 3
    svg = chart(found)
    assert svg and diamonds(svg) == len(found.exceptions)
    assert diamonds(chart(made((10, 1), (10, -3))) or b"") == 0


def test_the_same_series_gives_the_same_bytes_and_no_date() -> None:
    found = series(book("b"), "EUR", 1e6)
    svg = chart(found)
    assert svg == chart(found)
    assert svg and b"dc:date" not in svg and b"<script" not in svg
    ET.fromstring(svg)  # well-formed


def test_the_dark_chart_has_no_colour_of_the_light_one() -> None:
    svg = chart(series(book("b"), "EUR", 1e6))
    assert svg and all(colour.encode() in svg for colour in DARK)
    dark = darkened(svg)
    assert not [colour for colour in DARK if colour.encode() in dark]
    assert len(re.findall(rb"#[0-9a-f]{6}", dark)) == len(re.findall(rb"#[0-9a-f]{6}", svg))


@pytest.mark.parametrize(
    "pairs",
    [
        [(10.0, -3.0)],
        [(None, -3.0)],
        [(10.0, None), (None, None)],
        [(0.0, 0.0)],
        [(1e-9, 1e-9), (1e-9, -2e-9)],
        [(1e14, 1e14), (None, None), (1e14, -3e14)],
    ],
)
def test_short_and_gappy_series_are_drawn(pairs: list[tuple[float | None, float | None]]) -> None:
    svg = chart(made(*pairs))
    assert svg
    ET.fromstring(svg)


@pytest.mark.parametrize("pairs", [[], [(None, None), (None, None)]])
def test_nothing_known_is_no_chart(pairs: list[tuple[None, None]]) -> None:
    assert chart(made(*pairs)) is None


@pytest.mark.parametrize(
    ("size", "unit"), [(3e9, "EUR billion"), (3e6, "EUR million"), (3e3, "EUR thousand"), (3.0, "EUR")]
)
def test_the_axis_says_its_unit(size: float, unit: str) -> None:
    assert f">{unit}</text>" in (chart(made((size, size / 2))) or b"").decode()


def test_a_chart_is_cheap() -> None:
    found = series(book("b"), "EUR", 1e6)
    chart(found)  # the import is paid once
    times = []
    for _ in range(5):
        start = time.process_time()
        chart(found)
        times.append(time.process_time() - start)
    assert min(times) < 0.2


def test_the_figures_beside_the_chart() -> None:
    found = made((10, -12.5), (11, 4), (12, -13), (13, None), (14, -1.5))
    (shown,) = comparisons([found], [figures_of(book("b"), "EUR", 1.0)])
    assert {what: (figure, note) for what, figure, note in shown.facts} == {
        "Sessions shown": ("5", "2026-03-02 to 2026-03-06"),
        "with both figures": ("4", "only these can be compared"),
        "Exceptions, by hypothetical P&L": ("2", "about 0.0 expected at 99 %"),
        "Newest exceptions": ("2026-03-04", "2026-03-02"),
        "Latest VaR": ("EUR 14.00", "forecast for 2026-03-06"),
        "Latest P&L": ("EUR -1.50", "on 2026-03-06"),
        "Largest loss": ("EUR -13.00", "on 2026-03-04"),
    }
    assert shown.how == "historical, 99 %, 1 day, 500 sessions"
    assert "2 exceptions" in shown.alt


def test_the_expected_number_follows_confidence_and_days() -> None:
    (shown,) = comparisons([series(book("b"), "EUR", 1.0)], [figures_of(book("b"), "EUR", 1.0)])
    assert HISTORICAL.confidence == Decimal("0.99")
    # 250 sessions x 1 %: the expectation of a binomial count.
    assert ("about 2.5 expected at 99 %") in [note for _, _, note in shown.facts]


def test_without_figures_of_tonight_no_method_is_claimed() -> None:
    (shown,) = comparisons([made((10, -1))], [])
    assert shown.how == "" and How().confidence is None
    assert ("Exceptions, by hypothetical P&L", "0", "") in shown.facts


def test_a_series_without_days_says_nothing() -> None:
    (shown,) = comparisons([made()], [])
    assert (shown.light, shown.dark, shown.facts) == (None, None, ())
    assert DAY not in made().days
