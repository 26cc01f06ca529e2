"""duskcheck backtest from outside: the real command over a real drop, held against sums worked out here apart from it.

Real prices: S&P 500 closes of 1999 to 2018, as the package arch carries them (arch.data.sp500). The small firm, its
books and its prices are invented.
"""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from datetime import date, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from evening_scene import Commands, leave
from test_evening_real_prices import EXCEPTIONS_500, SITE, closes, run

AUTUMN = date(2008, 8, 29), date(2008, 12, 31)  # when all of EXCEPTIONS_500 fell
# Counts worked out from the same closes apart from this program, by the convention that it states: 99 %, log returns,
# the day itself not in its window, the 5th worst of 500 and the 3rd of 250, a loss strictly larger.
SP500 = {
    250: {"days": 4780, "exceptions": 67, "first": "1999-12-31", "coverage": 6.9254, "of_the_year": 10},
    500: {"days": 4530, "exceptions": 63, "first": "2000-12-27", "coverage": 6.2282, "of_the_year": 15},
}
ONE_INDEX = """\
rules:
  - id: day
    applies_to: {book: index}
    measure: {name: day_loss}
    limit: 100000
    unit: amount
"""

# Weekdays without the holidays of the exchange, as its public calendar has them.
WEEKDAYS = [day for day in (date(2026, 1, 5) + timedelta(days=n) for n in range(96)) if day.weekday() < 5]
DUBLIN = [day for day in WEEKDAYS if day not in (date(2026, 4, 3), date(2026, 4, 6))]
TOKYO = [day for day in WEEKDAYS if str(day) not in ("2026-01-12", "2026-02-11", "2026-02-23", "2026-03-20")]
FIRST, LAST = date(2026, 3, 9), date(2026, 4, 10)
NO_FILE = date(2026, 3, 17)  # harbour leaves no positions
SOLD, BOUGHT = date(2026, 3, 12), date(2026, 3, 24)  # harbour has TIDE before the one and from the other on
FIRST_OWN = date(2026, 3, 11)  # harbour says from here on what it made
SEED = 13  # of prices with a few losses beyond the forecast
LESS = 150  # is what it says it made than what its positions made
WINDOW, CONFIDENCE = 10, 0.9
HELD = {"QUAY": 100, "TIDE": 300}
RULES = """\
rules:
  - id: all-gross
    applies_to: {book: any}
    each: book
    measure: {name: gross}
    limit: 1000000000
    unit: amount
  - id: harbour-tail
    applies_to: {book: harbour}
    measure: {name: value_at_risk, method: student_t, confidence: 0.9, horizon_days: 5, window: 20}
    limit: 1000000000
    unit: amount
  - id: each-tail
    applies_to: {book: harbour}
    each: position
    measure: {name: value_at_risk, method: normal, confidence: 0.9, horizon_days: 1, window: 20}
    limit: 1000000000
    unit: amount
"""


def site_text(more: str = "", confidence: float = CONFIDENCE) -> str:
    return f"""\
site: Small Trust
base_currency: EUR
calendar: XDUB
time_zone: UTC
books:
  - {{id: harbour, name: Harbour, currency: EUR, calendar: XDUB}}
  - {{id: lantern, name: Lantern, currency: JPY, calendar: XTKS}}
channels:
  - {{id: tray, kind: folder, path: tray}}
defaults: {{window: {WINDOW}, confidence: {confidence}}}
{more}"""


def prices_of(name: str, days: Sequence[date]) -> dict[date, float]:
    """Invented closes: returns that differ from day to day, so that no loss equals a forecast."""
    random = np.random.RandomState([SEED, *name.encode()])
    moves = random.standard_t(4, len(WEEKDAYS))[: len(days)] * 0.01
    return {day: round(float(price), 6) for day, price in zip(days, 50 * np.exp(np.cumsum(moves)), strict=True)}


PRICES = {"QUAY": prices_of("QUAY", DUBLIN), "TIDE": prices_of("TIDE", DUBLIN), "KOI": prices_of("KOI", TOKYO)}


def holdings_of(day: date) -> dict[str, float]:
    return {name: units for name, units in HELD.items() if name != "TIDE" or not SOLD <= day < BOUGHT}


