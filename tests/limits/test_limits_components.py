"""Components, marginal and incremental risk in a book and in the firm, overlapping horizons, ranges: by hand."""

from __future__ import annotations

import math
from dataclasses import replace
from datetime import timedelta
from decimal import Decimal

import numpy as np
import pytest
from drop_site import FRIDAY, WEEK, SmallSite, by_key, rule, rules
from scipy import stats
from test_limits_methods import the_demo_firm

from monitor.limits.context import RuleContext
from monitor.limits.defaults import Defaults
from monitor.limits.evaluate import evaluate
from monitor.limits.parameters import COMPONENT_METHODS
from monitor.limits.rules import read_rules
from monitor.limits.valuation import Valuation
from monitor.risk.figures import LACK_TEXT, Lack
from monitor.words import MarkKind, Standing, WrongUse

QUAY = {"applies_to": "{book: quay}"}
FIGURES = ("value_at_risk", "expected_shortfall")
DECAY = {"age_weighted": ", decay: 0.995"}
SHARED_OUT = [
    (method, of) for method in COMPONENT_METHODS for of in FIGURES if (method, of) != ("age_weighted", "value_at_risk")
]
VAR = "{name: value_at_risk}"
SCALED = "shared out by a smoothed quantile (Harrell and Davis), times "


@pytest.fixture(scope="module")
def world():
    return the_demo_firm()


def asked(world, *lines):
    """The answers of other rules to the same world."""
    firm = world.terms.firm
    context = RuleContext(tuple(book.id for book in firm.books), (), ("desk",), "desk", Defaults())
    terms = replace(world.terms, rules=read_rules([("rules/a.yaml", rules(*lines).encode())], context))
    return by_key(evaluate(replace(world, terms=terms)))


def of_rule(found, name):
    return {key: answer for (own, key), answer in found.items() if own == name}


def scenarios(world, currency, calendar):
    """(positions, 500) scenario P&L, and the names BOOK/INSTRUMENT of the positions."""
    books, instruments = world.terms.firm.books, world.market.instruments
    held = zip(world.holdings.book.tolist(), world.holdings.instrument.tolist(), strict=True)
    names = [f"{books[book].id}/{instruments[instrument].id}" for book, instrument in held]
    return Valuation(world).scenarios(calendar, currency).pnl[:, -500:], names


# Components


@pytest.mark.parametrize(("method", "of"), SHARED_OUT)
def test_components_of_all_positions_of_a_book_add_up_to_the_figure_of_the_book(method, of, world):
    told = f"method: {method}{DECAY.get(method, '')}"
    found = asked(
        world,
        rule("whole", f"{{name: {of}, {told}}}", each="book"),
        rule("parts", f"{{name: component, of: {of}, {told}}}", each="position"),
        rule("share", f"{{name: component, of: {of}, {told}}}", "limit: 5 %", "of_nav", each="position"),
    )
    whole = of_rule(found, "whole")
    for book in world.terms.firm.books:
        parts = {key: own for key, own in of_rule(found, "parts").items() if own.subject.book == book.id}
        figure = whole[f"book:{book.id}"]
        assert len(parts) > 10
        assert math.fsum(own.value for own in parts.values()) == pytest.approx(figure.value, rel=1e-10)
        assert {own.currency for own in parts.values()} == {book.currency} == {figure.currency}
        assert {own.n for own in parts.values()} == {500}
        assert {(own.how.of, own.how.method) for own in parts.values()} == {(of, method)}
        nav = world.nav[book.id].value
        for key, own in parts.items():
            assert found["share", key].value == pytest.approx(own.value / nav, rel=1e-12)
            assert (found["share", key].currency, own.low, own.unbounded) == (None, None, None)


@pytest.mark.parametrize(("method", "of"), SHARED_OUT)
def test_components_of_everything_held_in_each_currency_add_up_to_the_figure_of_the_firm(method, of, world):
    told = f"method: {method}{DECAY.get(method, '')}"
    found = asked(
        world,
        rule("whole", f"{{name: {of}, {told}}}"),
        rule("currency", f"{{name: component, of: {of}, {told}}}", each="currency"),
        rule("whole-usd", f"{{name: {of}, {told}}}", currency="USD"),
        rule("currency-usd", f"{{name: component, of: {of}, {told}}}", each="currency", currency="USD"),
    )
    for parts, whole in (("currency", "whole"), ("currency-usd", "whole-usd")):
        own = of_rule(found, parts)
        assert set(own) == {f"group:currency={code}" for code in ("EUR", "GBP", "JPY", "USD")}
        assert math.fsum(answer.value for answer in own.values()) == pytest.approx(
            found[whole, "firm"].value, rel=1e-10
        )
    assert found["currency-usd", "group:currency=EUR"].currency == "USD"
    # Dollars do not lose against the dollar what they lose against the euro: not the same figures at tonight's rate.
    ratios = [
        of_rule(found, "currency-usd")[key].value / answer.value for key, answer in of_rule(found, "currency").items()
    ]
    assert max(ratios) - min(ratios) > 0.01


