"""Does value at risk cover as often as its confidence promises, and do exceptions come alone?

Each test works on counts, arrays (subjects,), and answers with a statistic and the probability of one at least as
large if the forecasts were right, or with the reason why there is none. Scaling the unit of money changes nothing.
None of them is proof: with 250 days at 99 % a model whose true coverage is 98 % stays in the green zone in 44 of 100
years (Basel Committee 1996, Table 1).
"""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal
from enum import IntEnum
from fractions import Fraction

import numpy as np
from scipy.special import bdtr, bdtrc, chdtrc, xlogy

from monitor.risk.exceptions import Counts
from monitor.risk.figures import Booleans, Codes, Floats
from monitor.risk.tail import tail_share


class NoTest(IntEnum):
    """Why a test has no result for a subject."""

    NONE = 0
    NO_DAYS = 1
    NO_EXCEPTION = 2
    NOTHING_TO_COMPARE = 3
    NO_SHORTFALL = 4


NO_TEST_TEXT: dict[NoTest, str] = {
    NoTest.NONE: "there is a result",
    NoTest.NO_DAYS: "no day has both a forecast and an outcome",
    NoTest.NO_EXCEPTION: "there has been no exception yet",
    NoTest.NOTHING_TO_COMPARE: "no day follows an exception, or none follows a day without one",
    NoTest.NO_SHORTFALL: "an exception on a day whose forecast shortfall is not above 0",
}


class Zone(IntEnum):
    """The zones of the Basel Committee's traffic light."""

    GREEN = 0
    YELLOW = 1
    RED = 2


YELLOW_FROM, RED_FROM = 0.95, 0.9999

# For 250 days at 99 %, by the number of exceptions up to 10, which stands for 10 and more.
PLUS_FACTORS_1996 = np.array([0, 0, 0, 0, 0, 0.40, 0.50, 0.65, 0.75, 0.85, 1.00])
MULTIPLIERS_MAR32_9 = np.array([1.50, 1.50, 1.50, 1.50, 1.50, 1.70, 1.76, 1.83, 1.88, 1.92, 2.00])


@dataclass(frozen=True)
class BaselZone:
    """The zone of each subject (Zone) and how likely its count is if coverage is right, all (subjects,).

    at_most: P(X <= exceptions). at_least: P(X >= exceptions).
    plus_factor: added to 3 by the 1996 framework; multiplier: of MAR32.9. Both are NaN but for 250 days at 99 %, the
    only case for which the Committee printed them.
    """

    zone: Codes
    at_most: Floats
    at_least: Floats
    plus_factor: Floats
    multiplier: Floats


@dataclass(frozen=True)
class Verdict:
    """A statistic and its p-value, both (subjects,), NaN exactly where reason (NoTest) is not NONE."""

    statistic: Floats
    p_value: Floats
    reason: Codes

    @staticmethod
    def of(statistic: Floats, p_value: Floats, reason: Codes) -> Verdict:
        """Blank what has no result."""
        there = reason == NoTest.NONE
        return Verdict(np.where(there, statistic, np.nan), np.where(there, p_value, np.nan), reason)


@dataclass(frozen=True)
class Transitions:
    """How often a day of one kind was followed by a day of another, all (subjects,).

    The first digit is the day before, the second the day: 1 an exception, 0 none.
    """

    t00: Counts
    t01: Counts
    t10: Counts
    t11: Counts


@dataclass(frozen=True)
class Christoffersen:
    """Independence alone (one degree of freedom), and with coverage (two)."""

    independence: Verdict
    conditional_coverage: Verdict


