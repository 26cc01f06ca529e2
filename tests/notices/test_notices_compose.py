from __future__ import annotations

import json
import re
from collections.abc import Callable
from dataclasses import replace

import pytest
from notices_scene import (
    EVENING,
    HASH,
    NEAR,
    NORTH_QUAY,
    REFUSED,
    RULES,
    WITHIN,
    make_answer,
    make_excess,
    make_rule,
    single_name,
)

from monitor.facts import EveningMissed, Hand, RulesAdopted
from monitor.notices.compose import compose, compose_missed, compose_summary, compose_terms, compose_trouble
from monitor.notices.message import Notice, Topic
from monitor.notices.news import EveningNews, PastEvening, SummaryNews
from monitor.words import CuredBy, ExcessState, FileKind, Mark, MarkKind, Outcome, Side, Standing
from monitor.world import Standings

Make = Callable[..., EveningNews]


def the(notices: list[Notice], topic: Topic) -> Notice:
    [found] = [notice for notice in notices if notice.topic is topic]
    return found


def flat(notice: Notice) -> str:
    return " ".join(notice.text.split())


def test_the_notice_of_an_excess_says_everything_its_reader_needs(evening: Make) -> None:
    excess = make_excess()
    answer = make_answer(marks=(Mark(MarkKind.CARRIED, "the price of QUAYLINE is of 2026-03-02"),))
    news = evening(opened=((excess, answer),), alive={excess: 1})

    notice = the(compose(news), Topic.EXCESS_OPENED)

    assert notice.tell == ("risk-desk",)
    assert flat(notice).startswith(
        "OVER: value at risk (VaR) of north-quay is EUR 1,312,400, EUR 62,400 above its limit of EUR 1,250,000 "
        "(utilisation 105.0 %)."
    )
    for said in (
        "nq-var",
        "One-day 99 % VaR of North Quay",
        "Near at: EUR 1,000,000",
        "Age: business day 1",
        "historical, 99 %, 1 day, 500 sessions, n = 500",
        "EUR 1,190,000 to EUR 1,488,000",
        "carried: the price of QUAYLINE is of 2026-03-02",
        "2026-03-04",
        "europe",
        "Edition: 1",
        "Risk committee, minute 4 of 2025-12-16",
        "1234",
        HASH,
        "not the worst case",
        "not advice",
        "licensed people that local rules require",
    ):
        assert said in flat(notice), said
        assert said.partition(": ")[2] in " ".join(re.sub("<[^>]*>", " ", notice.html).replace("\u00a0", " ").split())
    assert notice.data["record"] == {"seq": 1234, "hash": HASH}
    assert notice.data["standing"]["value"] == 1_312_400.0


def test_a_lower_limit_is_said_to_be_one(evening: Make) -> None:
    answer = make_answer(side=Side.BELOW, limit=None, limit_below=1_500_000.0, distance=187_600.0, utilisation=1.14294)
    excess = make_excess(side=Side.BELOW, level=1_500_000.0)

    notice = the(compose(evening(opened=((excess, answer),), alive={excess: 1})), Topic.EXCESS_OPENED)

    assert "EUR 187,600 below its lower limit of EUR 1,500,000" in flat(notice)


@pytest.mark.parametrize(("subjects", "singles"), [(20, 20), (21, 0)])
def test_more_than_twenty_subjects_of_a_rule_make_one_notice(evening: Make, subjects: int, singles: int) -> None:
    pairs = tuple(single_name(f"NAME{i:02}", 0.101 + i / 1000) for i in range(subjects))
    news = evening(opened=pairs, alive={excess: 1 for excess, _ in pairs})

    notices = compose(news)

    assert [n.topic for n in notices].count(Topic.EXCESS_OPENED) == singles
    digests = [n for n in notices if n.topic is Topic.RULE_DIGEST]
    assert len(digests) == (0 if singles else 1)
    for digest in digests:
        assert f"{subjects} subjects of rule single-name" in flat(digest)
        assert "far-east/NAME20" in flat(digest)
        assert "NAME00:" not in flat(digest)
        assert "and 1 more" in flat(digest)


