"""Windows: short histories, gaps, holidays, futures at and below zero, and what a figure says of its sessions."""

from __future__ import annotations

import math
from datetime import date, timedelta

import numpy as np
import pytest
from drop_site import FRIDAY, WEEK, SmallSite, place_of, rule, rules

from monitor.limits.valuation import Valuation
from monitor.words import MarkKind, Standing

QUAY = {"applies_to": "{book: quay}"}
TAIL = "{name: value_at_risk, confidence: 0.75, window: %d}"
# The 21 sessions of Dublin that end on the Friday: 20 returns.
LONG = [day for day in (FRIDAY - timedelta(days=back) for back in range(28, -1, -1)) if day.weekday() < 5]


def write(site: SmallSite, instruments: list[str], *positions: str) -> None:
    site.leave("instruments.csv", ["instrument,currency,kind,multiplier,calendar,expiry", *instruments])
    site.positions(*positions, "west,,", "east,,")


def swinging(count: int) -> list[float]:
    """Closes that rise and fall by 1 % and a little more each time."""
    return [100 * (1 + 0.01 * (-1) ** at + 0.0001 * at) for at in range(count)]


@pytest.mark.parametrize(("missing", "n"), [(0, 20), (1, 19), (2, None)])
def test_a_short_history_is_measured_down_to_95_percent_and_says_how_many_it_used(tmp_path, missing, n):
    assert len(LONG) == 21
    site = SmallSite(tmp_path / "site", rules(rule("tail", TAIL % 20, **QUAY)), window=20)
    write(site, ["ALFA,EUR,equity,1,XDUB,"], "quay,ALFA,1")
    closes = [None if at < missing else close for at, close in enumerate(swinging(21))]
    site.prices({"ALFA": closes}, LONG)

    answer = site.answers()["tail", "book:quay"]

    if n is None:
        assert answer.standing is Standing.UNMEASURED
        assert answer.reason == "ALFA has 18 of the 20 returns of the window"
    else:
        returns = np.diff(np.log(np.array(closes[missing:], dtype=float)))
        pnl = sorted(closes[-1] * (np.exp(returns) - 1))
        assert answer.n == n
        assert answer.value == pytest.approx(-pnl[math.ceil(n / 4) - 1], rel=1e-10)
        short = [mark.note for mark in answer.marks if mark.kind is MarkKind.SHORT]
        assert short == ([f"{n} of the 20 sessions of the window"] if n < 20 else [])
        assert not answer.doubtful
        assert [mark.kind for mark in answer.marks if mark.kind is MarkKind.GAPS] == []


def test_a_young_position_beside_an_old_one_counts_as_nothing_before_its_first_close_and_says_so(tmp_path):
    site = SmallSite(tmp_path / "site", rules(rule("tail", TAIL % 20, **QUAY)), window=20)
    write(site, ["OLD,EUR,equity,1,XDUB,", "YOUNG,EUR,equity,1,XDUB,"], "quay,OLD,1", "quay,YOUNG,1")
    site.prices({"OLD": swinging(21), "YOUNG": [None, *swinging(20)]}, LONG)

    answer = site.answers()["tail", "book:quay"]

    assert answer.n == 20
    assert [(mark.kind, mark.note) for mark in answer.marks] == [(MarkKind.GAPS, "YOUNG without 1 of its returns")]


def test_a_gap_counts_against_the_floor_and_the_move_comes_with_the_next_close(tmp_path):
    site = SmallSite(tmp_path / "site", rules(rule("tail", TAIL % 20, **QUAY)), window=20)
    write(site, ["ALFA,EUR,equity,1,XDUB,"], "quay,ALFA,1")
    closes = [None if at == 7 else close for at, close in enumerate(swinging(21))]
    site.prices({"ALFA": closes}, LONG)

    world = site.world()
    made = Valuation(world).scenarios("XDUB", "EUR")
    assert made.pnl[0, 6] == 0
    assert made.pnl[0, 7] == pytest.approx(closes[-1] * (closes[8] / closes[6] - 1))
    assert made.lacks[0].tolist() == [at == 6 for at in range(20)]
    answer = site.answers()["tail", "book:quay"]
    assert (answer.n, answer.marks[0].note) == (20, "ALFA without 1 of its returns")

    closes[9] = None
    site.prices({"ALFA": closes}, LONG)
    assert site.answers()["tail", "book:quay"].reason == "ALFA has 18 of the 20 returns of the window"