def basel_zone(exceptions: Counts, days: Counts, confidence: Decimal) -> BaselZone:
    """The traffic light for any number of days and any confidence.

    exceptions, days: (subjects,) or anything that broadcasts, 0 <= exceptions <= days; ValueError otherwise.
    With X binomial (days, 1 - confidence): yellow from the first count whose P(X <= count) is at least 95 %, red from
    the first at which it is at least 99.99 % (Basel Committee on Banking Supervision, January 1996, Supervisory
    framework for the use of "backtesting", note to Table 2; today MAR32 and MAR99). No exception is green however few
    the days: read to the letter the rule would find fault with a spotless record of five days.
    One more exception never betters the zone; with more days the bounds do not grow in proportion.
    """
    exceptions, days = _counts(exceptions, days)
    share = tail_share(confidence)
    at_most = bdtr(exceptions, days, float(share))
    at_least = bdtrc(exceptions - 1, days, float(share))
    zone = np.where(at_most >= RED_FROM, Zone.RED, np.where(at_most >= YELLOW_FROM, Zone.YELLOW, Zone.GREEN))
    zone = np.where(exceptions == 0, Zone.GREEN, zone).astype(np.int8)
    printed = (days == 250) & (share == Fraction(1, 100))
    row = np.minimum(exceptions, 10)
    return BaselZone(
        zone,
        at_most,
        at_least,
        plus_factor=np.where(printed, PLUS_FACTORS_1996[row], np.nan),
        multiplier=np.where(printed, MULTIPLIERS_MAR32_9[row], np.nan),
    )


def kupiec(exceptions: Counts, days: Counts, confidence: Decimal) -> Verdict:
    """Unconditional coverage: is the share of exceptions x / n the p = 1 - confidence that was promised?

    exceptions x, days n: (subjects,) or anything that broadcasts, 0 <= x <= n; ValueError otherwise.
    LR = -2 ln[(1 - p)^(n - x) p^x] + 2 ln[(1 - x/n)^(n - x) (x/n)^x], chi-squared with 1 degree of freedom (Kupiec
    1995, Techniques for verifying the accuracy of risk measurement models). 0 ln 0 = 0, so that no exception at all
    has LR = -2 n ln(1 - p): the test is two-sided, and no exception in 255 days at 99 % is rejected at 5 % as too few,
    although the printed table says N < 7. Without a day there is no result. Never below 0.
    """
    exceptions, days = _counts(exceptions, days)
    share = float(tail_share(confidence))
    reason = np.where(days == 0, NoTest.NO_DAYS, NoTest.NONE).astype(np.int8)
    at_least_one = np.maximum(days, 1)
    others = days - exceptions
    ratio = xlogy(exceptions, exceptions / at_least_one / share) + xlogy(others, others / at_least_one / (1 - share))
    return _chi_squared(2 * ratio, 1, reason)


def transitions(hit: Booleans, counted: Booleans) -> Transitions:
    """Count how days follow each other. hit, counted: (subjects, days), as in `exceptions.Exceptions`.

    Only a pair of neighbouring days that both count is a transition. The first day has no day before it, so n days
    give n - 1; an author who takes it as preceded by a day without exception counts one more t00 or t01 (Jorion 2007
    does), and `christoffersen` takes those counts just as well.
    """
    pair = counted[:, :-1] & counted[:, 1:]
    before, after = hit[:, :-1], hit[:, 1:]

    def number(of: Booleans) -> Counts:
        return np.asarray((pair & of).sum(axis=1, dtype=np.int64))

    return Transitions(
        number(~before & ~after), number(~before & after), number(before & ~after), number(before & after)
    )


