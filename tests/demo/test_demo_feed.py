"""The demo firm: the same bytes every time, sensible markets and books, and a story that really happens."""

from __future__ import annotations

import csv
import hashlib
import io
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import date
from functools import cache
from itertools import pairwise
from types import MappingProxyType

import numpy as np
import numpy.typing as npt
import pytest

from demo_feed import sessions, story
from demo_feed.instruments import CASH, PRICED
from monitor.feed.kinds import Vocabulary, parse
from monitor.limits.rules import read_rules
from monitor.site import SiteSettings, read_site
from monitor.words import FileKind
from monitor.world import Rule

Floats = npt.NDArray[np.float64]
BOOKS = MappingProxyType({"north-quay": ("EUR", "XDUB"), "far-east": ("JPY", "XTKS"), "western": ("USD", "XNYS")})
WINDOW = 500

# Of all files of the story, by name; it changes when the story is changed on purpose, and then only.
STORY_SHA256 = "708c5e0f88d60cdd6b8e331d8c800a567da97f6324aedf700eb20c8a2b458917"


def rows(data: bytes) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(data.decode())))


@cache
def evenings() -> Sequence[story.DemoEvening]:
    return story.evenings()


@cache
def site() -> SiteSettings:
    return read_site("site.yaml", story.site_files()["site.yaml"])


@cache
def rules() -> Mapping[str, Rule]:
    files = [(name, data) for name, data in story.site_files().items() if name.startswith("rules/")]
    return {rule.id: rule for rule in read_rules(files, site().rule_context())}


def events_with(attribute: str) -> list[story.Event]:
    return [event for event in story.EVENTS if getattr(event, attribute)]


# The files


def test_the_story_has_the_same_bytes_every_time() -> None:
    digest = hashlib.sha256()
    for files in (story.start_files(), *(evening.files for evening in story.evenings())):
        for name, data in sorted(files.items()):
            digest.update(f"{name} {len(data)}\n".encode() + data)
    assert digest.hexdigest() == STORY_SHA256


def test_the_story_has_260_business_dates() -> None:
    dates = [evening.date for evening in evenings()]
    assert (len(dates), dates[0], dates[-1]) == (260, story.FIRST_EVENING, story.LAST_EVENING)
    assert dates == sorted(set(dates))
    assert all(any(sessions.is_session(calendar, day) for calendar in sessions.CALENDARS) for day in dates)
    assert [event.date for event in story.EVENTS] == sorted({event.date for event in story.EVENTS} & set(dates))


@pytest.mark.parametrize("calendar", sessions.CALENDARS)
def test_frozen_sessions_are_those_of_the_library(calendar: str) -> None:
    # An independent source: the calendars of exchange_calendars.
    import exchange_calendars

    known = exchange_calendars.get_calendar(calendar, start=sessions.FIRST.isoformat())
    last = min(sessions.LAST, known.last_session.date())
    days = np.arange(sessions.FIRST, last, dtype="datetime64[D]").astype(object)
    ours = [day for day in days if sessions.is_session(calendar, day)]
    theirs = {session.date() for session in known.sessions}
    assert ours == [day for day in days if day in theirs]


def test_sessions_outside_the_frozen_years_are_refused() -> None:
    with pytest.raises(ValueError, match=r"2027-01-04 lies outside the frozen sessions, 2020-01-01 to 2026-12-31"):
        sessions.is_session("XDUB", date(2027, 1, 4))


def test_every_file_is_one_that_the_feed_takes_except_the_broken_nav() -> None:
    words = Vocabulary(tuple(BOOKS), frozenset({"EUR", "GBP", "JPY", "USD"}))
    given = [(None, name, data) for name, data in story.start_files().items()]
    given += [(evening.date, name, data) for evening in evenings() for name, data in evening.files.items()]
    refused = {}
    for day, name, data in given:
        kind = FileKind(name.removesuffix(".csv").removesuffix(f"_{day}"))
        findings = parse(kind, name, data, day, words).findings
        if findings:
            refused[name] = [finding.line for finding in findings]
    (broken,) = events_with("broken_nav")
    assert refused == {f"nav_{broken.date}.csv": [4]}


