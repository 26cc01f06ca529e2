"""A worked example: two currencies, an equity in each, a fund, cash in both and a future, every number worked out here.

The window holds 4 sessions, so that each figure can be followed with a pocket calculator. Formulas: design of the
program, section 6; the conventions of quantile and shortfall are those of monitor/risk/historical.py.
"""

from __future__ import annotations

import numpy as np
import pytest
from drop_site import FRIDAY, THURSDAY, WEEK, SmallSite, by_key, rule, rules

from monitor.limits.evaluate import evaluate
from monitor.limits.valuation import Valuation
from monitor.words import Standing

CLOSES = {
    "ALFA": (10.0, 10.5, 10.29, 10.29, 11.0),
    "BETA": (20.0, 19.0, 19.95, 21.0, 20.0),
    "FOND": (100.0, 101.0, 99.99, 102.0, 103.02),
    "FUTU": (40.0, 42.0, 39.9, 41.0, 40.0),
}
EURUSD = (1.25, 1.2, 1.25, 1.28, 1.25)
CURRENCY = {"ALFA": "EUR", "BETA": "USD", "FOND": "EUR", "FUTU": "USD", "EURO": "EUR", "DOLLAR": "USD"}
QUAY = {"ALFA": 1000, "BETA": 300, "FOND": -50, "EURO": 5000, "DOLLAR": 1000}
WEST = {"ALFA": 100, "BETA": -200, "FUTU": 3, "EURO": 2000, "DOLLAR": 4000}
MULTIPLIER = {"FUTU": 50}
# Thursday's positions: quay sold 200 ALFA on Friday, and west bought 100.
BEFORE = {"quay": QUAY | {"ALFA": 1200}, "west": {name: size for name, size in WEST.items() if name != "ALFA"}}
NAV = {"quay": 40000.0, "west": 30000.0}  # in EUR and in USD; one USD is 0.80 EUR on the Friday
TAIL = "{name: %s, confidence: 0.5, window: 4}"
MEASURES = {
    "gross": "{name: gross}",
    "net": "{name: net}",
    "long": "{name: long}",
    "short": "{name: short}",
    "var": TAIL % "value_at_risk",
    "es": TAIL % "expected_shortfall",
    "day": "{name: day_loss}",
}


def write(site: SmallSite) -> SmallSite:
    site.leave(
        "instruments.csv",
        [
            "instrument,currency,kind,multiplier,calendar,expiry,issuer",
            "ALFA,EUR,equity,,XDUB,,Alfa",
            "BETA,USD,equity,1,XNYS,,Beta",
            "FOND,EUR,fund,,XDUB,,Fond",
            "FUTU,USD,future,50,XNYS,2026-06-19,",
            "EURO,EUR,cash,,,,",
            "DOLLAR,USD,cash,,,,",
        ],
    )
    site.prices(CLOSES)
    site.rates({"EURUSD": EURUSD})
    for day, books in ((THURSDAY, BEFORE), (FRIDAY, {"quay": QUAY, "west": WEST})):
        held = [f"{book},{name},{size}" for book, own in books.items() for name, size in own.items()]
        site.positions(*held, "east,,", day=day)
    site.navs("quay,40000", "west,30000", "east,1000000")
    return site