def test_a_missing_rate_inside_the_window_is_a_gap_of_what_is_held_in_that_currency(tmp_path):
    site = SmallSite(tmp_path / "site", rules(rule("tail", TAIL % 20, each="position", **QUAY)), window=20)
    instruments = [
        "ALFA,EUR,equity,1,XDUB,",
        "BETA,USD,equity,1,XDUB,",
        "DOLLAR,USD,cash,,,",
        "FUTU,USD,future,1,XDUB,2027-01-15",
    ]
    write(site, instruments, "quay,ALFA,1", "quay,BETA,1", "quay,DOLLAR,1", "quay,FUTU,1")
    site.prices({name: swinging(21) for name in ("ALFA", "BETA", "FUTU")}, LONG)
    site.rates({"EURUSD": [None if at == 5 else 1.25 + at / 1000 for at in range(21)]}, LONG)

    found = site.answers()

    gaps = {key[1]: [mark.note for mark in answer.marks] for key, answer in found.items()}
    assert gaps == {
        "position:quay/ALFA": [],
        "position:quay/BETA": ["BETA without 1 of its returns"],
        "position:quay/DOLLAR": ["DOLLAR without 1 of its returns"],
        "position:quay/FUTU": [],  # FX acts on its P&L at tonight's rate only
    }


def test_a_holiday_of_the_instruments_market_is_a_return_of_nothing_without_a_mark(tmp_path):
    """Tokyo was closed on 2026-02-11, Dublin open; the twelfth carries the whole move."""
    days = [date(2026, 2, day) for day in (9, 10, 11, 12)]
    site = SmallSite(tmp_path / "site", rules(rule("tail", TAIL % 3, **QUAY)), window=3)
    site.leave("instruments.csv", ["instrument,currency,calendar", "HANA,EUR,XTKS"])
    site.prices({"HANA": (100.0, 110.0, None, 99.0)}, days)
    site.prices({"HANA": (100.0,)}, [date(2026, 2, 6)])
    for day in days:
        site.positions("quay,HANA,2", "west,,", "east,,", day=day)

    made = Valuation(site.world(days[3])).scenarios("XDUB", "EUR")
    answer = site.answers(days[3])["tail", "book:quay"]

    assert made.pnl[0] == pytest.approx([198 * 0.1, 0, 198 * (99 / 110 - 1)])
    assert not made.lacks.any()
    assert (answer.n, answer.value) == (3, pytest.approx(19.8))
    assert [mark.kind for mark in answer.marks] == [MarkKind.METHOD]  # the worst of three is no tail
    closed = site.standings(days[2])
    assert (closed.lacking, closed.unmeasured) == ((), ())


def futures(site: SmallSite, closes: tuple[float, ...], quantity: int = 2) -> list[float]:
    """The scenario P&L of a future of multiplier 10, in EUR, on the week's sessions."""
    write(site, ["FUTU,EUR,future,10,XDUB,2026-06-19"], f"quay,FUTU,{quantity}")
    site.prices({"FUTU": closes})
    made = Valuation(site.world()).scenarios("XDUB", "EUR")
    assert not made.lacks.any()
    return made.pnl[0].tolist()


def test_where_a_price_is_not_positive_a_future_earns_the_difference(tmp_path):
    """By hand: 2 x 10 x 15 x (20/18 - 1); then the differences 20 -> -37, -37 -> 10; then 2 x 10 x 15 x (15/10 - 1)."""
    found = futures(SmallSite(tmp_path / "site"), (18.0, 20.0, -37.0, 10.0, 15.0))

    assert found == pytest.approx([300 * (20 / 18 - 1), 20 * -57, 20 * 47, 300 * 0.5])


