"""The same evening again: nothing new is recorded unless something that it depends on has changed."""

from __future__ import annotations

import os
import time
from pathlib import Path

import pytest
from evening_scene import (
    EVENINGS,
    FIRST,
    RULES,
    SECOND,
    TRAY,
    Commands,
    account,
    documents,
    evening_of,
    leave,
    leave_files,
    site_text,
)

NOW, LATER = evening_of(SECOND), evening_of(SECOND, "19:30")


@pytest.mark.parametrize(("big", "kinds", "code"), [(False, 3, 0), (True, 3, 3), (False, 1, 4), (True, 1, 4)])
def test_a_check_again_records_nothing_and_exits_the_same(
    duskcheck: Commands, site: Path, big: bool, kinds: int, code: int
):
    leave_files(site, SECOND, big=big, kinds=("prices", "positions", "nav")[:kinds])
    first = duskcheck(NOW, "check", "--site", site, "--json")
    record = account(site)

    again = [duskcheck(LATER, "check", "--site", site, *as_json) for as_json in (["--json"], [])]

    assert [first.code, *(one.code for one in again)] == [code] * 3
    assert documents(again[0]) == documents(first)
    assert "nothing new since it was recorded" in again[1].stdout
    assert account(site) == record


def test_over_wins_over_near_and_incomplete_over_both(duskcheck: Commands, site: Path):
    leave_files(site, SECOND, big=True, kinds=("positions", "nav"))

    ended = duskcheck(NOW, "check", "--site", site, "--json")

    (evening,) = documents(ended)
    assert "over" in {row["standing"] for row in evening["standings"]}
    assert (ended.code, evening["outcome"]) == (4, "incomplete")


def test_a_range_prints_one_document_a_line_and_its_worst_evening_decides(duskcheck: Commands, site: Path):
    for day in EVENINGS[1:4]:
        leave_files(site, day, big=day == SECOND)

    ended = duskcheck(evening_of(EVENINGS[3]), "check", "--from", FIRST, "--to", EVENINGS[3], "--json", "--site", site)

    assert (ended.code, ended.stderr) == (3, "")
    assert [document["business_date"] for document in documents(ended)] == [str(day) for day in EVENINGS[:4]]
    assert [document["outcome"] for document in documents(ended)] == ["within", "over", "within", "within"]


def test_changed_rules_are_adopted_told_and_make_the_next_edition(duskcheck: Commands, site: Path):
    leave_files(site, SECOND)
    duskcheck(NOW, "check", "--site", site)
    (site.parent / "rules" / "limits.yaml").write_text(
        RULES.replace("limit: 15000", "limit: 9000").replace("14000", "8000")
    )

    ended = duskcheck(LATER, "check", "--site", site, "--json")

    assert ended.code == 3
    (evening,) = documents(ended)
    assert (evening["edition"], evening["outcome"]) == (2, "over")
    record = account(site)
    assert record["entries"]["rules.adopted"] == 2 and record["entries"]["settings.adopted"] == 1
    assert any("Rules changed" in title for _, _, _, title, _ in record["notices"])
    assert duskcheck(LATER, "check", "--site", site).code == 3
    assert account(site) == record


def test_changed_settings_are_adopted_told_and_make_the_next_edition(duskcheck: Commands, site: Path):
    leave_files(site, SECOND)
    duskcheck(NOW, "check", "--site", site)
    site.write_text(site_text((TRAY, "- {id: second, kind: folder, path: second}")))

    ended = duskcheck(LATER, "check", "--site", site, "--json")

    assert ended.code == 0
    assert documents(ended)[0]["edition"] == 2
    record = account(site)
    assert record["entries"]["settings.adopted"] == 2
    assert any("Settings changed" in title for _, _, _, title, _ in record["notices"])
    assert any((site.parent / "second").iterdir())


def test_a_late_file_makes_the_next_edition_and_a_correction_the_one_after(duskcheck: Commands, site: Path):
    leave_files(site, SECOND, kinds=("prices", "nav"))
    assert duskcheck(NOW, "check", "--site", site).code == 4
    leave_files(site, SECOND, big=True, kinds=("positions",))

    late = duskcheck(LATER, "check", "--site", site, "--json")
    leave_files(site, SECOND, kinds=("positions",))
    corrected = duskcheck(LATER, "check", "--site", site, "--json")

    assert [(end.code, documents(end)[0]["edition"]) for end in (late, corrected)] == [(3, 2), (0, 3)]
    assert "excess.voided" in account(site)["entries"]


def test_files_of_two_dates_with_the_same_bytes_are_two_files(duskcheck: Commands, site: Path):
    """A NAV and closes that did not move are those of their own date."""
    for day in (SECOND, EVENINGS[2]):
        leave_files(site, day, kinds=("positions",))
        leave(site, f"prices_{day}.csv", "instrument,close\nQUAY,10\nTIDE,10\n")
        leave(site, f"nav_{day}.csv", "book,nav\nharbour,20000\n")

    ended = duskcheck(evening_of(EVENINGS[2]), "check", "--from", SECOND, "--to", EVENINGS[2], "--site", site, "--json")

    assert [document["lacking"] for document in documents(ended)] == [[], []]
    assert ended.code == 0


def test_evenings_checked_long_after_are_told_in_one_summary(duskcheck: Commands, site: Path):
    for day in EVENINGS[1:4]:
        leave_files(site, day, big=True)
    before = len(account(site)["notices"])

    ended = duskcheck(evening_of(EVENINGS[12]), "check", "--from", SECOND, "--to", EVENINGS[3], "--site", site)

    assert ended.code == 3
    new = [topic for topic, *_ in account(site)["notices"]]
    assert len(new) == before + 1 and "summary" in new


def test_today_is_the_day_where_the_round_is_checked(duskcheck: Commands, site: Path):
    """At 23:30 UTC it is the next day in Helsinki, two hours ahead in winter."""
    site.write_text(site_text(rounds='- {id: all, at: "01:00", time_zone: Europe/Helsinki}'))
    leave_files(site, SECOND)

    ended = duskcheck(evening_of(FIRST, "23:30"), "check", "--site", site, "--json")
    by_date = duskcheck(evening_of(FIRST, "23:30"), "check", "--date", SECOND, "--site", site, "--json")
    too_early = duskcheck(evening_of(FIRST, "21:30"), "check", "--date", SECOND, "--site", site, "--json")

    assert documents(ended)[0]["business_date"] == str(SECOND)
    assert documents(by_date) == documents(ended)
    assert (too_early.code, "still to come" in too_early.stderr) == (2, True)


def test_a_file_that_is_still_being_written_waits_for_the_next_check(duskcheck: Commands, site: Path):
    """A file changed in the last second is looked at twice; here its time of change runs ahead of the clock."""
    leave_files(site, SECOND)
    path = leave(site, f"prices_{SECOND}.csv", "instrument,close\nQUAY,10\n")
    os.utime(path, (time.time(), time.time()))

    started = time.monotonic()
    ended = duskcheck(NOW, "check", "--site", site, "--json")

    assert time.monotonic() - started > 1
    assert ended.code == 4  # it stood still, was taken, and lacks TIDE
