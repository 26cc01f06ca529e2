"""One look of the daemon after another, the clock passed in: what is due, what waits, and what is told."""

from __future__ import annotations

import os
import shutil
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
from evening_scene import EVENINGS, FIRST, RULES, SECOND, THIRD, account, leave, leave_files, site_text, write_site

from monitor.adoption import adopt
from monitor.daemon import watch as watch_module
from monitor.daemon.watch import Watch
from monitor.evening import check_evening, take_in
from monitor.run import hand, open_for_checking
from monitor.site import open_site
from monitor.state import open_state

FRIDAY, MONDAY = EVENINGS[4], EVENINGS[5]  # 2026-03-13 and 2026-03-16
TWO_ROUNDS = '- {id: early, books: [harbour], at: "18:00"}\n  - {id: late, books: [basin], at: "18:30"}'


def at(day: Any, clock: str = "18:00") -> datetime:
    return datetime.fromisoformat(f"{day}T{clock}:00+00:00")


class Desk:
    """A site with a daemon that looks when it is told to. The round is due at 18:00 UTC and given up at 20:00."""

    def __init__(self, folder: Path) -> None:
        self.site = folder / "site.yaml"
        self.rules = folder / "rules" / "limits.yaml"
        self.start(at(FIRST, "18:01"))

    def start(self, now: datetime) -> None:
        """A daemon that starts, knowing nothing but the record."""
        site = open_site(self.site)
        with open_for_checking(site) as state:
            adopt(state, now, hand())
        self.watch = Watch(self.site, site, lambda: False)

    def look(self, now: datetime) -> dict[str, Any]:
        self.watch.look(now)
        return self.record()

    def record(self) -> dict[str, Any]:
        return account(self.site)

    def evenings(self) -> list[tuple[str, int, str]]:
        return [(day, edition, outcome) for day, _, edition, outcome, _ in self.record()["evenings"]]

    def notices(self, topic: str) -> list[str]:
        return [title for kind, _, _, title, _ in self.record()["notices"] if kind == topic]

    def entries(self, kind: str) -> list[Any]:
        with open_state(open_site(self.site)) as state:
            return [entry.fact for entry in state.ledger.entries() if kind == entry.fact.KIND]

    def write(self, path: Path, text: str, changed: datetime) -> None:
        path.write_text(text)
        os.utime(path, (changed.timestamp(), changed.timestamp()))