def test_a_future_below_zero_tonight_earns_differences_throughout(tmp_path):
    found = futures(SmallSite(tmp_path / "site"), (18.0, 20.0, 10.0, 2.0, -3.0), quantity=-2)

    assert found == pytest.approx([-40, 200, 160, 100])


def test_a_future_at_zero_tonight_can_still_lose(tmp_path):
    assert futures(SmallSite(tmp_path / "site"), (4.0, 3.0, 2.0, 1.0, 0.0)) == [-20, -20, -20, -20]


def test_a_negative_price_long_ago_does_not_change_the_figure_of_a_shorter_window(tmp_path):
    """A figure depends on its own window, and not on the longest one that another rule asks for."""
    site = SmallSite(tmp_path / "site", rules(rule("tail", TAIL % 2, **QUAY)), window=2)
    futures(site, (-5.0, 20.0, 10.0, 12.0, 15.0))
    alone = site.answers()["tail", "book:quay"].value
    site.settle(rules(rule("tail", TAIL % 2, **QUAY), rule("longer", TAIL % 4, **QUAY)), window=4)

    assert site.answers()["tail", "book:quay"].value == alone


def test_the_exposure_of_a_future_below_zero_is_below_zero(tmp_path):
    site = SmallSite(
        tmp_path / "site", rules(rule("net", "{name: net}", **QUAY), rule("gross", "{name: gross}", **QUAY))
    )
    futures(site, (18.0, 20.0, 10.0, 2.0, -3.0))
    found = site.answers()

    assert (found["net", "book:quay"].value, found["gross", "book:quay"].value) == (-60, 60)


def test_prices_that_have_no_logarithm_have_no_volatility(tmp_path):
    measure = "{name: volatility, window: 4}"
    more = {"each": "position", **QUAY}
    site = SmallSite(
        tmp_path / "site",
        rules(rule("ratio", measure, "limit: 90 %", "ratio", **more), rule("amount", measure, **more)),
    )
    futures(site, (18.0, 20.0, -37.0, -10.0, 15.0))
    found = site.answers()

    assert found["ratio", "position:quay/FUTU"].reason == "a scenario is missing or not a finite number"
    assert found["amount", "position:quay/FUTU"].value > 0


def test_the_volatility_of_an_instrument_and_of_its_pnl_are_a_years(tmp_path):
    measure = "{name: volatility, window: 4}"
    more = {"each": "position", **QUAY}
    site = SmallSite(
        tmp_path / "site",
        rules(rule("ratio", measure, "limit: 90 %", "ratio", **more), rule("amount", measure, **more)),
    )
    write(site, ["BETA,USD,equity,1,XNYS,"], "quay,BETA,3")
    closes, rates = np.array([20.0, 21.0, 19.0, 19.5, 20.0]), np.array([1.25, 1.2, 1.3, 1.25, 1.25])
    site.prices({"BETA": closes.tolist()})
    site.rates({"EURUSD": rates.tolist(), "EURJPY": [160.0] * 5})
    found = site.answers()

    returns = np.diff(np.log(closes / rates))
    assert found["ratio", "position:quay/BETA"].value == pytest.approx(returns.std(ddof=1) * math.sqrt(252))
    pnl = 3 * 20 * 0.8 * (np.exp(returns) - 1)
    assert found["amount", "position:quay/BETA"].value == pytest.approx(pnl.std(ddof=1) * math.sqrt(252))
    assert found["amount", "position:quay/BETA"].currency == "EUR"
    assert found["ratio", "position:quay/BETA"].currency is None


