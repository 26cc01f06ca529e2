"""What tonight's positions are worth, and what they would have made on each session of a window. Cached by world."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from monitor.words import InstrumentKind
from monitor.world import Booleans, Floats, Holdings, Integers, Window, World

LEAST_OF_WINDOW = 0.95  # the share of a window below which a figure is not told


@dataclass(frozen=True)
class Scenarios:
    """Scenario P&L of positions on the newest sessions of a window, in one currency.

    pnl: (positions, n), zero where a position has no return. lacks: (positions, n) no return although the instrument's
    market was open, or before its first close. riskless: (positions,) cash in this very currency.
    log_returns: (positions, n) of prices in this currency (futures: local), NaN where there is none.
    """

    pnl: Floats
    lacks: Booleans
    riskless: Booleans
    log_returns: Floats


@dataclass
class Valuation:
    """Figures of the positions of one world, worked out once for all rules that ask."""

    world: World
    _exposure: dict[str, Floats] = field(default_factory=dict)
    _scenarios: dict[tuple[str, str], Scenarios] = field(default_factory=dict)

    def exposure(self, currency: str) -> Floats:
        """Quantity x multiplier x price x FX rate of each position, signed; NaN where something is not known."""
        if currency not in self._exposure:
            market = self.world.market
            worth = market.rate / market.rate[market.currency_index()[currency]]
            self._exposure[currency] = _units(self.world, self.world.holdings) * _of(self.world, market.close, worth)
        return self._exposure[currency]

    def scenarios(self, calendar: str, currency: str) -> Scenarios:
        """What tonight's positions would have made on each session of the calendar's window, in a currency."""
        key = (calendar, currency)
        if key not in self._scenarios:
            window = self.world.windows[calendar]
            market = self.world.market
            rate = market.rate / market.rate[market.currency_index()[currency]]
            self._scenarios[key] = _scenarios(self.world, self.world.holdings, window, currency, market.close, rate)
        return self._scenarios[key]

    def last_session(self, calendar: str, currency: str) -> tuple[Holdings, Floats, bool]:
        """The hypothetical P&L of the session just ended, of the positions held before it.

        Returns those holdings, the P&L of each position in the currency (NaN where a price is not known), and whether
        the calendar had a session on the evening's date; without one the P&L is that of no session, zero.
        """
        window = self.world.windows[calendar]
        held = self.world.past.held_before[calendar]
        if len(window.sessions) < 2 or window.sessions[-1] != np.datetime64(self.world.recipe.date):
            return held, np.zeros(len(held.quantity)), False
        newest = Window(calendar, window.sessions[-2:], window.close[:, -2:], window.rate[:, -2:], window.gap[:, -2:])
        rate = newest.rate[:, 0] / newest.rate[self.world.market.currency_index()[currency], 0]
        made = _scenarios(self.world, held, newest, currency, newest.close[:, 0], rate)
        known = np.isfinite(newest.close[held.instrument]).all(axis=1)
        return held, np.where(known | made.riskless, made.pnl[:, 0], np.nan), True


def position_currencies(world: World, holdings: Holdings) -> Integers:
    """The place of each position's currency among the market's currencies."""
    place = world.market.currency_index()
    by_instrument = np.array([place[item.currency] for item in world.market.instruments], dtype=np.int64)
    return by_instrument[holdings.instrument]


def _units(world: World, holdings: Holdings) -> Floats:
    multiplier = np.array([item.multiplier for item in world.market.instruments], dtype=np.float64)
    return holdings.quantity * multiplier[holdings.instrument]


def _of(world: World, close: Floats, rate: Floats) -> Floats:
    holdings = world.holdings
    return close[holdings.instrument] * rate[position_currencies(world, holdings)]


def _scenarios(
    world: World, holdings: Holdings, window: Window, currency: str, close: Floats, rate: Floats
) -> Scenarios:
    """close (instruments,) and rate (currencies,) into the currency are those of the day the positions are valued on.

    Local and FX log returns are added: exposure x (exp(r) - 1) = exposure x (P_d F_d / (P_d-1 F_d-1) - 1). A future
    earns on its local price alone, at tonight's FX rate; at prices that are not positive, by their difference.
    """
    kinds = np.array([item.kind.value for item in world.market.instruments], dtype=object)[holdings.instrument]
    future = kinds == InstrumentKind.FUTURE.value
    money = position_currencies(world, holdings)
    own = world.market.currency_index()[currency]
    riskless = (kinds == InstrumentKind.CASH.value) & (money == own)
    local = window.close[holdings.instrument]
    fx = window.rate[money] / window.rate[own]
    priced = np.where(future[:, None], local, local * fx)
    tonight = close[holdings.instrument]
    units = _units(world, holdings) * rate[money]
    with np.errstate(divide="ignore", invalid="ignore"):
        relative = priced[:, 1:] / priced[:, :-1]
        moves = tonight[:, None] * (relative - 1.0)
        by_difference = future & ~(np.nan_to_num(local, nan=1.0) > 0).all(axis=1)
        moves[by_difference] = np.diff(local[by_difference], axis=1)
        pnl = units[:, None] * moves
        log_returns = np.log(np.where(relative > 0, relative, np.nan))
    lacks = ~np.isfinite(pnl) | window.gap[holdings.instrument, 1:]
    lacks[riskless] = False
    pnl[~np.isfinite(pnl)] = 0.0
    pnl[riskless] = 0.0
    return Scenarios(pnl, lacks, riskless, log_returns)
