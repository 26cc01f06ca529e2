"""What a round answers for, what no rule covers, and what is listed as unmeasured."""

from __future__ import annotations

from dataclasses import replace
from datetime import date, timedelta

import pytest
from drop_site import FRIDAY, WEEK, SmallSite, by_key, rule, rules

from monitor.limits.evaluate import evaluate
from monitor.words import Outcome

ROUNDS = """\
rounds:
  - {id: asia, books: [east], time_zone: Asia/Tokyo, at: "18:00", files_due_by: "17:30", give_up_at: "20:00"}
  - {id: later, books: [quay, west], at: "21:00", files_due_by: "20:00", give_up_at: "22:00"}
"""
GROSS = "{name: gross}"


def write(site: SmallSite) -> SmallSite:
    site.leave(
        "instruments.csv",
        ["instrument,currency,issuer,calendar", "ALFA,EUR,one,XDUB", "BETA,USD,two,XNYS", "HANA,JPY,three,XTKS"],
    )
    site.prices({"ALFA": (10.0,) * 5, "BETA": (20.0,) * 5, "HANA": (100.0,) * 5})
    site.rates({"EURUSD": (1.25,) * 5, "EURJPY": (160.0,) * 5})
    for day in WEEK:
        site.positions("quay,ALFA,1", "west,BETA,2", "east,HANA,3", day=day)
    return site


@pytest.fixture
def site(tmp_path) -> SmallSite:
    return write(SmallSite(tmp_path / "site", more=ROUNDS))


def settle(site: SmallSite, *lines: str) -> None:
    site.settle(rules(*lines), more=ROUNDS)


def test_subjects_across_books_are_asked_about_in_the_round_that_completes_the_date(site):
    settle(
        site,
        rule("firm", GROSS),
        rule("book", GROSS, each="book"),
        rule("line", GROSS, each="position"),
        rule("issuer", GROSS, each="issuer"),
        rule("two", GROSS, applies_to="{book: [east, quay]}"),
        rule("east", GROSS, applies_to="{book: east}", each="issuer"),
    )

    asia, later = site.standings(round_id="asia"), site.standings(round_id="later")

    assert set(by_key(asia)) == {
        ("book", "book:east"),
        ("line", "position:east/HANA"),
        ("east", "group:book=east; issuer=three"),
    }
    assert set(by_key(later)) == {
        ("firm", "firm"),
        ("book", "book:quay"),
        ("book", "book:west"),
        ("line", "position:quay/ALFA"),
        ("line", "position:west/BETA"),
        ("issuer", "group:issuer=one"),
        ("issuer", "group:issuer=two"),
        ("issuer", "group:issuer=three"),
        ("two", "group:book=east|quay"),
    }
    assert [book.subject.key for book in asia.books] == ["book:east"]
    assert [book.subject.key for book in later.books] == ["book:quay", "book:west", "firm"]


def test_a_firm_wide_figure_needs_the_books_of_every_round(site):
    settle(site, rule("firm", GROSS))
    site.positions("quay,ALFA,1", "west,BETA,2")

    later = site.standings(round_id="later")

    reason = f"no accepted file gives the positions of east on {FRIDAY}"
    assert by_key(later)["firm", "firm"].reason == reason
    assert later.lacking == (reason,)
    assert later.outcome is Outcome.INCOMPLETE


def test_a_round_is_not_troubled_by_the_books_of_another(site):
    settle(site, rule("book", GROSS, each="book"))
    site.positions("east,HANA,3")
    site.prices({"HANA": (100.0,) * 5})

    asia = site.standings(round_id="asia")

    assert (asia.lacking, asia.unmeasured, asia.outcome) == ((), (), Outcome.WITHIN)


def uncovered(site: SmallSite, *lines: str) -> list[str]:
    site.settle(rules(*lines))
    return [subject.key for subject in site.standings().uncovered]


@pytest.mark.parametrize(
    ("line", "expected"),
    [
        (rule("r", GROSS), []),
        (rule("r", GROSS, applies_to="{book: quay}"), ["book:west", "book:east"]),
        (rule("r", GROSS, each="position"), []),
        (rule("r", GROSS, applies_to="{book: {not: west}}"), ["book:west"]),
        (rule("r", GROSS, applies_to="{instrument: ALFA}"), ["position:quay/BETA", "book:west", "book:east"]),
        (rule("r", GROSS, applies_to="{issuer: nobody}"), ["book:quay", "book:west", "book:east"]),
        (rule("r", GROSS, each="desk"), ["book:quay", "book:west", "book:east"]),
        (rule("r", GROSS, in_force="{from: 2026-03-07}"), ["book:quay", "book:west", "book:east"]),
        (rule("r", GROSS, in_force="{to: 2026-03-05}"), ["book:quay", "book:west", "book:east"]),
        (rule("r", GROSS, in_force="{from: 2026-03-06, to: 2026-03-06}"), []),
    ],
)
def test_positions_and_books_that_no_rule_covers_are_listed(site, line, expected):
    site.positions("quay,ALFA,1", "quay,BETA,1", "west,BETA,2", "east,HANA,3")

    assert uncovered(site, line) == expected