def test_a_figure_of_less_than_one_scenario_says_that_it_is_the_worst_one(tmp_path):
    lines = [
        rule(f"{name}-{level}", f"{{name: {name}, confidence: 0.{level}, window: 4}}", **QUAY)
        for name in ("value_at_risk", "expected_shortfall")
        for level in (75, 99)
    ]
    site = SmallSite(tmp_path / "site", rules(*lines))
    write(site, ["ALFA,EUR,equity,1,XDUB,"], "quay,ALFA,1")
    site.prices({"ALFA": (10.0, 11.0, 9.0, 9.5, 10.0)})
    found = site.answers()

    marked = {key[0] for key, answer in found.items() if any(mark.kind is MarkKind.METHOD for mark in answer.marks)}
    assert marked == {"value_at_risk-99", "expected_shortfall-99"}
    assert found["expected_shortfall-99", "book:quay"].value == pytest.approx(10 * (1 - 9 / 11))


def test_a_note_on_the_method_does_not_hide_how_short_the_window_is(tmp_path):
    line = rule("tail", "{name: value_at_risk, method: student_t, window: 20}", **QUAY)
    site = SmallSite(tmp_path / "site", rules(line), window=20)
    write(site, ["ALFA,EUR,equity,1,XDUB,"], "quay,ALFA,1")
    site.prices({"ALFA": [None, *[10.0 + at % 2 for at in range(20)]]}, LONG)

    kinds = [mark.kind for mark in site.answers()["tail", "book:quay"].marks]

    assert kinds == [MarkKind.SHORT, MarkKind.METHOD]


def test_each_book_has_the_sessions_of_its_own_calendar_and_groups_across_books_those_of_the_firm(tmp_path):
    """2026-02-11 was a session in Dublin and none in Tokyo."""
    days = [date(2026, 2, day) for day in (9, 10, 11, 12)]
    lines = [rule("book", TAIL % 2, each="book"), rule("firm", TAIL % 2)]
    site = SmallSite(tmp_path / "site", rules(*lines), window=2)
    site.leave("instruments.csv", ["instrument,currency,calendar", "ALFA,EUR,XDUB", "HANA,JPY,XTKS"])
    site.prices({"HANA": (100.0, 90.0, None, 100.0), "ALFA": (10.0, 10.0, 8.0, 10.0)}, days)
    site.rates({"EURJPY": (100.0,) * 4, "EURUSD": (1.0,) * 4}, days)
    site.positions("quay,ALFA,1", "west,,", "east,HANA,1", day=days[3])

    found = site.answers(days[3])

    # Tokyo's last two returns are 90/100 (from the ninth to the tenth) and 100/90; Dublin's 8/10 and 10/8.
    assert found["book", "book:east"].value == pytest.approx(100 * 0.1)
    assert found["book", "book:quay"].value == pytest.approx(10 * 0.2)
    assert found["firm", "firm"].value == pytest.approx(10 * 0.2)  # HANA returned nothing on the eleventh


def test_no_session_on_the_evening_means_no_loss_of_the_day(tmp_path):
    """On 2026-02-11 Tokyo was closed: east's P&L of the day is that of no session."""
    tenth, eleventh = date(2026, 2, 10), date(2026, 2, 11)
    site = SmallSite(tmp_path / "site", rules(rule("day", "{name: day_loss}", applies_to="{book: east}")), window=2)
    site.leave("instruments.csv", ["instrument,currency,calendar", "HANA,JPY,XTKS"])
    site.prices({"HANA": (100.0, 90.0)}, [tenth, eleventh])
    site.rates({"EURJPY": (100.0,) * 2}, [tenth, eleventh])
    for day in (date(2026, 2, 9), tenth):
        site.positions("quay,,", "west,,", "east,HANA,1", day=day)

    assert site.answers(eleventh)["day", "book:east"].value == 0


def test_a_futures_loss_of_the_day_at_prices_around_zero(tmp_path):
    site = SmallSite(tmp_path / "site", rules(rule("day", "{name: day_loss}", **QUAY)))
    write(site, ["FUTU,EUR,future,10,XDUB,2026-06-19"], "quay,FUTU,2")
    site.positions("quay,FUTU,2", "west,,", "east,,", day=WEEK[3])
    site.prices({"FUTU": (18.0, 20.0, 10.0, -2.0, -5.0)})

    assert site.answers()["day", "book:quay"].value == 60
    assert place_of(site.world(), "FUTU") == 0