@pytest.mark.parametrize(("method", "of"), [("historical", "value_at_risk"), ("normal", "expected_shortfall")])
def test_an_issuer_contributes_what_its_positions_do(method, of, world):
    measure = f"{{name: component, of: {of}, method: {method}}}"
    found = asked(
        world,
        rule("position", measure, each="position", applies_to="{book: north-quay}"),
        rule("issuer", measure, each="issuer", applies_to="{book: north-quay}"),
        rule("group", measure, applies_to="{book: north-quay, kind: [cash, future]}"),
        rule("firm", measure, each="issuer"),
        rule("firm-group", measure, applies_to="{issuer: Kestermann}"),
    )
    issuer = {item.id: item.tags.get("issuer") for item in world.market.instruments}
    kind = {item.id: item.kind.value for item in world.market.instruments}
    added: dict[str, float] = {}
    group = 0.0
    for key, answer in of_rule(found, "position").items():
        name = key.partition("/")[2]
        added[issuer[name]] = added.get(issuer[name], 0.0) + answer.value
        group += answer.value if kind[name] in ("cash", "future") else 0.0
    made = {key.rpartition("=")[2]: answer.value for key, answer in of_rule(found, "issuer").items()}
    assert made == pytest.approx({name: value for name, value in added.items() if name}, rel=1e-10)
    [only] = of_rule(found, "group").values()
    assert only.value == pytest.approx(group, rel=1e-10)
    # Across books an issuer's component is that of the firm, in the firm's currency.
    [alone] = of_rule(found, "firm-group").values()
    assert alone.value == of_rule(found, "firm")["group:issuer=Kestermann"].value
    assert (alone.currency, alone.subject.book) == ("EUR", None)


def test_components_by_the_normal_are_covariances_and_of_the_shortfall_the_mean_of_the_worst_days(world):
    """By hand: cov(x, P) / sd(P) x z; minus the mean of x on the five worst of 500 days."""
    found = asked(
        world,
        rule("normal", "{name: component, method: normal}", each="position", applies_to="{book: far-east}"),
        rule("worst", "{name: component, of: expected_shortfall}", each="position", applies_to="{book: far-east}"),
    )
    pnl, names = scenarios(world, "JPY", "XTKS")
    own = [at for at, name in enumerate(names) if name.startswith("far-east/")]
    whole = pnl[own].sum(axis=0)
    days = np.argsort(whole)[:5]
    for at in own:
        key = f"position:{names[at]}"
        covariance = np.cov(pnl[at], whole)[0, 1]
        expected = covariance / whole.std(ddof=1) * stats.norm.ppf(0.99)
        assert found["normal", key].value == pytest.approx(expected, rel=1e-9, abs=1e-6)
        assert found["worst", key].value == pytest.approx(-pnl[at, days].mean(), rel=1e-9, abs=1e-6)


def test_the_factor_to_the_figure_told_is_shown_in_a_mark(world):
    """The estimate of Harrell and Davis 1982 with scipy's beta distribution."""
    found = asked(world, rule("parts", "{name: component}", each="position"), rule("whole", VAR, each="book"))
    edges = np.arange(501) / 500
    weights = np.diff(stats.beta.cdf(edges, 0.01 * 501, 0.99 * 501))
    for book in world.terms.firm.books:
        pnl, names = scenarios(world, book.currency, book.calendar)
        own = np.array([name.startswith(f"{book.id}/") for name in names])
        estimate = -(np.sort(pnl[own].sum(axis=0)) * weights).sum()
        factor = found["whole", f"book:{book.id}"].value / estimate
        for answer in of_rule(found, "parts").values():
            if answer.subject.book == book.id:
                [note] = [mark.note for mark in answer.marks if mark.kind is MarkKind.METHOD]
                assert note == f"{SCALED}{factor:.3f} to add up to the figure"
                assert not answer.doubtful


