"""Opening, highest and lowest prices: what a file may say of them, how they are kept, and who gets them."""

from __future__ import annotations

import math
import sqlite3
from collections.abc import Mapping
from datetime import date

import numpy as np
import pytest
from drop_site import FRIDAY, THURSDAY, WEEK, SmallSite, place_of, rule, rules, same, sessions_worked_out
from hypothesis import given
from hypothesis import strategies as st

from monitor.currencies import CURRENCIES
from monitor.facts import UsedFile
from monitor.feed import calendars
from monitor.feed.digest import digest_inputs
from monitor.feed.history import FORMAT, TABLES, History
from monitor.feed.kinds import Panel, Parsed, Vocabulary, parse
from monitor.words import FileKind
from monitor.world import Floats, World

HEADER = "instrument,close,open,high,low"
NEW = Vocabulary(("quay", "west", "east"), CURRENCIES, lambda calendar: calendar == "XDUB")
TOO_HIGH, TOO_LOW = "a low at or below open and close", "a high at or above open and close"
NONE_THERE = "Leave the cell empty where there is none."


def read(*lines: str, kind: FileKind = FileKind.PRICES, words: Vocabulary = NEW) -> Parsed:
    return parse(kind, "prices.csv", "\n".join([*lines, ""]).encode(), FRIDAY, words)


def ranges_of(parsed: Parsed) -> Floats | None:
    assert parsed.findings == ()
    assert isinstance(parsed.content, Panel)
    return parsed.content.ranges


# What a file says


def test_columns_may_come_in_any_order_and_cells_may_be_empty():
    ranges = ranges_of(read("low,instrument,high,close,open", "8,A,12,10,9", ",B,,5,5.5", "3,C,4,3.5,"))

    nan = math.nan
    expected = [[[9, 5.5, nan]], [[12, nan, 4]], [[8, nan, 3]]]
    assert np.array_equal(ranges, expected, equal_nan=True)


@pytest.mark.parametrize(
    "lines", [("instrument,close", "A,1"), (HEADER, "A,1,,,"), ("instrument,close,volume", "A,1,5")]
)
def test_a_file_that_gives_none_has_none(lines):
    assert ranges_of(read(*lines)) is None


def test_a_day_on_which_the_price_stood_still_is_sound():
    assert ranges_of(read(HEADER, "A,10,10,10,10")) is not None


@pytest.mark.parametrize(
    ("row", "told"),
    [
        ("A,10,11,12,10.5", f"prices.csv:2:12: found the low 10.5 above the close 10; expected {TOO_HIGH}"),
        ("A,10,9,11,9.5", f"prices.csv:2:11: found the low 9.5 above the open 9; expected {TOO_HIGH}"),
        ("A,10,9,9.5,8", f"prices.csv:2:8: found the high 9.5 below the close 10; expected {TOO_LOW}"),
        ("A,10,12,11,8", f"prices.csv:2:9: found the high 11 below the open 12; expected {TOO_LOW}"),
        ("A,10,,9.99,", f"prices.csv:2:7: found the high 9.99 below the close 10; expected {TOO_LOW}"),
        ("A,10,,,10.01", f"prices.csv:2:8: found the low 10.01 above the close 10; expected {TOO_HIGH}"),
        ("A,10,0,11,8", f"prices.csv:2:6: found the open 0; expected a number above zero. {NONE_THERE}"),
        ("A,10,9,11,-8", f"prices.csv:2:11: found the low -8; expected a number above zero. {NONE_THERE}"),
        (
            "A,10,x,11,8",
            "prices.csv:2:6: found 'x' as open; expected a number with a decimal point, below 1e+18 in size",
        ),
        (
            "A,10,9,1e400,8",
            "prices.csv:2:8: found '1e400' as high; expected a number with a decimal point, below 1e+18 in size",
        ),
        (
            "A,10,nan,11,8",
            "prices.csv:2:6: found 'nan' as open; expected a number with a decimal point, below 1e+18 in size",
        ),
    ],
)
def test_what_is_wrong_refuses_the_file_with_its_place(row, told):
    assert [str(finding) for finding in read(HEADER, row).findings] == [told]
    # A history file has the same columns behind a date, which moves them by its width.
    [finding] = read("date," + HEADER, "2026-03-05," + row, kind=FileKind.HISTORY).findings
    [alone] = read(HEADER, row).findings
    assert (finding.found, finding.column) == (alone.found, alone.column + len("2026-03-05,"))


