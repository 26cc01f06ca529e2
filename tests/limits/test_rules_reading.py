"""Rule files to rules: what is filled in, what percentages and levels become, and what identifies a rule."""

from __future__ import annotations

import time
from dataclasses import replace
from datetime import date
from decimal import Decimal
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.limits.catalogue import LATER_MEASURES, MEASURES
from monitor.limits.context import RuleContext
from monitor.limits.defaults import Defaults
from monitor.limits.rules import read_rules
from monitor.words import Unit, WrongUse
from monitor.world import MeasureCall, Rule, Selector

CONTEXT = RuleContext(
    books=("north-quay", "far-east"),
    people=("m.osei",),
    groups=("risk-desk", "board"),
    told_by_default="risk-desk",
    defaults=Defaults(window=250, confidence="97.5 %", decay="95 %"),
)
NQ_VAR = """\
rules:
  - id: nq-var
    title: One-day 99 % VaR of North Quay
    applies_to: {book: north-quay}
    measure: {name: value_at_risk, method: historical, confidence: 0.99, horizon_days: 1, window: 500}
    near: 1000000
    limit: 1250000
    unit: amount
    class: board
    owner: m.osei
    tell: [risk-desk, board]
    in_force: {from: 2026-01-02}
    because: Risk committee, minute 4 of 2025-12-16
"""


def rules(text: str) -> tuple[Rule, ...]:
    return read_rules([("rules/a.yaml", text.encode())], CONTEXT)


def rule(**keys: str) -> Rule:
    """One rule of the keys given, on gross exposure below 5 where they say nothing else."""
    all_keys = {"id": "r", "measure": "{name: gross}", "limit": "5", "unit": "amount", **keys}
    lines = [f"    {key}: {value}\n" for key, value in all_keys.items() if value]
    [only] = rules("rules:\n  -\n" + "".join(lines))
    return only


def levels(made: Rule) -> tuple[float | None, ...]:
    return made.near_below, made.limit_below, made.near, made.limit


def test_every_key_of_a_rule_is_kept() -> None:
    assert rules(NQ_VAR) == (
        Rule(
            id="nq-var",
            title="One-day 99 % VaR of North Quay",
            applies_to=(Selector("book", ("north-quay",)),),
            each=None,
            measure=MeasureCall(
                "value_at_risk",
                {
                    "method": "historical",
                    "confidence": Decimal("0.99"),
                    "horizon_days": 1,
                    "horizon": "square_root",
                    "window": 500,
                },
            ),
            unit=Unit.AMOUNT,
            currency=None,
            near=1000000.0,
            limit=1250000.0,
            near_below=None,
            limit_below=None,
            kind="board",
            owner="m.osei",
            tell=("risk-desk", "board"),
            in_force_from=date(2026, 1, 2),
            in_force_to=None,
            because="Risk committee, minute 4 of 2025-12-16",
            file="rules/a.yaml",
            line=2,
        ),
    )


def test_what_a_rule_leaves_out_comes_from_the_site() -> None:
    made = rule(measure="{name: expected_shortfall}", near="4")

    assert made.measure.parameters == {
        "method": "historical",
        "confidence": Decimal("0.975"),
        "horizon_days": 1,
        "horizon": "square_root",
        "window": 250,
    }
    assert (made.applies_to, made.each, made.tell) == ((), None, ("risk-desk",))


