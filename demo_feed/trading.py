"""What the books hold: targets, the small trades of every day, the orders of the story, and the net asset value.

Trades are booked at the evening's closes and cost nothing. A future's daily gain goes to cash and its exposure is no
part of the net asset value, which is the worth of everything else. What trades really gained until the close, and what
they cost, is settled apart from the book: it is part of the P&L that the book states, and not of its net asset value.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from datetime import date

import numpy as np

from demo_feed.instruments import CASH, PRICED
from demo_feed.market import PAIRS, Panel
from demo_feed.sessions import is_session

SEED, SEED_OF_DEALING = 19, 20
SHARE_TRADED = 0.25
NOISE = 0.0012
DEALT_APART = 0.004  # standard deviation of (close / price dealt at) - 1
FEE = 0.0005  # of what was traded
BY_ID = {instrument.id: instrument for instrument in (*PRICED, *CASH)}
COLUMN = {instrument.id: column for column, instrument in enumerate(PRICED)}


@dataclass(frozen=True)
class Book:
    """`targets`: share of the net asset value by instrument, short < 0; what they leave is cash in `currency`."""

    id: str
    currency: str
    calendar: str
    start: float
    targets: Mapping[str, float]


@dataclass(frozen=True)
class Order:
    """On its evening an instrument is traded to a share of the book's net asset value, its target from then on."""

    book: str
    instrument: str
    weight: float


@dataclass(frozen=True)
class Resize:
    """On its evening every priced position of the book, and its target, is multiplied by a factor."""

    book: str
    factor: float


@dataclass(frozen=True)
class Pnl:
    """What a book made from its session before, in its currency, rounded to cents.

    held: by what it held overnight. intraday: by the trades of the day until the close. fees: what they cost.
    """

    held: float
    intraday: float
    fees: float

    @property
    def actual(self) -> float:
        return self.held + self.intraday - self.fees


@dataclass
class Account:
    """A book while its year runs. `cash` is that in the book's own currency; `nav` that of its session before."""

    book: Book
    targets: dict[str, float]
    cash: float
    quantity: dict[str, float] = field(default_factory=dict)
    nav: float = 0.0


@dataclass(frozen=True)
class Statement:
    """A book on one evening: quantities by instrument, cash included, and the net asset value in its currency.

    pnl: None on its first evening, which has no session before.
    """

    day: date
    book: str
    quantity: Mapping[str, float]
    nav: float
    pnl: Pnl | None


BOOKS = (
    Book(
        "north-quay",
        "EUR",
        "XDUB",
        180e6,
        {
            "CORVANE": 0.055,
            "ARDNAVALE": 0.050,
            "DUNMARROW": 0.050,
            "SKERRANE": 0.040,
            "HOLLINPORT": 0.035,
            "LOCHTIRE": 0.050,
            "BELLWICK": 0.050,
            "QUILLFANE": 0.045,
            "MARROWICK": 0.035,
            "TARNHOLT": 0.055,
            "KESTERMANN": 0.040,
            "KESTERMANN-PREF": 0.015,
            "BRISONNE": 0.055,
            "OLTREVIA": 0.045,
            "VENTAROSA": 0.035,
            "THORNABBEY": 0.040,
            "TALLOWMERE": 0.030,
            "LANTERNFIELD": 0.030,
            "FENWYKE-WORLD": 0.050,
            "FENWYKE-BOND": 0.060,
            "FENWYKE-GILT": 0.040,
            "DUBLIN-INDEX-DEC27": -0.040,
            "CASH-GBP": 0.012,
            "CASH-USD": 0.010,
        },
    ),
    Book(
        "far-east",
        "JPY",
        "XTKS",
        9e9,
        {
            "KAZANUMA": 0.060,
            "NATSUHARA": 0.065,
            "MINATORI": 0.050,
            "YUKISHIRO": 0.065,
            "HANEGUSA": 0.070,
            "KOGARASHI": 0.045,
            "TSURUBIKO": 0.055,
            "ARAKUMO": 0.050,
            "ORIMATSU": 0.065,
            "FUBUKINO": 0.065,
            "SHIRANAGI": 0.060,
            "UMEKURA": 0.065,
            "ISOBANE": 0.065,
            "MATSUYAGI-BOND": 0.080,
            "TOKYO-INDEX-DEC27": 0.040,
            "CASH-USD": 0.020,
        },
    ),
    Book(
        "western",
        "USD",
        "XNYS",
        120e6,
        {
            "TALLOWMERE": 0.070,
            "WINDLATCH": 0.060,
            "CINDERMOOR": 0.060,
            "MOSSGATE": -0.050,
            "REDFENNEL": 0.070,
            "GRAYCOMBE": 0.065,
            "IRONQUAY": 0.065,
            "LANTERNFIELD": 0.070,
            "NETTLEBURY": 0.040,
            "ORCHARDINE": -0.055,
            "PALEWATER": -0.050,
            "BRACKWATER": 0.060,
            "SABLECREST": 0.070,
            "UMBERLINE": -0.045,
            "KESTERMANN-DR": 0.040,
            "OAKENSHAW-BOND": 0.070,
            "WESTERN-INDEX-DEC27": -0.140,
            "COPPER-DEC27": 0.050,
            "CASH-EUR": 0.010,
        },
    ),
)


