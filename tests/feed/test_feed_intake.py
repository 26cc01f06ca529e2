"""What lies in the drop is decided about once, and again when the file or the settings are others."""

from __future__ import annotations

import os

import pytest
from drop_site import FRIDAY, WEEK, SmallSite

from monitor.facts import FileAccepted, FileRefused


@pytest.fixture
def site(tmp_path) -> SmallSite:
    return SmallSite(tmp_path / "site")


def decided(site: SmallSite) -> list[tuple[str, bool]]:
    """Every decision on record: the file's name and whether it was accepted."""
    with site.state() as (state, _):
        return [
            (entry.fact.name, isinstance(entry.fact, FileAccepted))
            for entry in state.ledger.entries()
            if isinstance(entry.fact, FileAccepted | FileRefused)
        ]


def test_a_file_is_decided_about_once(site):
    site.leave("instruments.csv", "instrument,currency\nALFA,EUR\n")
    site.leave(f"prices_{FRIDAY}.csv", "instrument,close\nALFA,x\n")

    expected = [("instruments.csv", True), (f"prices_{FRIDAY}.csv", False)]
    assert decided(site) == expected
    (site.folder / "state" / "history.sqlite").unlink()
    assert decided(site) == expected


def test_a_mended_file_is_taken_and_the_evening_lacks_it_no_more(site):
    name = f"prices_{FRIDAY}.csv"
    site.positions("quay,,", "west,,", "east,,")
    site.leave(name, "instrument,close\nALFA,x\n")
    assert site.world().lacking == (
        f"{name}:2:6: found 'x' as close; expected a number with a decimal point, below 1e+18 in size",
    )

    site.leave(name, "instrument,close\nALFA,1\n")
    assert site.world().lacking == ()


def test_a_good_file_put_back_after_a_bad_one_mends_the_evening(site):
    name = f"prices_{FRIDAY}.csv"
    site.positions("quay,,", "west,,", "east,,")
    site.leave(name, "instrument,close\nALFA,1\n")
    assert site.world().lacking == ()
    site.leave(name, "instrument,close\nALFA,x\n")
    assert len(site.world().lacking) == 1

    site.leave(name, "instrument,close\nALFA,1\n")
    assert site.world().lacking == ()


def test_a_refused_file_is_tried_again_under_other_settings(site):
    site.positions("quay,,", "west,,", "east,,", "north,,")
    assert site.world().holdings.missing.keys() == {"quay", "west", "east"}

    north = "  - {id: north, currency: EUR, calendar: XDUB}\nchannels:"
    text = (site.folder / "site.yaml").read_text().replace("channels:", north)
    (site.folder / "site.yaml").write_text(text)

    world = site.world()
    assert world.holdings.missing == {}
    assert world.lacking == ()


def test_a_file_that_stays_wrong_is_refused_once_for_each_settings(site):
    site.leave("notes.txt", "hello")
    assert decided(site) == decided(site) == [("notes.txt", False)]

    site.settle(nav_age=3)
    assert decided(site) == decided(site) == [("notes.txt", False)] * 2

    site.settle("rules:\n  - {id: other, measure: {name: count}, limit: 5}\n", nav_age=3)
    assert decided(site) == [("notes.txt", False)] * 2


def test_an_unknown_calendar_refuses_the_instruments_and_not_the_evening(site):
    site.positions("quay,,", "west,,", "east,,")
    site.leave("instruments.csv", "instrument,currency,calendar\nALFA,EUR,XDUB\nBETA,EUR,XQQQ\n")

    [lacking] = site.world().lacking

    assert lacking.startswith("instruments.csv:3:10: found the calendar 'XQQQ'; expected the ISO 10383 code")


def test_links_folders_and_unreadable_names_are_refused_and_unfinished_files_wait(site):
    drop = site.folder / "drop"
    (drop / "prices_2026-03-05.csv").symlink_to(site.folder / "site.yaml")
    (drop / "prices_2026-03-04.csv").mkdir()
    (drop / os.fsdecode(b"prices_\xff.csv")).write_text("x")
    for unfinished in (".prices_2026-03-06.csv", "prices_2026-03-06.csv.part", "prices_2026-03-06.csv.tmp"):
        site.leave(unfinished, "instrument,close\n")

    expected = [("prices_2026-03-04.csv", False), ("prices_2026-03-05.csv", False), ("prices_�.csv", False)]
    assert decided(site) == expected
    assert decided(site) == expected


def test_a_kind_of_file_that_comes_later_says_so(site):
    site.leave(f"actions_{FRIDAY}.csv", "instrument,ex_date,action,value\n")
    with site.state() as (state, _):
        [fact] = [entry.fact for entry in state.ledger.entries() if isinstance(entry.fact, FileRefused)]

    assert fact.findings[0].found == "a kind of file that is not there yet"


def test_a_refused_file_of_another_day_does_not_trouble_tonight(site):
    site.positions("quay,,", "west,,", "east,,")
    site.leave(f"prices_{WEEK[1]}.csv", "instrument,close\nALFA,x\n")

    assert site.world().lacking == ()
    assert len(site.world(WEEK[1]).lacking) == 4  # the file, and three books without positions


def test_a_price_in_another_currency_than_its_instrument_is_refused(site):
    """Also when both files come together and the prices' name comes first."""
    name = f"prices_{FRIDAY}.csv"
    site.positions("quay,,", "west,,", "east,,")
    site.leave("instruments.csv", "instrument,currency\nALFA,EUR\nBETA,USD\n")
    site.leave(name, "instrument,close,currency\nALFA,1,EUR\nGAMMA,2,JPY\nBETA,1.5,\n")
    assert site.world().lacking == ()

    site.leave(name, "instrument,close,currency\nALFA,1,USD\nBETA,2,USD\n")
    assert site.world().lacking == (
        f"{name}:2:8: found a close of ALFA in USD; expected EUR, its currency by the instruments file",
    )
