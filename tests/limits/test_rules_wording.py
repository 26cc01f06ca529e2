"""Rules as sentences, and what changed from one set to another."""

from __future__ import annotations

import re
from dataclasses import fields, replace
from datetime import date

import pytest
from test_limits_methods import ASKED, EACH, fits, measure_text, rule_text
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
        "r: the value at risk (Student's t distribution, confidence 97.5 %, horizon 20 days by the root of time, "
        "window 250 sessions, drift zero) of book north-quay must be at most 5 in the book's currency.",
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
        {
            "applies_to": "{book: north-quay}",
            "measure": "{name: value_at_risk, method: age_weighted, decay: 0.995}",
            "limit": "2 %",
            "unit": "of_nav",
        },
        "r: the value at risk (age-weighted historical simulation, confidence 97.5 %, horizon 1 day, window 250 "
        "sessions, decay 0.995) of book north-quay must be at most 2 % of the book's NAV.",
    ),
    (
        {"measure": "{name: value_at_risk, method: volatility_scaled}", "limit": "2 %", "unit": "of_nav"},
        "r: the value at risk (volatility-scaled historical simulation, confidence 97.5 %, horizon 1 day, window 250 "
        "sessions, scaled by exponentially weighted volatility, decay 0.95) of the firm must be at most 2 % of the "
        "firm's NAV.",
    ),
    (
        {
            "measure": "{name: expected_shortfall, method: volatility_scaled, scaling: garch, window: 500}",
            "limit": "2 %",
            "unit": "of_nav",
        },
        "r: the expected shortfall (volatility-scaled historical simulation, confidence 97.5 %, horizon 1 day, window "
        "500 sessions, scaled by GARCH volatility) of the firm must be at most 2 % of the firm's NAV.",
    ),
    (
        {"measure": "{name: value_at_risk, method: student_t, fit: kurtosis}", "each": "position"},
        "r: the value at risk (Student's t distribution, confidence 97.5 %, horizon 1 day, window 250 sessions, "
        "fitted to the kurtosis, drift zero) of each position must be at most 5 in its book's currency.",
    ),
    (
        {"measure": "{name: value_at_risk, method: peaks_over_threshold, tail_share: 15 %}", "currency": "USD"},
        "r: the value at risk (peaks over threshold with a generalised Pareto tail, confidence 97.5 %, horizon 1 day, "
        "window 250 sessions, from the worst 15 % of the sessions) of the firm must be at most 5 USD.",
    ),
    (
        {
            "measure": "{name: expected_shortfall, method: monte_carlo, distribution: student_t, paths: 50000}",
            "each": "book",
        },
        "r: the expected shortfall (Monte Carlo simulation, confidence 97.5 %, horizon 1 day, window 250 sessions, "
        "50,000 draws of Student's t distribution, drift zero) of each book must be at most 5 in its book's currency.",
    ),
    (
        {"measure": "{name: value_at_risk, horizon_days: 10, horizon: overlapping}"},
        "r: the value at risk (historical simulation, confidence 97.5 %, horizon 10 days by overlapping periods, "
        "window 250 sessions) of the firm must be at most 5 in the firm's currency.",
    ),
    (
        {"measure": "{name: component, of: expected_shortfall}", "each": "position", "limit": "4 %", "unit": "of_nav"},
        "r: the contribution of each position to its book's expected shortfall (historical simulation, confidence "
        "97.5 %, horizon 1 day, window 250 sessions) must be at most 4 % of its book's NAV.",
    ),
    (
        {"measure": "{name: incremental, within: firm}", "each": "book", "limit": "4 %", "unit": "of_nav"},
        "r: the incremental contribution of each book to the firm's value at risk (historical simulation, confidence "
        "97.5 %, horizon 1 day, window 250 sessions) must be at most 4 % of the firm's NAV.",
    ),
    (
        {"measure": "{name: marginal}", "each": "issuer", "limit": "5 %", "unit": "ratio"},
        "r: the marginal contribution of each issuer to the firm's value at risk (historical simulation, confidence "
        "97.5 %, horizon 1 day, window 250 sessions) must be at most 5 % of each further unit of exposure.",
    ),
    (
        {"measure": "{name: volatility, method: parkinson}", "each": "position", "limit": "40 %", "unit": "ratio"},
        "r: the annualised volatility (Parkinson's estimator from highs and lows, window 250 sessions) of each "
        "position must be at most 40 %.",
    ),
    (
        {"measure": "{name: tail_index}", "limit": "", "limit_below": "2.5", "unit": ""},
        "r: the tail index of losses (window 250 sessions, from the worst 10 % of the sessions) of the firm must be "
        "at least 2.5.",
    ),
    (
        {"measure": "{name: count}", "limit": "40", "unit": ""},
        "r: the number of positions of the firm must be at most 40.",
    ),
]


