"""The register of a real site: files in a drop, evenings checked in any order, the ledger and the notices after it."""

from __future__ import annotations

from collections.abc import Iterable
from datetime import date, timedelta
from typing import Any

import pytest
from excess_made import fold, plain
from excess_site import QUAY_GROSS, ROUNDS, RULES, SHARES, Small, at_nine, copied, instruments
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from monitor import evenings, results
from monitor.amend import evenings_in_order
from monitor.facts import EveningMissed
from monitor.news import days_of
from monitor.settle import as_evening
from monitor.state import State
from monitor.words import CuredBy, ExcessState, Outcome

MON, TUE, WED, THU, FRI = (date(2026, 4, number) for number in range(20, 25))
QUAY = ("quay-gross", "quay")


def folded_anew(state: State) -> list[Any]:
    """The register by folding the recorded standings of the latest editions, one after the other."""
    latest = evenings.latest_of_all(state.index())
    last = latest[-1]
    tonight = as_evening(last.recipe, results.decode(state.archive.get(last.results)), state.terms(last.recipe.rules))
    return plain(fold(evenings_in_order(state, tonight, last.recipe)))


def assert_sound(small: Small) -> None:
    with small.opened() as state:
        expected = folded_anew(state)
    assert plain(small.register().values()) == expected
    assert len(small.alive()) == sum(own.alive for own in small.register().values())


def run(small: Small, kelp: Iterable[float], first: date = MON) -> None:
    for number, quantity in enumerate(kelp):
        small.quay(first + timedelta(days=number), quantity)
        small.check(first + timedelta(days=number))


def test_an_excess_from_opening_to_cure(small: Small) -> None:
    run(small, [70, 120, 150, 110, 60])

    register = small.register()
    assert {(own.rule, own.subject.name): (own.opened_on, own.cured_on) for own in register.values()} == {
        QUAY: (TUE, FRI),
        ("line", "quay/KELP"): (TUE, FRI),
        ("issuer", "issuer kelp"): (TUE, FRI),
    }
    gross = register["e1"]
    assert (gross.rule, gross.owner, gross.level) == ("quay-gross", "risk", 100.0)
    assert (gross.opened_value, gross.worst_on, gross.worst_value, gross.last_on) == (120.0, WED, 150.0, THU)
    assert (gross.cured_by, gross.cured_value) == (CuredBy.FIGURE, 60.0)
    [told] = small.notices("excess_opened", "shelf")
    assert (told["excess"]["id"], told["excess"]["day"], told["standing"]["value"]) == ("e1", 1, 120.0)
    [cured] = small.notices("excess_cured", "shelf")
    assert "opened on 2026-04-21 and was cured on 2026-04-24" in " ".join(cured["text"].split())
    assert_sound(small)


def test_a_position_that_is_sold_ends_its_excess_and_its_issuers(small: Small) -> None:
    run(small, [120, 0])

    by = {own.rule: (own.cured_on, own.cured_by) for own in small.register().values()}
    assert by == {
        "quay-gross": (TUE, CuredBy.FIGURE),
        "line": (TUE, CuredBy.END_OF_SUBJECT),
        "issuer": (TUE, CuredBy.END_OF_SUBJECT),
    }
    [text] = [data["text"] for data in small.notices("excess_cured") if data["rule"]["id"] == "line"]
    assert "its subject is no longer held" in " ".join(text.split())
    assert_sound(small)


def test_the_end_of_a_rule_ends_its_excess_and_says_that_the_figure_may_be_as_high(small: Small) -> None:
    run(small, [120])
    (small.folder / "rules" / "rules.yaml").write_text(RULES.replace(QUAY_GROSS, ""))
    small.quay(TUE, 130)
    small.check(TUE)

    gross = small.register()["e1"]
    assert (gross.cured_on, gross.cured_by, gross.cured_value) == (TUE, CuredBy.END_OF_RULE, None)
    [told] = small.notices("excess_cured")
    assert "the figure itself may still be as high" in " ".join(told["text"].split())
    assert_sound(small)