def test_prices_come_for_open_markets_only_and_positions_for_books_with_a_session() -> None:
    missing, lost = [], []
    for evening in evenings():
        day = evening.date
        given = evening.files
        positions = {row["book"] for row in rows(given[f"positions_{day}.csv"])}
        due = {book for book, (_, calendar) in BOOKS.items() if sessions.is_session(calendar, day)}
        assert positions <= due
        lost += [(day, book) for book in due - positions]
        if f"prices_{day}.csv" not in given:
            missing.append(day)
            continue
        traded = [item.id for item in PRICED if sessions.is_session(item.calendar, day)]
        assert [row["instrument"] for row in rows(given[f"prices_{day}.csv"])] == traded
    assert missing == [event.date for event in events_with("no_prices")] == [date(2025, 4, 18)]
    assert lost == [(event.date, event.lost_book) for event in events_with("lost_book")]
    assert lost == [(date(2025, 5, 14), "western")]


def test_the_firm_is_of_the_size_it_should_be() -> None:
    kinds = [item.kind for item in (*PRICED, *CASH)]
    assert {kind: kinds.count(kind) for kind in kinds} == {"equity": 44, "fund": 5, "future": 4, "cash": 4}
    names = {item.id for item in (*PRICED, *CASH)}
    held = rows(evenings()[0].files[f"positions_{story.FIRST_EVENING}.csv"])
    assert {row["instrument"] for row in held} == names
    expiries = [date.fromisoformat(item.expiry) for item in PRICED if item.kind == "future"]
    assert min(expiries) > date(2027, 1, 1)


# Markets that look like markets


def closes(day_from: date) -> dict[str, Floats]:
    history: dict[str, list[float]] = {}
    for row in rows(story.start_files()["history.csv"]):
        if date.fromisoformat(row["date"]) >= day_from:
            history.setdefault(row["instrument"], []).append(float(row["close"]))
    return {name: np.array(values) for name, values in history.items()}


def test_returns_have_fat_tails_clusters_and_common_causes() -> None:
    returns = {name: np.diff(np.log(close)) for name, close in closes(story.HISTORY_FROM).items()}
    assert min(len(made) for made in returns.values()) > 1200
    shares = {item.id: item for item in PRICED if item.kind == "equity"}

    def kurtosis(made: Floats) -> float:
        return float(np.mean((made - made.mean()) ** 4) / made.var() ** 2)

    # A normal distribution has 3. Squares of a clustered series go on for weeks; those of independent draws do not.
    assert min(kurtosis(returns[name]) for name in shares) > 4
    mean = np.mean([returns[name] for name, item in shares.items() if item.calendar == "XNYS"], axis=0)
    size = np.abs(mean)
    assert np.mean([np.corrcoef(size[lag:], size[:-lag])[0, 1] for lag in range(1, 11)]) > 3 / math.sqrt(len(size))
    volatility = [returns[name].std() * math.sqrt(252) for name in shares]
    assert 0.12 < min(volatility) < max(volatility) < 0.5
    listed = [name for name, item in shares.items() if item.calendar == "XDUB"]
    correlation = np.corrcoef([returns[name] for name in listed])
    apart = correlation[np.triu_indices(len(listed), 1)]
    assert 0.2 < np.median(apart) < 0.6
    assert correlation[listed.index("KESTERMANN"), listed.index("KESTERMANN-PREF")] > 0.95


