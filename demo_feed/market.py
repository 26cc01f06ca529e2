"""Prices and rates of the invented markets: factors with fat tails and clusters of volatility, and what follows them.

Within a day a price walks on at random between one close and the next, and its range is that of the walk.

A return is beta x (world + region) + sector + own. Each of these series is a GARCH(1,1) process (Bollerslev 1986) with
Student-t innovations of four degrees of freedom. Tokyo, which closes first, follows the world a session late in part.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date

import numpy as np
import numpy.typing as npt

from demo_feed.instruments import PRICED
from demo_feed.sessions import is_session

Floats = npt.NDArray[np.float64]

SEED, SEED_OF_RANGES = 234, 235
WORLD_DEVIATION = 0.0052
REGION_DEVIATION = 0.0048
SECTOR_DEVIATION = {"bonds": 0.0022, "metals": 0.0, "index": 0.0, "world": 0.0}  # 0.4 % where none stands here
DRIFT = 0.0001  # a day, for everything
DRIFT_OF_BETA = 0.0002  # a day, on top, for each unit of beta
TOKYO_LATE = 0.6
SHOCK, MEMORY = 0.07, 0.91
OVERNIGHT = 0.2  # of a day's variance, from the close before to the open
CALMING = 0.9  # a day, of the variance within a day, towards that of the returns
PAIRS = ("EURGBP", "EURJPY", "EURUSD")
PAIR_START = (0.8520, 121.50, 1.1090)
PAIR_DEVIATION = (0.0027, 0.0046, 0.0040)
PAIR_BETA = (0.0, 0.25, 0.08)


@dataclass(frozen=True)
class Panel:
    """close: (days, instruments) as printed, in the order of PRICED; open: whether its market had a session on the day.

    rate: (days, pairs) as printed, in the order of PAIRS. A close on a day that is not open is the last one before.
    first, high, low: (days, instruments) the opening, highest and lowest price of the day; they mean nothing on a day
    that is not open.
    """

    days: tuple[date, ...]
    close: Floats
    open: npt.NDArray[np.bool_]
    rate: Floats
    first: Floats
    high: Floats
    low: Floats


def make_panel(days: tuple[date, ...], world_moves: Mapping[date, float]) -> Panel:
    """The whole panel over ascending days. `world_moves` fixes the world's return (a fraction) on some of them."""
    regions = sorted({instrument.calendar for instrument in PRICED})
    sectors = sorted({instrument.sector for instrument in PRICED})
    deviation = np.array(
        [
            WORLD_DEVIATION,
            *(REGION_DEVIATION for _ in regions),
            *(SECTOR_DEVIATION.get(sector, 0.004) for sector in sectors),
            *(instrument.own for instrument in PRICED),
            *PAIR_DEVIATION,
        ]
    )
    given = np.full(len(days), np.nan)
    for day, move in world_moves.items():
        given[days.index(day)] = move
    series = _clustered(deviation, given)
    world, region, sector, own, pair = np.split(series, np.cumsum([1, len(regions), len(sectors), len(PRICED)]), axis=1)
    late = np.vstack([world[:1], world[:-1]])
    tokyo = (1 - TOKYO_LATE) * world + TOKYO_LATE * late
    followed = np.hstack([tokyo if calendar == "XTKS" else world for calendar in regions]) + region + DRIFT_OF_BETA
    beta = np.array([instrument.beta for instrument in PRICED])
    returns = (
        beta * followed[:, [regions.index(instrument.calendar) for instrument in PRICED]]
        + sector[:, [sectors.index(instrument.sector) for instrument in PRICED]]
        + own
        + DRIFT
    )
    pair += np.array(PAIR_BETA) * world
    _follow(returns, own, pair)
    start = np.array([instrument.price for instrument in PRICED])
    rate = np.array(PAIR_START) * np.exp(np.cumsum(pair, axis=0))
    is_open = np.array([[is_session(instrument.calendar, day) for instrument in PRICED] for day in days])
    close = _carried(np.round(start * np.exp(np.cumsum(returns, axis=0)), 2), is_open)
    return Panel(days, close, is_open, np.round(rate, 4), *_ranges(close, is_open))


def _ranges(close: Floats, is_open: npt.NDArray[np.bool_]) -> tuple[Floats, Floats, Floats]:
    """Opening, highest and lowest prices, as printed: the log price is a Brownian bridge from close to close.

    The highest and the lowest point of a bridge are drawn by inverting their distributions, each by itself:
    P(max > m) = exp(-2 (m - a) (m - b) / v) from a to b with variance v.
    """
    random = np.random.RandomState(SEED_OF_RANGES)
    normal = random.standard_normal(close.shape)
    chances = 1.0 - random.random_sample((2, *close.shape))  # above 0, so that their logarithms are finite
    returns = np.diff(np.log(close), axis=0, prepend=np.log(close[:1]))
    variance = _calming(returns, is_open)
    gap = OVERNIGHT * returns + np.sqrt(OVERNIGHT * (1 - OVERNIGHT) * variance) * normal
    rest = returns - gap
    up, down = (np.sqrt(rest**2 - 2 * (1 - OVERNIGHT) * variance * np.log(chance)) for chance in chances)
    first = close * np.exp(-rest)
    high, low = np.round(first * np.exp((rest + up) / 2), 2), np.round(first * np.exp((rest - down) / 2), 2)
    first = np.round(first, 2)
    return first, np.maximum(high, np.maximum(first, close)), np.minimum(low, np.minimum(first, close))


def _calming(returns: Floats, is_open: npt.NDArray[np.bool_]) -> Floats:
    """(days, instruments) the variance of a day: an exponential mean of squared returns, the day's own the newest."""
    variances: Floats = np.empty_like(returns)
    variance = np.mean(returns**2, axis=0)
    for at, (day, traded) in enumerate(zip(returns, is_open, strict=True)):
        variance = np.where(traded, CALMING * variance + (1 - CALMING) * day**2, variance)
        variances[at] = variance
    return variances


def _follow(returns: Floats, own: Floats, pair: Floats) -> None:
    """Give other lines of a company the returns of the line they follow, in their own currency, and a little more."""
    names = [instrument.id for instrument in PRICED]
    a_euro_costs = {"EUR": np.zeros(len(pair))} | {name[3:]: pair[:, place] for place, name in enumerate(PAIRS)}
    for at, instrument in enumerate(PRICED):
        if instrument.follows:
            leader = names.index(instrument.follows)
            change = a_euro_costs[instrument.currency] - a_euro_costs[PRICED[leader].currency]
            returns[:, at] = returns[:, leader] + change + own[:, at]


def _clustered(deviation: Floats, given: Floats) -> Floats:
    """One GARCH(1,1) series a column, (days, series), of the long-run deviations; `given` replaces the first column."""
    innovations = np.random.RandomState(SEED).standard_t(4, size=(len(given), len(deviation))) / np.sqrt(2.0)
    returns: Floats = np.empty_like(innovations)
    long_run = deviation**2
    variance = long_run.copy()
    for at, innovation in enumerate(innovations):
        returns[at] = np.sqrt(variance) * innovation
        if not np.isnan(given[at]):
            returns[at, 0] = given[at]
        variance = (1 - SHOCK - MEMORY) * long_run + SHOCK * returns[at] ** 2 + MEMORY * variance
    return returns


def _carried(close: Floats, is_open: npt.NDArray[np.bool_]) -> Floats:
    rows = np.maximum.accumulate(np.where(is_open, np.arange(len(close))[:, None], 0), axis=0)
    carried: Floats = np.take_along_axis(close, rows, axis=0)
    return carried
