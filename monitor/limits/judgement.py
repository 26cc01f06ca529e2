"""How the forecasts of a method have done against what happened: exceptions, and the tests of them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date
from decimal import Decimal
from functools import lru_cache

import numpy as np

from monitor.limits.windowed import tail_call
from monitor.risk.coverage import (
    NO_TEST_TEXT,
    NoTest,
    Verdict,
    Zone,
    basel_zone,
    christoffersen,
    kupiec,
    time_until_first_failure,
    transitions,
)
from monitor.risk.exceptions import Exceptions, find_exceptions, larger_count
from monitor.risk.figures import LACK_TEXT, Lack
from monitor.risk.goodness import describe_fit
from monitor.risk.methods import measure_tail, transform_outcomes
from monitor.risk.randomness import random_state
from monitor.risk.rolling import rolling_historical
from monitor.risk.shortfall_test import critical_value, p_value, shortfall_test, simulate_z2
from monitor.risk.student_fit import fit_student
from monitor.risk.transform import kolmogorov_smirnov
from monitor.world import Booleans, Floats, Integers, MeasureCall, RecordTerms

REJECTED_AT = 0.05
Z2_PATHS = 20_000
# Student's t that the critical values of Z2 are simulated for: the fitted degrees of freedom, rounded down to one of
# these, so that the tail is never taken as thinner than it was found.
Z2_TAILS = (2.01, 2.5, 3.0, 4.0, 5.0, 7.0, 10.0, 20.0, 100.0)
HYPOTHETICAL, ACTUAL = "hypothetical", "actual"  # whose P&L
NO_TRANSFORM = "only the figures are known, not the whole distribution"


@dataclass(frozen=True)
class Forecasts:
    """Of each record, (records,), NaN where there is none.

    transform: where the outcome lies in the forecast distribution; None where only the figures are known. tried:
    whether the method was asked at all; where it was and there is no figure, it has none to give. why: by record, what
    it then lacked.
    """

    value_at_risk: Floats
    expected_shortfall: Floats
    transform: Floats | None
    tried: Booleans
    why: Mapping[int, str] = field(default_factory=dict)

    def on(self, days: Booleans) -> Forecasts:
        """Those of some of the records."""
        places = None if self.transform is None else self.transform[days]
        return Forecasts(self.value_at_risk[days], self.expected_shortfall[days], places, self.tried[days])


@dataclass(frozen=True)
class Trials:
    """Forecasts and outcomes of one subject under one method, in time order, profit positive.

    days: of the outcomes. pnl: hypothetical, actual: the book's own; NaN where not known. carried: whether pnl rests in
    part on older prices. asked: the days to judge; the others only tell whether forecasts had begun before them.
    """

    days: tuple[date, ...]
    forecasts: Forecasts
    pnl: Floats
    actual: Floats
    carried: Booleans
    asked: Booleans


@dataclass(frozen=True)
class Tested:
    """A statistic with its p-value, or the reason why there is none."""

    statistic: float | None
    p_value: float | None
    reason: str | None = None

    @property
    def rejects(self) -> bool:
        return self.p_value is not None and self.p_value < REJECTED_AT


@dataclass(frozen=True)
class ShortfallTested:
    """Z2 with the value below which a test at 5 % rejects, and the tail that it was simulated for (None: normal)."""

    statistic: float | None
    critical: float | None
    p_value: float | None
    degrees_of_freedom: float | None
    reason: str | None = None


@dataclass(frozen=True)
class Judgement:
    """The record of one method for one subject. days: those that count; expected: exceptions of a right forecast.

    counted_from: whose P&L gave the count, hypothetical or actual. exceptions_of: the count by each, None where a P&L
    is not known on any day. missing_days: without forecast or P&L, whether they count or not. carried: days that count
    whose hypothetical P&L rests in part on older prices. zone: of the Basel Committee's traffic light, any number of
    days; None without one.
    """

    days: int
    first: date | None
    last: date | None
    exceptions: int
    expected: float
    counted_from: str
    exceptions_of: dict[str, int | None]
    exception_days: tuple[date, ...]
    missing_days: tuple[date, ...]
    carried: int
    zone: str | None
    at_least: float
    transitions: tuple[int, int, int, int]
    coverage: Tested
    independence: Tested
    conditional_coverage: Tested
    days_until_first: int | None
    first_failure: Tested
    shortfall: ShortfallTested
    distribution: Tested


def forecast(call: MeasureCall, scenarios: Floats, outcomes: Floats, names: Sequence[tuple[str, ...]]) -> Forecasts:
    """What a method said of each record from the scenarios before it.

    scenarios: (records, n), oldest first. outcomes: (records,). names: of each record, for methods that draw.
    """
    asked = tail_call(call.parameters)
    tail = measure_tail(scenarios, asked, names)
    places = transform_outcomes(outcomes, scenarios, asked)
    figures = tail.value_at_risk
    why = {at: LACK_TEXT[Lack(figures.lack[at])] for at in np.flatnonzero(figures.lack != Lack.NONE).tolist()}
    tried = np.ones(len(outcomes), dtype=np.bool_)
    return Forecasts(figures.value, tail.expected_shortfall.value, places, tried, why)


@dataclass(frozen=True)
class QuickForecast:
    """Figures of every full window of some series, worked out together. rows: (series, days - window + 1)."""

    call: MeasureCall
    value_at_risk: Floats
    expected_shortfall: Floats

    def of(self, place: int, ends: Integers, scenarios: Floats, outcomes: Floats) -> Forecasts:
        """The forecasts of one series from the windows that end on some days, as `forecast` gives them."""
        rows = ends - self.call.parameters["window"] + 1
        places = transform_outcomes(outcomes, scenarios, tail_call(self.call.parameters))
        tried = np.ones(len(ends), dtype=np.bool_)
        return Forecasts(self.value_at_risk[place, rows], self.expected_shortfall[place, rows], places, tried)


def quick_forecast(call: MeasureCall, pnl: Floats) -> QuickForecast | None:
    """One-day forecasts from every window of each series at once; None where there is no such way.

    pnl: (series, days).
    """
    if call.parameters["method"] != "historical" or pnl.shape[1] < call.parameters["window"]:
        return None
    tail = rolling_historical(pnl, call.parameters["window"], call.parameters["confidence"])
    return QuickForecast(call, tail.value_at_risk.value, tail.expected_shortfall.value)


def describe(pnl: Floats) -> tuple[str, ...]:
    """One sentence on the P&L of each subject: is it normal, do large moves cluster. pnl: (subjects, n)."""
    return describe_fit(pnl).sentences


def judge(trials: Trials, call: MeasureCall, terms: RecordTerms, site: str) -> Judgement:
    """Everything that the record of one method for one subject says.

    Days before the first on which the method was asked don't count, and by actual P&L neither do days before the first
    that is known; later ones without forecast or P&L are missing. A subject without any actual P&L, as every position
    and the firm, is judged by the hypothetical one whatever the terms say.
    """
    confidence: Decimal = call.parameters["confidence"]
    asked = trials.asked
    known = {HYPOTHETICAL: trials.pnl, ACTUAL: trials.actual}
    by = {name: _exceptions(name, own, trials, terms) for name, own in known.items()}
    there = {name: bool(np.isfinite(own[asked]).any()) for name, own in known.items()}
    name = _counted_from(by, there[ACTUAL], terms)
    found, pnl, forecasts = by[name], known[name][asked], trials.forecasts.on(asked)
    covered = kupiec(found.exceptions, found.days, confidence)
    counts = transitions(found.hit, found.counted)
    independent = christoffersen(counts, covered)
    zone = basel_zone(found.exceptions, found.days, confidence)
    days = int(found.days[0])
    counted = _days(trials, found.counted)
    until = int(found.days_until_first[0])
    return Judgement(
        days=days,
        first=counted[0] if counted else None,
        last=counted[-1] if counted else None,
        exceptions=int(found.exceptions[0]),
        expected=float(1 - confidence) * days,
        counted_from=name,
        exceptions_of={own: int(by[own].exceptions[0]) if there[own] else None for own in known},
        exception_days=_days(trials, found.hit),
        missing_days=_days(trials, found.missing),
        carried=int((found.counted[0] & trials.carried[asked]).sum()),
        zone=Zone(int(zone.zone[0])).name.lower() if days else None,
        at_least=float(zone.at_least[0]),
        transitions=(int(counts.t00[0]), int(counts.t01[0]), int(counts.t10[0]), int(counts.t11[0])),
        coverage=_tested(covered),
        independence=_tested(independent.independence),
        conditional_coverage=_tested(independent.conditional_coverage),
        days_until_first=until or None,
        first_failure=_tested(time_until_first_failure(found.days_until_first, confidence)),
        shortfall=_shortfall(pnl, forecasts, confidence, site),
        distribution=_distribution(forecasts),
    )


def _exceptions(name: str, pnl: Floats, trials: Trials, terms: RecordTerms) -> Exceptions:
    """Those on the days asked for, by one kind of P&L."""
    var, tried = trials.forecasts.value_at_risk, trials.forecasts.tried
    if name == ACTUAL:
        told = np.logical_or.accumulate(np.isfinite(pnl))
        var, tried = np.where(told, var, np.nan), tried & told
    found = find_exceptions(pnl[np.newaxis, :], var[np.newaxis, :], terms.missing_counts, tried[np.newaxis, :])
    asked = trials.asked
    return Exceptions(found.hit[:, asked], found.counted[:, asked], found.missing[:, asked])


def _counted_from(by: Mapping[str, Exceptions], actual_known: bool, terms: RecordTerms) -> str:
    """Whose P&L gives the count."""
    if not actual_known or terms.pnl == HYPOTHETICAL:
        return HYPOTHETICAL
    if terms.pnl == ACTUAL:
        return ACTUAL
    return ACTUAL if larger_count(by[ACTUAL], by[HYPOTHETICAL]).from_actual[0] else HYPOTHETICAL


def _days(trials: Trials, chosen: Booleans) -> tuple[date, ...]:
    """chosen: (1, days asked for)."""
    asked = [day for day, own in zip(trials.days, trials.asked.tolist(), strict=True) if own]
    return tuple(day for day, own in zip(asked, chosen[0].tolist(), strict=True) if own)


def _tested(verdict: Verdict) -> Tested:
    reason = NoTest(int(verdict.reason[0]))
    if reason is not NoTest.NONE:
        return Tested(None, None, NO_TEST_TEXT[reason])
    return Tested(float(verdict.statistic[0]), float(verdict.p_value[0]))


def _shortfall(pnl: Floats, forecasts: Forecasts, confidence: Decimal, site: str) -> ShortfallTested:
    made = shortfall_test(
        pnl[np.newaxis, :],
        forecasts.value_at_risk[np.newaxis, :],
        forecasts.expected_shortfall[np.newaxis, :],
        confidence,
    )
    reason = NoTest(int(made.reason[0]))
    if reason is not NoTest.NONE:
        return ShortfallTested(None, None, None, None, NO_TEST_TEXT[reason])
    nu = _tail_of(pnl)
    simulated = _simulated(int(made.days[0]), confidence, nu, site)
    return ShortfallTested(
        statistic=float(made.statistic[0]),
        critical=critical_value(simulated, REJECTED_AT).value,
        p_value=float(p_value(made.statistic, simulated)[0]),
        degrees_of_freedom=None if np.isinf(nu) else nu,
    )


def _tail_of(pnl: Floats) -> float:
    """The degrees of freedom that outcomes have, rounded down to one of Z2_TAILS; infinite for the normal."""
    known = pnl[np.isfinite(pnl)]
    nu = float(fit_student(known[np.newaxis, :], "zero").nu[0])
    return nu if np.isinf(nu) else max((own for own in Z2_TAILS if own <= nu), default=Z2_TAILS[0])


@lru_cache(maxsize=64)
def _simulated(days: int, confidence: Decimal, nu: float, site: str) -> Floats:
    random = random_state(site, "Z2", str(days), str(confidence), str(nu))
    return simulate_z2(days, confidence, nu, random, Z2_PATHS)


def _distribution(forecasts: Forecasts) -> Tested:
    if forecasts.transform is None:
        return Tested(None, None, NO_TRANSFORM)
    return _tested(kolmogorov_smirnov(forecasts.transform[np.newaxis, :]))