def statements(panel: Panel, first: date, orders: Mapping[date, tuple[Order | Resize, ...]]) -> Iterator[Statement]:
    """Every book on each of its sessions from `first` on, in the order of days. Orders need an open market."""
    random, dealing = np.random.RandomState(SEED), np.random.RandomState(SEED_OF_DEALING)
    accounts = [Account(book, dict(book.targets), book.start) for book in BOOKS]
    before: dict[str, int] = {}
    for at, day in enumerate(panel.days):
        for account in accounts:
            book = account.book
            if day < first or not is_session(book.calendar, day):
                continue
            value = _unit_values(panel, at, book.currency)
            if book.id in before:
                account.cash += _futures_gain(account, panel, before[book.id], at, value)
            before[book.id] = at
            nav = _nav(account, value)
            held_before = dict(account.quantity)
            tradable = [name for name in account.targets if name in COLUMN and panel.open[at, COLUMN[name]]]
            if not account.quantity:
                for name in account.targets:
                    _trade_to(account, name, account.targets[name], nav, value)
            else:
                _small_trade(account, tradable, nav, value, random)
            for order in orders.get(day, ()):
                if order.book == book.id:
                    _carry_out(account, order, tradable, nav, value)
            pnl = _pnl(account, held_before, nav, value, dealing) if held_before else None
            account.nav = nav
            held = {name: quantity for name, quantity in account.quantity.items() if quantity}
            held[f"CASH-{book.currency}"] = round(account.cash, 2)
            yield Statement(day, book.id, held, round(_nav(account, value), 2), pnl)


def _pnl(
    account: Account, before: Mapping[str, float], nav: float, value: Mapping[str, float], random: np.random.RandomState
) -> Pnl:
    """before: quantities ahead of the day's trades. nav: after the day's closes, which trades at closes do not move."""
    names = [name for name in sorted(account.quantity) if account.quantity[name] != before.get(name, 0.0)]
    traded = np.array([(account.quantity[name] - before.get(name, 0.0)) * value[name] for name in names])
    gained = traded @ (DEALT_APART * random.standard_normal(len(names)))
    return Pnl(
        held=round(nav - account.nav, 2),
        intraday=round(float(gained), 2),
        fees=round(FEE * float(np.abs(traded).sum()), 2),
    )


def _unit_values(panel: Panel, at: int, currency: str) -> dict[str, float]:
    """What one unit of each instrument is worth in a currency, multiplier included."""
    a_euro_costs = {"EUR": 1.0} | {pair[3:]: float(panel.rate[at, place]) for place, pair in enumerate(PAIRS)}
    values = {}
    for name, instrument in BY_ID.items():
        price = float(panel.close[at, COLUMN[name]]) if name in COLUMN else 1.0
        values[name] = price * instrument.multiplier * a_euro_costs[currency] / a_euro_costs[instrument.currency]
    return values


def _nav(account: Account, value: Mapping[str, float]) -> float:
    funded = (name for name in account.quantity if BY_ID[name].kind != "future")
    return account.cash + sum(account.quantity[name] * value[name] for name in funded)


def _futures_gain(account: Account, panel: Panel, before: int, at: int, value: Mapping[str, float]) -> float:
    gain = 0.0
    for name, quantity in account.quantity.items():
        if BY_ID[name].kind == "future":
            column = COLUMN[name]
            gain += quantity * value[name] * (1 - float(panel.close[before, column] / panel.close[at, column]))
    return gain


def _small_trade(
    account: Account, tradable: list[str], nav: float, value: Mapping[str, float], random: np.random.RandomState
) -> None:
    """On about two evenings in three one position is traded part of the way to its target."""
    chance, pick, noise = random.random_sample(), random.random_sample(), random.standard_normal()
    if chance > 2 / 3 or not tradable:
        return
    name = tradable[int(pick * len(tradable))]
    weight = account.quantity[name] * value[name] / nav
    _trade_to(account, name, weight + SHARE_TRADED * (account.targets[name] - weight) + NOISE * noise, nav, value)


def _carry_out(
    account: Account, order: Order | Resize, tradable: list[str], nav: float, value: Mapping[str, float]
) -> None:
    if isinstance(order, Order):
        if order.instrument not in tradable:
            raise ValueError(f"{order.instrument} cannot be traded by {order.book} on that day")
        account.targets[order.instrument] = order.weight
        _trade_to(account, order.instrument, order.weight, nav, value)
        return
    for name in tradable:
        account.targets[name] *= order.factor
        _trade_to(account, name, order.factor * account.quantity[name] * value[name] / nav, nav, value)


def _trade_to(account: Account, name: str, weight: float, nav: float, value: Mapping[str, float]) -> None:
    """Trade to a share of the net asset value in whole lots, paid from or into the book's own cash."""
    instrument = BY_ID[name]
    lot = {"future": 1, "cash": 0.01}.get(instrument.kind, 100 if instrument.currency == "JPY" else 10)
    wanted = round(round(weight * nav / value[name] / lot) * lot, 2)
    traded = wanted - account.quantity.get(name, 0.0)
    account.quantity[name] = wanted
    if instrument.kind != "future":
        account.cash -= traded * value[name]
