"""The chart of a book's VaR against its daily P&L, as SVG. The same series gives the same bytes."""

from __future__ import annotations

import io
import re
from collections.abc import Mapping
from datetime import date

import numpy as np

from monitor.report.page import Series
from monitor.world import Floats

# Okabe and Ito (2008), "Color Universal Design": blue for the forecast, vermillion for exceptions. Values from memory.
INK, RULE, MOVE, FORECAST, EXCEPTION = "#2a3142", "#d9d5cb", "#7b8496", "#0072b2", "#d55e00"
DARK: Mapping[str, str] = {INK: "#d7dae2", RULE: "#353d4d", MOVE: "#8f9aae", FORECAST: "#56b4e9", EXCEPTION: "#f07a2a"}
_FONTS = "system-ui, 'Segoe UI', Roboto, 'Helvetica Neue', sans-serif"
_STEPS = ((1e9, "billion"), (1e6, "million"), (1e3, "thousand"))
_SIZE = (7.6, 2.9)  # inches
_TICKS = 6


def chart(series: Series) -> bytes | None:
    """P&L as stems from zero, minus the VaR as a stepped line, exceptions as diamonds. None when nothing is known."""
    import matplotlib as mpl
    from matplotlib.figure import Figure

    pnl, floor = _array(series.pnl), -_array(series.value_at_risk)
    if not (np.isfinite(pnl).any() or np.isfinite(floor).any()):
        return None
    scale, word = _scale(pnl, floor)
    pnl, floor = pnl / scale, floor / scale
    places = np.arange(len(pnl), dtype=float)
    struck = np.array(series.exceptions, dtype=int)
    # Text stays text, and neither a date nor random identifiers get into the bytes.
    with mpl.rc_context({"svg.fonttype": "none", "svg.hashsalt": "duskcheck", "font.size": 10, "path.simplify": False}):
        figure = Figure(figsize=_SIZE)
        figure.patch.set_alpha(0)
        axes = figure.add_axes((0.085, 0.115, 0.905, 0.775))
        axes.patch.set_alpha(0)
        axes.plot(*_stems(places, pnl), color=MOVE, linewidth=max(0.9, min(3.0, 300 / len(pnl))), solid_capstyle="butt")
        axes.step(places, floor, where="mid", color=FORECAST, linewidth=1.6)
        axes.plot(places[struck], pnl[struck], "D", color=EXCEPTION, markersize=6.5, markeredgecolor=INK)
        axes.axhline(0, color=INK, linewidth=0.8)
        margin = max(1.0, 0.012 * len(pnl))
        axes.set_xlim(-margin, len(pnl) - 1 + margin)
        axes.margins(y=0.08)
        ticks = _ticks(series.days)
        axes.set_xticks(ticks, [_label(series.days[place], len(series.days)) for place in ticks])
        axes.grid(axis="y", color=RULE, linewidth=0.7)
        axes.set_axisbelow(True)
        axes.tick_params(length=0, labelcolor=INK, pad=5)
        axes.tick_params(axis="x", length=3, color=INK)
        for side in ("top", "right", "left", "bottom"):
            axes.spines[side].set_visible(False)
        unit = f"{series.currency} {word}".strip()
        figure.text(0.008, 0.945, unit, color=INK, parse_math=False)
        out = io.BytesIO()
        figure.savefig(out, format="svg", metadata={"Date": None, "Creator": None})
    svg = out.getvalue().replace(b"'DejaVu Sans', sans-serif", _FONTS.encode())
    return svg.replace(b"'DejaVu Sans'", _FONTS.encode())


def darkened(svg: bytes) -> bytes:
    """The same chart in the colours for a dark page."""
    swap = {light.encode(): dark.encode() for light, dark in DARK.items()}
    return re.sub(b"|".join(swap), lambda found: swap[found.group()], svg)


def _array(values: tuple[float | None, ...]) -> Floats:
    return np.array([np.nan if value is None else value for value in values], dtype=float)


def _scale(pnl: Floats, floor: Floats) -> tuple[float, str]:
    largest = float(np.nanmax(np.abs(np.concatenate([pnl, floor]))))
    return next(((step, word) for step, word in _STEPS if largest >= step), (1.0, ""))


def _stems(places: Floats, heights: Floats) -> tuple[Floats, Floats]:
    """One line with gaps instead of a bar for each day, which keeps the file a quarter of the size."""
    gap = np.full(len(places), np.nan)
    rows = np.column_stack([places, places, gap]).ravel()
    return rows, np.column_stack([np.zeros(len(places)), heights, gap]).ravel()


def _ticks(days: tuple[date, ...]) -> list[int]:
    """Places of the first sessions of months, thinned out; of all sessions where there are few."""
    firsts = [place for place in range(1, len(days)) if days[place].month != days[place - 1].month]
    places = firsts if len(firsts) >= 2 else list(range(len(days)))
    return places[:: -(-len(places) // _TICKS)]


def _label(day: date, sessions: int) -> str:
    return f"{day:%Y-%m}" if sessions > 45 else day.isoformat()
