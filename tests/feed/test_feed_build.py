"""What a recipe makes of real files: prices, holidays, gaps, books and net asset values."""

from __future__ import annotations

from datetime import date, timedelta

import numpy as np
import pytest
from drop_site import FRIDAY, MONDAY, THURSDAY, WEEK, SmallSite, place_of, same

from monitor.words import InstrumentKind

INSTRUMENTS = ["instrument,currency,kind,calendar,expiry", "ALFA,EUR,equity,XDUB,", "BETA,USD,equity,XNYS,"]
FLAT = {"ALFA": (10.0,) * 5, "BETA": (20.0,) * 5}


@pytest.fixture
def site(tmp_path) -> SmallSite:
    site = SmallSite(tmp_path / "site")
    site.leave("instruments.csv", INSTRUMENTS)
    site.rates({"EURUSD": (1.25,) * 5, "EURJPY": (160.0,) * 5})
    for day in WEEK:
        site.positions("quay,ALFA,100", "west,BETA,50", "east,,", day=day)
    return site


def test_the_same_bytes_on_two_days_are_the_closes_of_both_days(site):
    """Two quiet days give files of the same content: what a file says depends on the date in its name too."""
    site.prices({"ALFA": (10.0, 11.0, 11.0, 11.0, 12.0)})
    for day in WEEK:
        site.navs("quay,500", day=day)

    for world in (site.world(), site.world()):  # the second one from the cache
        row = place_of(world, "ALFA")
        assert world.windows["XDUB"].close[row].tolist() == [10, 11, 11, 11, 12]
        assert not world.windows["XDUB"].gap[row].any()
        assert world.nav["quay"].on == FRIDAY


def test_a_missing_close_tonight_is_carried_and_told(site):
    site.prices({"ALFA": (10.0, 10.5, 11.0, 12.0, None), "BETA": (20.0,) * 5})

    world = site.world()

    row = place_of(world, "ALFA")
    assert (world.market.close[row], str(world.market.closed_on[row])) == (12, str(THURSDAY))
    assert world.market.carried.tolist() == [True, False]
    assert world.windows["XDUB"].gap[row].tolist() == [False, False, False, False, True]
    assert world.lacking == (f"no usable close of {FRIDAY} for 1 held instrument: ALFA",)


def test_a_missing_price_file_is_told_as_one_cause(site):
    site.prices({"ALFA": (10.0,) * 4, "BETA": (20.0,) * 4}, WEEK[:4])

    expected = f"no accepted price file gives closes of {FRIDAY}; 2 held instruments: ALFA, BETA"
    assert site.world().lacking == (expected,)


def test_a_close_that_is_not_positive_counts_for_a_future_only(site):
    site.leave("instruments.csv", [*INSTRUMENTS, "FUTU,USD,future,XNYS,2026-06-19"])
    site.positions("quay,ALFA,100", "west,FUTU,1", "east,,")
    site.prices({"ALFA": (10.0, 10.0, 10.0, 10.0, -10.0), "FUTU": (5.0, 3.0, 1.0, -2.0, 0.0)})

    world = site.world()

    assert world.windows["XNYS"].close[place_of(world, "FUTU")].tolist() == [5, 3, 1, -2, 0]
    assert world.market.close[place_of(world, "ALFA")] == 10
    assert world.market.carried[place_of(world, "ALFA")]


def test_on_a_holiday_of_its_market_a_close_is_carried_without_a_mark_and_the_reopening_carries_the_move(tmp_path):
    """Tokyo was closed on 2026-02-11 (Foundation Day), Dublin open."""
    days = [date(2026, 2, day) for day in (9, 10, 11, 12)]
    site = SmallSite(tmp_path / "site", window=3)
    site.leave("instruments.csv", ["instrument,currency,calendar", "HANA,JPY,XTKS"])
    site.prices({"HANA": (100.0, 110.0, None, 121.0)}, days)
    site.rates({"EURJPY": (160.0,) * 4, "EURUSD": (1.25,) * 4}, days)
    for day in days:
        site.positions("quay,HANA,10", "west,,", "east,,", day=day)

    window = site.world(days[3]).windows["XDUB"]
    closed = site.world(days[2])

    assert window.sessions.astype(str).tolist() == [str(day) for day in days]
    assert window.close[0].tolist() == [100, 110, 110, 121]
    assert not window.gap.any()
    assert not closed.market.carried.any()
    assert closed.lacking == ()