def test_a_missing_book_neither_cures_nor_stops_the_clock(small: Small) -> None:
    run(small, [120])
    small.day(TUE, {"east": {"SAND": 100}})
    [checked] = small.check(TUE)
    small.quay(WED, 130)
    small.check(WED)

    assert checked.evening.outcome is Outcome.INCOMPLETE
    assert {own.opened_on for own in small.alive().values()} == {MON}
    assert len(small.alive()) == 3
    note = small.notices("nightly_note")[-1]
    assert {own["day"] for own in note["excesses"]} == {3}
    assert_sound(small)


def test_a_book_of_another_round_that_is_missing_ends_nothing_across_books(two_rounds: Small) -> None:
    small = two_rounds
    small.day(MON, {"quay": {"PIER": 10}, "east": {"SAND": 20000}})
    small.check(MON)
    small.day(TUE, {"quay": {"PIER": 10}})
    small.check(TUE)

    assert set(small.alive()) == {("east-gross", "east"), ("issuer", "issuer sand")}
    assert_sound(small)


def test_a_position_that_no_file_describes_any_more_ends_no_group(small: Small) -> None:
    run(small, [120])
    small.drop("instruments.csv", instruments("KELP"))
    small.quay(TUE, 120)
    small.check(TUE)

    # Instruments once described stay so; it is the swap for one that never was that leaves the issuer unknown.
    small.day(WED, {"quay": {"WEED": 120}, "east": {"SAND": 100}}, (*SHARES, "WEED"))
    small.check(WED)

    assert ("issuer", "issuer kelp") in small.alive()
    assert QUAY in small.alive()
    assert ("line", "quay/KELP") not in small.alive()
    assert_sound(small)


def test_a_figure_on_an_old_price_does_not_cure_but_one_over_opens(small: Small) -> None:
    run(small, [120])
    without_kelp = ("PIER", "SAND", "TORII")
    small.day(TUE, {"quay": {"KELP": 50}, "east": {"SAND": 100}}, without_kelp)
    small.check(TUE)
    still = set(small.alive())
    small.quay(WED, 50)
    small.check(WED)
    cured = small.alive()
    small.day(THU, {"quay": {"KELP": 150}, "east": {"SAND": 100}}, without_kelp)
    small.check(THU)

    assert QUAY in still
    assert cured == {}
    assert QUAY in small.alive()
    assert_sound(small)


def test_an_evening_that_was_given_up_does_not_stop_the_clock(small: Small) -> None:
    run(small, [120])
    with small.opened() as state, state.ledger.transaction(at_nine(TUE)) as transaction:
        transaction.append(EveningMissed(TUE, "all", "no files came"))

    with small.opened() as state:
        assert evenings.newest_day(state.index()) == TUE
    small.quay(WED, 120)
    small.check(WED)
    assert {own["day"] for own in small.notices("nightly_note")[-1]["excesses"]} == {3}


def test_days_are_business_days_of_the_subjects_own_calendar(two_rounds: Small) -> None:
    """Tokyo is closed on 2026-04-29 and from 2026-05-04 to 06 (Golden Week), Dublin on 2026-05-01 (Labour Day) and on
    2026-05-04 (the first Monday of May). Source: the sessions of the package exchange_calendars."""
    small = two_rounds
    first = date(2026, 4, 28)  # a Tuesday
    for number in range(10):
        on = first + timedelta(days=number)
        if on.weekday() < 5 and on != date(2026, 5, 4):
            small.quay(on, 120, east=20000)
            small.check(on)

    ages = {own["rule"] + " " + own["subject"]: own["day"] for own in small.notices("nightly_note")[-1]["excesses"]}
    assert ages["quay-gross book:quay"] == 6  # April 28, 29 and 30, May 5, 6 and 7
    assert ages["east-gross book:east"] == 4  # April 28 and 30, May 1 and 7
    assert ages["issuer group:issuer=sand"] == 6  # across books: the firm's calendar, which is Dublin's
    assert_sound(small)


def test_two_rounds_a_day_answer_for_their_own_books(two_rounds: Small) -> None:
    small = two_rounds
    small.quay(MON, 120, east=20000)

    small.check(MON, round_="asia")
    after_asia = set(small.alive())
    small.check(MON, round_="europe")
    after_europe = set(small.alive())
    small.quay(TUE, 50, east=20000)
    small.check(TUE, round_="asia")
    asia_again = set(small.alive())
    small.check(TUE, round_="europe")

    assert after_asia == {("east-gross", "east")}
    assert after_europe == {
        ("east-gross", "east"),
        QUAY,
        ("line", "quay/KELP"),
        ("issuer", "issuer kelp"),
        ("issuer", "issuer sand"),
    }
    assert asia_again == after_europe
    assert set(small.alive()) == {("east-gross", "east"), ("issuer", "issuer sand")}
    assert_sound(small)