def test_many_cures_and_many_corrections_make_one_notice_each(evening: Make) -> None:
    pairs = [single_name(f"NAME{i:02}", 0.101 + i / 1000) for i in range(30)]
    cured = tuple((replace(e, state=ExcessState.CURED, cured_by=CuredBy.FIGURE), a) for e, a in pairs)
    void = tuple(replace(e, state=ExcessState.VOID, void_reason="positions corrected") for e, _ in pairs)

    notices = compose(evening(cured=cured, voided=void, told={excess.id: () for excess in void}))

    assert [n.topic for n in notices].count(Topic.RULE_DIGEST) == 2
    assert len({n.key for n in notices}) == len(notices) == 3


def test_an_incomplete_evening_names_each_cause_once_with_its_place(bad_evening: EveningNews) -> None:
    notice = the(compose(bad_evening), Topic.INCOMPLETE)

    assert flat(notice).count("no price of KITE") == 1
    assert "far-east/KITE, single-name of far-east/KITE" in flat(notice)
    assert "prices_2026-03-04.csv:14:2: found '1O3.2'; expected a price such as 103.25. Send" in flat(notice)
    assert "5 further reasons" in flat(notice)
    assert "fx_2026-03-04.csv did not come by 19:00" in flat(notice)


def test_a_refused_file_of_the_books_own_pnl_leaves_the_evening_complete(evening: Make) -> None:
    own = replace(REFUSED, name="pnl_2026-03-04.csv", file=FileKind.PNL)

    harmless = the(compose(evening(refused=(own,))), Topic.INCOMPLETE)
    both = the(compose(evening(refused=(own, REFUSED))), Topic.INCOMPLETE)

    assert harmless.title.startswith("FILE REFUSED: ")
    assert "no limit rests on it" in " ".join(harmless.text.split())
    assert "Do not read it as within" not in " ".join(harmless.text.split())
    assert both.title.startswith("INCOMPLETE: ")
    assert "Do not read it as within" in " ".join(both.text.split())


def test_a_refused_file_alone_makes_the_notice(evening: Make) -> None:
    notice = the(compose(evening(refused=(REFUSED,))), Topic.INCOMPLETE)

    assert notice.data["refused"][0]["file"] == "prices_2026-03-04.csv"


def test_a_quiet_evening_is_told_with_what_was_checked(evening: Make) -> None:
    [note] = compose(evening())

    assert note.topic is Topic.NIGHTLY_NOTE
    assert "ALL WITHIN" in note.text.splitlines()[0]
    assert "1 standing of 1 rule on 31 positions in north-quay, and the firm as a whole" in flat(note)
    assert HASH in note.text


def test_an_evening_without_rules_is_not_called_checked(evening: Make) -> None:
    note = the(compose(evening(standings=Standings((), (), (), (), ()))), Topic.NIGHTLY_NOTE)

    assert "nothing was held against a limit" in flat(note)
    assert "ALL WITHIN" not in note.text
    assert "within" not in note.title


def test_the_nightly_note_lists_over_near_open_and_uncovered(bad_evening: EveningNews) -> None:
    note = the(compose(bad_evening), Topic.NIGHTLY_NOTE)

    assert note.text.startswith("INCOMPLETE, and 2 OVER")
    for said in (
        "nq-var of north-quay: value EUR 1,312,400; limit EUR 1,250,000; utilisation 105.0 %; excess new, day 1",
        "firm-lev of the firm: value 1.999; limit 2; utilisation 99.96 %",
        "single-name of far-east/HARBOUR: day 7 (waived)",
        "cured: nq-var of north-quay, opened on 2026-02-25",
        "position far-east/LANTERN",
        "over 0 to 2",
        "EUR -212,350",
    ):
        assert said in flat(note), said


def test_near_is_not_called_all_within(evening: Make) -> None:
    note = the(compose(evening(standings=Standings((NEAR,), (), (), (), ()))), Topic.NIGHTLY_NOTE)

    assert note.text.startswith("NOTHING OVER, 1 near")


def test_a_cure_says_how_and_from_where(bad_evening: EveningNews) -> None:
    notice = the(compose(bad_evening), Topic.EXCESS_CURED)

    assert "it is now EUR 640,000, EUR 610,000 within its limit" in flat(notice)
    assert "its worst was EUR 1,420,000 on 2026-02-26" in flat(notice)


