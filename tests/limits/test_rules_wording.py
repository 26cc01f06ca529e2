"""Rules as sentences, and what changed from one set to another."""

from __future__ import annotations

from dataclasses import fields, replace
from datetime import date

import pytest
from test_rules_reading import NQ_VAR, rule, rules

from monitor.limits.wording import differences, sentence
from monitor.words import Unit
from monitor.world import MeasureCall, Rule, Selector

SENTENCES = [
    (
        {"near": "4000000", "limit": "5000000"},
        "r: the gross exposure of the firm must be at most 5,000,000 in the firm's currency (near from 4,000,000 up).",
    ),
    (
        {"applies_to": "{book: any}", "each": "issuer", "measure": "{name: weight}", "limit": "10 %", "unit": "of_nav"},
        "r: the weight of each issuer must be at most 10 % of the firm's NAV.",
    ),
    (
        {"applies_to": "{book: north-quay}", "each": "issuer", "near": "9 %", "limit": "10 %", "unit": "of_nav"},
        "r: the gross exposure of each issuer, where book is north-quay, must be at most 10 % of the book's NAV "
        "(near from 9 % up).",
    ),
    (
        {"each": "position", "measure": "{name: weight}", "limit": "10 %", "unit": "of_nav"},
        "r: the weight of each position must be at most 10 % of its book's NAV.",
    ),
    (
        {"applies_to": "{book: {not: north-quay}}", "limit": "10 %", "unit": "of_nav"},
        "r: the gross exposure of all positions where book is not north-quay must be at most 10 % of NAV.",
    ),
    (
        {"applies_to": "{book: north-quay}", "measure": "{name: value_at_risk, method: student_t, horizon_days: 20}"},
        "r: the value at risk (Student's t distribution, confidence 97.5 %, horizon 20 days, window 250 sessions, "
        "drift zero) of book north-quay must be at most 5 in the book's currency.",
    ),
    (
        {
            "applies_to": "{kind: {not: [cash, future]}, style: any}",
            "limit": "",
            "limit_below": "2e6",
            "currency": "USD",
        },
        "r: the gross exposure of all positions where kind is none of cash, future and style is any "
        "must be at least 2,000,000 USD.",
    ),
    (
        {
            "applies_to": "{currency: {not: EUR}}",
            "each": "currency",
            "near_below": "-4",
            "limit_below": "-5",
            "near": "4",
        },
        "r: the gross exposure of each currency, where currency is not EUR, must be at least -5 and at most 5 in "
        "the firm's currency (near from -4 down or from 4 up).",
    ),
    (
        {
            "measure": "{name: loss_probability, threshold: 5 %, of: gross, drift: sample, method: normal}",
            "limit": "0.5 %",
            "unit": "ratio",
            "in_force": "{from: 2026-01-02, to: 2026-12-31}",
        },
        "r: the probability of a loss (above 5 % of the firm's gross exposure, normal distribution, horizon 1 day, "
        "window 250 sessions, drift as in the window) of the firm must be at most 0.5 %, from 2026-01-02, "
        "up to 2026-12-31.",
    ),
    (
        {"measure": "{name: loss_probability, threshold: 50000}", "limit": "1 %", "unit": "ratio", "each": "book"},
        "r: the probability of a loss (above 50,000 in its book's currency, normal distribution, horizon 1 day, "
        "window 250 sessions, drift zero) of each book must be at most 1 %.",
    ),
    (
        {"measure": "{name: volatility, method: ewma}", "each": "position", "limit": "40 %", "unit": "ratio"},
        "r: the annualised volatility (exponentially weighted, window 250 sessions, decay 0.95) of each position "
        "must be at most 40 %.",
    ),
    (
        {"measure": "{name: leverage}", "limit": "2.5", "unit": "ratio"},
        "r: the leverage of the firm must be at most 2.5.",
    ),
    (
        {"measure": "{name: day_loss}", "limit": "0.07 %", "unit": "of_gross"},
        "r: the loss of the day (hypothetical P&L) of the firm must be at most 0.07 % of the firm's gross exposure.",
    ),
    (
        {"measure": "{name: count}", "limit": "40", "unit": ""},
        "r: the number of positions of the firm must be at most 40.",
    ),
]


@pytest.mark.parametrize(("keys", "expected"), SENTENCES, ids=range(len(SENTENCES)))
def test_sentence_says_the_whole_limit(keys: dict[str, str], expected: str) -> None:
    assert sentence(rule(**keys)) == expected


def test_title_is_made_where_none_is_given() -> None:
    assert rule(near="4").title == "Gross exposure of the firm: at most 5 in the subject's currency"
    made = rule(applies_to="{kind: cash}", each="book", limit="10 %", unit="of_nav")
    assert made.title == "Gross exposure of each book, where kind is cash: at most 10 % of NAV"


def test_same_rules_do_not_differ() -> None:
    assert differences(rules(NQ_VAR), rules(NQ_VAR)) == []


def test_place_of_a_rule_makes_no_difference() -> None:
    [made] = rules(NQ_VAR)

    assert differences([made], [replace(made, file="elsewhere.yaml", line=99)]) == []


def test_new_gone_and_changed_rules_are_told() -> None:
    [old] = rules(NQ_VAR)
    new = replace(old, limit=1500000.0, tell=("board",))

    assert differences([old], [new, rule()]) == [
        "new rule r: the gross exposure of the firm must be at most 5 in the firm's currency.",
        "rule nq-var: limit was 1,250,000 in the subject's currency, is now 1,500,000 in the subject's currency",
        "rule nq-var: told was risk-desk, board, is now board",
    ]
    assert differences([old], []) == ["rule nq-var is no more (One-day 99 % VaR of North Quay)"]


OTHER = {
    "title": "Another",
    "applies_to": (Selector("book", ("far-east",)),),
    "each": "book",
    "unit": Unit.OF_NAV,
    "currency": "USD",
    "near": 1.0,
    "limit": 2.0,
    "near_below": -1.0,
    "limit_below": -2.0,
    "kind": "desk",
    "owner": None,
    "tell": ("board",),
    "in_force_from": date(2026, 1, 3),
    "in_force_to": date(2026, 1, 4),
    "because": None,
}


@pytest.mark.parametrize("field", [item.name for item in fields(Rule) if item.name not in ("id", "file", "line")])
def test_no_change_of_a_rule_passes_in_silence(field: str) -> None:
    [old] = rules(NQ_VAR)
    changed = (
        MeasureCall("value_at_risk", {**old.measure.parameters, "window": 250}) if field == "measure" else OTHER[field]
    )

    assert differences([old], [replace(old, **{field: changed})]) != []


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ("{name: value_at_risk, confidence: 0.99}", "{name: value_at_risk, confidence: 0.995}"),
        ("{name: value_at_risk, method: normal}", "{name: value_at_risk, method: normal, drift: sample}"),
        ("{name: value_at_risk, horizon_days: 1}", "{name: value_at_risk, horizon_days: 10}"),
        ("{name: volatility, method: ewma}", "{name: volatility, method: ewma, decay: 0.97}"),
        ("{name: volatility, method: ewma}", "{name: volatility}"),
    ],
)
def test_no_change_of_a_parameter_passes_in_silence(old: str, new: str) -> None:
    assert len([line for line in differences([rule(measure=old)], [rule(measure=new)]) if "measure was" in line]) == 1