def test_every_row_that_is_wrong_is_told():
    found = read(HEADER, "A,10,9,11,12", "B,1,1,1,1", "C,5,6,4,4")

    assert [(finding.line, finding.found) for finding in found.findings] == [
        (4, "the high 4 below the open 6"),
        (4, "the high 4 below the close 5"),
        (2, "the low 12 above the open 9"),
        (2, "the low 12 above the close 10"),
    ]


def test_a_negative_close_of_a_future_needs_no_range():
    """A close below zero is a future's own affair; beside it there can be no range above zero."""
    assert ranges_of(read(HEADER, "FUTU,-37.63,,,")) is None
    assert [finding.found for finding in read(HEADER, "FUTU,-37.63,17,17.85,-40.32").findings] == ["the low -40.32"]


def test_a_history_places_each_row_on_its_day_and_instrument():
    ranges = ranges_of(
        read(
            "date,instrument,close,high,low",
            "2026-03-05,B,20,21,19",
            "2026-03-04,A,10,11,9",
            "2026-03-05,A,12,,",
            kind=FileKind.HISTORY,
        )
    )

    nan = math.nan
    expected = [[[nan, nan], [nan, nan]], [[11, nan], [nan, 21]], [[9, nan], [nan, 19]]]
    assert np.array_equal(ranges, expected, equal_nan=True)


PRICES = st.one_of(st.just(""), st.integers(-2, 12).map(str), st.sampled_from(["x", "1e400", "0.5"]))


@given(st.lists(st.tuples(st.integers(1, 10), PRICES, PRICES, PRICES), max_size=6))
def test_what_is_taken_is_in_order_and_the_archive_reads_all_that_was_ever_taken(made):
    """An earlier edition took these columns unread from a history: such a file stays taken, its unsound rows empty."""
    lines = [f"2026-03-05,N{at},{close},{opening},{high},{low}" for at, (close, opening, high, low) in enumerate(made)]
    lines = ["date," + HEADER, *lines]
    new = read(*lines, kind=FileKind.HISTORY)
    old = read(*lines, kind=FileKind.HISTORY, words=Vocabulary())

    assert old.findings == ()
    if not new.findings:
        assert repr(new.content) == repr(old.content)
    ranges, closes = ranges_of(old), old.content.values
    if ranges is not None:
        opening, high, low = ranges
        assert (ranges[~np.isnan(ranges)] > 0).all() and np.isfinite(ranges[~np.isnan(ranges)]).all()
        for prices in (opening, closes):
            assert not (prices > high).any() and not (prices < low).any()
        wrong = {finding.line for finding in new.findings}
        kept = [at for at in range(len(made)) if at + 2 not in wrong and any(made[at][1:])]
        assert [old.content.names[at] for at in np.flatnonzero(~np.isnan(ranges).all(axis=(0, 1)))] == [
            f"N{at}" for at in kept
        ]


# What a world holds


@pytest.fixture
def site(tmp_path) -> SmallSite:
    site = SmallSite(tmp_path / "site")
    site.leave(
        "instruments.csv",
        [
            "instrument,currency,kind,calendar,expiry",
            "ALFA,EUR,equity,XDUB,",
            "BETA,USD,equity,XNYS,",
            "EURO,EUR,cash,,",
        ],
    )
    site.rates({"EURUSD": (1.25,) * 5, "EURJPY": (160.0,) * 5})
    site.positions("quay,ALFA,100", "quay,EURO,7", "west,BETA,50", "east,,", day=FRIDAY)
    site.leave(
        "history.csv",
        [
            "date,instrument,close,open,high,low",
            f"{WEEK[0]},ALFA,10,9,11,8",
            f"{WEEK[1]},ALFA,11,10,12,9",
            f"{WEEK[1]},BETA,20,20,21,19",
        ],
    )
    site.leave(f"prices_{WEEK[2]}.csv", ["instrument,close", "ALFA,12", "BETA,21"])
    site.leave(f"prices_{THURSDAY}.csv", [HEADER, "BETA,22,21.5,22.5,21.25"])
    site.leave(
        f"prices_{FRIDAY}.csv", [HEADER, "BETA,23,,24,22", "ALFA,14,13,15,12.5", "OTHER,1,1,1,1", "EURO,1,1,2,0.5"]
    )
    return site