def test_the_range_of_a_day_holds_its_open_and_close_and_is_as_wide_as_its_returns() -> None:
    """Parkinson (1980): the mean of ln(high / low)^2 / (4 ln 2) is the variance from open to close, for a random walk.

    The range is that of four fifths of the day; what is left is between the close before and the open.
    """
    given = [*rows(story.start_files()["history.csv"])]
    for evening in evenings():
        given += rows(evening.files.get(f"prices_{evening.date}.csv", b""))
    series: dict[str, list[list[float]]] = {}
    for row in given:
        series.setdefault(row["instrument"], []).append(
            [float(row[field]) for field in ("close", "open", "high", "low")]
        )
    for item in PRICED:
        close, first, high, low = np.array(series[item.id]).T
        assert (low > 0).all()
        assert (low <= np.minimum(first, close)).all() and (high >= np.maximum(first, close)).all()
        whole = np.diff(np.log(close)).std()
        within = math.sqrt(np.mean(np.log(high / low) ** 2) / (4 * math.log(2)))
        night = np.log(first[1:] / close[:-1]).std()
        assert within / whole == pytest.approx(math.sqrt(0.8), abs=0.06), item.id
        assert night / whole == pytest.approx(math.sqrt(0.2), abs=0.06), item.id


# What happens, worked out from the files alone by a second calculation


@dataclass(frozen=True)
class Desk:
    """What the files say. close, rate: (names or currencies, days), carried; rate: EUR for one unit."""

    days: tuple[str, ...]
    names: tuple[str, ...]
    close: Floats
    rate: Floats
    instruments: Mapping[str, Mapping[str, str]]
    held: Mapping[str, Mapping[str, Mapping[str, float]]]
    nav: Mapping[str, Mapping[str, float]]


CURRENCIES = ("EUR", "GBP", "JPY", "USD")


@cache
def desk() -> Desk:
    start = story.start_files()
    instruments = {row["instrument"]: row for row in rows(start["instruments.csv"])}
    close = {(row["date"], row["instrument"]): float(row["close"]) for row in rows(start["history.csv"])}
    rate = {(row["date"], row["pair"]): float(row["rate"]) for row in rows(start["history_fx.csv"])}
    held: dict[str, dict[str, dict[str, float]]] = {}
    nav: dict[str, dict[str, float]] = {}
    for evening in evenings():
        day = evening.date.isoformat()
        for row in rows(evening.files.get(f"prices_{day}.csv", b"")):
            close[day, row["instrument"]] = float(row["close"])
        for row in rows(evening.files[f"fx_{day}.csv"]):
            rate[day, row["pair"]] = float(row["rate"])
        for row in rows(evening.files[f"positions_{day}.csv"]):
            held.setdefault(day, {}).setdefault(row["book"], {})[row["instrument"]] = float(row["quantity"])
        navs = rows(evening.files[f"nav_{day}.csv"])
        if not any(None in row for row in navs):
            nav[day] = {row["book"]: float(row["nav"]) for row in navs}
    days, names = tuple(sorted({day for day, _ in rate})), tuple(instruments)
    euros = [[1 / rate[day, f"EUR{code}"] if code != "EUR" else 1.0 for day in days] for code in CURRENCIES]
    table = np.ones((len(names), len(days)))
    for at, name in enumerate(names):
        last = 1.0
        for place, day in enumerate(days):
            last = close.get((day, name), last)
            table[at, place] = last
    return Desk(days, names, table, np.array(euros), instruments, held, nav)


def column(name: str) -> npt.NDArray[np.str_]:
    return np.array([desk().instruments[item][name] for item in desk().names])


@cache
def rates(currency: str) -> Floats:
    """(names, days) of what a unit of each instrument's currency is worth in a currency."""
    own = [CURRENCIES.index(code) for code in column("currency")]
    made: Floats = desk().rate[own] / desk().rate[CURRENCIES.index(currency)]
    return made


def exposures(quantity: Floats, currency: str, day: str) -> Floats:
    at = desk().days.index(day)
    made: Floats = quantity * column("multiplier").astype(float) * desk().close[:, at] * rates(currency)[:, at]
    return made