def test_a_late_asian_round_is_put_in_its_place(two_rounds: Small) -> None:
    small = two_rounds
    for on, east in ((MON, 20000), (TUE, 100), (WED, 20000)):
        small.quay(on, 50, east)
    small.check(MON)
    small.check(TUE, round_="europe")
    small.check(WED)
    assert small.alive()["east-gross", "east"].opened_on == MON

    small.check(TUE, round_="asia")

    assert small.alive()["east-gross", "east"].opened_on == WED
    assert_sound(small)


def test_evenings_of_rounds_that_were_renamed_still_count(two_rounds: Small) -> None:
    small = two_rounds
    small.quay(MON, 120, east=20000)
    small.check(MON)
    before = set(small.alive())
    renamed = small.file.read_text().replace("id: asia", "id: early").replace("id: europe", "id: late")
    small.file.write_text(renamed)
    small.quay(TUE, 120, east=20000)
    small.check(TUE)
    small.quay(TUE, 125, east=20000)

    small.check(TUE)

    assert set(small.alive()) == before
    assert {own.opened_on for own in small.alive().values()} == {MON}
    assert_sound(small)


def test_a_book_that_leaves_the_site_takes_its_excesses_along(small: Small) -> None:
    run(small, [120])
    small.quay(MON, 120, east=20000)
    small.check(MON)
    assert ("east-gross", "east") in small.alive()
    site = small.file.read_text()
    small.file.write_text("\n".join(line for line in site.splitlines() if "id: east" not in line) + "\n")
    rules = RULES.replace("applies_to: {book: east}", "applies_to: {book: any}\n    each: book")
    (small.folder / "rules" / "rules.yaml").write_text(rules)
    small.day(TUE, {"quay": {"KELP": 120}})
    small.check(TUE)

    gone = [own for own in small.register().values() if own.rule == "east-gross"]
    assert [(own.cured_on, own.cured_by) for own in gone] == [(TUE, CuredBy.END_OF_SUBJECT)]


def test_a_check_again_without_a_change_appends_nothing(two_rounds: Small) -> None:
    small = two_rounds
    run(small, [120, 50, 130])
    before = small.entries()

    small.check(MON, WED)

    assert small.entries() == before


def test_a_correction_that_removes_the_opening_is_told_to_whoever_was_told(small: Small) -> None:
    run(small, [70, 120])
    moved = RULES.replace("owner: risk\n    tell: [board]", "owner: risk\n    tell: [risk-desk]")
    (small.folder / "rules" / "rules.yaml").write_text(moved)
    small.quay(TUE, 60)
    small.check(TUE)

    states = {own.rule: own.state for own in small.register().values()}
    assert states == dict.fromkeys(("quay-gross", "line", "issuer"), ExcessState.VOID)
    [board] = small.notices("excess_voided", "shelf")  # the board was told of the opening, and is no longer named
    assert board["excess"]["state"] == "void"
    assert board["excess"]["void_reason"] == "the check of 2026-04-21 shows that it was not over"
    assert "CORRECTION: the excess e1 of quay-gross, quay, opened on 2026-04-21, is void" in " ".join(
        board["text"].split()
    )
    assert {data["rule"]["id"] for data in small.notices("excess_voided")} == {"quay-gross", "line", "issuer"}
    assert small.notices("nightly_note")[-1]["excesses_open"] == 0
    assert_sound(small)