def test_what_adds_up_by_itself_has_no_factor_to_show(world):
    measures = {
        "normal": "{name: component, method: normal}",
        "shortfall": "{name: component, of: expected_shortfall}",
        "t": "{name: component, method: student_t}",
    }
    lines = [rule(name, measure, each="position") for name, measure in measures.items()]
    for answer in asked(world, *lines).values():
        assert not any(SCALED in mark.note for mark in answer.marks)


# Marginal and incremental


@pytest.mark.parametrize("method", ["normal", "historical"])
def test_a_marginal_is_a_component_by_unit_of_exposure(method, world):
    found = asked(
        world,
        rule("component", f"{{name: component, method: {method}}}", each="position"),
        rule("net", "{name: net}", each="position"),
        rule("marginal", f"{{name: marginal, method: {method}}}", "limit: 5 %", "ratio", each="position"),
    )
    for key, answer in of_rule(found, "marginal").items():
        assert answer.value == pytest.approx(found["component", key].value / found["net", key].value, rel=1e-12)
        assert (answer.currency, answer.unit) == (None, "ratio")


def test_a_marginal_is_what_one_more_unit_of_exposure_does_to_the_figure(world):
    """By difference: a thousandth more and less of one position, in a book and across the firm."""
    lines = [
        rule("book", "{name: value_at_risk, method: normal}", each="book"),
        rule("firm", "{name: value_at_risk, method: normal}"),
        rule("net", "{name: net}", each="position"),
        rule("net-firm", "{name: net}", each="issuer"),
        rule("marginal", "{name: marginal, method: normal}", "limit: 5 %", "ratio", each="position"),
        rule("marginal-firm", "{name: marginal, method: normal}", "limit: 5 %", "ratio", each="issuer"),
    ]
    now = asked(world, *lines)
    _, names = scenarios(world, "EUR", "XDUB")
    issuers = {item.id: item.tags.get("issuer") for item in world.market.instruments}
    for name in ("north-quay/ARDNAVALE", "north-quay/DUBLIN-INDEX-DEC27", "north-quay/LANTERNFIELD"):
        found = []
        for factor in (1.001, 0.999):
            quantity = world.holdings.quantity * np.where(np.array(names) == name, factor, 1.0)
            found.append(asked(replace(world, holdings=replace(world.holdings, quantity=quantity)), *lines))
        more, less = found
        key, book = f"position:{name}", f"book:{name.partition('/')[0]}"
        by = more["net", key].value - less["net", key].value
        slope = (more["book", book].value - less["book", book].value) / by
        assert now["marginal", key].value == pytest.approx(slope, rel=1e-5)
        issuer = issuers[name.partition("/")[2]]
        group = f"group:issuer={issuer}"
        if issuer and now["net-firm", group].value == pytest.approx(now["net", key].value):  # held in one book alone
            slope = (more["firm", "firm"].value - less["firm", "firm"].value) / by
            assert now["marginal-firm", group].value == pytest.approx(slope, rel=1e-5)


@pytest.mark.parametrize("of", FIGURES)
@pytest.mark.parametrize("method", COMPONENT_METHODS)
def test_incremental_is_the_figure_less_that_of_all_others(method, of, world):
    """Told by other rules: the book, and the book without one instrument; the firm, and the firm without an issuer."""
    told = f"method: {method}{DECAY.get(method, '')}"
    measure = f"{{name: {of}, {told}}}"
    incremental = f"{{name: incremental, of: {of}, {told}}}"
    left_out = ("CORVANE", "DUBLIN-INDEX-DEC27", "CASH-USD", "LANTERNFIELD")
    found = asked(
        world,
        rule("book", measure, applies_to="{book: north-quay}"),
        rule("firm", measure),
        rule("position", incremental, each="position", applies_to="{book: north-quay}"),
        rule("issuer", incremental, each="issuer"),
        rule("without-issuer", measure, applies_to="{issuer: {not: Kestermann}}"),
        *(
            rule(f"no-{name.lower()}", measure, applies_to=f"{{book: north-quay, instrument: {{not: {name}}}}}")
            for name in left_out
        ),
    )
    whole = found["book", "book:north-quay"].value
    for name in left_out:
        [without] = of_rule(found, f"no-{name.lower()}").values()
        answer = found["position", f"position:north-quay/{name}"]
        assert answer.value == pytest.approx(whole - without.value, rel=1e-4, abs=whole * 1e-6)
        assert answer.value != 0
    [without] = of_rule(found, "without-issuer").values()
    firm = found["firm", "firm"].value
    assert found["issuer", "group:issuer=Kestermann"].value == pytest.approx(firm - without.value, abs=firm * 1e-6)