@pytest.mark.parametrize(
    ("measure", "parameters"),
    [
        ("{name: gross}", {}),
        ("{name: volatility}", {"method": "sample", "window": 250}),
        ("{name: volatility, method: garch}", {"method": "garch", "window": 250}),
        ("{name: volatility, method: ewma, decay: 0.97}", {"method": "ewma", "window": 250, "decay": 0.97}),
        ("{name: day_loss}", {"basis": "hypothetical"}),
        (
            "{name: value_at_risk, method: normal, drift: sample, confidence: 99 %}",
            {
                "method": "normal",
                "confidence": Decimal("0.99"),
                "horizon_days": 1,
                "horizon": "square_root",
                "window": 250,
                "drift": "sample",
            },
        ),
        (
            "{name: value_at_risk, method: volatility_scaled}",
            {
                "method": "volatility_scaled",
                "confidence": Decimal("0.975"),
                "horizon_days": 1,
                "window": 250,
                "decay": 0.95,
                "scaling": "ewma",
            },
        ),
        (
            "{name: expected_shortfall, method: volatility_scaled, scaling: garch}",
            {
                "method": "volatility_scaled",
                "confidence": Decimal("0.975"),
                "horizon_days": 1,
                "window": 250,
                "scaling": "garch",
            },
        ),
        (
            "{name: value_at_risk, method: monte_carlo, distribution: student_t, horizon_days: 10}",
            {
                "method": "monte_carlo",
                "confidence": Decimal("0.975"),
                "horizon_days": 10,
                "window": 250,
                "drift": "zero",
                "distribution": "student_t",
                "paths": 100_000,
            },
        ),
        (
            "{name: component, of: expected_shortfall}",
            {
                "of": "expected_shortfall",
                "within": "book",
                "method": "historical",
                "confidence": Decimal("0.975"),
                "horizon_days": 1,
                "window": 250,
            },
        ),
    ],
)
def test_parameters_are_complete_and_plain(measure: str, parameters: dict[str, object]) -> None:
    made = rule(measure=measure).measure.parameters

    assert made == parameters
    assert {key: type(value) for key, value in made.items()} == {key: type(value) for key, value in parameters.items()}


@pytest.mark.parametrize(
    ("written", "threshold", "of"),
    [("5 %, of: nav", 0.05, "nav"), ("0.5 %, of: gross", 0.005, "gross"), ("5e4", 5e4, None)],
)
def test_threshold_is_an_amount_or_a_share(written: str, threshold: float, of: str | None) -> None:
    made = rule(measure=f"{{name: loss_probability, threshold: {written}}}", limit="1 %", unit="ratio")

    assert made.measure.parameters == {
        "threshold": threshold,
        "of": of,
        "method": "normal",
        "horizon_days": 1,
        "horizon": "square_root",
        "window": 250,
        "drift": "zero",
    }
    assert made.limit == 0.01


@pytest.mark.parametrize(
    ("written", "expected"),
    [
        ("book: north-quay", Selector("book", ("north-quay",))),
        ("book: any", Selector("book", None)),
        ("book: [far-east, north-quay]", Selector("book", ("far-east", "north-quay"))),
        ("kind: {not: cash}", Selector("kind", ("cash",), negated=True)),
        ("currency: {not: [EUR, JPY]}", Selector("currency", ("EUR", "JPY"), negated=True)),
        ('issuer: "123"', Selector("issuer", ("123",))),
        ("style: any", Selector("style", None)),
    ],
)
def test_selector(written: str, expected: Selector) -> None:
    assert rule(applies_to=f"{{{written}}}").applies_to == (expected,)


@pytest.mark.parametrize(
    ("keys", "expected"),
    [
        ({"near": "4"}, (None, None, 4.0, 5.0)),
        ({"limit": "", "limit_below": "5", "near": "6"}, (6.0, 5.0, None, None)),
        ({"limit": "", "limit_below": "5", "near_below": "6"}, (6.0, 5.0, None, None)),
        ({"limit_below": "-5", "near": "4"}, (None, -5.0, 4.0, 5.0)),
        ({"limit_below": "-5", "near": "4", "near_below": "-4"}, (-4.0, -5.0, 4.0, 5.0)),
        ({"limit": "9 %", "unit": "of_nav"}, (None, None, None, 0.09)),
        ({"limit": "0.09", "unit": "of_nav"}, (None, None, None, 0.09)),
        ({"limit": "200 %", "unit": "of_gross"}, (None, None, None, 2.0)),
        ({"limit": "300 %", "unit": "ratio", "measure": "{name: leverage}"}, (None, None, None, 3.0)),
        ({"limit": "12.5", "unit": "ratio", "measure": "{name: leverage}"}, (None, None, None, 12.5)),
        ({"limit": "1.25e6"}, (None, None, None, 1250000.0)),
    ],
)
def test_levels(keys: dict[str, str], expected: tuple[float | None, ...]) -> None:
    assert levels(rule(**keys)) == expected