def told(world: World, name: str, calendar: str = "XDUB") -> Mapping[str, list[float | None]]:
    """The ranges of one instrument, None for NaN."""
    ranges = world.windows[calendar].ranges
    assert ranges is not None
    return {
        field: [
            None if math.isnan(price) else price for price in getattr(ranges, field)[place_of(world, name)].tolist()
        ]
        for field in ("open", "high", "low", "close")
    }


ALFA = {
    "open": [9, 10, None, None, 13],
    "high": [11, 12, None, None, 15],
    "low": [8, 9, None, None, 12.5],
    "close": [10, 11, 12, None, 14],
}
BETA = {
    "open": [None, 20, None, 21.5, None],
    "high": [None, 21, None, 22.5, 24],
    "low": [None, 19, None, 21.25, 22],
    "close": [None, 20, 21, 22, 23],
}
NOTHING = dict.fromkeys(("open", "high", "low", "close"), [None] * 5)


def test_ranges_are_those_given_on_the_session_itself_and_never_carried(site):
    world = site.world(ranges=True)

    for _ in range(2):  # the second one from the cache
        assert told(world, "ALFA") == told(world, "ALFA", "XNYS") == ALFA
        assert told(world, "BETA") == BETA
        assert told(world, "EURO") == NOTHING  # cash has no price of its own, whatever a file says
        assert world.windows["XDUB"].ranges.open.shape == world.windows["XDUB"].close.shape
        world = site.world(ranges=True)


def test_without_a_rule_that_needs_them_there_are_none_and_nothing_is_read(site, monkeypatch):
    monkeypatch.setattr(History, "_ranges_of", None)

    world = site.world()

    assert not world.terms.needs_ranges
    assert {name: window.ranges for name, window in world.windows.items()} == dict.fromkeys(world.windows)


def test_all_else_of_a_world_is_the_same_with_ranges_or_without(site):
    with_ranges, without = site.world(ranges=True), site.world()

    for name, window in without.windows.items():
        for field in ("sessions", "close", "rate", "gap", "rate_gap"):
            assert same(getattr(with_ranges.windows[name], field), getattr(window, field))
    assert same(with_ranges.market, without.market)


def test_where_files_give_nothing_it_is_not_given(tmp_path):
    site = SmallSite(tmp_path / "site")
    site.leave("instruments.csv", ["instrument,currency", "ALFA,EUR"])
    site.positions("quay,ALFA,1", "west,,", "east,,")
    assert told(site.world(ranges=True), "ALFA") == NOTHING  # no price file at all

    site.prices({"ALFA": (10.0,) * 5})
    assert told(site.world(ranges=True), "ALFA") == NOTHING | {"close": [10] * 5}


def test_nothing_is_held_so_nothing_is_given(tmp_path):
    site = SmallSite(tmp_path / "site")
    site.leave(f"prices_{FRIDAY}.csv", [HEADER, "ALFA,10,10,10,10"])
    site.positions("quay,,", "west,,", "east,,")

    assert site.world(ranges=True).windows["XDUB"].ranges.high.shape == (0, 5)


def test_a_range_comes_from_the_file_whose_close_counts(site):
    """A daily file outranks the history, and one of closes alone leaves none of the history's range beside its own."""
    site.leave(f"prices_{WEEK[1]}.csv", ["instrument,close", "ALFA,99"])

    world = site.world(ranges=True)

    assert told(world, "ALFA") == {
        "open": [9, None, None, None, 13],
        "high": [11, None, None, None, 15],
        "low": [8, None, None, None, 12.5],
        "close": [10, 99, 12, None, 14],
    }
    assert told(world, "BETA") == BETA