# Gaps and edges on the small site


def write(site, instruments, *positions):
    site.leave("instruments.csv", ["instrument,currency,kind,multiplier,calendar,expiry,issuer", *instruments])
    site.positions(*positions)


CONTRIBUTIONS = {
    "component": ("{name: component, method: normal, window: 4}", "amount"),
    "incremental": ("{name: incremental, window: 4}", "amount"),
    "marginal": ("{name: marginal, method: normal, window: 4}", "ratio"),
}
SMALL = [
    "ALFA,EUR,equity,1,XDUB,,Alfa",
    "BETA,USD,equity,1,XDUB,,Beta",
    "FUTU,USD,future,10,XDUB,2026-06-19,",
    "SHUT,EUR,equity,1,XDUB,,Alfa",
]
CLOSES = {
    "ALFA": (10.0, 11.0, 9.0, 9.5, 10.0),
    "BETA": (20.0, 19.0, 21.0, 20.5, 20.0),
    "FUTU": (5.0, 5.5, 5.2, 5.4, 5.0),
}
RATES = {"EURUSD": (1.25, 1.2, 1.3, 1.25, 1.25), "EURJPY": (160.0,) * 5}


def contributions(**more):
    lines = [rule("whole", "{name: value_at_risk, window: 4}", each="book")]
    for name, (measure, unit) in CONTRIBUTIONS.items():
        limit = "limit: 100 %" if unit == "ratio" else "limit: 1000"
        lines += [
            rule(f"{name}-position", measure, limit, unit, each="position", **more),
            rule(f"{name}-issuer", measure, limit, unit, each="issuer", **more),
        ]
    return rules(*lines)


def test_in_a_book_that_cannot_be_measured_nothing_contributes_and_the_reason_is_the_books(tmp_path):
    site = SmallSite(tmp_path / "site", contributions())
    write(site, SMALL, "quay,ALFA,1", "quay,GHOST,1", "west,BETA,3", "east,,")
    site.prices(CLOSES)
    site.rates(RATES)
    found = site.answers()

    reason = found["whole", "book:quay"].reason
    assert "GHOST" in reason
    for name in CONTRIBUTIONS:
        for key in ("position:quay/ALFA", "position:quay/GHOST"):
            assert (found[f"{name}-position", key].reason, found[f"{name}-position", key].value) == (reason, None)
        assert found[f"{name}-position", "position:west/BETA"].reason is None  # another book
        # The firm holds what cannot be measured too.
        assert found[f"{name}-issuer", "group:issuer=Beta"].reason == reason


def test_a_position_without_enough_returns_leaves_its_book_without_contributions(tmp_path):
    site = SmallSite(tmp_path / "site", contributions())
    write(site, SMALL, "quay,ALFA,1", "quay,SHUT,1", "west,,", "east,,")
    site.prices(CLOSES | {"SHUT": (None, None, None, 7.0, 7.5)})
    found = site.answers()

    assert found["whole", "book:quay"].reason == "SHUT has 1 of the 4 returns of the window"
    for name in CONTRIBUTIONS:
        assert found[f"{name}-position", "position:quay/ALFA"].reason == found["whole", "book:quay"].reason


@pytest.mark.parametrize("more", [{}, {"applies_to": "{book: [quay, east]}"}], ids=["firm", "two books"])
def test_a_book_that_is_missing_leaves_the_firm_without_contributions(tmp_path, more):
    """Also what lies in other books: it contributes to a firm that is not wholly known."""
    site = SmallSite(tmp_path / "site", contributions(**more))
    write(site, SMALL, "quay,ALFA,1", "east,,")
    site.prices(CLOSES)
    found = site.answers()

    missing = found["whole", "book:west"].reason
    assert missing
    for name in CONTRIBUTIONS:
        assert found[f"{name}-position", "position:quay/ALFA"].reason is None
        [issuer] = of_rule(found, f"{name}-issuer").values()
        assert (issuer.subject.book, issuer.reason) == (None, missing)