@pytest.fixture(scope="module")
def site(tmp_path_factory: pytest.TempPathFactory) -> SmallSite:
    written = [
        rule(f"{scope}-{name}", measure, "limit: 1e9", **more)
        for name, measure in MEASURES.items()
        for scope, more in {
            "quay": {"applies_to": "{book: quay}"},
            "west": {"applies_to": "{book: west}"},
            "both": {"applies_to": "{book: [quay, west]}"},
            "line": {"applies_to": "{book: [quay, west]}", "each": "position"},
        }.items()
    ]
    for scope, more in {"quay": "{book: quay}", "west": "{book: west}"}.items():
        written += [
            rule(f"{scope}-leverage", "{name: leverage}", "limit: 9", "ratio", applies_to=more),
            rule(f"{scope}-count", "{name: count}", "limit: 99", "number", applies_to=more),
            rule(f"{scope}-largest", "{name: largest_weight}", "limit: 99 %", "of_nav", applies_to=more),
            rule(f"{scope}-largest-gross", "{name: largest_weight}", "limit: 99 %", "of_gross", applies_to=more),
        ]
    written += [
        rule("issuers", "{name: weight}", "limit: 99 %", "of_gross", applies_to="{book: quay}", each="issuer"),
        rule("firm-largest", "{name: largest_weight}", "limit: 1e3 %", "of_gross"),
        rule(
            "west-short-largest",
            "{name: largest_weight}",
            "limit: 99 %",
            "of_gross",
            applies_to="{book: west, instrument: BETA}",
        ),
        rule("firm-leverage", "{name: leverage}", "limit: 9", "ratio"),
        rule("usd-net", "{name: net}", "limit: 1e9", applies_to="{book: quay}", currency="USD"),
    ]
    return write(SmallSite(tmp_path_factory.mktemp("worked"), rules(*written), nav_age=2))


@pytest.fixture(scope="module")
def world(site):
    return site.world()


@pytest.fixture(scope="module")
def answers(world):
    return by_key(evaluate(world))


def fx(currency: str, into: str, at: int) -> float:
    """What one unit of a currency costs in another on the day `at` of the week."""
    usd_in_eur = {"USD": 1 / EURUSD[at], "EUR": 1.0}
    return usd_in_eur[currency] / usd_in_eur[into]


def exposure(name: str, quantity: float, into: str, at: int = 4) -> float:
    price = CLOSES[name][at] if name in CLOSES else 1.0
    return quantity * MULTIPLIER.get(name, 1) * price * fx(CURRENCY[name], into, at)


def scenario(name: str, quantity: float, into: str, at: int, tonight: int = 4) -> float:
    """P&L that the position valued on the day `tonight` would have made on the session `at`."""
    money = CURRENCY[name]
    local = CLOSES[name][at] / CLOSES[name][at - 1] if name in CLOSES else 1.0
    if name == "FUTU":
        return exposure(name, quantity, into, tonight) * (local - 1)
    return exposure(name, quantity, into, tonight) * (local * fx(money, into, at) / fx(money, into, at - 1) - 1)


def vector(held: dict[str, float], into: str) -> list[float]:
    return [sum(scenario(name, size, into, at) for name, size in held.items()) for at in (1, 2, 3, 4)]


BOTH = [*QUAY.items(), *WEST.items()]


def scopes() -> dict[str, tuple[str, str, list[tuple[str, float]]]]:
    """Subject key, currency and positions by the first word of the rule ids."""
    return {
        "quay": ("book:quay", "EUR", list(QUAY.items())),
        "west": ("book:west", "USD", list(WEST.items())),
        "both": ("group:book=quay|west", "EUR", BOTH),
    }


def test_the_exposures_are_those_written_down_here(answers):
    # quay in EUR: 1000 x 11 = 11000; 300 x 20 x 0.8 = 4800; -50 x 103.02 = -5151; 5000; 1000 x 0.8 = 800
    assert answers["quay-net", "book:quay"].value == pytest.approx(16449, rel=1e-12)
    assert answers["quay-gross", "book:quay"].value == pytest.approx(26751, rel=1e-12)
    assert answers["quay-long", "book:quay"].value == pytest.approx(21600, rel=1e-12)
    assert answers["quay-short", "book:quay"].value == pytest.approx(5151, rel=1e-12)
    # west in USD: 100 x 11 x 1.25 = 1375; -200 x 20 = -4000; 3 x 50 x 40 = 6000; 2000 x 1.25 = 2500; 4000
    assert answers["west-net", "book:west"].value == pytest.approx(9875, rel=1e-12)
    assert answers["west-gross", "book:west"].value == pytest.approx(17875, rel=1e-12)
    # both in EUR, position by position: the BETA of the two books is not netted in gross
    assert answers["both-gross", "group:book=quay|west"].value == pytest.approx(26751 + 17875 * 0.8, rel=1e-12)
    assert answers["both-net", "group:book=quay|west"].value == pytest.approx(16449 + 9875 * 0.8, rel=1e-12)
    assert answers["usd-net", "book:quay"].value == pytest.approx(16449 * 1.25, rel=1e-12)
    assert answers["usd-net", "book:quay"].currency == "USD"
    assert answers["line-net", "position:west/FUTU"].value == pytest.approx(6000, rel=1e-12)
    assert answers["line-short", "position:west/FUTU"].value == 0
    assert answers["line-short", "position:west/BETA"].value == pytest.approx(4000, rel=1e-12)