@pytest.fixture(scope="session")
def first_evening(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The folder of a site whose daemon checked its first evening."""
    site = write_site(tmp_path_factory.mktemp("daemon") / "site")
    leave_files(site, FIRST)
    Desk(site.parent).look(at(FIRST))
    return site.parent


@pytest.fixture
def started(first_evening: Path, tmp_path: Path) -> Desk:
    """The daemon of a fresh copy of that site."""
    desk = Desk(Path(shutil.copytree(first_evening, tmp_path / "site")))
    assert desk.evenings() == [(str(FIRST), 1, "within")]
    return desk


def test_an_evening_is_checked_when_its_time_has_come_and_once(started: Desk):
    leave_files(started.site, SECOND)
    started.look(at(SECOND, "17:59"))
    assert started.evenings() == [(str(FIRST), 1, "within")]

    started.look(at(SECOND, "18:00"))
    record = started.look(at(SECOND, "18:01"))

    assert started.evenings()[1:] == [(str(SECOND), 1, "within")]
    assert len([title for title in started.notices("nightly_note") if str(SECOND) in title]) == 1
    assert f"{SECOND}_all_1.html" in record["pages"]
    assert started.look(at(SECOND, "18:02")) == record


def test_the_first_evening_of_a_site_is_the_newest_one(started: Desk):
    for part in ("state", "pages", "tray"):
        shutil.rmtree(started.site.parent / part)
    for day in (SECOND, THIRD):
        leave_files(started.site, day)
    started.start(at(THIRD, "18:00"))

    started.look(at(THIRD, "18:00"))

    assert started.evenings() == [(str(THIRD), 1, "within")]


def test_a_missing_file_is_waited_for_and_then_told_of(started: Desk):
    leave_files(started.site, SECOND, kinds=("prices", "nav"))

    for clock in ("18:00", "18:01", "19:59"):
        started.look(at(SECOND, clock))
        assert started.evenings() == [(str(FIRST), 1, "within")]
    started.look(at(SECOND, "20:00"))

    assert started.evenings()[-1] == (str(SECOND), 1, "incomplete")
    assert len(started.notices("incomplete")) == 1
    record = started.record()
    assert started.look(at(SECOND, "20:01")) == record


def test_a_late_file_makes_the_next_edition(started: Desk):
    leave_files(started.site, SECOND, kinds=("prices", "nav"))
    started.look(at(SECOND, "20:00"))
    leave_files(started.site, SECOND, big=True, kinds=("positions",))

    started.look(at(SECOND, "21:00"))

    assert started.evenings()[1:] == [(str(SECOND), 1, "incomplete"), (str(SECOND), 2, "over")]
    assert len(started.notices("excess_opened")) == 1


def test_a_correction_of_an_older_evening_makes_its_next_edition(started: Desk):
    for day in (SECOND, THIRD):
        leave_files(started.site, day)
        started.look(at(day))
    leave_files(started.site, SECOND, big=True, kinds=("positions",))

    started.look(at(THIRD, "18:05"))

    assert started.evenings()[-1] == (str(SECOND), 2, "over")


def test_a_late_file_taken_in_before_a_crash_still_makes_the_next_edition(started: Desk):
    leave_files(started.site, SECOND, kinds=("prices", "nav"))
    started.look(at(SECOND, "20:00"))
    leave_files(started.site, SECOND, kinds=("positions",))
    with open_for_checking(open_site(started.site)) as state:
        take_in(state, at(SECOND, "21:00"))  # and no more: as if killed here

    started.start(at(SECOND, "21:05"))
    started.look(at(SECOND, "21:05"))

    assert started.evenings()[-1] == (str(SECOND), 2, "within")


def test_what_instruments_lack_is_made_up_for_by_a_later_file(started: Desk):
    leave_files(started.site, SECOND)
    leave(started.site, f"positions_{SECOND}.csv", "book,instrument,quantity\nharbour,QUAY,700\nharbour,NEW,1\n")
    leave(started.site, f"prices_{SECOND}.csv", "instrument,close\nQUAY,10\nTIDE,10\nNEW,10\n")
    started.look(at(SECOND, "20:00"))
    assert started.evenings()[-1] == (str(SECOND), 1, "incomplete")
    leave(
        started.site, "instruments.csv", "instrument,currency,kind\nQUAY,EUR,equity\nTIDE,EUR,equity\nNEW,EUR,equity\n"
    )

    started.look(at(SECOND, "20:30"))

    assert (str(SECOND), 2) == started.evenings()[-1][:2]


def test_an_evening_checked_too_early_by_hand_waits_for_its_files_too(started: Desk):
    with open_for_checking(open_site(started.site)) as state:
        check_evening(state, adopt(state, at(SECOND, "10:00"), hand()), SECOND, "all", at(SECOND, "10:00"), tell=True)
    leave_files(started.site, SECOND, kinds=("prices",))
    started.look(at(SECOND, "17:00"))
    started.look(at(SECOND, "18:00"))
    assert started.evenings()[1:] == [(str(SECOND), 1, "incomplete")]
    leave_files(started.site, SECOND)

    started.look(at(SECOND, "18:30"))

    assert started.evenings()[1:] == [(str(SECOND), 1, "incomplete"), (str(SECOND), 2, "within")]


def test_a_file_is_taken_once_nobody_has_written_it_for_a_while(started: Desk):
    leave_files(started.site, SECOND)
    path = leave(started.site, f"prices_{SECOND}.csv", "instrument,close\nQUAY,10\nTIDE,10\n")

    def touch(moment: datetime) -> None:
        os.utime(path, (moment.timestamp(), moment.timestamp()))

    touch(at(SECOND, "18:00") - timedelta(seconds=1))
    started.look(at(SECOND, "18:00"))
    touch(at(SECOND, "18:01") - timedelta(seconds=1))
    started.look(at(SECOND, "18:01"))
    started.look(at(SECOND, "18:01") + timedelta(seconds=1))  # unchanged between two looks, but they lie too close
    assert started.evenings() == [(str(FIRST), 1, "within")]

    started.look(at(SECOND, "18:02"))

    assert started.evenings()[-1] == (str(SECOND), 1, "within")


def test_a_file_whose_time_lies_ahead_is_taken_when_it_lies_still(started: Desk):
    leave_files(started.site, SECOND)
    path = leave(started.site, f"prices_{SECOND}.csv", "instrument,close\nQUAY,10\nTIDE,10\n")
    os.utime(path, (at(THIRD).timestamp(), at(THIRD).timestamp()))

    started.look(at(SECOND, "18:00"))
    started.look(at(SECOND, "18:01"))

    assert started.evenings()[-1] == (str(SECOND), 1, "within")


def test_after_a_gap_the_missed_evenings_come_in_order_and_the_old_ones_in_one_summary(started: Desk):
    missed = EVENINGS[1:9]
    for day in missed:
        leave_files(started.site, day, big=day == missed[0])
    nightly = len(started.notices("nightly_note"))

    started.start(at(missed[-1], "18:10"))
    started.look(at(missed[-1], "18:10"))

    assert [day for day, _, _ in started.evenings()] == [str(FIRST), *map(str, missed)]
    assert len(started.notices("summary")) == 1 and "2 evenings" in started.notices("summary")[0]
    assert len(started.notices("nightly_note")) == nightly + 6  # today's and those of the five business days before
    assert started.notices("excess_opened") == []  # of an old evening: the summary tells of it
    assert {f"{day}_all_1.html" for day in missed[2:]} <= set(started.record()["pages"])


def test_a_gap_behind_an_evening_checked_by_hand_is_made_up_for(started: Desk):
    for day in EVENINGS[1:4]:
        leave_files(started.site, day)
    with open_for_checking(open_site(started.site)) as state:
        terms = adopt(state, at(EVENINGS[3]), hand())
        take_in(state, at(EVENINGS[3]))
        check_evening(state, terms, EVENINGS[3], "all", at(EVENINGS[3]), tell=True)

    started.start(at(EVENINGS[3], "18:10"))
    started.look(at(EVENINGS[3], "18:10"))

    assert sorted(day for day, _, _ in started.evenings()) == [str(day) for day in EVENINGS[:4]]


def test_weekends_are_no_evenings(started: Desk):
    for day in EVENINGS[1:5]:
        leave_files(started.site, day)
    started.look(at(FRIDAY))
    record = started.record()

    for days in (1, 2):
        assert started.look(at(FRIDAY) + timedelta(days=days)) == record
    started.look(at(MONDAY, "20:00"))

    assert started.evenings()[-1] == (str(MONDAY), 1, "incomplete")


def break_rules(desk: Desk, when: datetime) -> None:
    desk.write(desk.rules, RULES.replace("measure:", "messure:"), when)


def break_site(desk: Desk, when: datetime) -> None:
    desk.write(desk.site, desk.site.read_text() + "nonsense: 1\n", when)


def name_an_unknown_calendar(desk: Desk, when: datetime) -> None:
    desk.write(desk.site, desk.site.read_text().replace("XDUB", "XXXX"), when)


def take_the_site_away(desk: Desk, when: datetime) -> None:
    desk.site.rename(desk.site.with_suffix(".away"))


@pytest.mark.parametrize("harm", [break_rules, break_site, name_an_unknown_calendar, take_the_site_away])
def test_while_the_site_or_its_rules_are_wrong_evenings_go_on_by_those_before(
    started: Desk, harm: Callable[[Desk, datetime], None]
):
    whole = started.site.read_bytes()
    leave_files(started.site, SECOND, big=True)
    harm(started, at(SECOND, "17:00"))

    for clock in ("18:00", "18:01"):
        started.watch.look(at(SECOND, clock))
    leave_files(started.site, THIRD)
    started.watch.look(at(THIRD, "18:00"))

    started.site.write_bytes(whole)
    started.write(started.rules, RULES, at(THIRD, "18:30"))
    os.utime(started.site, (0, 0))
    assert started.evenings()[1:] == [(str(SECOND), 1, "over"), (str(THIRD), 1, "within")]
    assert len(started.notices("trouble")) == 2  # once a day
    assert len(started.entries("rules.adopted")) == 1
    started.look(at(THIRD, "19:00"))
    assert len(started.notices("trouble")) == 2
    assert len(started.entries("rules.adopted")) == 1


def test_changed_rules_are_adopted_once_they_lie_still_and_count_from_the_next_evening(started: Desk):
    leave_files(started.site, SECOND)
    stricter = RULES.replace("near: 14000\n    limit: 15000", "limit: 9000")
    started.write(started.rules, stricter, at(SECOND, "17:59") - timedelta(seconds=2))
    started.look(at(SECOND, "17:59"))
    assert len(started.entries("rules.adopted")) == 1

    started.look(at(SECOND, "18:00"))

    assert len(started.entries("rules.adopted")) == 2
    assert len(started.notices("terms_changed")) == 1
    assert started.evenings()[1:] == [(str(SECOND), 1, "over")]


def test_a_drop_that_cannot_be_read_is_told_of_and_does_not_stop_the_evening(started: Desk):
    drop = started.site.parent / "drop"
    drop.rename(drop.with_name("away"))

    for clock in ("18:00", "19:00", "20:00"):
        started.look(at(SECOND, clock))

    assert started.evenings()[-1] == (str(SECOND), 1, "incomplete")
    assert len(started.notices("trouble")) == 1 and "reading the drop" in started.notices("trouble")[0]


def into_two_rounds(desk: Desk) -> None:
    """A second book, in a round of its own; both have their files of the second evening."""
    book = "  - {id: harbour, name: Harbour, currency: EUR, calendar: XDUB}\n"
    second = book.replace("harbour", "basin").replace("Harbour", "Basin")
    desk.write(desk.site, site_text(rounds=TWO_ROUNDS).replace(book, book + second), at(FIRST, "16:00"))
    for day in (FIRST, SECOND):
        leave_files(desk.site, day)
        leave(desk.site, f"positions_{day}.csv", "book,instrument,quantity\nharbour,QUAY,700\nbasin,TIDE,300\n")
        leave(desk.site, f"nav_{day}.csv", f"book,nav\nharbour,{20000 + day.day}\nbasin,20000\n")
    desk.start(at(SECOND, "17:00"))


def test_a_round_that_fails_does_not_hold_up_the_other_and_is_given_up_in_time(
    started: Desk, monkeypatch: pytest.MonkeyPatch
):
    desk = started
    into_two_rounds(desk)
    real = watch_module.check_evening

    def fail_early(state: Any, terms: str, day: Any, round_id: str, *rest: Any) -> Any:
        if round_id == "early" and day == SECOND:
            raise KeyError("a defect")
        return real(state, terms, day, round_id, *rest)

    monkeypatch.setattr(watch_module, "check_evening", fail_early)
    for clock in ("18:00", "18:30", "18:31"):
        desk.look(at(SECOND, clock))
    checked = [(day, round_id) for day, round_id, *_ in desk.record()["evenings"]]
    assert (str(SECOND), "late") in checked and (str(SECOND), "early") not in checked
    assert len(desk.notices("trouble")) == 1 and desk.notices("evening_missed") == []

    for clock in ("21:00", "21:01"):
        desk.look(at(SECOND, clock))

    (missed,) = desk.entries("evening.missed")
    assert (missed.day, missed.round) == (SECOND, "early")
    assert len(desk.notices("evening_missed")) == 1
    desk.look(at(THIRD, "18:29"))
    assert len(desk.entries("evening.missed")) == 1


def test_a_stop_lets_the_evening_in_hand_be_the_last(started: Desk):
    for day in EVENINGS[1:4]:
        leave_files(started.site, day)
    asked: list[bool] = []

    def stopping() -> bool:
        asked.append(True)
        return len(asked) > 2

    started.watch.stopping = stopping
    started.look(at(EVENINGS[3]))

    assert started.evenings()[1:] == [(str(SECOND), 1, "within")]
    assert len(started.notices("nightly_note")) == 2
    assert {state for *_, state in started.record()["notices"]} == {"sent"}


def test_pages_that_cannot_be_written_are_told_of_and_drawn_later(started: Desk):
    pages = started.site.parent / "pages"
    shutil.rmtree(pages)
    pages.touch()
    leave_files(started.site, SECOND)

    for clock in ("18:00", "18:01"):
        started.look(at(SECOND, clock))
    assert started.evenings()[1:] == [(str(SECOND), 1, "within")]
    assert len(started.notices("trouble")) == 1
    pages.unlink()
    started.look(at(SECOND, "18:02"))

    assert f"{SECOND}_all_1.html" in started.record()["pages"]


def test_a_notice_is_tried_again_by_a_later_look(started: Desk):
    tray = started.site.parent / "tray"
    shutil.rmtree(tray)
    tray.touch()
    leave_files(started.site, SECOND)
    started.look(at(SECOND, "18:00"))
    tray.unlink()

    record = started.look(at(SECOND, "18:01"))

    assert {state for *_, state in record["notices"]} == {"sent"}


def test_the_day_is_that_of_the_round_and_not_that_of_utc(started: Desk):
    """18:00 in Honolulu is 04:00 UTC of the next day."""
    rounds = '- {id: all, at: "18:00", give_up_at: "18:00", time_zone: Pacific/Honolulu}'
    started.write(started.site, site_text(rounds=rounds), at(FIRST))
    leave_files(started.site, SECOND)

    started.look(datetime(2026, 3, 11, 3, 59, tzinfo=UTC))
    before = started.evenings()
    started.look(datetime(2026, 3, 11, 4, 0, tzinfo=UTC))

    assert before == [(str(FIRST), 1, "within")]
    assert started.evenings()[1:] == [(str(SECOND), 1, "within")]
