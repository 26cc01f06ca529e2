"""Was expected shortfall large enough? The second test of Acerbi and Szekely (2014, Backtesting expected shortfall)."""

from __future__ import annotations

import math
from dataclasses import dataclass
from decimal import Decimal

import numpy as np
from scipy.special import ndtri, stdtrit

from monitor.risk.coverage import NoTest
from monitor.risk.exceptions import Counts
from monitor.risk.figures import Codes, Floats
from monitor.risk.student import standard_student_tail
from monitor.risk.tail import tail_share

PATHS = 100_000
_DRAWS_AT_ONCE = 1 << 20  # part of the stream: another number simulates other records


@dataclass(frozen=True)
class ShortfallTest:
    """Z2 of each subject, (subjects,), NaN exactly where reason (NoTest) is not NONE, and the days that it is of."""

    statistic: Floats
    days: Counts
    reason: Codes


@dataclass(frozen=True)
class CriticalValue:
    """Reject when Z2 is below value. standard_error: of the value, from simulating only so many records (paths)."""

    value: float
    standard_error: float
    paths: int


def shortfall_test(
    pnl: Floats, value_at_risk: Floats, expected_shortfall: Floats, confidence: Decimal
) -> ShortfallTest:
    """Z2 = sum of X_t I_t / (T a ES_t), plus 1, with I_t = 1 where X_t < -VaR_t and a = 1 - confidence.

    pnl X, value_at_risk, expected_shortfall: (subjects, days), as forecast for that day, all three in one unit; a day
    on which one of them is not finite doesn't count, T is the number of those that do. Without an exception Z2 is 1
    exactly; if the forecasts are right its expectation is 0; the more negative, the more shortfall was understated, in
    size or in frequency. An exception on a day whose shortfall is not above 0 leaves the subject without a result.
    Scaling a day's three numbers by one positive factor changes nothing; the order of days does not matter but for
    rounding; where value at risk is not negative, larger losses and smaller forecasts never raise Z2; a row alone has
    the bits of the row in a block. Raises ValueError when the shapes differ.
    """
    pnl, value_at_risk, expected_shortfall = (
        np.ascontiguousarray(matrix, dtype=np.float64) for matrix in (pnl, value_at_risk, expected_shortfall)
    )
    if pnl.ndim != 2 or not pnl.shape == value_at_risk.shape == expected_shortfall.shape:
        raise ValueError(
            "profit or loss, value at risk and shortfall must all be (subjects, days) "
            f"(got shapes {pnl.shape}, {value_at_risk.shape} and {expected_shortfall.shape})"
        )
    share = float(tail_share(confidence))
    counted = np.isfinite(pnl) & np.isfinite(value_at_risk) & np.isfinite(expected_shortfall)
    days = counted.sum(axis=1, dtype=np.int64)
    with np.errstate(all="ignore"):
        hit = counted & (pnl < -value_at_risk)
        sizes = np.where(hit, pnl / expected_shortfall, 0.0).sum(axis=1)
        statistic = sizes / (days * share) + 1
    reason = np.where(days == 0, NoTest.NO_DAYS, NoTest.NONE).astype(np.int8)
    reason[(hit & ~(expected_shortfall > 0)).any(axis=1)] = NoTest.NO_SHORTFALL
    return ShortfallTest(np.where(reason == NoTest.NONE, statistic, np.nan), days, reason)


def simulate_z2(days: int, confidence: Decimal, nu: float, random: np.random.RandomState, paths: int = PATHS) -> Floats:
    """Z2 of records whose forecasts are right, ascending, (paths,).

    nu: degrees of freedom of the outcomes' Student t, above 1, infinite for the normal; location 0, any scale. Only
    the days beyond value at risk are drawn: their number is binomial, their sizes the quantile at a U, U uniform. A
    replay under other library versions agrees to a relative 1e-10 of each record (the uniform and binomial draws to
    the bit, the quantiles to rounding). Raises ValueError when days, paths or nu are too small.
    """
    if days < 1 or paths < 1 or not nu > 1:
        raise ValueError(f"there must be days, paths and nu above 1 (got {days} days, {paths} paths, nu {nu})")
    share = float(tail_share(confidence))
    shortfall = float(standard_student_tail(np.array([nu]), share)[1][0])
    at_once = max(1, math.floor(_DRAWS_AT_ONCE / (days * share)))
    statistics = np.empty(paths)
    for start in range(0, paths, at_once):
        rows = min(at_once, paths - start)
        exceptions = random.binomial(days, share, size=rows)
        place = share * (1 - random.random_sample(int(exceptions.sum())))
        outcomes = stdtrit(nu, place) if math.isfinite(nu) else ndtri(place)
        sizes = np.bincount(np.repeat(np.arange(rows), exceptions), outcomes, minlength=rows)
        statistics[start : start + rows] = sizes / (days * share * shortfall) + 1
    statistics.sort()
    return statistics


def critical_value(simulated: Floats, level: float) -> CriticalValue:
    """Below which Z2 a test of this level rejects: the level's quantile of the simulated statistics.

    simulated: ascending, as `simulate_z2` gives them. The standard error is half the distance between the statistics
    one standard deviation of the binomial count before and after (order statistics, free of any density). ValueError
    when the level is not above 0 and below 1, or fewer than 10 simulated statistics lie below it.
    """
    paths = len(simulated)
    if not 0 < level < 1 or level * paths < 10:
        raise ValueError(f"the level must leave 10 of the {paths} paths below it and be below 1 (got {level})")
    rank = math.ceil(level * paths)
    deviation = math.sqrt(paths * level * (1 - level))
    spread = max(1, round(deviation))
    lower, upper = simulated[max(rank - 1 - spread, 0)], simulated[min(rank - 1 + spread, paths - 1)]
    return CriticalValue(float(simulated[rank - 1]), float(upper - lower) / 2 * deviation / spread, paths)


def p_value(statistic: Floats, simulated: Floats) -> Floats:
    """How likely a Z2 as low is if the forecasts are right: (1 + how many simulated are not above it) / (1 + paths).

    statistic: any shape, NaN stays NaN; of as many days as were simulated. Counting the record itself keeps the p-value
    above 0 (Davison and Hinkley 1997, Bootstrap methods and their application, section 4.2); its standard error is
    sqrt(p (1 - p) / paths).
    """
    statistic = np.asarray(statistic, dtype=np.float64)
    not_above = np.searchsorted(simulated, statistic, side="right")
    return np.where(np.isnan(statistic), np.nan, (1 + not_above) / (1 + len(simulated)))