def test_a_gap_in_the_window_is_carried_and_marked(site):
    site.prices({"ALFA": (10.0, 11.0, None, 12.0, 13.0), "BETA": (20.0,) * 5})

    window = site.world().windows["XDUB"]

    assert window.close[0].tolist() == [10, 11, 11, 12, 13]
    assert window.gap[0].tolist() == [False, False, True, False, False]


def test_the_close_before_the_window_is_found(site):
    """The first session of the window has no close of ALFA: the one of the Friday before is carried into it."""
    site.prices({"ALFA": (9.0,)}, [MONDAY - timedelta(days=3)])
    site.prices({"ALFA": (None, 10.0, 10.0, 10.0, 10.0), "BETA": (20.0,) * 5})

    window = site.world().windows["XDUB"]

    assert window.close[place_of(site.world(), "ALFA")].tolist() == [9, 10, 10, 10, 10]


def test_a_daily_file_outranks_the_history_and_a_correction_replaces_its_file_whole(site):
    site.leave("history.csv", ["date,instrument,close", *(f"{day},ALFA,1" for day in WEEK)])
    site.prices({"ALFA": (10.0, 10.0, 10.0), "BETA": (20.0,) * 3}, WEEK[:3])

    first = site.world()
    site.leave(f"prices_{WEEK[1]}.csv", ["instrument,close", "BETA,21"])
    second = site.world()

    assert first.windows["XDUB"].close[place_of(first, "ALFA")].tolist() == [10, 10, 10, 1, 1]
    assert second.windows["XDUB"].close[place_of(second, "ALFA")].tolist() == [10, 1, 10, 1, 1]
    assert second.windows["XDUB"].close[place_of(second, "BETA")].tolist() == [20, 21, 20, 20, 20]


def test_cash_needs_no_price_file(tmp_path):
    site = SmallSite(tmp_path / "site")
    site.leave("instruments.csv", ["instrument,currency,kind", "DOLLAR,USD,cash"])
    site.rates({"EURUSD": (1.25, 1.2, 1.25, 1.28, 1.25), "EURJPY": (160.0,) * 5})
    site.positions("quay,DOLLAR,1000", "west,,", "east,,")

    world = site.world()

    assert world.market.instruments[0].kind is InstrumentKind.CASH
    assert world.windows["XDUB"].close.tolist() == [[1, 1, 1, 1, 1]]
    assert not world.windows["XDUB"].gap.any()
    assert not world.market.carried.any()
    assert world.lacking == ()


def test_an_unknown_instrument_is_named_and_told(site):
    site.prices({**FLAT, "ODD": (1.0,) * 5})
    site.positions("quay,ALFA,100", "quay,ODD,5", "west,BETA,50", "east,,")

    world = site.world()

    assert world.market.unknown.tolist() == [item.id == "ODD" for item in world.market.instruments]
    assert world.lacking == ("no instruments file describes 1 held instrument: ODD",)


def test_an_absent_book_is_missing_and_a_flat_one_is_flat(site):
    site.prices(FLAT)
    site.positions("quay,ALFA,100", "east,,")

    world = site.world()

    reason = f"no accepted file gives the positions of west on {FRIDAY}"
    assert world.holdings.missing == {"west": reason}
    assert world.lacking == (reason,)
    assert world.holdings.book.tolist() == [0]


def test_a_book_of_which_everything_was_sold_is_flat(site):
    site.prices(FLAT)
    site.positions("quay,ALFA,60", "quay,ALFA,-60", "west,BETA,0", "east,,")

    world = site.world()

    assert world.holdings.missing == {}
    assert len(world.holdings.quantity) == 0


def test_lots_are_summed_and_positions_sorted_by_book_and_instrument(site):
    site.prices(FLAT)
    site.leave(
        f"positions_{FRIDAY}.csv",
        [
            "book,instrument,quantity,lot",
            "west,BETA,1,a",
            "quay,BETA,5,",
            "quay,ALFA,2.5,x",
            "quay,ALFA,-4,y",
            "east,,,",
        ],
    )

    holdings = site.world().holdings

    assert holdings.book.tolist() == [0, 0, 1]
    assert holdings.instrument.tolist() == [0, 1, 1]
    assert holdings.quantity.tolist() == [-1.5, 5, 1]


