"""The parts of an invented evening of Saltmere Trust. The figures are made up for these tests."""

from __future__ import annotations

from dataclasses import replace
from datetime import date
from decimal import Decimal

from monitor.excesses.register import Excess
from monitor.facts import FileRefused
from monitor.words import (
    ExcessState,
    FileKind,
    Finding,
    Side,
    Standing,
    Subject,
    SubjectKind,
    Unit,
)
from monitor.world import Answer, BookFigures, How, MeasureCall, Rule, Selector

EVENING = date(2026, 3, 4)
HASH = "ab" * 32
NORTH_QUAY = Subject("book:north-quay", SubjectKind.BOOK, "north-quay")
FIRM = Subject("firm", SubjectKind.FIRM, None)
HISTORICAL = How("historical", Decimal("0.99"), 1, 500)


def make_rule(**changes: object) -> Rule:
    rule = Rule(
        id="nq-var",
        title="One-day 99 % VaR of North Quay",
        applies_to=(Selector("book", ("north-quay",)),),
        each=None,
        measure=MeasureCall("value_at_risk", {"method": "historical"}),
        unit=Unit.AMOUNT,
        currency=None,
        near=1_000_000.0,
        limit=1_250_000.0,
        near_below=None,
        limit_below=None,
        kind="board",
        owner="m.osei",
        tell=("risk-desk",),
        in_force_from=None,
        in_force_to=None,
        because="Risk committee, minute 4 of 2025-12-16",
        file="rules/board.yaml",
        line=2,
    )
    return replace(rule, **changes)


def make_answer(**changes: object) -> Answer:
    answer = Answer(
        rule="nq-var",
        subject=NORTH_QUAY,
        measure="value_at_risk",
        standing=Standing.OVER,
        value=1_312_400.0,
        unit=Unit.AMOUNT,
        currency="EUR",
        near=1_000_000.0,
        limit=1_250_000.0,
        limit_below=None,
        side=Side.ABOVE,
        distance=62_400.0,
        utilisation=1.04992,
        low=1_190_000.0,
        high=1_488_000.0,
        unbounded=None,
        n=500,
        reason=None,
        marks=(),
        how=HISTORICAL,
    )
    return replace(answer, **changes)


def make_excess(**changes: object) -> Excess:
    excess = Excess(
        id="x-0007",
        rule="nq-var",
        subject=NORTH_QUAY,
        side=Side.ABOVE,
        unit=Unit.AMOUNT,
        currency="EUR",
        owner="m.osei",
        state=ExcessState.OPEN,
        opened_on=EVENING,
        opened_value=1_312_400.0,
        last_on=EVENING,
        last_value=1_312_400.0,
        worst_on=EVENING,
        worst_value=1_312_400.0,
        worst_distance=62_400.0,
        level=1_250_000.0,
    )
    return replace(excess, **changes)


def single_name(instrument: str, value: float) -> tuple[Excess, Answer]:
    """A position over a tenth of net assets: its excess and its answer."""
    subject = Subject(f"position:far-east/{instrument}", SubjectKind.POSITION, "far-east")
    answer = make_answer(
        rule="single-name",
        subject=subject,
        measure="weight",
        value=value,
        unit=Unit.OF_NAV,
        currency=None,
        near=0.09,
        limit=0.10,
        distance=value - 0.10,
        utilisation=value / 0.10,
        low=None,
        high=None,
        n=None,
        how=How(),
    )
    excess = make_excess(
        id=f"x-{instrument}",
        rule="single-name",
        subject=subject,
        unit=Unit.OF_NAV,
        currency=None,
        opened_value=value,
        last_value=value,
        worst_value=value,
        worst_distance=value - 0.10,
        level=0.10,
    )
    return excess, answer


RULES = {
    "nq-var": make_rule(),
    "single-name": make_rule(
        id="single-name",
        title="No position above a tenth of net assets",
        each="position",
        measure=MeasureCall("weight", {}),
        unit=Unit.OF_NAV,
        near=0.09,
        limit=0.10,
        kind=None,
    ),
    "firm-lev": make_rule(id="firm-lev", title="Leverage of the firm", measure=MeasureCall("leverage", {})),
}
NEAR = make_answer(
    rule="firm-lev",
    subject=FIRM,
    measure="leverage",
    standing=Standing.NEAR,
    value=1.9992,
    unit=Unit.RATIO,
    currency=None,
    near=1.8,
    limit=2.0,
    distance=-0.0008,
    utilisation=0.9996,
    low=None,
    high=None,
    n=None,
    how=How(),
)
WITHIN = make_answer(rule="nq-var", standing=Standing.WITHIN, value=640_000.0, distance=-610_000.0, utilisation=0.512)
BOOKS = (
    BookFigures(
        NORTH_QUAY,
        "EUR",
        31,
        88e6,
        52e6,
        60e6,
        date(2026, 3, 3),
        1_312_400.0,
        1_701_000.0,
        -212_350.0,
        500,
        HISTORICAL,
        (),
    ),
    BookFigures(
        FIRM, "EUR", 52, 190e6, 121e6, 140e6, date(2026, 3, 3), 2_004_000.0, 2_600_000.0, 95_020.0, 500, HISTORICAL, ()
    ),
)
REFUSED = FileRefused(
    name="prices_2026-03-04.csv",
    file=FileKind.PRICES,
    source="prices",
    day=EVENING,
    sha256="cd" * 32,
    size=18_201,
    reasons=7,
    findings=(
        Finding("prices_2026-03-04.csv", 14, 2, "'1O3.2'", "a price such as 103.25", "Send the file again."),
        Finding("prices_2026-03-04.csv", 15, 2, "''", "a price such as 103.25"),
    ),
)