def christoffersen(counts: Transitions, coverage: Verdict) -> Christoffersen:
    """Independence: is an exception as likely after an exception as after a day without? And coverage with it.

    counts: transitions; coverage: the answer of `kupiec` for the same subjects. With pi01 = t01 / (t00 + t01),
    pi11 = t11 / (t10 + t11) and pi = (t01 + t11) / all,
    LR_ind = 2 ln{(1 - pi01)^t00 pi01^t01 (1 - pi11)^t10 pi11^t11 / [(1 - pi)^(t00 + t10) pi^(t01 + t11)]},
    chi-squared with 1 degree of freedom; LR_cc = LR_uc + LR_ind, with 2 (Christoffersen 1998, Evaluating interval
    forecasts). 0 ln 0 = 0. Where no day follows an exception (there is none, or only on the last day), or none
    follows a day without one, pi11 or pi01 does not exist: the formula would give LR_ind = 0, which reads like evidence
    of independence where there is none, so neither test has a result. Only clusters of length two show.
    """
    t00, t01, t10, t11 = counts.t00, counts.t01, counts.t10, counts.t11
    after_calm, after_hit, calm, hits = t00 + t01, t10 + t11, t00 + t10, t01 + t11
    every = after_calm + after_hit
    reason = np.where((after_calm == 0) | (after_hit == 0), NoTest.NOTHING_TO_COMPARE, NoTest.NONE).astype(np.int8)
    reason[every == 0] = NoTest.NO_DAYS
    after_calm, after_hit, every = np.maximum(after_calm, 1), np.maximum(after_hit, 1), np.maximum(every, 1)
    apart = (
        xlogy(t00, t00 / after_calm)
        + xlogy(t01, t01 / after_calm)
        + xlogy(t10, t10 / after_hit)
        + xlogy(t11, t11 / after_hit)
    )
    together = xlogy(calm, calm / every) + xlogy(hits, hits / every)
    independence = _chi_squared(2 * (apart - together), 1, reason)
    both = np.where(coverage.reason == NoTest.NONE, reason, coverage.reason).astype(np.int8)
    return Christoffersen(independence, _chi_squared(coverage.statistic + independence.statistic, 2, both))


def time_until_first_failure(days_until_first: Counts, confidence: Decimal) -> Verdict:
    """Did the first exception come too early, or too late? For a record too young for `kupiec`.

    days_until_first v: (subjects,), the place of the first exception from 1, or 0 where there is none, which has no
    result; ValueError below 0. With p = 1 - confidence, LR = -2 ln[p (1 - p)^(v - 1)] + 2 ln[(1/v) (1 - 1/v)^(v - 1)],
    chi-squared with 1 degree of freedom (Kupiec 1995); 0 ln 0 = 0. Its power is low: at 99 % anything from day 7 to
    day 438 passes at 5 %.
    """
    days_until_first = np.asarray(days_until_first, dtype=np.int64)
    if (days_until_first < 0).any():
        raise ValueError(f"the days until the first exception must not be negative (got {days_until_first.min()})")
    share = float(tail_share(confidence))
    reason = np.where(days_until_first == 0, NoTest.NO_EXCEPTION, NoTest.NONE).astype(np.int8)
    v = np.maximum(days_until_first, 1)
    ratio = -np.log(v * share) + xlogy(v - 1, (v - 1) / v / (1 - share))
    return _chi_squared(2 * ratio, 1, reason)


def _counts(exceptions: Counts, days: Counts) -> tuple[Counts, Counts]:
    """Both as whole numbers of one shape. Raises ValueError where there are fewer days than exceptions, or below 0."""
    exceptions, days = np.broadcast_arrays(np.asarray(exceptions), np.asarray(days))
    for counts in (exceptions, days):
        if not np.issubdtype(counts.dtype, np.integer):
            raise TypeError(f"exceptions and days must be whole numbers (got {counts.dtype})")
    wrong = (exceptions < 0) | (exceptions > days)
    if wrong.any():
        raise ValueError(
            f"exceptions must be from 0 to the number of days (got {exceptions[wrong][0]} of {days[wrong][0]})"
        )
    return exceptions.astype(np.int64), days.astype(np.int64)


def _chi_squared(statistic: Floats, degrees: int, reason: Codes) -> Verdict:
    """The result of a likelihood ratio, which rounding must not put below 0."""
    statistic = np.maximum(statistic, 0.0)
    return Verdict.of(statistic, chdtrc(degrees, statistic), reason)