def test_of_one_position_everything_is_the_figure_of_its_book(tmp_path):
    lines = [
        rule("whole", "{name: value_at_risk, method: normal, window: 4}", each="book"),
        rule("net", "{name: net}", each="position"),
        rule("component", "{name: component, method: normal, window: 4}", each="position"),
        rule("incremental", "{name: incremental, method: normal, window: 4}", each="position"),
        rule("marginal", "{name: marginal, method: normal, window: 4}", "limit: 100 %", "ratio", each="position"),
        rule("flat", "{name: component, window: 4, within: firm}", each="book"),
    ]
    site = SmallSite(tmp_path / "site", rules(*lines))
    write(site, SMALL, "quay,ALFA,-3", "west,BETA,2", "east,,")
    site.prices(CLOSES)
    site.rates(RATES)
    found = site.answers()

    for book, key in (("quay", "position:quay/ALFA"), ("west", "position:west/BETA")):
        whole = found["whole", f"book:{book}"]
        assert whole.value > 0
        assert found["component", key].value == pytest.approx(whole.value, rel=1e-12)
        assert found["incremental", key].value == pytest.approx(whole.value, rel=1e-12)
        assert found["marginal", key].value == pytest.approx(whole.value / found["net", key].value, rel=1e-12)
        assert found["component", key].currency == whole.currency
    assert found["marginal", "position:quay/ALFA"].value < 0  # of a book that is short, one more unit is less risk
    assert found["flat", "book:east"].value == 0


def test_where_long_and_short_cancel_there_is_no_unit_of_exposure_to_reckon_by(tmp_path):
    lines = [
        rule("component", "{name: component, method: normal, window: 4}", each="issuer"),
        rule("marginal", "{name: marginal, method: normal, window: 4}", "limit: 100 %", "ratio", each="issuer"),
    ]
    site = SmallSite(tmp_path / "site", rules(*lines))
    write(site, SMALL, "quay,ALFA,3", "quay,SHUT,-4", "west,BETA,1", "east,,")
    site.prices(CLOSES | {"SHUT": (7.0, 7.1, 7.3, 7.2, 7.5)})  # 3 x 10 = 4 x 7.5
    site.rates(RATES)
    found = site.answers()

    assert found["component", "group:issuer=Alfa"].value > 0
    answer = found["marginal", "group:issuer=Alfa"]
    assert (answer.value, answer.reason, answer.standing) == (None, LACK_TEXT[Lack.NO_EXPOSURE], Standing.UNMEASURED)
    assert found["marginal", "group:issuer=Beta"].reason is None


def test_where_the_estimate_is_far_from_the_figure_there_are_components_of_the_shortfall_only(tmp_path):
    lines = [
        rule("whole", "{name: value_at_risk, window: 4}", each="book"),
        rule("component", "{name: component, window: 4}", each="position"),
        rule("shortfall", "{name: component, of: expected_shortfall, window: 4}", each="position"),
    ]
    site = SmallSite(tmp_path / "site", rules(*lines))
    write(site, SMALL, "quay,ALFA,1", "west,,", "east,,")
    site.prices(CLOSES)
    found = site.answers()

    answer = found["component", "position:quay/ALFA"]
    assert answer.reason == LACK_TEXT[Lack.NOT_SCALABLE]
    [mark] = answer.marks
    pnl = np.sort(10 * (np.array(CLOSES["ALFA"][1:]) / np.array(CLOSES["ALFA"][:-1]) - 1))
    weights = np.diff(stats.beta.cdf(np.arange(5) / 4, 0.25 * 5, 0.75 * 5))
    factor = found["whole", "book:quay"].value / -(pnl * weights).sum()
    assert not 0.8 <= factor <= 1.25
    assert mark.note == f"{SCALED}{factor:.3f} to add up to the figure"
    assert found["shortfall", "position:quay/ALFA"].value == pytest.approx(-pnl[0])


def test_a_young_book_says_how_many_sessions_its_components_rest_on(tmp_path):
    long = [day for day in (FRIDAY - timedelta(days=back) for back in range(28, -1, -1)) if day.weekday() < 5]
    site = SmallSite(
        tmp_path / "site",
        rules(rule("component", "{name: component, method: normal, window: 20}", each="position", **QUAY)),
    )
    write(site, SMALL, "quay,ALFA,1", "west,,", "east,,")
    closes = [None, *[100 + 3 * math.sin(at) for at in range(20)]]
    site.prices({"ALFA": closes}, long)
    answer = site.answers()["component", "position:quay/ALFA"]

    assert (answer.n, [(mark.kind, mark.note) for mark in answer.marks]) == (
        19,
        [(MarkKind.SHORT, "19 of the 20 sessions of the window")],
    )
    assert answer.value > 0