def quantities(held: Mapping[str, float]) -> Floats:
    return np.array([held.get(name, 0.0) for name in desk().names])


@cache
def window(calendar: str) -> tuple[list[int], list[int]]:
    """Places of the calendar's sessions among the days, and how many of them there are up to each day."""
    places = [at for at, day in enumerate(desk().days) if sessions.is_session(calendar, date.fromisoformat(day))]
    return places, np.searchsorted(places, np.arange(len(desk().days)), side="right").tolist()


def scenario_pnl(exposure: Floats, currency: str, calendar: str, day: str, length: int = WINDOW) -> Floats:
    """Design section 6: exposure x (exp(r) - 1), local and FX log returns added; a future on its local return."""
    places, upto = window(calendar)
    end = upto[desk().days.index(day)]
    own = places[end - length - 1 : end]
    local = np.diff(np.log(desk().close[:, own]), axis=1)
    foreign = np.where((column("kind") == "future")[:, None], 0.0, np.diff(np.log(rates(currency)[:, own]), axis=1))
    made: Floats = exposure @ np.expm1(local + foreign)
    return made


def value_at_risk(pnl: Floats) -> float:
    """The 5th worst of 500 at 99 %: k = ceil((1 - c) n)."""
    assert len(pnl) == WINDOW
    return -float(np.sort(pnl)[4])


@cache
def book_evenings(book: str) -> list[tuple[str, Floats, float]]:
    """Date, exposures and the latest NAV of a book, on each of its evenings whose positions came."""
    made = []
    nav = math.nan
    for evening in evenings():
        day = evening.date.isoformat()
        nav = desk().nav.get(day, {}).get(book, nav)
        if book in desk().held[day]:
            made.append((day, exposures(quantities(desk().held[day][book]), BOOKS[book][0], day), nav))
    return made


@cache
def firm_evenings() -> list[tuple[str, Floats, float]]:
    """The same of the firm in EUR on the sessions of XDUB, each book on its last known positions."""
    made = []
    held: dict[str, Mapping[str, float]] = {}
    nav: dict[str, float] = {}
    for evening in evenings():
        day = evening.date.isoformat()
        held.update(desk().held[day])
        nav.update(desk().nav.get(day, {}))
        if sessions.is_session("XDUB", evening.date):
            at = desk().days.index(day)
            quantity = np.sum([quantities(own) for own in held.values()], axis=0)
            total = sum(nav[book] * desk().rate[CURRENCIES.index(BOOKS[book][0]), at] for book in BOOKS)
            made.append((day, exposures(quantity, "EUR", day), float(total)))
    return made


def runs(rule: str, values: Mapping[str, float]) -> list[tuple[str, str]]:
    """The dates on which a rule's standing changed, with the new standing, from the levels in the rule files."""
    near, limit = rules()[rule].near, rules()[rule].limit
    assert near is not None
    assert limit is not None
    changes: list[tuple[str, str]] = []
    for day, value in values.items():
        standing = "over" if value > limit else "near" if value >= near else "within"
        if not changes or changes[-1][1] != standing:
            changes.append((day, standing))
    return changes


def weights(book: str, name: str) -> dict[str, float]:
    at = desk().names.index(name)
    return {day: abs(float(exposure[at])) / nav for day, exposure, nav in book_evenings(book)}


def test_nav_is_what_the_book_is_worth_without_the_exposure_of_futures() -> None:
    funded = column("kind") != "future"
    unpriced = {event.date.isoformat() for event in (*events_with("no_prices"), *events_with("broken_nav"))}
    for book in BOOKS:
        for day, exposure, nav in book_evenings(book):
            if day not in unpriced:
                assert float(exposure[funded].sum()) == pytest.approx(nav, rel=1e-9), (book, day)