def test_on_a_day_that_is_no_session_of_its_book_the_positions_of_its_last_session_count(tmp_path):
    """2026-02-11 was a holiday in Tokyo alone."""
    tenth, eleventh = date(2026, 2, 10), date(2026, 2, 11)
    site = SmallSite(tmp_path / "site", window=2)
    site.positions("quay,ALFA,1", "west,,", "east,HANA,7", day=tenth)
    site.positions("quay,ALFA,2", "west,,", day=eleventh)

    world = site.world(eleventh)
    assert world.holdings.missing == {}
    assert world.holdings.quantity.tolist() == [2, 7]

    site.positions("quay,ALFA,2", "west,,", "east,HANA,8", day=eleventh)
    assert site.world(eleventh).holdings.quantity.tolist() == [2, 8]


def test_the_holdings_before_are_those_of_the_session_before_by_calendar(site):
    site.prices(FLAT)
    site.positions("quay,ALFA,90", "west,BETA,50", "east,,", day=THURSDAY)

    past = site.world().past.held_before

    assert {name: (held.on, held.quantity.tolist()) for name, held in past.items()} == {
        "XDUB": (THURSDAY, [90, 50]),
        "XNYS": (THURSDAY, [90, 50]),
        "XTKS": (THURSDAY, [90, 50]),
    }


@pytest.mark.parametrize(
    ("day", "nav", "value", "reason"),
    [
        (FRIDAY, "500", 500, None),
        (WEEK[2], "500", 500, None),  # two business days old, which is allowed
        (WEEK[1], "500", None, "the newest NAV of quay is of 2026-03-03, 3 business days old; 2 allowed"),
        (FRIDAY, "-1", None, "the NAV of quay of 2026-03-06 is not positive"),
        (FRIDAY, "0", None, "the NAV of quay of 2026-03-06 is not positive"),
        (None, "", None, "no NAV of quay on or before 2026-03-06 is known"),
    ],
)
def test_a_nav_that_is_missing_too_old_or_not_positive_says_why(site, day, nav, value, reason):
    site.prices(FLAT)
    if day:
        site.navs(f"quay,{nav}", day=day)

    found = site.world().nav["quay"]

    assert (found.value, found.on, found.reason) == (value, day, reason)


def test_a_nav_may_be_as_old_as_the_site_allows(tmp_path):
    """60 business days back: 2026-03-06 less twelve weeks, less what Christmas takes."""
    site = SmallSite(tmp_path / "site", nav_age=60)
    site.navs("quay,500", day=date(2025, 12, 12))

    assert site.world().nav["quay"].value == 500


def test_of_two_navs_for_one_date_the_later_file_counts_and_later_dates_do_not(site):
    site.prices(FLAT)
    site.leave(f"nav_{THURSDAY}.csv", ["book,nav,nav_date", f"quay,400,{WEEK[2]}", "west,1,"])
    site.leave(f"nav_{FRIDAY}.csv", ["book,nav,nav_date", f"quay,450,{WEEK[2]}"])

    assert (site.world().nav["quay"].value, site.world().nav["quay"].on) == (450, WEEK[2])
    assert site.world(THURSDAY).nav["quay"].value == 400


def test_an_earlier_recipe_ignores_later_files_and_later_corrections(site):
    site.prices(FLAT, WEEK)
    site.navs("quay,500")
    with site.state() as (state, _):
        known = state.ledger.head().seq
    before = site.world(known=known)

    site.leave(f"prices_{FRIDAY}.csv", ["instrument,close", "ALFA,11", "BETA,21"])
    site.positions("quay,ALFA,999", "west,BETA,50", "east,,")
    site.navs("quay,600")
    site.leave("instruments.csv", ["instrument,currency", "ALFA,USD", "BETA,USD"])
    site.leave("history.csv", ["date,instrument,close", "2026-02-27,ALFA,9"])
    after = site.world()

    assert after.holdings.quantity.tolist() == [999, 50]
    assert after.nav["quay"].value == 600
    assert same(site.world(known=known), before)


def test_files_of_later_dates_change_nothing(site):
    site.prices(FLAT)
    before = site.world(THURSDAY)
    site.leave("prices_2026-03-09.csv", ["instrument,close", "ALFA,99"])
    site.leave("positions_2026-03-09.csv", ["book,instrument,quantity", "quay,ALFA,9"])
    after = site.world(THURSDAY)

    assert same(after.holdings, before.holdings)
    assert same(after.market, before.market)
    assert same(after.windows["XDUB"], before.windows["XDUB"])


