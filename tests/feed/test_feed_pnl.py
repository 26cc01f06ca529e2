"""The books' own P&L: what a file may say, which file counts, and that no evening rests on it."""

from __future__ import annotations

import sqlite3
from collections.abc import Mapping
from datetime import date

import pytest
from drop_site import FRIDAY, MONDAY, NOW, THURSDAY, WEEK, SmallSite

from monitor.currencies import CURRENCIES
from monitor.evening import check_evening
from monitor.facts import FileAccepted, FileRefused
from monitor.feed.digest import digest_inputs
from monitor.feed.holdings import actual_pnl
from monitor.feed.kinds import Parsed, PnlRow, Vocabulary, parse
from monitor.feed.known import Known, accepted_after
from monitor.feed.names import read_name
from monitor.words import FileKind
from monitor.world import ActualPnl

WORDS = Vocabulary(("quay", "west"), CURRENCIES)


def read(*lines: str) -> Parsed:
    return parse(FileKind.PNL, "pnl.csv", "\n".join([*lines, ""]).encode(), FRIDAY, WORDS)


def test_fees_and_intraday_are_told_where_they_are_given():
    found = read("book,fees,actual,intraday", "quay,12.5,-300,0", "west,,4.25,-7")

    assert found.findings == ()
    assert found.content == (PnlRow("quay", -300.0, 12.5, 0.0), PnlRow("west", 4.25, None, -7.0))
    assert (found.rows, found.first, found.last) == (2, FRIDAY, FRIDAY)
    assert read("book,actual", "quay,1").content == (PnlRow("quay", 1.0, None, None),)


@pytest.mark.parametrize(
    ("lines", "told"),
    [
        (
            ("book,actual", "quay,"),
            "pnl.csv:2:6: found '' as actual; expected a number with a decimal point, below 1e+18",
        ),
        (("book,actual", "quay,1,5"), "pnl.csv:2:1: found a row of 3 columns; expected 2 columns as in the header"),
        (
            ("book,actual", "quey,1"),
            "pnl.csv:2:1: found the book 'quey'; expected one of quay, west. Did you mean 'quay'?",
        ),
        (
            ("book,actual", "quay,1", "quay,2"),
            "pnl.csv:3:1: found a second row of 'quay'; expected one row, as in line 2",
        ),
        (("book,actual,fees", "quay,1,x"), "pnl.csv:2:8: found 'x' as fees; expected a number with a decimal point"),
        (("book,actual,fee", "quay,1,2"), "pnl.csv:1:13: found the column 'fee'; expected one of book, actual, fees"),
        (("book,pnl", "quay,1"), "pnl.csv:1:6: found the column 'pnl'; expected one of book, actual, fees, intraday"),
    ],
)
def test_what_is_wrong_is_told_with_its_place(lines, told):
    assert str(read(*lines).findings[0]).startswith(told)


def test_its_name_is_no_longer_one_of_a_later_edition():
    site_patterns = {FileKind.PNL: "pnl_{date}.csv"}
    assert read_name("pnl_2026-03-06.csv", site_patterns).kind is FileKind.PNL
    assert read_name("scenario_pnl_2026-03-06.csv", site_patterns) is None


# Which file counts


@pytest.fixture
def site(tmp_path) -> SmallSite:
    site = SmallSite(tmp_path / "site")
    site.positions("quay,,", "west,,", "east,,")
    return site


def pnl(site: SmallSite, *rows: str, day: date = FRIDAY) -> None:
    site.leave(f"pnl_{day}.csv", ["book,actual,fees", *rows])


def known_pnl(
    site: SmallSite, first: date = MONDAY, last: date = FRIDAY, known: int | None = None, until: date = FRIDAY
) -> Mapping[tuple[str, date], ActualPnl]:
    with site.state() as (state, _):
        seq = state.ledger.head().seq if known is None else known
        return actual_pnl(Known(state.index(), seq, until), state.history, first, last)


def test_it_is_looked_up_by_book_and_date_within_a_range_of_dates(site):
    for at, day in enumerate(WEEK):
        pnl(site, f"quay,{at}.5,1", f"west,-{at},", day=day)

    found = known_pnl(site, WEEK[1], WEEK[2])

    assert found == {
        ("quay", WEEK[1]): ActualPnl(1.5, 1.0, None),
        ("west", WEEK[1]): ActualPnl(-1.0, None, None),
        ("quay", WEEK[2]): ActualPnl(2.5, 1.0, None),
        ("west", WEEK[2]): ActualPnl(-2.0, None, None),
    }
    assert known_pnl(site, FRIDAY, FRIDAY, until=THURSDAY) == {}
    assert len(known_pnl(site)) == 10