def test_trades_are_paid_for_so_that_nav_moves_with_the_market_alone() -> None:
    future = column("kind") == "future"
    unpriced = {event.date.isoformat() for event in (*events_with("no_prices"), *events_with("broken_nav"))}
    lost = [event.date.isoformat() for event in events_with("lost_book")]
    for book, (currency, _) in BOOKS.items():
        for (before, held, nav_before), (day, _, nav) in pairwise(book_evenings(book)):
            if unpriced & {before, day} or any(before < between < day for between in lost):
                continue
            old, new = desk().days.index(before), desk().days.index(day)
            local = desk().close[:, new] / desk().close[:, old]
            foreign = rates(currency)[:, new] / rates(currency)[:, old]
            gain = held * np.where(future, foreign * (local - 1), local * foreign - 1)
            assert nav - nav_before == pytest.approx(float(gain.sum()), abs=1e-9 * nav + 0.05), (book, day)


def test_the_pnl_that_books_state_is_that_of_what_they_held_with_the_days_trades_and_without_their_cost() -> None:
    """Held overnight, a book gains what its net asset value gains, for it trades at closes."""
    unknown = {event.date.isoformat() for event in (*events_with("broken_nav"), *events_with("no_pnl"))}
    stated: dict[str, dict[str, dict[str, str]]] = {}
    for evening in evenings():
        day = evening.date.isoformat()
        for row in rows(evening.files.get(f"pnl_{day}.csv", b"")):
            stated.setdefault(row["book"], {})[day] = row
    fees, intraday = [], []
    for book, (_, calendar) in BOOKS.items():
        due = [evening.date for evening in evenings() if sessions.is_session(calendar, evening.date)]
        days = [day.isoformat() for day in due]
        absent = [day for day in days[1:] if day not in stated[book]]
        assert absent == ["2025-10-21"] == [event.date.isoformat() for event in events_with("no_pnl")]
        assert days[0] not in stated[book]  # nothing was held before
        for before, day in pairwise(days):
            if not {before, day} & unknown:
                row, nav = stated[book][day], desk().nav[day][book]
                held = float(row["actual"]) - float(row["intraday"]) + float(row["fees"])
                assert held == pytest.approx(nav - desk().nav[before][book], abs=1e-9 * nav + 0.05), (book, day)
                fees.append(float(row["fees"]) / nav)
                intraday.append(float(row["intraday"]) / nav)
    assert min(fees) == 0
    assert 1e-5 < max(fees) < 1e-3
    assert np.abs(intraday).max() < 0.002
    assert np.mean(np.array(intraday) < 0) == pytest.approx(np.mean(np.array(intraday) > 0), abs=0.1)


def test_books_have_their_size_and_trade_little_on_most_days() -> None:
    for book, (least, most) in {
        "north-quay": (150e6, 200e6),
        "far-east": (7.5e9, 10e9),
        "western": (95e6, 130e6),
    }.items():
        made = book_evenings(book)
        assert least < min(nav for *_, nav in made) < max(nav for *_, nav in made) < most
        quantity = [list(desk().held[day][book].values()) for day, *_ in made]
        moved = [sum(a != b for a, b in zip(*pair, strict=True)) for pair in pairwise(quantity)]
        assert np.mean(np.array(moved) > 1) > 0.5
        assert np.median(moved) <= 3


def test_a_buy_takes_a_position_over_and_a_sale_cures_it() -> None:
    assert runs("position-weight", weights("north-quay", "CORVANE")) == [
        ("2025-02-03", "within"),
        ("2025-03-25", "near"),
        ("2025-03-27", "over"),
        ("2025-04-03", "within"),
    ]


def test_the_story_ends_with_a_position_over() -> None:
    assert runs("position-weight", weights("far-east", "HANEGUSA")) == [
        ("2025-02-03", "within"),
        ("2026-01-20", "near"),
        ("2026-01-28", "over"),
    ]


