"""An invented evening of Saltmere Trust for the tests of pages. Every number is made up."""

from __future__ import annotations

from dataclasses import replace
from datetime import date, timedelta
from decimal import Decimal

import numpy as np

from monitor.excesses.register import Excess
from monitor.report.page import AgedExcess, Before, Neighbours, Page, Series
from monitor.words import (
    CuredBy,
    ExcessState,
    Mark,
    MarkKind,
    Recipe,
    Side,
    Standing,
    Subject,
    SubjectKind,
    Unit,
)
from monitor.world import Answer, BookFigures, How, MeasureCall, Rule, Standings, Unmeasured

DAY = date(2026, 3, 12)
HISTORICAL = How(method="historical", confidence=Decimal("0.99"), horizon_days=1, window=500)
RECIPE = Recipe(
    date=DAY, round="europe", positions_on=DAY, prices_on=DAY, window_to=DAY, rules="9f2c" * 16, known=18201
)
FIRM = Subject("firm", SubjectKind.FIRM, None)


def book(name: str) -> Subject:
    return Subject(f"book:{name}", SubjectKind.BOOK, name)


def position(name: str, instrument: str) -> Subject:
    return Subject(f"position:{name}/{instrument}", SubjectKind.POSITION, name)


def rule(name: str, title: str, measure: str = "value_at_risk", unit: Unit = Unit.AMOUNT) -> Rule:
    call = MeasureCall(measure, {})
    return Rule(
        name, title, (), None, call, unit, None, None, None, None, None, "board", "m.osei", (), None, None, None, "r", 1
    )


def answer(
    name: str,
    subject: Subject,
    value: float | None,
    near: float | None,
    limit: float | None,
    *,
    measure: str = "value_at_risk",
    unit: Unit = Unit.AMOUNT,
    currency: str | None = None,
    how: How = HISTORICAL,
    n: int | None = 500,
    reason: str | None = None,
    marks: tuple[Mark, ...] = (),
    low: float | None = None,
    high: float | None = None,
) -> Answer:
    """An answer of an upper limit, its standing and utilisation worked out as the limits would."""
    standing, used, distance = Standing.UNMEASURED, None, None
    if value is not None and limit is not None:
        distance = value - limit
        used = value / limit if value > 0 and limit > 0 else None
        standing = Standing.OVER if distance > 0 else Standing.NEAR if near and value >= near else Standing.WITHIN
    return Answer(
        rule=name, subject=subject, measure=measure, standing=standing, value=value, unit=unit, currency=currency,
        near=near, limit=limit, limit_below=None, side=Side.ABOVE, distance=distance, utilisation=used, low=low,
        high=high, n=n, reason=reason, marks=marks, how=how,
        unbounded=None,
    )  # fmt: skip


RULES = {
    made.id: made
    for made in (
        rule("nq-var", "One-day 99 % VaR of North Quay"),
        rule("fe-var", "One-day 99 % VaR of Far East"),
        rule("cl-es", "One-day 97.5 % shortfall of Cove Lane", "expected_shortfall"),
        rule("firm-var", "One-day 99 % VaR of the whole firm"),
        rule("single-name", "No issuer above a tenth of net assets", "weight", Unit.OF_NAV),
        rule("leverage", "Gross exposure at most twice the net assets", "leverage", Unit.RATIO),
        rule("vol", "Yearly volatility at most 18 %", "volatility", Unit.RATIO),
        rule("cash", "At least two per cent in cash", "weight", Unit.OF_NAV),
    )
}
ISSUERS = (
    "Aldern Birkholm Calderweir Dunmarra Eskbrook Fennick Garrowby Hallin Inverlea Jorvane Kestrelbay Lowmoor Marrick "
    "Netherby Ostrand Pellworth Quennel Ravensey Skarholt Tarnside Ulverby Vennor Wexcombe Yarrowby Zennick Ambleford "
    "Brackwater Coldrey Dornish Ellerby"
).split()


def answers(shift: float = 1.0) -> tuple[Answer, ...]:
    """Forty standings; `shift` moves the weights, so that another evening differs from this one."""
    weights = np.random.RandomState(7).gamma(3.0, 0.014, len(ISSUERS)) * shift
    made = [
        answer("nq-var", book("north-quay"), 1_542_317 * shift, 1_000_000, 1_250_000, currency="EUR", low=1_301_000,
               high=1_878_000),
        answer("fe-var", book("far-east"), 81_204_113, 80_000_000, 95_000_000, currency="JPY", n=487,
               marks=(Mark(MarkKind.SHORT, "487 of 500 sessions"),)),
        answer("cl-es", book("cove-lane"), 412_888, 450_000, 500_000, currency="GBP", measure="expected_shortfall",
               how=replace(HISTORICAL, confidence=Decimal("0.975"))),
        answer("firm-var", FIRM, 2_004_120 * shift, 1_900_000, 2_000_000, currency="EUR"),
        answer("vol", book("cove-lane"), None, 0.15, 0.18, measure="volatility", unit=Unit.RATIO, n=212,
               how=How(method="ewma", window=500),
               reason="212 of 500 sessions have a return; at least 95 % are needed"),
    ]  # fmt: skip
    for name, value in (("north-quay", 1.31), ("far-east", 1.84), ("cove-lane", 0.92)):
        made.append(
            answer("leverage", book(name), value, 1.8, 2.0, measure="leverage", unit=Unit.RATIO, how=How(), n=None)
        )
    floor = answer("cash", book("north-quay"), 0.034, None, None, measure="weight", unit=Unit.OF_NAV, how=How(), n=None)
    made.append(
        replace(floor, standing=Standing.WITHIN, limit_below=0.02, near=0.025, side=Side.BELOW, distance=-0.014,
                utilisation=0.02 / 0.034)
    )  # fmt: skip
    for issuer, weight in zip(ISSUERS, weights, strict=True):
        carried = (Mark(MarkKind.CARRIED, "close of 2026-03-10, two sessions old"),) if issuer == "Ostrand" else ()
        group = Subject(f"group:north-quay issuer {issuer}", SubjectKind.GROUP, "north-quay")
        made.append(
            answer("single-name", group, float(weight), 0.09, 0.1, measure="weight", unit=Unit.OF_NAV, how=How(),
                   n=None, marks=carried)
        )  # fmt: skip
    return tuple(made)