@given(st.decimals(min_value="0.0001", max_value=500, places=4))
def test_percentage_is_the_float_nearest_to_its_hundredth(number: Decimal) -> None:
    assert rule(limit=f"{number} %", unit="of_nav").limit == float(f"{number}e-2")


def test_only_unit_of_a_measure_may_be_left_out() -> None:
    assert rule(measure="{name: count}", unit="").unit is Unit.NUMBER
    assert rule(measure="{name: leverage}", unit="").unit is Unit.RATIO


def test_tag_of_the_site_makes_subjects() -> None:
    assert rule(each="style").each == "style"


def test_findings_of_every_file_come_together() -> None:
    broken = b"rules:\n  - {id: a, measure: {name: nett}, limit: 5, unit: amount}\n"
    again = b"rules:\n  - {id: a, measure: {name: net}, limit: 5, unit: amount}\n"

    with pytest.raises(WrongUse) as caught:
        read_rules([("a.yaml", broken), ("b.yaml", b"rules: ["), ("c.yaml", again)], CONTEXT)

    places = [(finding.file, finding.line, finding.column) for finding in caught.value.findings]
    assert places == [("a.yaml", 2, 29), ("b.yaml", 2, 1), ("c.yaml", 2, 10)]
    assert "'a' again (first at a.yaml:2)" in str(caught.value)


def test_rules_keep_the_order_of_the_files() -> None:
    files = [(name, NQ_VAR.replace("nq-var", name).encode()) for name in ("z", "a", "m")]

    assert [made.id for made in read_rules(files, CONTEXT)] == ["z", "a", "m"]


def test_fifty_rules_are_read_in_a_blink() -> None:
    text = "rules:\n" + "".join(NQ_VAR.removeprefix("rules:\n").replace("nq-var", f"r{number}") for number in range(50))
    rules(NQ_VAR)

    start = time.perf_counter()
    made = rules(text)
    taken = time.perf_counter() - start

    assert len(made) == 50
    assert taken < 0.2


def test_catalogue_and_measures_name_the_same() -> None:
    from monitor.limits import measures

    assert set(MEASURES) == set(measures.MEASURES)
    assert set(MEASURES).isdisjoint(LATER_MEASURES)
    # The measures of the design, section 7, and beside `component` its kin `incremental` and `marginal`.
    assert len(MEASURES) + len(LATER_MEASURES) == 30


@pytest.mark.parametrize(
    "file", sorted((Path(__file__).parents[2] / "rules").glob("*.yaml")), ids=lambda file: file.stem
)
@pytest.mark.parametrize("books", [("only",), ("north-quay", "far-east")])
def test_example_rules_stand_as_they_are(file: Path, books: tuple[str, ...]) -> None:
    text = file.read_text(encoding="utf-8")
    bare = replace(CONTEXT, books=books, people=(), groups=("everyone",), told_by_default="everyone")

    made = read_rules([(file.name, text.encode())], bare)

    assert len(made) >= 4
    assert all(each.because for each in made)
    assert "not the worst" in text
    assert "Source" in text
    assert "decide" in text or "require" in text


def test_examples_of_all_kinds_are_there() -> None:
    names = {file.stem for file in (Path(__file__).parents[2] / "rules").glob("*.yaml")}

    assert names == {"fund", "trading_desk", "treasury"}


def test_fund_example_is_the_absolute_var_of_cesr_10_788() -> None:
    file = Path(__file__).parents[2] / "rules" / "fund.yaml"
    made = {each.id: each for each in read_rules([("f", file.read_bytes())], CONTEXT)}["fund-absolute-var"]

    # CESR/10-788 (2010), box 15 and the limits: 99 %, 20 business days, at least 250 days of history, 20 % of NAV
    assert (made.limit, made.unit) == (0.2, Unit.OF_NAV)
    assert made.measure.parameters["confidence"] == Decimal("0.99")
    assert made.measure.parameters["horizon_days"] == 20
    assert made.measure.parameters["window"] == 250
