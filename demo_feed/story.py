"""A year at Saltmere Trust: what happens, on which date, and the files that tell of it.

The same bytes every time: all randomness is numpy's legacy RandomState from fixed seeds, and numbers are written with
fixed decimals.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import date
from functools import cache
from importlib import resources

from demo_feed.instruments import CASH, PRICED
from demo_feed.market import PAIRS, Panel, make_panel
from demo_feed.sessions import business_dates
from demo_feed.trading import Order, Resize, Statement, statements

HISTORY_FROM = date(2020, 2, 3)
FIRST_EVENING = date(2025, 2, 3)
LAST_EVENING = date(2026, 2, 2)


@dataclass(frozen=True)
class Event:
    """Something that happens on a date, in a sentence, and what it does to the files.

    trades: done that evening. world_move: the world's return that day, as a fraction. no_prices: the prices file never
    arrives. lost_book: the positions file has no row of it. broken_nav: a figure in the nav file cannot be read.
    no_pnl: the file of the books' own P&L never arrives.
    """

    date: date
    text: str
    trades: tuple[Order | Resize, ...] = ()
    world_move: float | None = None
    no_prices: bool = False
    lost_book: str | None = None
    broken_nav: bool = False
    no_pnl: bool = False


@dataclass(frozen=True)
class DemoEvening:
    """The files that other systems leave in the drop for one business date, by name."""

    date: date
    files: dict[str, bytes]


EVENTS = (
    Event(date(2025, 2, 3), "The story begins. North Quay is near its VaR limit, everything else within."),
    Event(
        date(2025, 2, 11), "A holiday in Tokyo: Far East stands on its last closes, while Dublin and New York trade."
    ),
    Event(
        date(2025, 3, 18),
        "A bad day of March 2023 has left the window of 500 sessions: the VaR of North Quay is within without a trade.",
    ),
    Event(
        date(2025, 3, 25),
        "North Quay buys Corvane Bank up to 9.4 % of its net assets: near the limit of 10 %.",
        trades=(Order("north-quay", "CORVANE", 0.094),),
    ),
    Event(
        date(2025, 3, 27),
        "North Quay goes on buying Corvane Bank, to 10.8 %: over the limit of one position.",
        trades=(Order("north-quay", "CORVANE", 0.108),),
    ),
    Event(
        date(2025, 4, 3),
        "North Quay sells Corvane Bank down to 6.5 %: the excess is cured by a trade.",
        trades=(Order("north-quay", "CORVANE", 0.065),),
    ),
    Event(
        date(2025, 4, 18),
        "Good Friday: only Tokyo trades, and the prices file never arrives. Far East stays on the closes before.",
        no_prices=True,
    ),
    Event(
        date(2025, 5, 5), "A holiday in Dublin and in Tokyo: only New York trades, and Western alone has new positions."
    ),
    Event(
        date(2025, 5, 14),
        "The positions file has no row of Western: the book is missing, not flat, and the firm cannot be measured.",
        lost_book="western",
    ),
    Event(date(2025, 6, 11), "Shares begin to fall all over the world.", world_move=-0.031),
    Event(
        date(2025, 6, 12),
        "The worst day of the fall. North Quay loses 3 % of its net assets, and its VaR goes over its limit.",
        world_move=-0.047,
    ),
    Event(date(2025, 6, 13), "The fall goes on; the VaR of the firm comes near its limit.", world_move=-0.040),
    Event(
        date(2025, 6, 16),
        "The last day of the fall. The VaR of the firm goes over, and so does the volatility of Far East.",
        world_move=-0.033,
    ),
    Event(date(2025, 6, 17), "Shares recover a little. Volatility stays high for weeks.", world_move=0.014),
    Event(
        date(2025, 6, 20),
        "North Quay sells 12 % of everything: its VaR and that of the firm are back below their limits.",
        trades=(Resize("north-quay", 0.88),),
    ),
    Event(
        date(2025, 6, 24),
        "Western cuts its positions by 15 %: the VaR of the firm eases further.",
        trades=(Resize("western", 0.85),),
    ),
    Event(
        date(2025, 6, 26),
        "North Quay cuts again, by a fifth, and keeps the money in cash.",
        trades=(Resize("north-quay", 0.80),),
    ),
    Event(date(2025, 7, 11), "The volatility of Far East is back below its limit by itself: the market has calmed."),
    Event(date(2025, 7, 14), "An aftershock. The smaller books of Dublin and New York bear it.", world_move=-0.014),
    Event(date(2025, 7, 16), "The aftershock takes the volatility of Far East over its limit again, for one evening."),
    Event(
        date(2025, 8, 6),
        "A NAV is written with a decimal comma: the file is refused and the figures of the day before are used.",
        broken_nav=True,
    ),
    Event(
        date(2025, 9, 23),
        "North Quay buys Kestermann Werke up to 8 % of its net assets, well within its own limit.",
        trades=(Order("north-quay", "KESTERMANN", 0.080),),
    ),
    Event(
        date(2025, 9, 30),
        "Western buys dollar receipts of Kestermann Werke: no position is over, but the company is, across the firm.",
        trades=(Order("western", "KESTERMANN-DR", 0.088),),
    ),
    Event(
        date(2025, 10, 8),
        "Both books sell Kestermann Werke: the excess across the firm is cured.",
        trades=(Order("north-quay", "KESTERMANN", 0.045), Order("western", "KESTERMANN-DR", 0.045)),
    ),
    Event(
        date(2025, 10, 21),
        "The books' own P&L never arrives. No evening needs it; a backtest shows a day without it.",
        no_pnl=True,
    ),
    Event(
        date(2025, 11, 10),
        "Western enlarges its positions by 29 %: its leverage is near its limit.",
        trades=(Resize("western", 1.29),),
    ),
    Event(
        date(2025, 11, 18),
        "Western enlarges them once more: its leverage is over, and takes the VaR of the firm over with it.",
        trades=(Resize("western", 1.10),),
    ),
    Event(
        date(2025, 11, 25),
        "Western reduces its positions by three tenths: both excesses are cured.",
        trades=(Resize("western", 0.70),),
    ),
    Event(date(2025, 12, 25), "Christmas: only Tokyo trades; the other books stand on their last closes."),
    Event(date(2025, 12, 31), "Tokyo is closed until 5 January; the firm is measured on Far East's last positions."),
    Event(
        date(2026, 1, 20),
        "Far East buys Hanegusa Electric up to 9.4 % of its net assets: near the limit of one position.",
        trades=(Order("far-east", "HANEGUSA", 0.094),),
    ),
    Event(
        date(2026, 1, 27),
        "North Quay puts some of its cash to work again: everything grows by a twentieth.",
        trades=(Resize("north-quay", 1.05),),
    ),
    Event(
        date(2026, 1, 28),
        "Far East buys more of Hanegusa Electric, to 10.6 %: over.",
        trades=(Order("far-east", "HANEGUSA", 0.106),),
    ),
    Event(
        date(2026, 2, 2),
        "Shares of Dublin fall, and the VaR of North Quay is over. The story ends with it and Hanegusa Electric open.",
    ),
)


@cache
def _panel() -> Panel:
    moves = {event.date: event.world_move for event in EVENTS if event.world_move is not None}
    return make_panel(business_dates(HISTORY_FROM, LAST_EVENING), moves)


def start_files() -> dict[str, bytes]:
    """What the firm starts with: instruments.csv, history.csv and history_fx.csv up to the day before the story."""
    panel = _panel()
    days = [day for day in panel.days if day < FIRST_EVENING]
    closes = (f"{day},{row}" for at, day in enumerate(days) for row in _prices(panel, at))
    rates = (
        f"{day},{pair},{rate:.4f}"
        for day, row in zip(days, panel.rate.tolist(), strict=False)
        for pair, rate in zip(PAIRS, row, strict=True)
    )
    return {
        "instruments.csv": _instruments(),
        "history.csv": _csv("date,instrument,close,open,high,low", closes),
        "history_fx.csv": _csv("date,pair,rate", rates),
    }


def evenings() -> Sequence[DemoEvening]:
    """The business dates of the story in order, each with its files."""
    panel = _panel()
    orders: dict[date, tuple[Order | Resize, ...]] = {}
    told: dict[date, list[Statement]] = {}
    events: dict[date, list[Event]] = {}
    for event in EVENTS:
        orders[event.date] = orders.get(event.date, ()) + event.trades
        events.setdefault(event.date, []).append(event)
    for statement in statements(panel, FIRST_EVENING, orders):
        told.setdefault(statement.day, []).append(statement)
    return tuple(
        DemoEvening(day, _evening_files(panel, at, told[day], events.get(day, ())))
        for at, day in enumerate(panel.days)
        if day >= FIRST_EVENING
    )


def site_files() -> dict[str, bytes]:
    """site.yaml and rules/*.yaml of Saltmere Trust, as they stand in the package."""
    package = resources.files("demo_feed")
    rules = sorted((entry for entry in (package / "rules").iterdir() if entry.name.endswith(".yaml")), key=str)
    return {
        "site.yaml": (package / "saltmere.yaml").read_bytes(),
        **{f"rules/{entry.name}": entry.read_bytes() for entry in rules},
    }


def _evening_files(panel: Panel, at: int, told: Sequence[Statement], events: Sequence[Event]) -> dict[str, bytes]:
    day = panel.days[at]
    lost = {event.lost_book for event in events}
    positions = (
        f"{statement.book},{name},{quantity:.{2 if name.startswith('CASH-') else 0}f}"
        for statement in told
        if statement.book not in lost
        for name, quantity in sorted(statement.quantity.items())
    )
    rates = (f"{pair},{rate:.4f}" for pair, rate in zip(PAIRS, panel.rate[at].tolist(), strict=True))
    navs = [f"{statement.book},{statement.nav:.2f},{day}" for statement in told]
    if any(event.broken_nav for event in events):
        navs[-1] = navs[-1].replace(".", ",", 1)
    files = {
        f"prices_{day}.csv": _csv("instrument,close,open,high,low", _prices(panel, at)),
        f"positions_{day}.csv": _csv("book,instrument,quantity", positions),
        f"fx_{day}.csv": _csv("pair,rate", rates),
        f"nav_{day}.csv": _csv("book,nav,nav_date", navs),
    }
    pnls = [
        f"{statement.book},{statement.pnl.actual:.2f},{statement.pnl.fees:.2f},{statement.pnl.intraday:.2f}"
        for statement in told
        if statement.pnl
    ]
    if pnls and not any(event.no_pnl for event in events):
        files[f"pnl_{day}.csv"] = _csv("book,actual,fees,intraday", pnls)
    if any(event.no_prices for event in events):
        del files[f"prices_{day}.csv"]
    return files


def _prices(panel: Panel, at: int) -> list[str]:
    """The rows of a day: instrument, close, open, high, low, of those whose market was open."""
    columns = (panel.open, panel.close, panel.first, panel.high, panel.low)
    return [
        ",".join([instrument.id, *(f"{price:.2f}" for price in prices)])
        for instrument, traded, *prices in zip(PRICED, *(column[at].tolist() for column in columns), strict=True)
        if traded
    ]


def _instruments() -> bytes:
    columns = ("kind", "multiplier", "calendar", "expiry", "sector", "issuer", "country")
    rows = (
        ",".join([item.id, item.currency, *(str(getattr(item, column)) for column in columns), f'"{item.name}"'])
        for item in (*PRICED, *CASH)
    )
    return _csv(",".join(("instrument", "currency", *columns, "name")), rows)


def _csv(header: str, rows: Iterable[str]) -> bytes:
    return "\n".join([header, *rows, ""]).encode()