def test_no_other_position_is_ever_near_its_limit() -> None:
    near = rules()["position-weight"].near
    assert near is not None
    judged = [item.id for item in PRICED if item.kind in ("equity", "fund")]
    told = {("north-quay", "CORVANE"), ("far-east", "HANEGUSA")}
    rest = [(book, name) for book in BOOKS for name in judged if (book, name) not in told]
    assert max(max(weights(book, name).values()) for book, name in rest) < near


def test_two_books_take_a_company_over_across_the_firm() -> None:
    lines = (column("issuer") == "Kestermann") & (column("kind") == "equity")
    values = {day: float(exposure[lines].sum()) / nav for day, exposure, nav in firm_evenings()}
    assert runs("issuer-weight", values) == [
        ("2025-02-03", "within"),
        ("2025-09-23", "near"),
        ("2025-09-30", "over"),
        ("2025-10-08", "within"),
    ]


def test_leverage_goes_over_and_is_cured() -> None:
    at_home = desk().names.index("CASH-USD")
    values = {day: float(np.abs(np.delete(own, at_home)).sum()) / nav for day, own, nav in book_evenings("western")}
    assert runs("we-leverage", values) == [
        ("2025-02-03", "within"),
        ("2025-11-10", "near"),
        ("2025-11-18", "over"),
        ("2025-11-25", "within"),
    ]


def test_a_market_shock_takes_var_over_and_selling_cures_it() -> None:
    book = {
        day: value_at_risk(scenario_pnl(own, "EUR", "XDUB", day)) / nav for day, own, nav in book_evenings("north-quay")
    }
    assert runs("nq-var", book) == [
        ("2025-02-03", "near"),
        ("2025-03-18", "within"),
        ("2025-06-12", "over"),
        ("2025-06-20", "within"),
        ("2026-02-02", "over"),
    ]
    firm = {day: value_at_risk(scenario_pnl(own, "EUR", "XDUB", day)) / nav for day, own, nav in firm_evenings()}
    assert runs("firm-var", firm) == [
        ("2025-02-03", "within"),
        ("2025-06-13", "near"),
        ("2025-06-16", "over"),
        ("2025-06-20", "near"),
        ("2025-06-25", "within"),
        ("2025-09-23", "near"),
        ("2025-10-08", "within"),
        ("2025-11-10", "near"),
        ("2025-11-18", "over"),
        ("2025-11-25", "within"),
        ("2026-01-22", "near"),
        ("2026-01-23", "within"),
        ("2026-01-26", "near"),
    ]


def test_ewma_volatility_calms_by_itself() -> None:
    values = {}
    for day, own, nav in book_evenings("far-east"):
        pnl = scenario_pnl(own, "JPY", "XTKS", day)
        variance = float(np.mean(pnl**2))
        for loss in pnl.tolist():
            variance = 0.94 * variance + 0.06 * loss**2
        values[day] = math.sqrt(252 * variance) / nav
    assert runs("fe-volatility", values) == [
        ("2025-02-03", "within"),
        ("2025-06-16", "over"),
        ("2025-07-11", "near"),
        ("2025-07-16", "over"),
        ("2025-07-17", "near"),
        ("2025-08-05", "within"),
    ]


# The site and its rules


def test_the_site_has_three_books_in_three_currencies_and_one_round() -> None:
    assert {book.id: (book.currency, book.calendar) for book in site().books} == BOOKS
    assert {each.id: each.books for each in site().rounds} == {"evening": ("north-quay", "far-east", "western")}


def test_the_rules_use_every_kind_of_limit() -> None:
    assert len(rules()) == 19
    assert {rule.measure.parameters.get("method") for rule in rules().values()} == {
        None,
        "historical",
        "normal",
        "student_t",
        "peaks_over_threshold",
        "monte_carlo",
        "sample",
        "ewma",
    }
    assert {rule.each for rule in rules().values()} == {None, "position", "issuer"}
    assert any(rule.limit_below is not None for rule in rules().values())
    assert all(rule.because and rule.owner for rule in rules().values())