def test_counts_weights_and_leverage_are_those_written_down_here(answers):
    assert answers["quay-count", "book:quay"].value == 5
    assert answers["west-count", "book:west"].value == 5
    # leverage leaves out cash in the subject's own currency: (26751 - 5000) / 40000; (17875 - 4000) / 30000
    assert answers["quay-leverage", "book:quay"].value == pytest.approx(0.543775, rel=1e-12)
    assert answers["west-leverage", "book:west"].value == pytest.approx(0.4625, rel=1e-12)
    assert answers["quay-largest", "book:quay"].value == pytest.approx(0.275, rel=1e-12)  # ALFA, 11000 / 40000
    assert answers["west-largest", "book:west"].value == pytest.approx(0.2, rel=1e-12)  # FUTU, 6000 / 30000
    assert answers["west-largest-gross", "book:west"].value == pytest.approx(6000 / 17875, rel=1e-12)
    assert answers["west-short-largest", "group:book=west; instrument=BETA"].value == pytest.approx(4000 / 17875)
    assert answers["issuers", "group:book=quay; issuer=Fond"].value == pytest.approx(5151 / 26751, rel=1e-12)
    assert answers["issuers", "group:book=quay; issuer=Alfa"].unit == "of_gross"
    # In the firm ALFA is 1100 x 11 = 12100, BETA nets to 100 x 20 x 0.8 = 1600; gross is 26751 + 14300
    assert answers["firm-largest", "firm"].value == pytest.approx(12100 / 41051, rel=1e-12)
    # East has 1,000,000 JPY of NAV and no rate: there is no NAV of the firm to divide by.
    assert answers["firm-leverage", "firm"].standing is Standing.UNMEASURED
    assert answers["firm-leverage", "firm"].reason == "no FX rate turns the NAV into EUR"


@pytest.mark.parametrize(("calendar", "currency"), [("XDUB", "EUR"), ("XNYS", "USD"), ("XNYS", "EUR"), ("XDUB", "USD")])
def test_the_scenario_pnl_of_each_position(world, calendar, currency):
    made = Valuation(world).scenarios(calendar, currency)
    held = [(world.market.instruments[at].id, size) for at, size in zip(
        world.holdings.instrument.tolist(), world.holdings.quantity.tolist(), strict=True)]  # fmt: skip

    assert sorted(held) == sorted((name, float(size)) for name, size in BOTH)
    for row, (name, size) in enumerate(held):
        expected = [scenario(name, size, currency, at) for at in (1, 2, 3, 4)]
        assert made.pnl[row] == pytest.approx(expected, rel=1e-10, abs=1e-9), name
    assert not made.lacks.any()


@pytest.mark.parametrize("scope", ["quay", "west", "both"])
def test_value_at_risk_and_shortfall_of_books_and_of_both_together(answers, scope):
    key, currency, held = scopes()[scope]
    pnl = sorted(sum(scenario(name, size, currency, at) for name, size in held) for at in (1, 2, 3, 4))

    found = answers[f"{scope}-var", key]
    # At 50 % of 4 sessions k = 2 and the shortfall is the mean of the two worst.
    assert found.value == pytest.approx(-pnl[1], rel=1e-10)
    assert (found.n, found.currency) == (4, currency)
    assert answers[f"{scope}-es", key].value == pytest.approx(-(pnl[0] + pnl[1]) / 2, rel=1e-10)