def test_a_cure_by_the_end_of_its_rule_is_not_passed_off_as_a_better_figure(evening: Make) -> None:
    cured = make_excess(rule="gone", state=ExcessState.CURED, cured_on=EVENING, cured_by=CuredBy.END_OF_RULE)

    notice = the(compose(evening(cured=((cured, None),))), Topic.EXCESS_CURED)

    assert "the figure itself may still be as high" in flat(notice)
    assert notice.tell == ("risk-desk",)


def test_whoever_was_told_hears_of_the_correction(bad_evening: EveningNews) -> None:
    notice = the(compose(bad_evening), Topic.EXCESS_VOIDED)

    assert notice.tell == (*RULES["nq-var"].tell, "board")
    assert "the positions of 2026-03-03 were corrected" in flat(notice)


def test_text_from_the_site_cannot_break_the_page_or_the_subject(evening: Make) -> None:
    rule = make_rule(title="VaR <img src=x>\r\nBcc: all@saltmere.example")
    excess = make_excess()
    news = evening(site="Salt\r\nmere", rules={"nq-var": rule}, opened=((excess, make_answer()),), alive={excess: 1})

    for notice in compose(news):
        assert "<img" not in notice.html
        assert not any(c in notice.title for c in "\r\n")


def test_the_html_needs_nothing_from_outside(bad_evening: EveningNews) -> None:
    for notice in compose(bad_evening):
        assert not re.search(r"(?i)\b(src|href|url)\s*[=(]|<(script|style|link|svg|img)", notice.html)
        assert "max-width:600px" in notice.html


def test_data_is_plain_json_and_lines_are_short(bad_evening: EveningNews) -> None:
    for notice in compose(bad_evening):
        assert json.loads(json.dumps(notice.data, allow_nan=False)) == notice.data
        long = [line for line in notice.text.splitlines() if len(line) > 78 and HASH not in line]
        assert long == []


def test_old_evenings_make_one_summary(evening: Make) -> None:
    excess = make_excess()
    evenings = tuple(
        PastEvening(EVENING, f"r{i}", Outcome.OVER if i % 2 else Outcome.WITHIN, {"over": i % 2}) for i in range(9)
    )
    news = SummaryNews(
        "Saltmere Trust",
        evenings,
        1300,
        HASH,
        RULES,
        (excess,),
        (),
        (),
        {},
        {excess: 12},
        EVENING,
        "night",
        "2026-03-04.html",
    )

    [notice] = compose_summary(news)

    assert notice.tell == ("night", "risk-desk")
    assert "9 evenings of 2026-03-04; 1 excess still open" in flat(notice)
    assert "Outcomes: 5 within, 4 over" in flat(notice)
    assert "nq-var of north-quay: day 12" in flat(notice)


def test_changed_terms_missed_evenings_and_trouble_say_what_and_why() -> None:
    change = "nq-var: limit 1000000 became 1250000"
    adopted = RulesAdopted("a" * 64, "b" * 64, "c" * 64, (), (change,), Hand("mosei", "vault"))
    [terms] = compose_terms("Saltmere Trust", adopted, {"nq-var": "VaR"}, "night", 5, HASH)
    missed = EveningMissed(EVENING, "europe", "no prices came by 22:00")
    [not_checked] = compose_missed("Saltmere Trust", missed, "night", 6, HASH)
    [trouble] = compose_trouble("Saltmere Trust", "the check", "the disk is full", EVENING, "night", 6, HASH)

    assert change in flat(terms)
    assert "mosei" in terms.text.splitlines()[0]
    assert flat(not_checked).startswith("NOT CHECKED: Saltmere Trust, evening of 2026-03-04, round europe: no prices")
    assert "at the check: the disk is full" in flat(trouble)
    assert {n.tell for n in (terms, not_checked, trouble)} == {("night",)}


def test_standings_without_utilisation_are_listed_after_those_with_one(evening: Make) -> None:
    without = make_answer(rule="firm-lev", value=5.0, limit=-1.0, distance=6.0, utilisation=None)
    standings = Standings((without, make_answer(), WITHIN), (), (), (), ())

    note = the(compose(evening(standings=standings)), Topic.NIGHTLY_NOTE)

    assert flat(note).index("- nq-var of north-quay") < flat(note).index("- firm-lev of north-quay")
    assert note.data["counts"][Standing.OVER] == 2
    assert NORTH_QUAY.name in note.text
