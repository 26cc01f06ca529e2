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
    """

    pnl: Floats
    lacks: Booleans
    riskless: Booleans

    def newest(self, count: int) -> Scenarios:
        """Those of the newest sessions, `count` at most."""
        rows = slice(max(self.pnl.shape[1] - count, 0), None)
        return Scenarios(self.pnl[:, rows], self.lacks[:, rows], self.riskless)


@dataclass(frozen=True)
class LastSession:
    """The hypothetical P&L of the session just ended.

    holdings: those before it. pnl: of each of these positions, NaN where something is not known. carried: (positions,)
    the session or the one before has no close, or no FX rate, of its own.
    """

    holdings: Holdings
    pnl: Floats
    carried: Booleans


@dataclass
class Valuation:
    """Figures of the positions of one world, worked out once for all rules that ask."""

    world: World
    _exposure: dict[str, Floats] = field(default_factory=dict)
    _scenarios: dict[tuple[str, str], Scenarios] = field(default_factory=dict)
    _last_session: dict[tuple[str, str], LastSession] = field(default_factory=dict)

    def exposure(self, currency: str) -> Floats:
        """Quantity x multiplier x price x FX rate of each position, signed; NaN where something is not known."""
        if currency not in self._exposure:
            market, holdings = self.world.market, self.world.holdings
            worth = _into(self.world, market.rate, currency)[position_currencies(self.world, holdings)]
            self._exposure[currency] = _units(self.world, holdings) * (market.close[holdings.instrument] * worth)
        return self._exposure[currency]

    def scenarios(self, calendar: str, currency: str) -> Scenarios:
        """What tonight's positions would have made on each session of the calendar's window, in a currency."""
        key = (calendar, currency)
        if key not in self._scenarios:
            world, window = self.world, self.world.windows[calendar]
            pnl = _pnl(world, world.holdings, window, currency, world.market.close, world.market.rate)
            unknown = ~np.isfinite(pnl)
            pnl[unknown] = 0.0
            unknown |= _gaps(world, world.holdings, window, currency)[:, 1:]
            self._scenarios[key] = Scenarios(pnl, unknown, own_cash(world, world.holdings, currency))
        return self._scenarios[key]

    def overlapping(self, calendar: str, currency: str, days: int) -> Floats:
        """(positions, sessions - days) what tonight's positions would have made over each run of so many returns.

        Zero where a position has no price at either end. Column t ends with the session of column t + days - 1 of
        `scenarios`.
        """
        world, window = self.world, self.world.windows[calendar]
        pnl = _pnl(world, world.holdings, window, currency, world.market.close, world.market.rate, days)
        return np.where(np.isfinite(pnl), pnl, 0.0)

    def log_returns(self, calendar: str, currency: str) -> Floats:
        """(positions, n) of the prices in this currency, of futures in their own.

        Zero where a position has no price to compare with, NaN where prices have no logarithm.
        """
        world = self.world
        relative = _relative(world, world.holdings, self.world.windows[calendar], currency, 1)
        lacks = self.scenarios(calendar, currency).lacks
        with np.errstate(all="ignore"):
            return np.where(lacks & np.isnan(relative), 0.0, np.log(relative))

    def last_session(self, calendar: str, currency: str) -> LastSession:
        """What the positions held before the session just ended made on it; nothing when the evening is no session."""
        key = (calendar, currency)
        if key not in self._last_session:
            self._last_session[key] = self._of_last_session(calendar, currency)
        return self._last_session[key]

    def _of_last_session(self, calendar: str, currency: str) -> LastSession:
        window, held = self.world.windows[calendar], self.world.past.held_before[calendar]
        if len(window.sessions) < 2 or window.sessions[-1] != np.datetime64(self.world.recipe.date):
            return LastSession(held, np.zeros(len(held.quantity)), np.zeros(len(held.quantity), dtype=np.bool_))
        close, rate = window.close[:, -2:], window.rate[:, -2:]
        newest = Window(calendar, window.sessions[-2:], close, rate, window.gap[:, -2:], window.rate_gap[:, -2:])
        pnl = _pnl(self.world, held, newest, currency, close[:, 0], rate[:, 0])
        return LastSession(held, pnl[:, 0], np.asarray(_gaps(self.world, held, newest, currency).any(axis=1)))


def position_currencies(world: World, holdings: Holdings) -> Integers:
    """The place of each position's currency among the market's currencies."""
    place = world.market.currency_index()
    by_instrument = np.array([place[item.currency] for item in world.market.instruments], dtype=np.int64)
    return by_instrument[holdings.instrument]


def foreign(world: World, holdings: Holdings, currency: str) -> Booleans:
    """(positions,) in another currency."""
    return np.asarray(position_currencies(world, holdings) != world.market.currency_index()[currency])


def of_kind(world: World, holdings: Holdings, kind: InstrumentKind) -> Booleans:
    """(positions,) of a kind."""
    found = np.array([item.kind is kind for item in world.market.instruments], dtype=np.bool_)
    return found[holdings.instrument]


def own_cash(world: World, holdings: Holdings, currency: str) -> Booleans:
    """(positions,) cash in this very currency, which cannot lose."""
    return of_kind(world, holdings, InstrumentKind.CASH) & ~foreign(world, holdings, currency)


def expired(world: World, holdings: Holdings) -> Booleans:
    """(positions,) whose contract ended before the day on which they are held."""
    found = [item.expiry is not None and item.expiry < holdings.on for item in world.market.instruments]
    return np.array(found, dtype=np.bool_)[holdings.instrument]


def _into(world: World, rate: Floats, currency: str) -> Floats:
    """Worth of one unit of each currency in another: 1 of itself, even where no rate leads elsewhere.

    rate: (currencies,) or (currencies, sessions) into the base currency; the result alike.
    """
    own = world.market.currency_index()[currency]
    made = np.asarray(rate / rate[own])
    made[own] = 1.0
    return made


def _units(world: World, holdings: Holdings) -> Floats:
    """Quantity x multiplier; NaN for what no file describes and for contracts that ended."""
    multiplier = np.array([item.multiplier for item in world.market.instruments], dtype=np.float64)
    unfit = world.market.unknown[holdings.instrument] | expired(world, holdings)
    return np.where(unfit, np.nan, holdings.quantity * multiplier[holdings.instrument])


def _pnl(
    world: World, holdings: Holdings, window: Window, currency: str, close: Floats, rate: Floats, days: int = 1
) -> Floats:
    """P&L over each run of `days` sessions, (positions, sessions - days), not finite where something is not known.

    close (instruments,) and rate (currencies,) are those of the day the positions are valued on. Local and FX log
    returns are added: exposure x (exp(r) - 1) = exposure x (P_d F_d / (P_d-1 F_d-1) - 1). A future earns on its local
    price alone, at that day's FX rate; where one of the prices is not positive, by their difference.
    """
    future = of_kind(world, holdings, InstrumentKind.FUTURE)
    tonight = close[holdings.instrument]
    with np.errstate(all="ignore"):
        moves = _relative(world, holdings, window, currency, days)
        by_difference = future[:, None] & (np.isnan(moves) | ~(tonight > 0)[:, None])
        moves -= 1.0
        moves *= tonight[:, None]
        if by_difference.any():
            local = window.close[holdings.instrument[future]]
            moves[future] = np.where(by_difference[future], local[:, days:] - local[:, :-days], moves[future])
        moves *= (_units(world, holdings) * _into(world, rate, currency)[position_currencies(world, holdings)])[:, None]
        return moves


def _relative(world: World, holdings: Holdings, window: Window, currency: str, days: int) -> Floats:
    """Price over the price `days` sessions before, in a currency (futures: local), (positions, sessions - days).

    NaN where either is missing or not positive.
    """
    future = of_kind(world, holdings, InstrumentKind.FUTURE)
    priced = window.close[holdings.instrument]
    with np.errstate(all="ignore"):
        worth = _into(world, window.rate, currency)[position_currencies(world, holdings)]
        worth[future] = 1.0
        priced *= worth
        priced[~(priced > 0)] = np.nan
        return np.asarray(priced[:, days:] / priced[:, :-days])


def _gaps(world: World, holdings: Holdings, window: Window, currency: str) -> Booleans:
    """(positions, n + 1) sessions without a close of their own, or without the FX rate that a return needs."""
    by_rate = foreign(world, holdings, currency) & ~of_kind(world, holdings, InstrumentKind.FUTURE)
    own = window.rate_gap[world.market.currency_index()[currency]]
    rates = window.rate_gap[position_currencies(world, holdings)] | own
    return np.asarray(window.gap[holdings.instrument] | (rates & by_rate[:, None]))