def test_a_pnl_vector_written_out(world):
    """quay's P&L of Tuesday in EUR, by hand: ALFA 11000 x 5 % = 550; BETA 4800 x (0.95 x 1.25 / 1.2 - 1) = -50;
    FOND -5151 x 1 % = -51.51; DOLLAR 800 x (1.25 / 1.2 - 1) = 33.3333."""
    made = Valuation(world).scenarios("XDUB", "EUR")

    tuesday = made.pnl[world.holdings.book == 0, 0].sum()

    assert tuesday == pytest.approx(550 - 50 - 51.51 + 800 * (1.25 / 1.2 - 1), rel=1e-12)


def test_fx_acts_on_the_profit_of_a_future_alone(answers, world):
    made = Valuation(world).scenarios("XDUB", "EUR")
    row = [world.market.instruments[at].id for at in world.holdings.instrument].index("FUTU")

    # 3 x 50 x 40 x 0.8 = 4800 EUR, moved by the local price only: +5 %, -5 %, +1.1/39.9, -1/41
    assert made.pnl[row] == pytest.approx([240, -240, 4800 * 1.1 / 39.9, -4800 / 41], rel=1e-12)


def test_the_pnl_of_both_books_is_never_book_pnl_at_tonights_rate(answers):
    """Summed from the start in EUR; each book's own figures turned at tonight's rate would give another number."""
    together = np.array([sum(scenario(name, size, "EUR", at) for name, size in BOTH) for at in (1, 2, 3, 4)])
    turned = np.array(vector(QUAY, "EUR")) + np.array(vector(WEST, "USD")) * 0.8

    assert abs(np.sort(together)[1] - np.sort(turned)[1]) > 1
    assert answers["both-var", "group:book=quay|west"].value == pytest.approx(-np.sort(together)[1], rel=1e-10)


@pytest.mark.parametrize(("book", "currency"), [("quay", "EUR"), ("west", "USD")])
def test_the_loss_of_the_day_is_that_of_thursdays_positions(answers, book, currency):
    made = sum(scenario(name, size, currency, 4, tonight=3) for name, size in BEFORE[book].items())

    assert answers[f"{book}-day", f"book:{book}"].value == pytest.approx(-made, rel=1e-10)
    own = scenario("FUTU", 3, "USD", 4, tonight=3)
    assert answers["line-day", "position:west/FUTU"].value == pytest.approx(-own, rel=1e-10)
    assert answers["line-day", "position:west/ALFA"].value == 0  # bought on Friday


def test_what_pages_show_of_each_book(site):
    books = {figures.subject.key: figures for figures in site.standings().books}

    assert list(books) == ["book:quay", "book:west", "book:east", "firm"]
    quay = books["book:quay"]
    assert (quay.positions, quay.gross, quay.nav, quay.nav_on) == (5, pytest.approx(26751), 40000, FRIDAY)
    worst = min(vector(QUAY, "EUR"))  # at the site's 75 % of 4 sessions k = 1
    assert quay.value_at_risk == pytest.approx(-worst, rel=1e-10)
    made = sum(scenario(name, size, "EUR", 4, tonight=3) for name, size in BEFORE["quay"].items())
    assert quay.pnl == pytest.approx(made, rel=1e-10)
    assert quay.reasons == ()
    assert (books["book:east"].gross, books["book:east"].value_at_risk, books["book:east"].pnl) == (0, 0, 0)
    assert books["firm"].nav is None
    assert books["firm"].reasons == ("no FX rate turns the NAV into EUR",)


def test_the_window_ends_with_tonights_return(world):
    assert [str(day) for day in world.windows["XDUB"].sessions] == [str(day) for day in WEEK]