def test_an_old_rate_of_a_currency_that_only_a_book_or_a_rule_has_is_told_too(tmp_path):
    rule = "rules:\n  - {id: net, measure: {name: net}, limit: 9, unit: amount, currency: GBP}\n"
    site = SmallSite(tmp_path / "site", rule)
    site.leave("instruments.csv", INSTRUMENTS)
    site.prices({"ALFA": (10.0,) * 5})
    site.positions("quay,,", "west,ALFA,1", "east,,")
    site.rates({"EURJPY": (160.0,) * 5, "EURUSD": (1.25, 1.25, 1.25, 1.25, None)})

    assert site.world().lacking == (
        "no chain of FX rates leads from GBP to EUR",
        f"no FX rate of {FRIDAY} for USD; the last known ones count",
    )


def test_the_currency_of_a_flat_book_needs_no_rate(tmp_path):
    site = SmallSite(tmp_path / "site")
    site.positions("quay,,", "west,,", "east,,")

    assert site.world().lacking == ()


ROUNDS = """\
rounds:
  - {id: asia, books: [east], time_zone: Asia/Tokyo, at: "18:00", files_due_by: "17:30", give_up_at: "20:00"}
  - {id: later, books: [quay, west], at: "21:00", files_due_by: "20:00", give_up_at: "22:00"}
"""


def test_the_round_that_completes_a_date_answers_for_the_firm(tmp_path):
    site = SmallSite(tmp_path / "site", more=ROUNDS)
    site.positions("east,,")

    asia, later = site.world(round_id="asia"), site.world(round_id="later")

    assert (asia.scope.books, asia.scope.completes) == (("east",), False)
    assert (later.scope.books, later.scope.completes) == (("quay", "west"), True)
    assert asia.lacking == ()
    assert len(later.lacking) == 2  # west and quay are missing


def test_a_round_completes_the_date_when_the_books_of_the_later_ones_have_no_session(tmp_path):
    """2026-12-25: Dublin and New York keep Christmas, Tokyo does not."""
    site = SmallSite(tmp_path / "site", more=ROUNDS)
    christmas = date(2026, 12, 25)

    world = site.world(christmas, round_id="asia")

    assert world.scope.completes


def test_windows_hold_the_sessions_of_their_own_calendar(tmp_path):
    site = SmallSite(tmp_path / "site", window=3)

    windows = site.world(date(2026, 2, 12)).windows

    assert windows["XTKS"].sessions.astype(str).tolist() == ["2026-02-06", "2026-02-09", "2026-02-10", "2026-02-12"]
    assert windows["XDUB"].sessions.astype(str).tolist() == ["2026-02-09", "2026-02-10", "2026-02-11", "2026-02-12"]


def test_what_was_sold_today_keeps_the_calendar_of_the_book_that_held_it(tmp_path):
    """HANA has no calendar of its own; on Foundation Day no close of it is expected."""
    site = SmallSite(tmp_path / "site", window=2)
    site.leave("instruments.csv", ["instrument,currency", "HANA,JPY"])
    days = [date(2026, 2, 10), date(2026, 2, 11)]
    site.prices({"HANA": (100.0,)}, days[:1])
    site.rates({"EURJPY": (160.0, 160.0), "EURUSD": (1.0, 1.0)}, days)
    site.positions("quay,,", "west,,", "east,HANA,7", day=days[0])
    site.positions("quay,,", "west,,", "east,,", day=days[1])

    world = site.world(days[1])

    assert len(world.holdings.quantity) == 0
    assert not world.market.carried.any()
    assert not world.windows["XDUB"].gap[:, -1].any()


def test_a_rate_that_is_missing_inside_the_window_is_marked(site):
    site.prices(FLAT)
    site.rates({"EURUSD": (1.25, None, 1.3, 1.3, 1.3), "EURJPY": (160.0,) * 5})

    world = site.world()

    row = world.market.currencies.index("USD")
    assert world.windows["XNYS"].rate_gap[row].tolist() == [False, True, False, False, False]
    assert np.allclose(world.windows["XNYS"].rate[row], [0.8, 0.8, 1 / 1.3, 1 / 1.3, 1 / 1.3])
    assert not world.windows["XNYS"].rate_gap[world.market.currencies.index("EUR")].any()