def test_a_correction_replaces_the_ranges_too_and_an_earlier_recipe_keeps_them(site):
    with site.state() as (state, _):
        known = state.ledger.head().seq
    site.leave(f"prices_{FRIDAY}.csv", [HEADER, "ALFA,14,14,16,14", "BETA,23,,,"])

    assert told(site.world(ranges=True), "ALFA")["high"] == [11, 12, None, None, 16]
    assert told(site.world(ranges=True), "BETA")["low"] == [None, 19, None, 21.25, None]
    assert told(site.world(ranges=True, known=known), "ALFA") == ALFA


def test_a_close_that_does_not_count_has_no_range(site):
    """Zero is no close of a share; the open beside it is not believed either."""
    site.leave(f"prices_{FRIDAY}.csv", [HEADER, "ALFA,0,13,,", "BETA,23,,,"])

    assert told(site.world(ranges=True), "ALFA")["open"] == [9, 10, None, None, None]


def test_a_range_on_a_day_that_is_no_session_of_the_calendar_is_no_part_of_its_window(tmp_path):
    """2026-02-11 was a holiday in Tokyo alone."""
    site = SmallSite(tmp_path / "site", window=2)
    site.leave("instruments.csv", ["instrument,currency,calendar", "ALFA,EUR,XDUB"])
    days = [date(2026, 2, 10), date(2026, 2, 11), date(2026, 2, 12)]
    for at, day in enumerate(days):
        site.leave(f"prices_{day}.csv", [HEADER, f"ALFA,10,10,{11 + at},9"])
        site.positions("quay,ALFA,1", "west,,", "east,,", day=day)

    windows = site.world(days[2], ranges=True).windows

    assert windows["XDUB"].ranges.high.tolist() == [[11, 12, 13]]
    assert windows["XTKS"].sessions.astype(str).tolist() == ["2026-02-09", "2026-02-10", "2026-02-12"]
    assert np.array_equal(windows["XTKS"].ranges.high, [[math.nan, 11, 13]], equal_nan=True)


@pytest.mark.parametrize(
    ("row", "another"),
    [
        ("ALFA,14,13.5,15,12.5", True),
        ("ALFA,14,13,15.5,12.5", True),
        ("ALFA,14,13,15,12", True),
        ("ALFA,14,,15,12.5", True),
        ("ALFA,14.0,13.00,15,12.50", False),
    ],
)
def test_a_range_changes_the_digest_where_a_rule_needs_it_and_nowhere_else(site, row, another):
    needed, unneeded = digest_inputs(site.world(ranges=True)), digest_inputs(site.world())
    site.leave(f"prices_{FRIDAY}.csv", [HEADER, "BETA,23,,24,22", row, "OTHER,1,1,5,1", "EURO,1,,,"])

    assert digest_inputs(site.world()) == unneeded
    assert (digest_inputs(site.world(ranges=True)) != needed) is another


# What the cache holds


def cache(site: SmallSite):
    return site.folder / "state" / "history.sqlite"


@pytest.mark.parametrize(
    "damage",
    [
        "UPDATE panel SET ranges = zeroblob(length(ranges)) WHERE ranges IS NOT NULL",
        "UPDATE panel SET ranges = substr(ranges, 1, length(ranges) - 8) WHERE ranges IS NOT NULL",
        "UPDATE panel SET ranges = NULL",
        "UPDATE panel SET ranges = zeroblob(0)",
        "UPDATE panel SET ranges_sum = 0",
        "UPDATE panel SET ranges_sum = NULL",
        "UPDATE panel SET ranges = zeroblob(48) WHERE ranges IS NULL",
        "UPDATE names SET joined = replace(joined, 'ALFA', 'BETA')",
        "DELETE FROM panel",
    ],
)
def test_what_it_holds_of_ranges_is_believed_only_with_its_sum(site, damage):
    world = site.world(ranges=True)
    db = sqlite3.connect(cache(site), isolation_level=None)
    (kept,) = db.execute("SELECT COUNT(ranges) FROM panel").fetchone()
    db.execute(damage)
    db.close()

    assert kept == 3  # the history and two price files
    assert same(site.world(ranges=True), world)
    assert same(site.world(ranges=True), world)