@pytest.mark.parametrize(
    ("line", "expected"),
    [
        (rule("r", GROSS, applies_to="{book: [quay, west, east]}"), []),
        (rule("r", GROSS, applies_to="{book: [quay, west]}"), ["book:east"]),
        (rule("r", GROSS, each="position"), []),
        (rule("r", GROSS, each="issuer"), []),
    ],
)
def test_a_flat_book_is_covered_by_every_rule_that_would_ask_about_its_positions(site, line, expected):
    site.positions("quay,ALFA,1", "west,BETA,2", "east,,")

    assert uncovered(site, line) == expected


def test_what_cannot_be_measured_is_listed_with_its_reason(site):
    site.prices({"ALFA": (None, None, None, None, 10.0), "BETA": (20.0,) * 5})
    site.positions("quay,ALFA,1", "quay,BETA,1", "quay,ODD,1", "west,HANA,2")

    site.settle()
    standings = site.standings()

    assert [(gap.subject.key, gap.reason) for gap in standings.unmeasured] == [
        ("position:quay/ALFA", "ALFA has 0 of the 4 returns of the window"),
        ("position:quay/ODD", "no instruments file describes ODD"),
        ("position:west/HANA", "no close of HANA is known"),
        ("book:east", f"no accepted file gives the positions of east on {FRIDAY}"),
    ]
    assert standings.outcome is Outcome.INCOMPLETE


def test_questions_ask_for_some_rules_and_for_nothing_beyond_them(site):
    settle(site, rule("firm", GROSS), rule("book", GROSS, each="book"))
    world = site.world(round_id="later")

    some = evaluate(world, questions=("book",))

    assert {answer.rule for answer in some.answers} == {"book"}
    assert (some.books, some.unmeasured, some.uncovered) == ((), (), ())
    assert evaluate(world, questions=()).answers == ()


def test_answers_come_in_the_order_of_the_rules_and_then_of_the_subjects(site):
    site.settle(rules(rule("z", GROSS, each="book"), rule("a", GROSS, each="issuer")))

    assert [(answer.rule, answer.subject.key.partition(":")[2]) for answer in site.standings().answers] == [
        ("z", "quay"), ("z", "west"), ("z", "east"), ("a", "issuer=one"), ("a", "issuer=three"), ("a", "issuer=two"),
    ]  # fmt: skip


def test_the_worst_standing_is_the_outcome(site):
    for limit, outcome in {"limit: 1000": "within", "near: 1, limit: 1000": "near", "limit: 1": "over"}.items():
        site.settle(rules(rule("r", GROSS, limit), rule("s", GROSS, "limit: 9999")))
        assert site.standings().outcome is Outcome(outcome)


def test_an_evening_long_before_the_files_is_incomplete_and_nothing_worse(site):
    site.settle(rules(rule("firm", GROSS), rule("tail", "{name: value_at_risk}", each="position")))

    standings = site.standings(date(2026, 1, 15))

    assert standings.outcome is Outcome.INCOMPLETE
    assert len(standings.lacking) == 3


def test_the_same_world_gives_the_same_answers_whatever_else_is_asked(site):
    """A subject's figures do not depend on the company they are worked out in."""
    tails = [
        rule(f"{name}-{method}", f"{{name: {name}, method: {method}, window: 4}}", "limit: 1e9", each="position")
        for name, method in (("value_at_risk", "historical"), ("expected_shortfall", "normal"), ("volatility", "ewma"))
    ]
    days = [day for day in (FRIDAY - timedelta(days=back) for back in range(6, -1, -1)) if day.weekday() < 5]
    site.prices(
        {"ALFA": (10.0, 9.9, 10.3, 10.1, 9.7), "BETA": (20.0, 21.0, 20.3, 20.1, 19.7), "HANA": (7.0,) * 5}, days
    )
    site.settle(rules(*tails))
    world = site.world()
    together = by_key(evaluate(world))

    for made in world.terms.rules:
        for name in ("quay", "west", "east"):
            alone = replace(made, applies_to=(*made.applies_to, _only(name)))
            terms = replace(world.terms, rules=(alone,))
            for answer in evaluate(replace(world, terms=terms)).answers:
                assert answer == together[answer.rule, answer.subject.key]


def _only(book: str):
    from monitor.world import Selector

    return Selector("book", (book,))