def test_a_day_or_a_book_that_no_file_gives_is_absent(site):
    assert known_pnl(site) == {}
    pnl(site, "quay,1,", day=MONDAY)
    pnl(site, "west,2,", day=WEEK[2])

    assert known_pnl(site).keys() == {("quay", MONDAY), ("west", WEEK[2])}


def test_a_correction_replaces_its_file_whole_and_what_was_known_before_stays_known(site):
    pnl(site, "quay,1,", "west,2,", day=THURSDAY)
    before = known_pnl(site)
    with site.state() as (state, _):
        known = state.ledger.head().seq
    pnl(site, "quay,-5,3", day=THURSDAY)

    assert known_pnl(site) == {("quay", THURSDAY): ActualPnl(-5.0, 3.0, None)}
    assert (
        known_pnl(site, known=known)
        == before
        == {
            ("quay", THURSDAY): ActualPnl(1.0, None, None),
            ("west", THURSDAY): ActualPnl(2.0, None, None),
        }
    )


def test_a_file_put_back_after_its_correction_counts_again(site):
    pnl(site, "quay,1,")
    known_pnl(site)
    pnl(site, "quay,2,")
    known_pnl(site)
    pnl(site, "quay,1,")

    assert known_pnl(site) == {("quay", FRIDAY): ActualPnl(1.0, None, None)}


def test_the_same_bytes_on_two_days_are_the_pnl_of_both(site):
    pnl(site, "quay,1,", day=THURSDAY)
    pnl(site, "quay,1,")

    assert known_pnl(site).keys() == {("quay", THURSDAY), ("quay", FRIDAY)}


def test_a_refused_correction_leaves_the_file_before_in_effect(site):
    pnl(site, "quay,1,")
    known_pnl(site)
    pnl(site, "quay,1;5,")

    assert known_pnl(site) == {("quay", FRIDAY): ActualPnl(1.0, None, None)}


# No evening rests on it


def test_without_it_nothing_is_lacking(site):
    assert site.world().lacking == ()


def test_a_refused_one_is_on_record_and_the_evening_lacks_nothing(site):
    pnl(site, "quay,x,")

    assert site.world().lacking == ()
    with site.state() as (state, _):
        refused = [entry.fact for entry in state.ledger.entries() if isinstance(entry.fact, FileRefused)]
    assert [(fact.file, fact.day) for fact in refused] == [(FileKind.PNL, FRIDAY)]


def test_it_makes_no_new_edition(site):
    before = digest_inputs(site.world())
    pnl(site, "quay,-1000000,")
    pnl(site, "quay,x,", day=THURSDAY)

    assert digest_inputs(site.world()) == before

    with site.state() as (state, terms):
        assert check_evening(state, terms, FRIDAY, list(state.terms(terms).rounds)[-1], NOW, tell=False).new
    pnl(site, "quay,-2000000,")
    with site.state() as (state, terms):
        checked = check_evening(state, terms, FRIDAY, list(state.terms(terms).rounds)[-1], NOW, tell=False)
    assert not checked.new


def test_its_coming_is_no_reason_to_check_an_evening_again(site):
    pnl(site, "quay,1,", day=THURSDAY)
    with site.state() as (state, _):
        assert [day for day, _ in accepted_after(state.index(), 0)] == [FRIDAY]  # the positions


def test_a_file_refused_by_an_edition_that_did_not_know_its_kind_is_taken_now(site):
    """What an edition before this one recorded of such a file, with the settings the same."""
    pnl(site, "quay,1,")
    data = (site.folder / "drop" / f"pnl_{FRIDAY}.csv").read_bytes()
    (site.folder / "drop" / f"pnl_{FRIDAY}.csv").unlink()
    with site.state() as (state, _), state.ledger.transaction(NOW) as transaction:
        refused = FileRefused(f"pnl_{FRIDAY}.csv", None, "", None, state.archive.put(data), len(data), 1, ())
        transaction.append(refused)
    pnl(site, "quay,1,")

    assert known_pnl(site) == {("quay", FRIDAY): ActualPnl(1.0, None, None)}
    with site.state() as (state, _):
        decided = [entry.fact for entry in state.ledger.entries() if isinstance(entry.fact, FileAccepted | FileRefused)]
    assert [isinstance(fact, FileAccepted) for fact in decided if fact.name.startswith("pnl")] == [False, True]


def test_the_cache_of_prices_holds_none_of_it(site):
    pnl(site, "quay,1,")
    known_pnl(site)
    db = sqlite3.connect(site.folder / "state" / "history.sqlite")

    assert db.execute("SELECT COUNT(*) FROM panel").fetchone() == (0,)
    db.close()