def test_deleted_it_is_built_anew_with_ranges(site, monkeypatch):
    monkeypatch.setattr(calendars, "from_library", sessions_worked_out)
    world = site.world(ranges=True)
    cache(site).unlink()
    without = site.world()

    assert without.windows["XDUB"].ranges is None
    assert same(site.world(ranges=True), world)


def test_a_cache_of_an_older_format_is_rebuilt_by_itself(site, monkeypatch):
    """Format 2, as the edition before wrote it: the same table without ranges."""
    monkeypatch.setattr(calendars, "from_library", sessions_worked_out)
    world = site.world(ranges=True)
    assert FORMAT == 3
    db = sqlite3.connect(cache(site), isolation_level=None)
    kept = db.execute("SELECT sha256, day, names, days, closes, sum FROM panel").fetchall()
    db.execute("DROP TABLE panel")
    older = TABLES.replace(" ranges BLOB, ranges_sum INTEGER,", "")
    assert older != TABLES
    db.execute(next(statement for statement in older.split(";") if "TABLE panel" in statement))
    db.executemany("INSERT INTO panel VALUES (?, ?, ?, ?, ?, ?)", kept)
    db.execute("PRAGMA user_version = 2")
    db.close()

    assert same(site.world(ranges=True), world)
    db = sqlite3.connect(cache(site))
    assert db.execute("PRAGMA user_version").fetchone() == (3,)
    assert db.execute("SELECT COUNT(ranges) FROM panel").fetchone() == (3,)
    db.close()


def test_what_it_holds_is_not_read_from_the_archive_again_nor_kept_in_memory_unasked(site):
    data = f"{HEADER}\nALFA,14,13,15,12.5\n".encode()
    file = UsedFile(FileKind.PRICES, "main", FRIDAY, "a" * 64)
    read_from_archive = []
    for _ in range(2):
        history = History(cache(site), lambda sha256: read_from_archive.append(sha256) or data)
        days, names, _ = history.matrix([file], FRIDAY, FRIDAY)

        assert history.panel(file).ranges is None
        assert history.ranges([file], days, names).tolist() == [[[13]], [[15]], [[12.5]]]
        history.close()
    assert len(read_from_archive) == 1


def test_files_without_ranges_take_no_more_room(site):
    site.world()
    db = sqlite3.connect(cache(site))
    kept = dict(db.execute("SELECT day, length(ranges) FROM panel WHERE day <> ''").fetchall())
    db.close()

    assert kept[str(WEEK[2])] is None
    assert kept[str(THURSDAY)] == 3 * 8


def test_a_history_that_an_earlier_edition_took_unread_is_still_read_from_the_archive(site):
    """Its closes count as they did; a row whose range is unsound has none."""
    data = f"date,{HEADER}\n{WEEK[0]},ALFA,10,n/a,?,\n{WEEK[1]},ALFA,11,10,9,12\n{WEEK[2]},ALFA,12,11,13,10\n".encode()
    with site.state() as (state, _):
        sha256 = state.archive.put(data)
        history = History(cache(site), lambda wanted: {sha256: data}[wanted])
        file = UsedFile(FileKind.HISTORY, "history.csv", None, sha256)
        days, names, closes = history.matrix([file], WEEK[0], FRIDAY)
        ranges = history.ranges([file], days, names)
        history.close()

    assert closes.tolist() == [[10], [11], [12]]
    assert np.array_equal(
        ranges[:, :, 0], [[math.nan, math.nan, 11], [math.nan, math.nan, 13], [math.nan, math.nan, 10]], equal_nan=True
    )


# Who needs them


@pytest.mark.parametrize(
    ("method", "needed"), [("sample", False), ("ewma", False), ("parkinson", True), ("garman_klass", True)]
)
def test_a_rule_needs_them_by_its_method(tmp_path, method, needed):
    line = rule("vol", f"{{name: volatility, method: {method}}}", "limit: 50 %", "ratio", each="position")
    site = SmallSite(tmp_path / "site", rules(line))
    site.positions("quay,,", "west,,", "east,,")

    world = site.world()

    assert world.terms.needs_ranges is needed
    assert (world.windows["XDUB"].ranges is not None) is needed