# Overlapping horizons


def overlapping(name="value_at_risk", confidence="0.75", days=2, window=4, **more):
    told = "".join(f", {key}: {value}" for key, value in more.items())
    sure = f", confidence: {confidence}" if confidence else ""
    return f"{{name: {name}{sure}, horizon_days: {days}, horizon: overlapping, window: {window}{told}}}"


def test_over_two_days_a_position_makes_exposure_times_the_return_of_both(tmp_path):
    """By hand: 3 shares at 10; over two days 9/10, 9.5/11 and 10/9: three rows of n - h + 1 = 4 - 2 + 1."""
    lines = [
        rule("var", overlapping(), **QUAY),
        rule("half", overlapping(confidence="0.5"), **QUAY),
        rule("es", overlapping("expected_shortfall", "0.5"), **QUAY),
        rule("worst", overlapping("expected_shortfall"), **QUAY),
        rule("three", overlapping(days=3), **QUAY),
        rule(
            "probability",
            overlapping("loss_probability", "", threshold=3.5, method="historical"),
            "limit: 99 %",
            "ratio",
            **QUAY,
        ),
        rule("normal", overlapping(method="normal"), **QUAY),
    ]
    site = SmallSite(tmp_path / "site", rules(*lines))
    write(site, SMALL, "quay,ALFA,3", "west,,", "east,,")
    site.prices(CLOSES)
    found = {name: answer for (name, _), answer in site.answers().items()}

    worst, second, best = 30 * (1 - 9.5 / 11), 30 * (1 - 9 / 10), 30 * (1 - 10 / 9)
    assert found["var"].value == pytest.approx(worst)  # the first of three: 0.25 x 3 rounds up to 1
    assert found["half"].value == pytest.approx(second)  # the second: 0.5 x 3 rounds up to 2
    assert found["es"].value == pytest.approx((worst + 0.5 * second) / 1.5)
    assert found["worst"].value == pytest.approx(worst)
    assert [mark.note for mark in found["worst"].marks] == [
        "less than one scenario lies in the tail: the worst one stands in for the mean"
    ]
    assert found["three"].value == pytest.approx(30 * (1 - 10 / 11))  # of 9.5/10 and 10/11
    assert found["probability"].value == pytest.approx(1 / 3)  # of 4.09, 3 and -3.33; times the root of 2 it were 2 / 3
    sigma = np.std([worst, second, best], ddof=1)
    assert found["normal"].value == pytest.approx(sigma * stats.norm.ppf(0.75))  # no root of time on top
    assert {answer.n for answer in found.values()} == {4}
    assert (found["var"].how.horizon_days, found["var"].how.detail) == (2, "overlapping periods")
    assert (found["var"].low, found["var"].high) == (None, None)
    assert found["var"].unbounded == "too few scenarios for a bound at this confidence"
    assert found["normal"].unbounded == "the bounds of this method need scenarios that do not overlap"


def test_over_two_days_foreign_shares_move_with_the_rate_and_futures_on_their_price_alone(tmp_path):
    lines = [rule(f"conf-{level}", overlapping(confidence=f"0.{level}"), each="position", **QUAY) for level in (5, 75)]
    site = SmallSite(tmp_path / "site", rules(*lines, rule("book", overlapping(), **QUAY)))
    write(site, SMALL, "quay,BETA,2", "quay,FUTU,-3", "quay,ALFA,1", "west,,", "east,,")
    site.prices(CLOSES)
    site.rates(RATES)
    found = site.answers()

    beta, futu, alfa = (np.array(CLOSES[name]) for name in ("BETA", "FUTU", "ALFA"))
    euros = beta / np.array(RATES["EURUSD"])
    made = {
        "BETA": 2 * 20 / 1.25 * (euros[2:] / euros[:-2] - 1),
        "FUTU": -3 * 10 * 5.0 / 1.25 * (futu[2:] / futu[:-2] - 1),
        "ALFA": 10 * (alfa[2:] / alfa[:-2] - 1),
    }
    for name, pnl in made.items():
        assert found["conf-75", f"position:quay/{name}"].value == pytest.approx(-np.sort(pnl)[0], rel=1e-10)
        assert found["conf-5", f"position:quay/{name}"].value == pytest.approx(-np.sort(pnl)[1], rel=1e-10)
    assert found["book", "book:quay"].value == pytest.approx(-sum(made.values()).min(), rel=1e-10)


