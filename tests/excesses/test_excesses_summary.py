"""Old evenings are told in one summary, each once, however the run went; recent ones by notices of their own."""

from __future__ import annotations

from collections.abc import Iterable
from datetime import date

import pytest
from excess_site import RULES, Small, at_nine

from monitor.facts import NoticeQueued
from monitor.run import Due

MON, TUE, WED, THU, FRI = (date(2026, 4, number) for number in range(20, 25))
WEEK = (MON, TUE, WED, THU, FRI)
LATER = at_nine(date(2026, 5, 6))  # the sixth session of Dublin after Friday: the whole week is old
IN_TIME = at_nine(date(2026, 4, 27))  # the fifth session after Monday: told by notices of its own


def files(small: Small, kelp: Iterable[float]) -> None:
    for on, quantity in zip(WEEK, kelp, strict=True):
        small.quay(on, quantity)


def summed_up(small: Small) -> list[list[str]]:
    """The dates that each summary covers, read from the record of evenings between it and the summary before."""
    covered, last = [], 0
    for summary in small.notices("summary"):
        seq = summary["record"]["seq"]
        own = [str(each.recipe.date) for each in small.editions() if last < each.seq <= seq and not each.told]
        assert (summary["evenings"], summary["from"], summary["business_date"]) == (len(own), min(own), max(own))
        covered.append(own)
        last = seq
    return covered


def test_old_evenings_queue_one_summary_and_no_alarms(small: Small) -> None:
    files(small, [120, 60, 130, 140, 150])

    small.check(MON, FRI, now=LATER)

    assert {data["topic"] for data in small.notices()} == {"summary"}
    [summary] = small.notices("summary")
    assert summed_up(small) == [[str(on) for on in WEEK]]
    assert (summary["from"], summary["business_date"]) == (str(MON), str(FRI))
    assert (summary["opened"], summary["cured"], summary["excesses_open"]) == (6, 3, 3)
    assert {(own["rule"], own["opened_on"], own["day"]) for own in summary["excesses"]} == {
        (rule, str(WED), 3) for rule in ("quay-gross", "line", "issuer")
    }
    assert [own["business_date"] for own in small.notices("summary", "shelf")] == [str(FRI)]  # the board's rule is open


def test_the_last_of_five_business_days_is_told_by_itself(small: Small) -> None:
    files(small, [120, 60, 60, 60, 60])

    small.check(MON, FRI, now=IN_TIME)

    assert small.notices("summary") == []
    assert len(small.notices("nightly_note")) == 5


def test_the_sixth_business_day_is_in_the_summary_and_the_next_tells_itself(small: Small) -> None:
    files(small, [120, 130, 60, 60, 60])

    small.check(MON, FRI, now=at_nine(date(2026, 4, 28)))

    assert summed_up(small) == [[str(MON)]]
    assert [note["business_date"] for note in small.notices("nightly_note")] == [str(on) for on in WEEK[1:]]
    assert [own["business_date"] for own in small.notices("excess_opened")] == []
    assert {own["excess"]["id"] for own in small.notices("excess_cured")} == {"e2", "e3"}


@pytest.mark.parametrize("after", [1, 3, 5])
def test_a_run_that_is_cut_off_and_resumed_still_makes_one_summary(small: Small, after: int) -> None:
    files(small, [120, 130, 60, 60, 60])
    small.check_and_die([Due(on, "all") for on in WEEK], after, LATER)
    assert small.notices() == []

    small.check(MON, FRI, now=LATER)
    small.check(MON, FRI, now=LATER)

    assert summed_up(small) == [[str(on) for on in WEEK]]
    queued = [fact for fact in small.entries() if isinstance(fact, NoticeQueued) and fact.topic == "summary"]
    assert len(queued) == 1


def test_a_second_run_of_old_evenings_makes_a_second_summary_of_its_own(small: Small) -> None:
    files(small, [120, 130, 60, 60, 60])

    small.check(MON, TUE, now=LATER)
    small.check(WED, FRI, now=LATER)

    assert summed_up(small) == [[str(MON), str(TUE)], [str(WED), str(THU), str(FRI)]]
    assert [own["cured"] for own in small.notices("summary")] == [0, 3]


def test_the_page_that_a_summary_names_is_there(small: Small) -> None:
    files(small, [120, 130, 60, 60, 60])
    small.check(MON, FRI, now=at_nine(date(2026, 4, 29)))

    [summary] = small.notices("summary")
    assert (summary["business_date"], summary["page"]) == (str(TUE), "2026-04-21_all_1.html")
    assert (small.folder / "pages" / summary["page"]).exists()


def test_an_old_correction_tells_of_the_void_to_whoever_was_told(small: Small) -> None:
    files(small, [60, 120, 130, 60, 60])
    for on in WEEK:
        small.check(on)
    assert small.notices("excess_opened", "shelf") != []
    (small.folder / "rules" / "rules.yaml").write_text(RULES.replace("tell: [board]", "tell: [risk-desk]"))
    small.quay(TUE, 60)
    small.quay(WED, 60)

    small.check(TUE, WED, now=LATER)

    [board] = small.notices("summary", "shelf")
    assert {own["rule"] for own in board["voided"]} == {"quay-gross", "line", "issuer"}
    text = " ".join(board["text"].split())
    assert "EXCESSES VOID AFTER A CORRECTION (3)" in text
    assert "the check of 2026-04-22 shows that it was not over" in text
    assert (board["opened"], board["cured"], board["excesses_open"]) == (0, 0, 0)


def test_what_an_old_run_opens_and_makes_void_was_told_to_nobody(small: Small) -> None:
    files(small, [60, 120, 60, 60, 60])
    small.check_and_die([Due(on, "all") for on in WEEK], 3, LATER)
    small.quay(TUE, 60)

    small.check(MON, FRI, now=LATER)

    [summary] = small.notices("summary")
    assert (summary["opened"], summary["cured"], summary["voided"]) == (0, 0, [])
    assert summary["evenings"] == 5  # not their editions, of which there are more
    assert len(small.editions()) > 5


def test_days_in_a_summary_are_counted_to_the_newest_evening_on_record(small: Small) -> None:
    files(small, [60, 120, 130, 140, 150])
    small.check(WED)
    small.check(THU)
    small.check(FRI)

    small.check(MON, TUE, now=LATER)

    [summary] = small.notices("summary")
    assert {own["day"] for own in summary["excesses"]} == {4}  # from Tuesday to Friday
    assert "DAYS COUNTED TO 2026-04-24" in " ".join(summary["text"].split())


def test_a_late_evening_older_than_the_others_does_not_turn_the_span_round(small: Small) -> None:
    files(small, [60, 120, 130, 140, 150])
    small.check_and_die([Due(on, "all") for on in (FRI, MON)], 2, LATER)

    small.check(FRI, now=LATER)

    [summary] = small.notices("summary")
    assert (summary["from"], summary["business_date"], summary["evenings"]) == (str(MON), str(FRI), 2)
    assert summary["page"] == "2026-04-24_all_1.html"
    assert (small.folder / "pages" / summary["page"]).exists()


def test_two_rounds_of_old_dates_are_covered_once_each(two_rounds: Small) -> None:
    small = two_rounds
    files(small, [120, 130, 60, 60, 60])

    small.check(MON, FRI, now=LATER)

    [dates] = summed_up(small)
    assert dates == [str(on) for on in WEEK for _ in range(2)]
    assert small.notices("summary")[0]["evenings"] == 10