def figures_of(subject: Subject, currency: str, size: float) -> BookFigures:
    return BookFigures(
        subject=subject, currency=currency, positions=17, gross=62 * size, net=41 * size, nav=47 * size, nav_on=DAY,
        value_at_risk=1.54 * size, expected_shortfall=1.92 * size, pnl=-0.31 * size, n=500, how=HISTORICAL, reasons=(),
    )  # fmt: skip


def standings(shift: float = 1.0) -> Standings:
    books = (
        figures_of(book("north-quay"), "EUR", 1e6),
        replace(figures_of(book("far-east"), "JPY", 5.3e7), nav_on=date(2026, 3, 11)),
        replace(figures_of(book("cove-lane"), "GBP", 3e5), nav=None, nav_on=None, reasons=("no NAV since 2026-03-06",)),
        figures_of(FIRM, "EUR", 1.4e6),
    )
    unmeasured = (
        Unmeasured(position("cove-lane", "VENN"), "no close since 2026-02-27 and its market was open"),
        Unmeasured(position("cove-lane", "ZENN"), "no close since 2026-02-27 and its market was open"),
    )
    uncovered = (position("far-east", "CASH-JPY"), position("cove-lane", "CASH-GBP"))
    return Standings(answers(shift), books, unmeasured, uncovered, ("nav of cove-lane: nothing came by 19:00",))


def excess(number: int, name: str, subject: Subject, opened: date, value: float, level: float, unit: Unit) -> Excess:
    return Excess(
        id=f"x{number:04d}", rule=name, subject=subject, side=Side.ABOVE, unit=unit,
        currency="EUR" if unit is Unit.AMOUNT else None, owner="m.osei", state=ExcessState.OPEN, opened_on=opened,
        opened_value=value * 0.97, last_on=DAY, last_value=value, worst_on=DAY, worst_value=value,
        worst_distance=value - level, level=level,
    )  # fmt: skip


def series(subject: Subject, currency: str, size: float, days: int = 250, seed: int = 3) -> Series:
    random = np.random.RandomState(seed)
    level = 1.2 + 0.5 * np.sin(np.arange(days) / 40.0) ** 2
    pnl = random.standard_t(4, days) * 0.36 * level * size
    start = DAY - timedelta(days=days - 1 + 2 * (days // 5))
    weekdays = [start + timedelta(days=ahead) for ahead in range(days * 2)]
    weekdays = [day for day in weekdays if day.weekday() < 5][:days]
    return Series(subject, currency, tuple(weekdays), tuple((level * size).tolist()), tuple(pnl.tolist()))


def evening() -> Page:
    ravensey = Subject("group:north-quay issuer Ravensey", SubjectKind.GROUP, "north-quay")
    opened = excess(412, "firm-var", FIRM, DAY, 2_004_120, 2_000_000, Unit.AMOUNT)
    older = excess(398, "nq-var", book("north-quay"), date(2026, 3, 5), 1_542_317, 1_250_000, Unit.AMOUNT)
    oldest = excess(377, "single-name", ravensey, date(2026, 2, 18), 0.1123, 0.1, Unit.OF_NAV)
    cured = replace(
        excess(391, "leverage", book("far-east"), date(2026, 3, 9), 2.07, 2.0, Unit.RATIO),
        state=ExcessState.CURED, cured_on=DAY, cured_by=CuredBy.FIGURE, cured_value=1.84,
    )  # fmt: skip
    return Page(
        site="Saltmere Trust",
        recipe=RECIPE,
        edition=1,
        seq=18202,
        hash="4be1" * 16,
        checked_at="2026-03-12 19:15 Europe/Dublin",
        standings=standings(),
        before=Before(date(2026, 3, 11), standings(0.93)),
        rules=RULES,
        alive=(AgedExcess(opened, 1), AgedExcess(older, 6), AgedExcess(oldest, 17)),
        opened=(opened,),
        cured=(cured,),
        series=(
            series(book("north-quay"), "EUR", 1e6),
            series(book("far-east"), "JPY", 5.3e7, seed=5),
            series(book("cove-lane"), "GBP", 3e5, seed=6),
        ),
        neighbours=Neighbours("2026-03-11_europe_1.html", "2026-03-13_europe_1.html", "index.html"),
    )
