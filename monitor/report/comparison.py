"""A book's VaR against its daily P&L: the chart, and the table that says the same."""

from __future__ import annotations

import base64
from collections.abc import Iterable
from dataclasses import dataclass
from decimal import Decimal

from monitor.notices import figures
from monitor.report.charts import chart, darkened
from monitor.report.names import NOTHING
from monitor.report.page import Series
from monitor.words import Unit
from monitor.world import BookFigures, How

NEWEST = 4


@dataclass(frozen=True)
class Comparison:
    """light, dark: the chart as data URIs, None when nothing is known. facts: (what, figure, on which date or why)."""

    name: str
    currency: str
    how: str
    light: str | None
    dark: str | None
    alt: str
    facts: tuple[tuple[str, str, str], ...]


def comparisons(series: Iterable[Series], books: Iterable[BookFigures]) -> tuple[Comparison, ...]:
    """One for each series, in their order. The method is that of tonight's figures of the same subject."""
    methods = {book.subject: book.how for book in books}
    return tuple(_comparison(one, methods.get(one.subject, How())) for one in series)


def _comparison(series: Series, how: How) -> Comparison:
    light = chart(series)
    return Comparison(
        name=series.subject.name,
        currency=series.currency,
        how=figures.how_made(how),
        light=_uri(light) if light else None,
        dark=_uri(darkened(light)) if light else None,
        alt=_alt(series),
        facts=tuple(_facts(series, how.confidence)),
    )


def _facts(series: Series, confidence: Decimal | None) -> Iterable[tuple[str, str, str]]:
    if not series.days:
        return
    first, last = series.days[0].isoformat(), series.days[-1].isoformat()
    struck = series.exceptions
    yield "Sessions shown", f"{len(series.days):,}", f"{first} to {last}"
    if series.compared < len(series.days):
        yield "with both figures", f"{series.compared:,}", "only these can be compared"
    yield "Exceptions, by hypothetical P&L", f"{len(struck):,}", _expected(series.compared, confidence)
    if struck:
        newest = [series.days[place].isoformat() for place in reversed(struck[-NEWEST:])]
        yield "Newest exceptions", newest[0], ", ".join(newest[1:])
    yield "Latest VaR", _amount(series.value_at_risk[-1], series.currency), f"forecast for {last}"
    yield "Latest P&L", _amount(series.pnl[-1], series.currency), f"on {last}"
    losses = [(pnl, day) for pnl, day in zip(series.pnl, series.days, strict=True) if pnl is not None and pnl < 0]
    if losses:
        worst, day = min(losses)
        yield "Largest loss", _amount(worst, series.currency), f"on {day.isoformat()}"


def _expected(compared: int, confidence: Decimal | None) -> str:
    if confidence is None or not compared:
        return ""
    return f"about {float((1 - confidence) * compared):.1f} expected at {figures.confidence(confidence)}"


def _alt(series: Series) -> str:
    if not series.days:
        return ""
    return (
        f"Daily P&L of {series.subject.name} and minus the VaR forecast of the evening before, "
        f"{series.days[0].isoformat()} to {series.days[-1].isoformat()}; "
        f"{figures.count(len(series.exceptions), 'exception')}. The table beside it gives the figures."
    )


def _amount(value: float | None, currency: str) -> str:
    return NOTHING if value is None else figures.figure(value, Unit.AMOUNT, currency)


def _uri(svg: bytes) -> str:
    return f"data:image/svg+xml;base64,{base64.b64encode(svg).decode('ascii')}"