def test_over_two_days_a_future_at_prices_that_are_not_positive_earns_the_difference(tmp_path):
    """By hand, 2 contracts of 10. What lies between the two ends of a period, here -37, does not count."""
    lines = [rule(f"conf-{level}", overlapping(confidence=f"0.{level}"), **QUAY) for level in (5, 75)]
    site = SmallSite(tmp_path / "site", rules(*lines))
    write(site, ["FUTU,EUR,future,10,XDUB,2026-06-19,"], "quay,FUTU,2", "west,,", "east,,")
    site.prices({"FUTU": (18.0, 20.0, -37.0, 10.0, 15.0)})
    found = site.answers()

    # 18 -> -37: 20 x -55; 20 -> 10: 2 x 10 x 15 x (10/20 - 1); -37 -> 15: 20 x 52.
    assert found["conf-75", "book:quay"].value == pytest.approx(1100)
    assert found["conf-5", "book:quay"].value == pytest.approx(150)


@pytest.mark.parametrize("days", [4, 5])
def test_an_overlapping_horizon_as_long_as_the_window_is_no_rule(days, tmp_path):
    line = rule("long", f"{{name: value_at_risk, horizon_days: {days}, horizon: overlapping}}", **QUAY)

    with pytest.raises(WrongUse, match=f"a horizon of {days} days in a window of 4; expected a longer window"):
        SmallSite(tmp_path / "site", rules(line)).answers()


def test_overlapping_periods_of_one_day_are_days(tmp_path):
    lines = [rule("days", VAR, **QUAY), rule("periods", "{name: value_at_risk, horizon: overlapping}", **QUAY)]
    site = SmallSite(tmp_path / "site", rules(*lines))
    write(site, SMALL, "quay,ALFA,3", "west,,", "east,,")
    site.prices(CLOSES)
    found = site.answers()

    assert found["days", "book:quay"].value == found["periods", "book:quay"].value


def test_a_short_history_has_fewer_periods_and_those_are_not_padded(tmp_path):
    """20 sessions asked for, 19 there: 19 - 3 + 1 periods, of which none reaches before the first close."""
    long = [day for day in (FRIDAY - timedelta(days=back) for back in range(28, -1, -1)) if day.weekday() < 5]
    lines = [
        rule("var", overlapping(days=3, window=20), **QUAY),
        rule(
            "best",
            overlapping("loss_probability", "", 3, 20, threshold="0.000001", method="historical"),
            "limit: 99 %",
            "ratio",
            **QUAY,
        ),
    ]
    site = SmallSite(tmp_path / "site", rules(*lines), window=20)
    write(site, SMALL, "quay,ALFA,1", "west,,", "east,,")
    closes = [*(100 + 3 * math.sin(at) for at in range(19)), 90.0]  # the newest period is the worst
    site.prices({"ALFA": [None, *closes]}, long)
    found = site.answers()

    prices = np.array(closes)
    pnl = np.sort(prices[-1] * (prices[3:] / prices[:-3] - 1))
    assert len(pnl) == 17
    assert found["var", "book:quay"].value == pytest.approx(-pnl[math.ceil(17 / 4) - 1], rel=1e-10)
    assert found["best", "book:quay"].value == pytest.approx((pnl < -1e-6).sum() / 17, rel=1e-12)
    assert found["var", "book:quay"].n == 19


# Ranges


def prices_with_ranges(site, days=WEEK, missing=None):
    """Opens, highs and lows of ALFA around its closes."""
    rows = []
    for at, day in enumerate(days):
        close = CLOSES["ALFA"][at]
        opened, high, low = close * 0.99, close * (1.01 + 0.01 * at), close * 0.97
        cells = ",," if day == missing else f"{opened!r},{high!r},{low!r}"
        site.leave(
            f"prices_{day}.csv", ["instrument,close,open,high,low", f"ALFA,{close!r},{cells}", f"SHUT,{close!r},,,"]
        )
        rows.append((opened, high, low, close))
    return np.array(rows).T


RANGE_RULES = rules(
    *(
        rule(
            method,
            f"{{name: volatility, method: {method}, window: 4}}",
            "limit: 90 %",
            "ratio",
            each="position",
            **QUAY,
        )
        for method in ("parkinson", "garman_klass")
    )
)