def test_a_correction_of_an_old_evening_counts_days_to_the_newest(small: Small) -> None:
    run(small, [120, 130, 140, 150])
    small.quay(TUE, 60)
    small.check(TUE)

    note = small.notices("nightly_note")[-1]
    assert note["business_date"] == str(TUE)
    assert {own["day"] for own in note["excesses"]} == {2}  # opened on Wednesday, and Thursday is on record
    said = " ".join(note["text"].split())
    assert "This is an older evening: the newest on record is that of 2026-04-23." in said
    assert "EXCESSES OPEN (3), OLDEST FIRST, DAYS COUNTED TO 2026-04-23" in said
    cured = " ".join(small.notices("excess_cured", "shelf")[-1]["text"].split())
    assert "on 2026-04-21 it was EUR 60.00, EUR 40.00 within its limit of EUR 100." in cured
    assert "It is over again since 2026-04-22: excess e4, day 2." in cured
    [opened] = [data for data in small.notices("excess_opened", "shelf") if data["excess"]["id"] != "e1"]
    text = " ".join(opened["text"].split())
    assert "OVER: gross exposure of quay was EUR 150.00 against its limit of EUR 100 on 2026-04-23" in text
    assert "The excess opened on 2026-04-22. It came to light only when the evening of 2026-04-21 was checked." in text
    assert "It stands at business day 2." in text
    assert opened["standing"] is None
    assert_sound(small)


def test_a_split_where_the_corrected_evening_no_longer_knows_the_subject(small: Small) -> None:
    run(small, [120, 130, 140])
    small.quay(TUE, 0)
    small.check(TUE)

    assert small.alive()["line", "quay/KELP"].opened_on == WED
    assert_sound(small)


def test_a_late_evening_over_is_told_as_cured_with_the_figure_of_its_cure(small: Small) -> None:
    for on, kelp in ((MON, 50), (TUE, 120), (WED, 60)):
        small.quay(on, kelp)
    small.check(MON)
    small.check(WED)
    small.check(TUE)

    [told] = small.notices("excess_cured", "shelf")
    text = " ".join(told["text"].split())
    assert "on 2026-04-22 it was EUR 60.00" in text
    assert "Both came to light only when the evening of 2026-04-21 was checked." in text
    assert "above its limit" not in text
    assert small.notices("excess_opened", "shelf") == []
    assert_sound(small)


def test_a_cure_that_is_taken_back_is_told_as_open_again(small: Small) -> None:
    run(small, [120, 60])
    small.quay(TUE, 130)
    small.check(TUE)

    last = small.notices("excess_opened", "shelf")[-1]
    assert (last["excess"]["id"], last["excess"]["day"]) == ("e1", 2)
    text = " ".join(last["text"].split())
    assert (
        "The excess opened on 2026-04-20 and was told as cured; the check of 2026-04-21 takes that cure back." in text
    )
    note = small.notices("nightly_note")[-1]
    assert "open again: quay-gross of quay, opened on 2026-04-20; its cure is taken back" in " ".join(
        note["text"].split()
    )
    assert_sound(small)


STEPS = st.lists(
    st.tuples(
        st.integers(0, 4),  # which day of the week
        st.sampled_from([0, 50, 85, 95, 120, 150]),
        st.sampled_from([0, 100, 6000, 20000]),
        st.sampled_from(["", "", "", "no east", "no prices", "no quay"]),
        st.sampled_from([None, "asia", "europe"]),
    ),
    min_size=2,
    max_size=9,
)


@given(STEPS)
@settings(max_examples=6, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_order_of_files_and_checks_gives_the_fold_of_the_latest_editions(
    template: Small, tmp_path_factory: pytest.TempPathFactory, steps: list[tuple[int, float, float, str, str | None]]
) -> None:
    small = copied(template, tmp_path_factory.mktemp("any") / "site", ROUNDS)
    ids: list[str] = []
    for number, kelp, east, lacking, round_ in steps:
        on = MON + timedelta(days=number)
        held = {"quay": {"KELP": kelp, "PIER": 10} if kelp else {}, "east": {"SAND": east} if east else {}}
        held.pop({"no east": "east", "no quay": "quay"}.get(lacking, ""), None)
        small.day(on, held, ("PIER", "SAND") if lacking == "no prices" else tuple(SHARES))
        small.check(on, round_=round_)
        assert_sound(small)
        assert list(small.register())[: len(ids)] == ids
        ids = list(small.register())
        note = small.notices("nightly_note")[-1] if small.notices("nightly_note") else None
        if note is not None:
            with small.opened() as state:
                newest, terms = evenings.newest_day(state.index()), state.terms(state.last_adopted()[0])
                days = days_of(state, small.alive().values(), terms, newest)
            assert {own["id"]: own["day"] for own in note["excesses"]} == {own.id: day for own, day in days.items()}
            assert min(days.values(), default=1) >= 1