def own_pnl(day: date) -> tuple[float, float]:
    """What harbour says it made, after fees, and the fees: without them LESS than its positions made."""
    return round(pnl_of(holdings_of(before(DUBLIN, day)), day) - LESS - 5, 2), 5.0


def before(sessions: Sequence[date], day: date) -> date:
    return sessions[sessions.index(day) - 1]


def pnl_of(held: dict[str, float], day: date) -> float:
    earlier = before(DUBLIN, day)
    return sum(units * (PRICES[name][day] - PRICES[name][earlier]) for name, units in held.items())


def worst_of(held: dict[str, float], day: date, window: int = WINDOW, sessions: Sequence[date] = DUBLIN) -> float:
    """The loss that a historical simulation forecasts at 90 % on the evening of a day: the worst but a tenth."""
    at = sessions.index(day)
    made = np.zeros(window)
    for name, units in held.items():
        path = np.array([PRICES[name][own] for own in sessions[at - window : at + 1]])
        made += units * path[-1] * (path[1:] / path[:-1] - 1)
    return float(-np.sort(made)[-(-window // 10) - 1])


@dataclass(frozen=True)
class Place:
    """A site and the command."""

    site: Path
    duskcheck: Commands
    answers: dict[tuple[str, ...], list[dict[str, Any]]] = field(default_factory=dict)  # since the last check

    def leave(self, name: str, *lines: str) -> None:
        leave(self.site, name, "\n".join([*lines, ""]))

    def settle(self, more: str = "", confidence: float = CONFIDENCE) -> None:
        self.site.write_text(site_text(more, confidence))

    def check(self, day: date) -> None:
        ended = self.duskcheck(f"{day}T21:00:00+00:00", "check", "--site", self.site, "--date", str(day))
        assert ended.code in (0, 4), ended.stderr
        self.answers.clear()

    def ask(self, *arguments: str) -> tuple[int, str, str]:
        ended = self.duskcheck("2026-04-11T09:00:00+00:00", "backtest", "--site", self.site, *arguments)
        return ended.code, ended.stdout, ended.stderr

    def records(self, *arguments: str) -> list[dict[str, Any]]:
        if arguments not in self.answers:
            code, out, err = self.ask("--json", *arguments)
            assert (code, err) == (0, "")
            self.answers[arguments] = strict_json(out)["records"]
        return self.answers[arguments]

    def record(self, subject: str, reason: str, *arguments: str) -> dict[str, Any]:
        """The one record of a subject that stands there for a reason."""
        [found] = [own for own in self.records(*arguments) if own["subject"] == subject and reason in own["reasons"]]
        return found


def strict_json(text: str) -> dict[str, Any]:
    """The one document in a text; numbers that JSON does not know are refused."""

    def refuse(word: str) -> None:
        raise AssertionError(f"{word} is no JSON")

    assert text.count("\n") == 1
    found: dict[str, Any] = json.loads(text, parse_constant=refuse)
    return found


def begin(folder: Path, duskcheck: Commands, calendars: Path | None) -> Place:
    """A site with its prices, and no positions. calendars: a history file that knows the sessions of the exchanges."""
    for part in ("drop", "rules", "state"):
        (folder / part).mkdir(parents=True)
    if calendars is not None:
        shutil.copy(calendars, folder / "state" / "history.sqlite")
    place = Place(folder / "site.yaml", duskcheck)
    place.settle()
    (folder / "rules" / "limits.yaml").write_text(RULES)
    place.leave(
        "instruments.csv",
        "instrument,currency,kind,calendar",
        "QUAY,EUR,equity,XDUB",
        "TIDE,EUR,equity,XDUB",
        "KOI,JPY,equity,XTKS",
    )
    rows = [f"{day},{name},{close!r}" for name, path in PRICES.items() for day, close in path.items()]
    place.leave("history.csv", "date,instrument,close", *rows)
    rates = [f"{day},EURJPY,{160 + day.day % 5}" for day in DUBLIN]
    place.leave("history_fx.csv", "date,pair,rate", *rates)
    return place


def leave_positions(place: Place, day: date, harbour: dict[str, float] | None) -> None:
    """harbour: None when it says nothing. Each book says what it has on its own sessions."""
    rows = [f"harbour,{name},{units}" for name, units in (harbour or {}).items()] if day in DUBLIN else []
    rows += ["lantern,KOI,1000"] if day in TOKYO else []
    place.leave(f"positions_{day}.csv", "book,instrument,quantity", *rows)


@pytest.fixture(scope="module")
def calendars(duskcheck: Commands, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A history file that knows the sessions of both exchanges, which take seconds to work out."""
    place = begin(tmp_path_factory.mktemp("calendars") / "site", duskcheck, None)
    place.check(FIRST)
    kept = place.site.parent.parent / "history.sqlite"
    shutil.copy(place.site.parent / "state" / "history.sqlite", kept)
    return kept


@pytest.fixture
def fresh(duskcheck: Commands, calendars: Path, tmp_path: Path) -> Place:
    """A site with its prices, and no positions."""
    return begin(tmp_path / "site", duskcheck, calendars)


@pytest.fixture(scope="module")
def month(duskcheck: Commands, calendars: Path, tmp_path_factory: pytest.TempPathFactory) -> Place:
    """A site with the files of a month, checked on its last day. Nothing asked of it may change it."""
    place = begin(tmp_path_factory.mktemp("month") / "site", duskcheck, calendars)
    place.settle("backtest: {challenger: {method: normal, window: 15}}\n")
    for day in [day for day in WEEKDAYS if FIRST <= day <= LAST]:
        leave_positions(place, day, None if day == NO_FILE else holdings_of(day))
        if day in DUBLIN and day >= FIRST_OWN:
            actual, fees = own_pnl(day)
            place.leave(f"pnl_{day}.csv", "book,actual,fees", f"harbour,{actual},{fees}")
    place.check(LAST)
    return place


@pytest.fixture
def month_again(month: Place, tmp_path: Path) -> Place:
    """A copy of it, to be changed."""
    return Place(Path(shutil.copytree(month.site.parent, tmp_path / "site")) / "site.yaml", month.duskcheck)


def outcomes_of_harbour() -> list[date]:
    return [day for day in DUBLIN if FIRST < day <= LAST]


def counted_days() -> list[date]:
    """The outcomes that can be held against a forecast: not the one after the evening without positions."""
    return [day for day in outcomes_of_harbour() if before(DUBLIN, day) != NO_FILE]


def over(days: Sequence[date], loss_of: Callable[[date], float]) -> list[str]:
    """The days whose loss passed the forecast of harbour's positions of the evening before."""
    return [str(day) for day in days if loss_of(day) > worst_of(holdings_of(before(DUBLIN, day)), before(DUBLIN, day))]


def hypothetical_loss(day: date) -> float:
    return -pnl_of(holdings_of(before(DUBLIN, day)), day)


# --- Real prices


@pytest.fixture(scope="module")
def index(duskcheck: Commands, tmp_path_factory: pytest.TempPathFactory) -> Place:
    """One unit of the index, held on each session of an autumn and at the end of 2018; checked once, on that day."""
    place = Place(tmp_path_factory.mktemp("sp500") / "site.yaml", duskcheck)
    days, prices = closes()
    for part in ("drop", "rules"):
        (place.site.parent / part).mkdir()
    place.site.write_text(SITE)
    (place.site.parent / "rules" / "index.yaml").write_text(ONE_INDEX)
    place.leave("instruments.csv", "instrument,currency,kind,calendar", "SPX,USD,fund,XNYS")
    history = [f"{day},SPX,{price!r}" for day, price in zip(days, prices.tolist(), strict=True)]
    place.leave("history.csv", "date,instrument,close", *history)
    for day in days:
        if AUTUMN[0] <= day <= AUTUMN[1] or day in days[-2:]:
            place.leave(f"positions_{day}.csv", "book,instrument,quantity", "index,SPX,1")
    place.check(days[-1])
    return place


HISTORICAL = ("--book", "index", "--method", "historical", "--window")


@pytest.mark.parametrize("window", [250, 500])
def test_sp500_gives_the_counts_and_the_statistic_that_were_worked_out_apart(index, window):
    [record], told = index.records(*HISTORICAL, str(window), "--todays-positions"), SP500[window]

    assert {key: record[key] for key in ("days", "exceptions", "first")} == {
        key: told[key] for key in ("days", "exceptions", "first")
    }
    assert record["last"] == "2018-12-31"
    assert round(record["coverage"]["statistic"], 4) == told["coverage"]
    # Each session of the twenty years has a close, so that no day is missing or rests on an older one.
    assert (record["missing_days"], record["days_on_older_prices"]) == ([], 0)
    in_the_year = [day for day in record["exception_days"] if "2008-07-01" <= day <= "2009-06-30"]
    assert len(in_the_year) == told["of_the_year"]
    if window == 500:
        assert in_the_year == EXCEPTIONS_500


def test_sp500_exceptions_do_not_come_alone(index):
    [record] = index.records(*HISTORICAL, "250", "--todays-positions")

    assert record["transitions"] == {"t00": 4648, "t01": 64, "t10": 64, "t11": 3}
    assert round(record["independence"]["statistic"], 4) == 2.9768
    assert round(record["conditional_coverage"]["statistic"], 4) == 9.9021


def test_a_position_that_never_changes_has_the_exceptions_of_todays(index):
    asked = (*HISTORICAL, "500", "--method", "normal", "--from", "2008-09-02", "--to", "2008-12-31")

    then, today = index.records(*asked), index.records(*asked, "--todays-positions")

    assert then[0]["exception_days"] == EXCEPTIONS_500
    assert [own["method"] for own in then] == ["historical", "normal"]
    for one, other in zip(then, today, strict=True):
        assert one["exception_days"] == other["exception_days"]
        assert one["days"] == other["days"] == 85
        for test in ("coverage", "independence", "distribution"):
            assert one[test]["p_value"] == pytest.approx(other[test]["p_value"], rel=1e-9)
        assert one["shortfall"]["z2"] == pytest.approx(other["shortfall"]["z2"], rel=1e-9)


def test_the_command_in_a_process_of_its_own_says_the_same(index):
    asked = (*HISTORICAL, "250", "--todays-positions")

    ended = run("backtest", "--site", index.site, "--json", *asked)

    assert (ended.returncode, ended.stderr) == (0, "")
    assert strict_json(ended.stdout)["records"] == index.records(*asked)


# --- Positions of then


def test_each_forecast_is_held_against_what_its_own_positions_made_next(month):
    record = month.record("book:harbour", "default")

    assert record["exception_days"] == over(counted_days(), hypothetical_loss)
    assert len(record["exception_days"]) > 2
    assert (record["first"], record["last"]) == (str(outcomes_of_harbour()[0]), str(LAST))
    assert record["currency"] == "EUR"


def test_a_day_after_an_evening_without_positions_is_missing_and_named(month):
    for subject in ("book:harbour", "position:harbour/QUAY", "firm"):
        record = month.record(subject, "default", "--positions")

        assert record["missing_days"] == ["2026-03-18"]
        assert "2026-03-18" not in record["exception_days"]
    assert month.record("book:harbour", "default")["days"] == len(counted_days())
    assert month.record("book:lantern", "default")["missing_days"] == []


def test_a_missing_day_is_an_exception_where_the_site_says_so(month, month_again):
    month_again.settle("backtest: {missing_day: exception}\n")
    month_again.check(LAST)

    left_out, counts = (place.record("book:harbour", "default") for place in (month, month_again))

    assert counts["missing_days"] == left_out["missing_days"]
    assert counts["exceptions"] == left_out["exceptions"] + 1
    assert counts["days"] == left_out["days"] + 1
    assert counts["exception_days"] == sorted([*left_out["exception_days"], "2026-03-18"])
    # So it is in a span that begins with it: forecasts had begun before.
    span = month_again.record("book:harbour", "default", "--from", "2026-03-18", "--to", "2026-03-19")
    assert (span["days"], span["missing_days"]) == (2, ["2026-03-18"])
    assert "2026-03-18" in span["exception_days"]


def test_a_span_is_a_part_of_the_whole(month):
    span = ("--from", "2026-03-16", "--to", "2026-04-02")

    for arguments in ((), ("--todays-positions",)):
        whole = month.record("book:harbour", "default", *arguments)
        part = month.record("book:harbour", "default", *arguments, *span)

        inside = [day for day in whole["exception_days"] if "2026-03-16" <= day <= "2026-04-02"]
        assert part["exception_days"] == inside
        assert (part["first"], part["last"]) == ("2026-03-16", "2026-04-02")


def test_a_position_counts_on_the_days_it_was_held(month):
    record = month.record("position:harbour/TIDE", "default", "--positions")

    held = [day for day in counted_days() if "TIDE" in holdings_of(before(DUBLIN, day))]
    assert record["days"] == len(held)
    assert record["exception_days"] == [
        str(day) for day in held if -pnl_of({"TIDE": 300}, day) > worst_of({"TIDE": 300}, before(DUBLIN, day))
    ]


def test_the_sold_position_is_tested_under_its_rule_too(fresh):
    for day in DUBLIN[DUBLIN.index(FIRST) :][:4]:
        leave_positions(fresh, day, {"QUAY": 1} if day == DUBLIN[DUBLIN.index(FIRST) + 3] else {"QUAY": 1, "TIDE": 2})
    fresh.check(DUBLIN[DUBLIN.index(FIRST) + 3])

    assert fresh.record("position:harbour/TIDE", "rule each-tail", "--positions")["days"] == 3


def test_each_book_keeps_its_own_calendar(month):
    """Tokyo is closed on 20 March, Dublin on 3 and 6 April: no trial then, and the forecast before waits."""
    lantern, harbour = month.record("book:lantern", "default"), month.record("book:harbour", "default")
    in_tokyo = [day for day in TOKYO if FIRST < day <= LAST]

    assert lantern["days"] == len(in_tokyo)
    assert lantern["exception_days"] == [
        str(day)
        for day in in_tokyo
        if -1000 * (PRICES["KOI"][day] - PRICES["KOI"][before(TOKYO, day)])
        > worst_of({"KOI": 1000}, before(TOKYO, day), sessions=TOKYO)
    ]
    assert harbour["days"] + len(harbour["missing_days"]) == len(outcomes_of_harbour())
    assert lantern["currency"] == "JPY"


def test_a_short_span_after_a_holiday_still_finds_its_evening_before(month):
    record = month.record("book:harbour", "default", "--from", "2026-04-07", "--to", "2026-04-07")

    assert (record["days"], record["missing_days"]) == (1, [])


def test_days_before_the_window_is_full_do_not_count(fresh):
    for day in [day for day in WEEKDAYS if DUBLIN[15] <= day <= DUBLIN[24]]:
        leave_positions(fresh, day, {"QUAY": 1})
    fresh.check(DUBLIN[24])

    record = fresh.record("book:harbour", "asked for", "--method", "historical", "--window", "20")

    # Twenty returns are known from the 21st close on, which is the evening before the first outcome that counts.
    assert record["first"] == str(DUBLIN[21])
    assert (record["days"], record["missing_days"]) == (4, [])


# --- Whose P&L


def test_actual_and_hypothetical_stand_side_by_side(month):
    record = month.record("book:harbour", "default")
    with_own = [day for day in counted_days() if day >= FIRST_OWN]

    assert record["counted_from"] == "hypothetical"
    assert record["exceptions_of"] == {
        "hypothetical": len(over(counted_days(), hypothetical_loss)),
        "actual": len(over(with_own, lambda day: LESS + hypothetical_loss(day))),
    }
    assert month.record("firm", "default")["exceptions_of"]["actual"] is None


def test_fees_are_no_loss_of_the_model(month_again):
    """MAR32.5 leaves fees and commissions out: a book that lost nothing but fees had no exception."""
    for day in outcomes_of_harbour():
        month_again.leave(f"pnl_{day}.csv", "book,actual,fees", "harbour,-1000000,1000000")
    month_again.check(LAST)

    assert month_again.record("book:harbour", "default")["exceptions_of"]["actual"] == 0


@pytest.mark.parametrize("whose", ["larger", "actual"])
def test_the_count_is_by_the_pnl_that_the_site_names(month_again, whose):
    month_again.settle(f"backtest: {{pnl: {whose}}}\n")
    month_again.check(LAST)
    with_own = [day for day in counted_days() if day >= FIRST_OWN]

    record = month_again.record("book:harbour", "default")

    # With so much less each day the actual count is the larger one.
    assert record["counted_from"] == "actual"
    assert record["exception_days"] == over(with_own, lambda day: LESS + hypothetical_loss(day))
    assert record["exceptions_of"]["actual"] > record["exceptions_of"]["hypothetical"]
    # Days before the first P&L of its own are none that lack it.
    assert (record["first"], record["missing_days"]) == (str(FIRST_OWN), ["2026-03-18"])
    for subject, arguments in (("firm", ()), ("book:lantern", ()), ("book:harbour", ("--todays-positions",))):
        other = month_again.record(subject, "default", *arguments)
        assert (other["counted_from"], other["exceptions_of"]["actual"]) == ("hypothetical", None)
        assert other["days"] > 0


def test_the_larger_count_is_the_hypothetical_one_where_books_gained_more(month_again):
    for day in outcomes_of_harbour():
        month_again.leave(f"pnl_{day}.csv", "book,actual", "harbour,1000")
    month_again.settle("backtest: {pnl: larger}\n")
    month_again.check(LAST)

    record = month_again.record("book:harbour", "default")

    assert (record["counted_from"], record["exceptions_of"]["actual"]) == ("hypothetical", 0)
    assert record["exceptions"] == record["exceptions_of"]["hypothetical"] > 0


# --- Which methods


def test_without_a_method_those_behind_the_figures_are_tested(month):
    told = [(own["method"], own["parameters"]["window"], own["reasons"]) for own in month.records("--book", "harbour")]

    assert told == [
        ("historical", 10, ["default"]),
        ("student_t", 20, ["rule harbour-tail"]),
        ("normal", 15, ["challenger"]),
    ]
    # The rule looks five days ahead; a session is held against the forecast of one day.
    [_, rule, _] = month.records("--book", "harbour")
    assert rule["parameters"]["horizon_days"] == 1


@pytest.mark.parametrize("arguments", [(), ("--todays-positions",)])
def test_every_method_can_be_asked_for(month, arguments):
    methods = (
        "historical",
        "age_weighted",
        "volatility_scaled",
        "normal",
        "student_t",
        "cornish_fisher",
        "monte_carlo",
    )
    chosen = [part for method in methods for part in ("--method", method)]

    records = month.records("--book", "harbour", "--window", "40", *chosen, *arguments)

    assert [own["method"] for own in records] == list(methods)
    assert {tuple(own["reasons"]) for own in records} == {("asked for",)}
    assert {own["parameters"]["window"] for own in records} == {40}
    [simulated, closed] = [own for own in records if own["method"] in ("monte_carlo", "normal")]
    assert simulated["exception_days"] == closed["exception_days"]


# --- Today's positions


def test_todays_positions_are_held_over_all_prices(month):
    record = month.record("book:harbour", "default", "--todays-positions")
    days = DUBLIN[WINDOW + 1 :]

    assert (record["first"], record["last"], record["days"]) == (str(days[0]), str(LAST), len(days))
    scaled = []
    for day in days:
        # Today's positions: what they are worth today, moved as the prices moved then.
        at = DUBLIN.index(day)
        made = np.zeros(WINDOW + 1)
        for name, units in HELD.items():
            path = np.array([PRICES[name][own] for own in DUBLIN[at - WINDOW - 1 : at + 1]])
            made += units * PRICES[name][LAST] * (path[1:] / path[:-1] - 1)
        scaled += [str(day)] if -made[-1] > -np.sort(made[:-1])[1 - 1 + (-(-WINDOW // 10) - 1)] else []
    assert record["exception_days"] == scaled


def test_todays_positions_stay_the_newest_whatever_the_span(month):
    code, out, _ = month.ask("--todays-positions", "--to", "2026-02-27", "--json")

    assert code == 0
    found = strict_json(out)
    assert found["positions_on"] == str(LAST)
    assert {own["last"] for own in found["records"]} == {"2026-02-27"}


def test_a_book_without_positions_today_is_not_taken_for_flat(month_again):
    late = date(2026, 4, 13)
    month_again.leave(f"positions_{late}.csv", "book,instrument,quantity", "lantern,KOI,1000")
    month_again.check(late)

    for subject in ("book:harbour", "firm"):
        assert month_again.record(subject, "default", "--todays-positions")["days"] == 0
    assert month_again.record("book:lantern", "default", "--todays-positions")["days"] > 0


def test_a_share_with_a_short_history_waits_for_its_own_window(fresh):
    """Beside an older share: its first ten returns, not ten sessions with zeros for those before its first close."""
    rows = [f"{day},TIDE,{PRICES['TIDE'][day]!r}" for day in DUBLIN[30:]]
    rows += [f"{day},QUAY,{PRICES['QUAY'][day]!r}" for day in DUBLIN]
    fresh.leave("history.csv", "date,instrument,close", *rows)
    leave_positions(fresh, DUBLIN[60], {"QUAY": 1, "TIDE": 1})
    fresh.check(DUBLIN[60])
    chosen = ("--todays-positions", "--positions", "--method", "historical", "--window", "20")

    records = {own["subject"]: own for own in fresh.records(*chosen)}

    assert records["position:harbour/QUAY"]["first"] == str(DUBLIN[21])
    assert records["position:harbour/TIDE"]["first"] == str(DUBLIN[51])


@pytest.mark.parametrize("arguments", [(), ("--todays-positions",)])
def test_days_on_an_older_price_are_counted_and_said(fresh, arguments):
    """Without a close of its own a session moves nothing, and the next one moves twice."""
    gap = DUBLIN[50]
    rows = [f"{day},QUAY,{close!r}" for day, close in PRICES["QUAY"].items() if day != gap]
    fresh.leave("history.csv", "date,instrument,close", *rows)
    for day in DUBLIN[46:55]:
        fresh.leave(f"positions_{day}.csv", "book,instrument,quantity", "harbour,QUAY,1", "lantern,,")
    fresh.check(DUBLIN[54])

    record = fresh.record("book:harbour", "asked for", "--method", "historical", "--window", "20", *arguments)

    assert record["days_on_older_prices"] == 2


# --- What the evenings recorded


def check_on(place: Place, days: Sequence[date]) -> None:
    for day in days:
        leave_positions(place, day, {"QUAY": 100})
        place.check(day)


def recorded(place: Place, subject: str = "book:harbour") -> dict[str, Any]:
    return place.record(subject, "recorded")


def test_the_recorded_forecast_is_the_newest_before_the_outcome(fresh):
    """A correction in time counts. One that comes when the outcome is there changes the forecast made again alone."""
    day = next(
        day for day in DUBLIN[40:] if -pnl_of({"QUAY": 100}, day) > worst_of({"QUAY": 100}, before(DUBLIN, day)) > 0
    )
    eve = before(DUBLIN, day)
    leave_positions(fresh, eve, {"QUAY": 1000})
    fresh.check(eve)
    check_on(fresh, [eve, day])
    assert recorded(fresh)["exception_days"] == [str(day)]

    # A tenth as many: what they made is less than the forecast that was recorded in time, not than its own.
    leave_positions(fresh, eve, {"QUAY": 10})
    fresh.check(eve)
    fresh.check(day)

    assert pnl_of({"QUAY": 10}, day) > -worst_of({"QUAY": 100}, eve)
    assert recorded(fresh)["exception_days"] == []
    assert fresh.record("book:harbour", "default")["exception_days"] == [str(day)]


def test_an_evening_not_checked_leaves_two_days_missing(fresh):
    """The one it would have forecast, and its own, whose outcome nobody recorded."""
    days = DUBLIN[50:55]
    check_on(fresh, [day for day in days if day != days[2]])

    record = recorded(fresh)

    assert record["missing_days"] == [str(days[2]), str(days[3])]
    assert (record["days"], record["first"], record["last"]) == (2, str(days[1]), str(days[4]))


def test_an_evening_checked_after_the_next_has_forecast_nothing(fresh):
    eve, day = DUBLIN[50:52]
    check_on(fresh, [DUBLIN[49], day, eve])

    assert recorded(fresh)["missing_days"] == [str(day)]


def test_the_evening_of_a_holiday_is_no_session_of_the_closed_book(fresh):
    """Dublin is closed on 3 and 6 April while Tokyo trades: the forecast of the 2nd is that for the 7th."""
    check_on(fresh, [day for day in WEEKDAYS if date(2026, 4, 2) <= day <= date(2026, 4, 7)])

    for subject in ("book:harbour", "firm"):
        record = recorded(fresh, subject)
        assert (record["days"], record["first"], record["missing_days"]) == (1, "2026-04-07", [])
    assert recorded(fresh, "book:lantern")["days"] == 3


def test_what_was_recorded_under_other_settings_is_a_record_of_its_own(fresh):
    """A count at 90 % says nothing of a forecast at 75 %."""
    check_on(fresh, DUBLIN[50:52])
    fresh.settle(confidence=0.75)
    check_on(fresh, DUBLIN[52:54])

    told = {
        own["parameters"]["confidence"]: (own["first"], own["last"])
        for own in fresh.records("--book", "harbour")
        if own["reasons"] == ["recorded"]
    }

    assert told == {
        "0.9": (str(DUBLIN[51]), str(DUBLIN[52])),
        "0.75": (str(DUBLIN[53]), str(DUBLIN[53])),
    }


# --- How it answers


def test_a_site_that_was_never_checked(fresh):
    code, out, err = fresh.ask()

    assert (code, out) == (1, "")
    assert "made by the first check" in err


def test_a_site_without_positions(fresh):
    fresh.check(FIRST)

    code, out, err = fresh.ask("--json")

    assert (code, out) == (2, "")
    assert err == (
        "duskcheck: found no accepted positions; put the positions files into the drop and check an evening\n"
    )


def test_one_evening_has_no_outcome_yet(fresh):
    leave_positions(fresh, FIRST, {"QUAY": 1})
    fresh.check(FIRST)

    assert fresh.records() == []
    code, out, _ = fresh.ask()
    assert code == 0
    assert out.startswith("There is no evening with a next session")


@pytest.mark.parametrize(
    ("arguments", "told"),
    [
        (("--book", "harbor"), "found the book 'harbor'; expected one of harbour, lantern, firm"),
        (("--window", "250"), "go with --method"),
        (("--confidence", "0.99"), "go with --method"),
        (("--method", "normal", "--confidence", "99"), "expected one from 0.5 to below 1"),
        (("--method", "normal", "--confidence", "high"), "expected one from 0.5 to below 1, such as 0.99 or 99 %"),
        (("--method", "normal", "--confidence", "nan"), "found the confidence 'nan'; expected one from 0.5"),
        (("--method", "peaks_over_threshold", "--window", "40"), "with 4 sessions beyond the threshold in a window"),
        (("--method", "monte_carlo", "--confidence", "0.99999"), "expected more paths, or a lower confidence"),
        (("--method", "guess"), "'guess' is not one of"),
        (("--from", "2026-04-01", "--to", "2026-03-01"), "--from 2026-04-01 lies after --to 2026-03-01"),
    ],
)
def test_what_cannot_be_asked(month, arguments, told):
    code, out, err = month.ask(*arguments)

    assert (code, out) == (2, "")
    assert told in " ".join(err.split())


@pytest.mark.parametrize("span", [("--from", "2030-01-01"), ("--to", "2020-01-01")])
def test_a_span_without_an_outcome(month, span):
    assert month.records(*span) == []


def test_a_backtest_writes_nothing(month):
    def ledger() -> bytes:
        return (month.site.parent / "state" / "ledger.sqlite").read_bytes()

    before_it = ledger()
    code, _, err = month.ask("--positions")

    assert (code, err) == (0, "")
    assert ledger() == before_it


def test_only_the_books_asked_for_are_told(month):
    assert {own["subject"] for own in month.records("--book", "firm", "--book", "lantern")} == {"book:lantern", "firm"}
    assert {own["subject"] for own in month.records("--book", "lantern", "--positions")} == {
        "book:lantern",
        "position:lantern/KOI",
    }


def test_the_text_names_what_the_document_says(month):
    code, out, err = month.ask()

    assert (code, err) == (0, "")
    text = " ".join(out.split())
    for told in (
        "harbour",
        "lantern",
        "the firm",
        "2026-03-18",
        "rule harbour-tail",
        "challenger",
        "No promise",
        "EUR",
    ):
        assert told.lower() in text.lower()
    for day in month.record("book:harbour", "default")["exception_days"]:
        assert day in text
    assert "nan" not in text.lower().split()