def test_volatility_from_the_ranges_of_the_price_files(tmp_path):
    """Parkinson 1980 and Garman and Klass 1980, by hand, on the four sessions of the window; 252 days a year."""
    site = SmallSite(tmp_path / "site", RANGE_RULES)
    write(site, SMALL, "quay,ALFA,-2", "quay,SHUT,1", "west,,", "east,,")
    opened, high, low, close = prices_with_ranges(site)[:, 1:]
    found = site.answers()

    parkinson = math.sqrt(252 * (np.log(high / low) ** 2).mean() / (4 * math.log(2)))
    terms = np.log(high / low) ** 2 / 2 - (2 * math.log(2) - 1) * np.log(close / opened) ** 2
    assert found["parkinson", "position:quay/ALFA"].value == pytest.approx(parkinson, rel=1e-12)
    assert found["garman_klass", "position:quay/ALFA"].value == pytest.approx(math.sqrt(252 * terms.mean()), rel=1e-12)
    assert found["parkinson", "position:quay/ALFA"].n == 4
    for method in ("parkinson", "garman_klass"):
        assert found[method, "position:quay/SHUT"].reason == LACK_TEXT[Lack.NO_RANGE]
        assert found[method, "position:quay/SHUT"].standing is Standing.UNMEASURED


@pytest.mark.parametrize("missing", [WEEK[0], WEEK[2]])
def test_a_session_without_a_range_leaves_no_volatility_unless_it_lies_before_the_window(tmp_path, missing):
    site = SmallSite(tmp_path / "site", RANGE_RULES)
    write(site, SMALL, "quay,ALFA,1", "west,,", "east,,")
    prices_with_ranges(site, missing=missing)
    answer = site.answers()["parkinson", "position:quay/ALFA"]

    assert (answer.reason is None) == (missing == WEEK[0])


def test_components_of_the_books_within_the_firm_add_up_to_the_figure_of_the_firm(world):
    found = asked(
        world,
        rule("whole", VAR),
        rule("books", "{name: component, within: firm}", each="book"),
        rule("share", "{name: component, within: firm}", "limit: 5 %", "of_nav", each="book"),
        rule("positions", "{name: component, within: firm}", each="position"),
    )
    whole, books = found["whole", "firm"], of_rule(found, "books")
    assert len(books) == 3
    assert math.fsum(own.value for own in books.values()) == pytest.approx(whole.value, rel=1e-10)
    assert math.fsum(own.value for own in of_rule(found, "positions").values()) == pytest.approx(whole.value, rel=1e-10)
    assert {own.currency for own in books.values()} == {whole.currency} == {"EUR"}
    nav = {found["share", key].value / own.value for key, own in books.items()}
    assert max(nav) == pytest.approx(min(nav), rel=1e-12)  # the firm's, for every book


def test_what_is_said_of_a_figure_is_said_of_its_contributions(tmp_path):
    lines = [
        rule("whole", "{name: value_at_risk, method: student_t, window: 4}", each="book"),
        rule("component", "{name: component, method: student_t, window: 4}", each="position"),
        rule("incremental", "{name: incremental, method: student_t, window: 4}", each="position"),
        rule("shortfall", "{name: component, of: expected_shortfall, confidence: 0.99, window: 4}", each="position"),
    ]
    site = SmallSite(tmp_path / "site", rules(*lines))
    write(site, SMALL, "quay,ALFA,3", "west,,", "east,,")
    site.prices(CLOSES)
    found = site.answers()

    said = [mark.note for mark in found["whole", "book:quay"].marks if mark.kind is MarkKind.METHOD]
    assert said == ["by the normal: too few scenarios to fit Student's t"]
    for name in ("component", "incremental"):
        assert [mark.note for mark in found[name, "position:quay/ALFA"].marks if mark.kind is MarkKind.METHOD] == said
    [worst] = [mark.note for mark in found["shortfall", "position:quay/ALFA"].marks if mark.kind is MarkKind.METHOD]
    assert worst == "less than one scenario lies in the tail: the worst one stands in for the mean"


def test_the_least_that_a_rule_may_ask_is_what_the_methods_need():
    from monitor.limits import parameters
    from monitor.risk import monte_carlo, peaks_over_threshold, tail_index

    assert parameters.LEAST_EXCEEDANCES == peaks_over_threshold.LEAST_EXCEEDANCES
    assert parameters.LEAST_IN_TAIL == monte_carlo.LEAST_IN_TAIL
    with pytest.raises(ValueError, match="at most"):
        tail_index.tail_index(np.ones((1, 100)), Decimal(parameters.LARGEST_INDEX_SHARE) + Decimal("0.001"))