@pytest.mark.parametrize(("keys", "expected"), SENTENCES, ids=range(len(SENTENCES)))
def test_sentence_says_the_whole_limit(keys: dict[str, str], expected: str) -> None:
    assert sentence(rule(**keys)) == expected


EVERYTHING = [(asked, each) for asked in ASKED for each in EACH.values() if fits(asked, each)]
TOLD_AS = {
    "historical": "historical simulation",
    "age_weighted": "age-weighted historical simulation",
    "volatility_scaled": "volatility-scaled historical simulation",
    "normal": "normal distribution",
    "student_t": "Student's t distribution",
    "cornish_fisher": "Cornish-Fisher expansion",
    "peaks_over_threshold": "peaks over threshold",
    "monte_carlo": "Monte Carlo simulation",
    "sample": "sample standard deviation",
    "ewma": "exponentially weighted",
    "garch": "GARCH(1,1)",
    "parkinson": "Parkinson's estimator",
    "garman_klass": "Garman and Klass's estimator",
}


def rule_of(asked: str, measure: str = "") -> Rule:
    """A rule that asks this of the firm, or of each position where it says nothing of the firm."""
    text = rule_text(asked, None if fits(asked, None) else "position", "r")
    [only] = rules("rules:\n" + text.replace(measure_text(asked), measure or measure_text(asked)))
    return only


def test_everything_that_a_rule_can_ask_is_one_sentence_of_its_own() -> None:
    made = [
        (one, sentence(one)) for asked, each in EVERYTHING for one in rules("rules:\n" + rule_text(asked, each, "r"))
    ]

    for one, said in made:
        told = one.measure.parameters
        assert re.fullmatch(r"r: the .+ must be at (most|least) [\d,.]+( %)?( (of|in) .+)?\.", said)
        assert said.count("(") == said.count(")")
        assert not re.search(r"_|None|Decimal|\bTrue\b|\bFalse\b|  |\( |, ,|, \)", said)
        if "method" in told:
            assert f"({TOLD_AS[told['method']]}" in said or f", {TOLD_AS[told['method']]}" in said
        if "confidence" in told:
            assert f"confidence {float(told['confidence'] * 100):g} %" in said
        if "window" in told:
            assert f"window {told['window']} sessions" in said
        if "horizon_days" in told:
            assert f"horizon {told['horizon_days']} day" in said
        assert ("drift" in said) == ("drift" in told)
    # Different rules are told differently; that of a measure alone and with its default method is the same rule.
    sentences = {}
    for one, said in made:
        measure = one.measure
        assert sentences.setdefault(said, (one.each, measure)) == (one.each, measure)


# Another value of each parameter, and what the sentence then says.
CHANGES = {
    "confidence": ("0.9", "confidence 90 %"),
    "horizon_days": ("7", "horizon 7 days"),
    "window": ("234", "window 234 sessions"),
    "horizon": ("overlapping", "overlapping periods"),
    "drift": ("sample", "drift as in the window"),
    "decay": ("0.97", "decay 0.97"),
    "scaling": ("garch", "scaled by GARCH volatility"),
    "fit": ("kurtosis", "fitted to the kurtosis"),
    "tail_share": ("17 %", "from the worst 17 % of the sessions"),
    "distribution": ("student_t", "draws of Student's t distribution"),
    "paths": ("77000", "77,000 draws"),
    "of": ("expected_shortfall", "expected shortfall"),
}
CHANGED = [
    (asked, key)
    for asked in ASKED
    for key in CHANGES
    if key in rule_of(asked).measure.parameters
    # Of a loss `of` is the denominator of the threshold; the other two go with one value of another parameter only.
    and not (key == "of" and asked.startswith("loss"))
    and not (key == "scaling" and asked == "scaled-slowly")
    and not (key == "of" and "age_weighted" in asked and not asked.startswith("incremental"))
]


@pytest.mark.parametrize(("asked", "key"), CHANGED)
def test_no_change_of_any_parameter_of_any_method_passes_in_silence(asked: str, key: str) -> None:
    value, said = CHANGES[key]
    old = rule_of(asked)
    new = rule_of(
        asked, re.sub(rf", {key}: [^,}}]+", "", measure_text(asked)).removesuffix("}") + f", {key}: {value}}}"
    )

    assert said in sentence(new)
    if new.measure == old.measure:  # asked for already
        assert said in sentence(old)
        return
    # The title that is made for a contribution changes with what it is one to.
    [line] = [line for line in differences([old], [new]) if not line.startswith("rule r: title was ")]
    assert line.startswith("rule r: measure was ")
    assert said in line.partition(", is now ")[2]
    assert sentence(new) != sentence(old)


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
