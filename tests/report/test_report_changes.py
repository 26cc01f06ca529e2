"""What changed between two evenings, and the sentence that sums an evening up."""

from __future__ import annotations

from dataclasses import replace

import pytest
from report_scene import DAY, FIRM, RULES, answer, book, evening, excess

from monitor.report.changes import LARGEST_MOVES, changes
from monitor.report.headline import by_urgency, headline
from monitor.report.page import Before
from monitor.report.told import MOST_IN_WORDS, moves, said
from monitor.words import Standing, Unit
from monitor.world import Answer, Standings, Unmeasured

WITHIN, NEAR, OVER, GONE = 0.5, 0.95, 1.2, None


def held(name: str, value: float | None, rule: str = "nq-var") -> Answer:
    return answer(rule, book(name), value, 0.9, 1.0, unit=Unit.RATIO, reason=None if value else "no price")


def evening_of(**values: float | None) -> Standings:
    return Standings(tuple(held(name, value) for name, value in values.items()), (), (), (), ())


def names(turns: tuple) -> list[tuple[str, str | None]]:
    return [(turn.answer.subject.name, turn.was) for turn in turns]


def test_each_standing_that_turned_is_told_with_what_it_was() -> None:
    before = evening_of(a=WITHIN, b=OVER, c=NEAR, d=WITHIN, e=GONE, f=WITHIN, lost=OVER)
    tonight = evening_of(a=NEAR, b=NEAR, c=WITHIN, d=GONE, e=OVER, f=WITHIN, new=NEAR, calm=WITHIN)
    found = changes(before, tonight)
    assert names(found.turned(Standing.NEAR)) == [("a", "within"), ("b", "over"), ("new", None)]
    assert names(found.turned(Standing.WITHIN)) == [("c", "near")]
    assert names(found.turned(Standing.UNMEASURED)) == [("d", "within")]
    assert names(found.turned(Standing.OVER)) == [("e", "unmeasured")]
    assert [one.subject.name for one in found.asked] == ["calm"]
    assert [one.subject.name for one in found.dropped] == ["lost"]


def test_the_largest_moves_come_first_whatever_their_sign() -> None:
    before = evening_of(a=0.5, b=0.5, c=0.5, d=0.5, e=GONE)
    found = changes(before, evening_of(a=0.6, b=0.1, c=0.5, d=0.5004, e=0.9)).moves
    assert [(move.answer.subject.name, round(move.change, 9)) for move in found] == [("b", -0.4), ("a", 0.1)]


def test_moves_are_few() -> None:
    many = {f"b{number:02d}": 0.3 + number / 100 for number in range(40)}
    found = changes(evening_of(**dict.fromkeys(many, 0.1)), evening_of(**many)).moves
    assert [move.answer.subject.name for move in found] == [f"b{n}" for n in range(39, 39 - LARGEST_MOVES, -1)]


def test_the_words_put_excesses_first_and_do_not_say_an_opening_twice() -> None:
    tonight = evening_of(a=OVER, b=OVER, c=NEAR)
    opened = excess(1, "nq-var", book("a"), DAY, OVER, 1.0, Unit.RATIO)
    page = replace(
        evening(),
        standings=tonight,
        opened=(opened,),
        cured=(),
        before=Before(DAY, evening_of(a=WITHIN, b=GONE, c=WITHIN)),
    )
    told = {part.heading: part.lines for part in said(page)}
    assert list(told) == ["Excess opened", "Over now, under an excess already open", "Newly near"]
    title = "One-day 99 % VaR of North Quay"
    assert told["Excess opened"] == (f"{title} (a): 1.20, allowed at most 1",)
    assert told["Over now, under an excess already open"] == (f"{title} (b): 120.0 % of its limit, was unmeasured",)
    assert told["Newly near"] == (f"{title} (c): 95.0 % of its limit, was within",)
    assert [(move.subject, move.change) for move in moves(page)] == [("a", "+70.0"), ("c", "+45.0")]


def test_a_long_list_says_how_many_it_leaves_out() -> None:
    many = [f"b{number}" for number in range(MOST_IN_WORDS + 7)]
    page = replace(
        evening(), standings=evening_of(**dict.fromkeys(many, NEAR)), opened=(), cured=(),
        before=Before(DAY, evening_of(**dict.fromkeys(many, WITHIN))),
    )  # fmt: skip
    (part,) = said(page)
    assert (len(part.lines), part.total) == (MOST_IN_WORDS, MOST_IN_WORDS + 7)


def test_without_an_evening_before_only_excesses_are_told() -> None:
    page = replace(evening(), before=None)
    assert [part.heading for part in said(page)] == ["Excess opened", "Excess cured"]
    assert moves(page) == ()


@pytest.mark.parametrize(
    ("values", "sentence"),
    [
        ({}, "No rule was asked tonight, so nothing was held against a limit."),
        (
            {"a": 0.5},
            "The one standing is within its limit; "
            "the closest is One-day 99 % VaR of North Quay (a) at 50.0 % of its limit.",
        ),
        (
            {"a": 0.5, "b": 0.6},
            "All 2 standings are within their limits; "
            "the closest is One-day 99 % VaR of North Quay (b) at 60.0 % of its limit.",
        ),
        (
            {"a": 0.5, "b": 1.2, "c": 1.3, "d": 0.95},
            "Of 4 standings, 2 are over their limits and 1 is near; "
            "the worst is One-day 99 % VaR of North Quay (c) at 130.0 % of its limit.",
        ),
        (
            {"a": None, "b": 0.6},
            "Incomplete: of 2 standings, none is over its limit and 1 could not be measured; "
            "the closest is One-day 99 % VaR of North Quay (b) at 60.0 % of its limit.",
        ),
        ({"a": None}, "Incomplete: of 1 standing, none is over its limit and 1 could not be measured."),
    ],
)
def test_the_headline(values: dict[str, float | None], sentence: str) -> None:
    assert headline(evening_of(**values), RULES) == sentence


@pytest.mark.parametrize(
    ("gap", "why"),
    [
        ({"lacking": ("nav",)}, "; 1 item lacking."),
        ({"unmeasured": (Unmeasured(FIRM, "why"), Unmeasured(FIRM, "too"))}, "; 2 positions or books not measured."),
    ],
)
def test_an_evening_with_a_gap_never_reads_as_all_well(gap: dict, why: str) -> None:
    sentence = headline(replace(evening_of(a=0.5), **gap), RULES)
    assert sentence.startswith("Incomplete: the one standing is within") and sentence.endswith(why)


def test_what_is_over_without_a_utilisation_is_not_lost_behind_others() -> None:
    negative = replace(held("x", OVER), utilisation=None)
    order = by_urgency((held("a", WITHIN), held("b", NEAR), negative, held("c", OVER), held("d", GONE)))
    assert [one.subject.name for one in order] == ["c", "x", "b", "d", "a"]
