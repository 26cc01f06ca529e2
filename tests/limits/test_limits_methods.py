"""Every measure by every method that a rule may name, asked of the demo firm: a figure, or a reason that is true."""

from __future__ import annotations

import json
from datetime import UTC, datetime, time
from decimal import Decimal
from functools import cache, partial
from itertools import islice
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
import pytest
from drop_site import FRIDAY, NOW, SmallSite, rule, rules

from demo_feed import story
from monitor import results
from monitor.cli.documents import evening_document
from monitor.demonstration import set_up
from monitor.evening import check_evening
from monitor.feed.build import build
from monitor.limits.catalogue import MEASURES
from monitor.limits.evaluate import evaluate
from monitor.limits.parameters import COMPONENT_METHODS, PROBABILITY_METHODS, TAIL_METHODS, VOLATILITY_METHODS
from monitor.limits.valuation import Valuation
from monitor.risk.age_weighted import age_weighted
from monitor.risk.bounds import BOUND_LACK_TEXT
from monitor.risk.cornish_fisher import cornish_fisher
from monitor.risk.figures import LACK_TEXT, Lack
from monitor.risk.garch import garch
from monitor.risk.historical import historical
from monitor.risk.monte_carlo import monte_carlo
from monitor.risk.normal import normal
from monitor.risk.peaks_over_threshold import peaks_over_threshold
from monitor.risk.probability import loss_probability
from monitor.risk.student import student_t
from monitor.risk.tail_index import tail_index
from monitor.risk.volatility import ewma, sample
from monitor.risk.volatility_scaled import volatility_scaled
from monitor.run import open_for_checking, prepare
from monitor.site import open_site
from monitor.words import InstrumentKind, Recipe, Standing, SubjectKind, Unit
from monitor.world import World

DAYS = 2  # evenings of the demo firm that are taken in: the newest has a P&L of the day
NINETY_NINE = Decimal("0.99")

# What a rule may ask, by a name of its own: the measure, and what it is told besides.
ASKED: dict[str, tuple[str, str]] = {name: (name, "") for name in MEASURES}
for _method in TAIL_METHODS:
    for _name in ("value_at_risk", "expected_shortfall"):
        _more = {"age_weighted": ", decay: 0.995", "monte_carlo": ", paths: 20000"}.get(_method, "")
        ASKED[f"{_name}-{_method}"] = (_name, f"method: {_method}{_more}")
for _name in ("component", "incremental", "marginal"):
    for _method in COMPONENT_METHODS:
        for _of in ("value_at_risk", "expected_shortfall"):
            _more = ", decay: 0.995" if _method == "age_weighted" else ""
            if _name == "incremental" or (_method, _of) != ("age_weighted", "value_at_risk"):
                ASKED[f"{_name}-{_method}-{_of}"] = (_name, f"of: {_of}, method: {_method}{_more}")
for _method in PROBABILITY_METHODS:
    ASKED[f"loss_probability-{_method}"] = ("loss_probability", f"threshold: 1 %, of: nav, method: {_method}")
for _method in VOLATILITY_METHODS:
    ASKED[f"volatility-{_method}"] = ("volatility", f"method: {_method}")
ASKED |= {
    "scaled-by-garch": ("value_at_risk", "method: volatility_scaled, scaling: garch"),
    "scaled-slowly": ("value_at_risk", "method: volatility_scaled, decay: 0.99"),
    "by-kurtosis": ("value_at_risk", "method: student_t, fit: kurtosis"),
    "with-drift": ("value_at_risk", "method: normal, drift: sample"),
    "t-with-drift": ("expected_shortfall", "method: student_t, drift: sample"),
    "drawn-from-t": ("expected_shortfall", "method: monte_carlo, distribution: student_t, paths: 20000"),
    "fatter-share": ("value_at_risk", "method: peaks_over_threshold, tail_share: 15 %"),
    "less-sure": ("value_at_risk", "method: historical, confidence: 97.5 %, window: 250"),
    "ten-days": ("value_at_risk", "method: historical, horizon_days: 10"),
    "overlapping": ("value_at_risk", "method: historical, horizon_days: 10, horizon: overlapping"),
    "t-overlapping": ("expected_shortfall", "method: student_t, horizon_days: 5, horizon: overlapping"),
    "loss-overlapping": (
        "loss_probability",
        "threshold: 1 %, of: gross, method: historical, horizon_days: 5, horizon: overlapping",
    ),
    "loss-with-drift": ("loss_probability", "threshold: 500000, drift: sample, method: student_t"),
    "tail-index-of-19": ("tail_index", "tail_share: 19 %"),
    "component-garch": ("component", "method: volatility_scaled, scaling: garch"),
    "component-drift": ("component", "method: normal, drift: sample, horizon_days: 10"),
}
ASKED.pop("loss_probability")  # which has no threshold
EACH = {"firm": None, "book": "book", "position": "position", "issuer": "issuer"}


def measure_text(asked: str, each: str | None = None) -> str:
    name, more = ASKED[asked]
    within = ", within: firm" if each == "book" and name in ("component", "incremental", "marginal") else ""
    return f"{{name: {name}{', ' if more else ''}{more}{within}}}"


def fits(asked: str, each: str | None) -> bool:
    """Whether a rule may ask this of such subjects."""
    name, more = ASKED[asked]
    return bool(MEASURES[name].units_for(each)) and (
        ("parkinson" not in more and "garman" not in more) or each == "position"
    )


def unit_of(asked: str, each: str | None) -> Unit:
    name, _ = ASKED[asked]
    units = MEASURES[name].units_for(each)
    if name == "volatility" and each == "position":
        return Unit.RATIO
    return Unit.OF_NAV if Unit.OF_NAV in units else units[-1]


def rule_text(asked: str, each: str | None = None, name: str = "") -> str:
    unit = unit_of(asked, each)
    limit = {Unit.OF_NAV: "100 %", Unit.RATIO: "5" if ASKED[asked][0] == "leverage" else "100 %"}.get(unit, "100")
    more = {"each": each} if each else {}
    level = "limit_below: 0.1" if ASKED[asked][0] == "tail_index" else f"limit: {limit}"
    return rule(name or asked, measure_text(asked, each), level, unit.value, **more)


@cache
def the_demo_firm() -> World:
    """The demo firm on one of its first evenings, under rules that ask everything of everyone."""
    with TemporaryDirectory() as place:
        folder = Path(place) / "saltmere"
        site_file = set_up(folder)
        for file in (folder / "rules").iterdir():
            file.unlink()
        levels = [(asked, level) for asked in ASKED for level in EACH if fits(asked, EACH[level])]
        lines = [rule_text(asked, EACH[level], f"{asked}-{level}") for asked, level in levels]
        (folder / "rules" / "all.yaml").write_text(rules(*lines))
        evenings = list(islice(story.evenings(), DAYS))
        for evening in evenings:
            for name, data in evening.files.items():
                (folder / "drop" / name).write_bytes(data)
        day = evenings[-1].date
        with open_for_checking(open_site(site_file)) as state:
            terms = prepare(state, datetime.combine(day, time(23), UTC))
            return build(Recipe(day, "evening", day, day, day, terms, state.ledger.head().seq), state.sources(day))


@pytest.fixture(scope="session")
def demo_world() -> World:
    return the_demo_firm()


@pytest.fixture(scope="session")
def standings(demo_world):
    return evaluate(demo_world)


@pytest.fixture(scope="session")
def answers(standings):
    """By rule, the answers."""
    found: dict[str, list] = {}
    for answer in standings.answers:
        found.setdefault(answer.rule, []).append(answer)
    return found


# A figure or a true reason


def scenarios_of(world, subject):
    """The scenario P&L of a book, a position or the firm over 500 sessions, and its NAV, in its currency.

    Added up position by position, not by the program's sums.
    """
    firm = world.terms.firm
    books = {book.id: book for book in firm.books}
    own = books[subject.book] if subject.book else firm
    currency = own.currency if subject.book else own.base_currency
    pnl = Valuation(world).scenarios(own.calendar, currency).pnl
    rows = []
    for at, (book, instrument) in enumerate(zip(world.holdings.book, world.holdings.instrument, strict=True)):
        key = f"position:{firm.books[book].id}/{world.market.instruments[instrument].id}"
        if subject.kind is SubjectKind.FIRM or subject.key in (key, f"book:{firm.books[book].id}"):
            rows.append(pnl[at, -500:])
    place = world.market.currency_index()
    rate = {
        book.id: world.market.rate[place[book.currency]] / world.market.rate[place[currency]] for book in firm.books
    }
    nav = sum(world.nav[name].value * rate[name] for name in ([subject.book] if subject.book else books))
    return np.sum(rows, axis=0), nav


def instrument_of(world, subject):
    name = subject.key.partition("/")[2]
    return next(item for item in world.market.instruments if item.id == name)


def test_every_measure_and_every_method_is_asked(answers):
    methods = {
        "value_at_risk": TAIL_METHODS,
        "expected_shortfall": TAIL_METHODS,
        "volatility": VOLATILITY_METHODS,
        "loss_probability": PROBABILITY_METHODS,
        **dict.fromkeys(("component", "incremental", "marginal"), COMPONENT_METHODS),
    }
    asked = {(answer.measure, answer.how.method) for own in answers.values() for answer in own}
    assert {name for name, _ in asked} == set(MEASURES)
    for name, known in methods.items():
        assert {method for measure, method in asked if measure == name} == set(known)


def test_each_gives_a_figure_or_a_reason(answers, demo_world):
    assert len(answers) == len(demo_world.terms.rules)
    for own in answers.values():
        for answer in own:
            if answer.reason is None:
                assert np.isfinite(answer.value)
                assert answer.standing is not Standing.UNMEASURED
            else:
                assert (answer.value, answer.standing) == (None, Standing.UNMEASURED)
                assert answer.reason in LACK_TEXT.values()
    # What may have no figure at the demo firm, where every book is whole and every position has its history.
    lacking = {rule for rule, own in answers.items() if any(answer.reason for answer in own)}
    odd = ("cornish_fisher", "parkinson", "garman_klass", "tail_index", "tail-index")
    assert [rule for rule in lacking if not any(word in rule for word in odd)] == []


@pytest.mark.parametrize("name", ["value_at_risk", "expected_shortfall"])
def test_outside_the_domain_is_outside_the_domain(name, answers, demo_world):
    """Maillard 2012: the expansion rises everywhere when its derivative, a parabola, is nowhere negative."""
    found = answers[f"{name}-cornish_fisher-position"]
    for answer in found:
        pnl, _ = scenarios_of(demo_world, answer.subject)
        if not pnl.any():
            assert answer.value == 0
            continue
        standard = (pnl - pnl.mean()) / pnl.std()
        skewness, kurtosis = (standard**3).mean(), (standard**4).mean() - 3
        a, b = kurtosis / 8 - skewness**2 / 6, skewness / 3
        rising = a > 0 and b**2 <= 4 * a * (1 - kurtosis / 8 + 5 * skewness**2 / 36)
        assert answer.reason == (None if rising else LACK_TEXT[Lack.OUTSIDE_DOMAIN])
    assert 0 < sum(answer.reason is None for answer in found) < len(found)


@pytest.mark.parametrize("method", ["parkinson", "garman_klass"])
def test_ranges_count_on_the_sessions_of_the_instruments_own_market(method, answers, demo_world):
    found = answers[f"volatility-{method}-position"]
    abroad = 0
    for answer in found:
        own = next(book for book in demo_world.terms.firm.books if book.id == answer.subject.book)
        window = demo_world.windows[own.calendar]
        instrument = instrument_of(demo_world, answer.subject)
        at = demo_world.market.instruments.index(instrument)
        ranges = window.ranges
        opened, high, low, close = (rows[at, -500:] for rows in (ranges.open, ranges.high, ranges.low, ranges.close))
        given = ~np.isnan(close)
        if instrument.kind is InstrumentKind.CASH or (~given & window.gap[at, -500:]).any():
            assert answer.reason == LACK_TEXT[Lack.NO_RANGE]
            continue
        abroad += not given.all()
        ratio, move = np.log(high / low)[given], np.log(close / opened)[given]
        terms = ratio**2 / (4 * np.log(2)) if method == "parkinson" else ratio**2 / 2 - (2 * np.log(2) - 1) * move**2
        assert answer.value == pytest.approx(np.sqrt(252 * terms.mean()), rel=1e-12)
    assert abroad > 0  # on holidays of their own market, sessions of the book's
    assert 40 < sum(answer.reason is None for answer in found) < len(found)


def test_what_cannot_lose_has_no_tail_index(answers, demo_world):
    for answer in answers["tail_index-position"]:
        pnl, _ = scenarios_of(demo_world, answer.subject)
        assert (answer.reason == LACK_TEXT[Lack.FEW_IN_TAIL]) == (not pnl.any())


# What is told is what the method says


SURE = {"confidence": NINETY_NINE}
DIRECT = {
    "historical": partial(historical, **SURE),
    "age_weighted": partial(age_weighted, **SURE, decay=0.995),
    "volatility_scaled": partial(volatility_scaled, **SURE, horizon_days=1, scaling="ewma", decay=0.94),
    "normal": partial(normal, **SURE),
    "student_t": partial(student_t, **SURE),
    "cornish_fisher": partial(cornish_fisher, **SURE),
    "peaks_over_threshold": partial(peaks_over_threshold, **SURE),
    "monte_carlo": partial(monte_carlo, **SURE, paths=20_000),
}
FURTHER = {
    "scaled-by-garch": partial(volatility_scaled, **SURE, horizon_days=1, scaling="garch", decay=0.94),
    "scaled-slowly": partial(volatility_scaled, **SURE, horizon_days=1, scaling="ewma", decay=0.99),
    "by-kurtosis": partial(student_t, **SURE, fit="kurtosis"),
    "with-drift": partial(normal, **SURE, drift="sample"),
    "t-with-drift": partial(student_t, **SURE, drift="sample"),
    "drawn-from-t": partial(monte_carlo, **SURE, distribution="student_t", paths=20_000),
    "fatter-share": partial(peaks_over_threshold, **SURE, tail_share=Decimal("0.15")),
    "less-sure": lambda pnl: historical(pnl[:, -250:], Decimal("0.975")),
    "ten-days": partial(historical, **SURE, horizon_days=10),
}
TOLD = {f"{name}-{method}": ask for method, ask in DIRECT.items() for name in ("value_at_risk", "expected_shortfall")}


def assert_told(answers, world, asked, ask):
    """ask: of a subject's scenarios, its NAV and what its draws are seeded from, the figures."""
    for level in ("firm", "book", "position"):
        for answer in answers.get(f"{asked}-{level}", ()):
            pnl, nav = scenarios_of(world, answer.subject)
            figures = ask(pnl[np.newaxis], nav, ("Saltmere Trust", str(world.recipe.date), answer.subject.key))
            if answer.reason:
                assert answer.reason == LACK_TEXT[Lack(figures.lack[0])]
            else:
                # Where a likelihood is flat, adding up in another order moves its fit by more than the sum.
                assert answer.value == pytest.approx(figures.value[0], rel=1e-5, abs=1e-12)


@pytest.mark.parametrize("asked", [*TOLD, *FURTHER])
def test_a_tail_is_the_one_that_its_method_gives(asked, answers, demo_world):
    ask = {**TOLD, **FURTHER}[asked]

    def share_of_nav(pnl, nav, seed):
        drawn = getattr(ask, "func", None) is monte_carlo
        return getattr(ask(pnl / nav, names=[seed]) if drawn else ask(pnl / nav), ASKED[asked][0])

    assert_told(answers, demo_world, asked, share_of_nav)


PROBABILITIES = {
    "loss_probability-normal": (0.01, {"method": "normal"}),
    "loss_probability-student_t": (0.01, {"method": "student_t"}),
    "loss_probability-historical": (0.01, {"method": "historical"}),
    "loss-with-drift": (None, {"method": "student_t", "drift": "sample"}),
}


@pytest.mark.parametrize("asked", PROBABILITIES)
def test_a_probability_is_that_of_a_share_of_nav_or_of_an_amount(asked, answers, demo_world):
    share, more = PROBABILITIES[asked]

    def probability(pnl, nav, _seed):
        return loss_probability(pnl, np.array([share * nav if share else 500_000.0]), 1, **more)

    assert_told(answers, demo_world, asked, probability)


@pytest.mark.parametrize(("asked", "share"), [("tail_index", "0.1"), ("tail-index-of-19", "0.19")])
def test_a_tail_index_is_that_of_the_scenarios(asked, share, answers, demo_world):
    assert_told(answers, demo_world, asked, lambda pnl, _nav, _seed: tail_index(pnl, Decimal(share)))


VOLATILITIES = {"sample": sample, "ewma": partial(ewma, decay=0.94), "garch": garch}


@pytest.mark.parametrize("method", VOLATILITIES)
def test_volatility_of_a_book_is_that_of_its_pnl_and_of_a_position_that_of_its_returns(method, answers, demo_world):
    for answer in [*answers[f"volatility-{method}-book"], *answers[f"volatility-{method}-firm"]]:
        pnl, nav = scenarios_of(demo_world, answer.subject)
        expected = VOLATILITIES[method](pnl[np.newaxis]).value[0] * np.sqrt(252) / nav
        assert answer.value == pytest.approx(expected, rel=1e-5)
    positions = [answer for answer in answers[f"volatility-{method}-position"] if answer.subject.book == "north-quay"]
    window, place = demo_world.windows["XDUB"], demo_world.market.currency_index()
    for answer in positions:
        instrument = instrument_of(demo_world, answer.subject)
        price = window.close[demo_world.market.instruments.index(instrument), -501:]
        if instrument.kind != "future":
            price = price * window.rate[place[instrument.currency], -501:] / window.rate[place["EUR"], -501:]
        expected = VOLATILITIES[method](np.diff(np.log(price))[np.newaxis]).value[0] * np.sqrt(252)
        assert answer.value == pytest.approx(expected, rel=1e-5, abs=1e-12)
    assert len(positions) > 10


# Bounds


def test_bounds_go_with_value_at_risk_and_shortfall_and_say_why_one_is_missing(answers):
    texts = set(BOUND_LACK_TEXT.values())
    for own in answers.values():
        for answer in own:
            if answer.measure not in ("value_at_risk", "expected_shortfall") or answer.value is None:
                assert (answer.low, answer.high, answer.unbounded) == (None, None, None)
                continue
            assert answer.low is None or answer.low <= answer.value
            assert answer.high is None or answer.value <= answer.high
            assert (answer.unbounded is not None) == (None in (answer.low, answer.high))
            assert answer.unbounded is None or answer.unbounded in texts
    for asked in [*TOLD, *FURTHER]:
        [firm] = answers[f"{asked}-firm"]
        if firm.value is not None:
            assert firm.low < firm.value
            assert firm.high is None or firm.high > firm.value
    open_above = {asked for asked in [*TOLD, *FURTHER, "overlapping"] if answers[f"{asked}-firm"][0].unbounded}
    assert open_above == {"expected_shortfall-age_weighted", "overlapping"}
    [without] = answers["t-overlapping-firm"]
    assert (without.low, without.high, without.unbounded) == (
        None,
        None,
        "the bounds of this method need scenarios that do not overlap",
    )


def test_bounds_of_a_share_of_nav_are_shares_of_nav(answers, demo_world):
    """Of the normal without a drift by hand: VaR exp(+-1.96 / sqrt(2 (n - 1))), on the scale of its logarithm."""
    width = 1.959963984540054 / np.sqrt(2 * 499)
    for level in ("firm", "book", "position"):
        for answer in answers[f"value_at_risk-normal-{level}"]:
            if answer.value > 0:
                assert answer.low == pytest.approx(answer.value * np.exp(-width), rel=1e-9)
                assert answer.high == pytest.approx(answer.value * np.exp(width), rel=1e-9)


# On record


def test_everything_is_recorded_and_read_back(standings):
    data = results.encode(standings)
    again = results.decode(data)

    assert again == standings
    assert results.encode(again) == data
    told = {answer.how.detail for answer in again.answers}
    assert {"overlapping periods", "decay 0.995", "scaled by GARCH volatility", "fitted to the kurtosis"} <= told
    assert any(answer.unbounded for answer in again.answers)


def test_results_of_the_first_format_are_still_read(standings):
    """They had no `unbounded` and five parts of `how`."""
    content = json.loads(results.encode(standings))
    content["format"] = 1
    del content["answers"]["unbounded"]
    content["answers"]["how"] = [how[:5] for how in content["answers"]["how"]]
    content["books"]["how"] = [how[:5] for how in content["books"]["how"]]

    old = results.decode(json.dumps(content).encode())

    assert len(old.answers) == len(standings.answers)
    for one, other in zip(old.answers, standings.answers, strict=True):
        assert (one.rule, one.subject, one.value, one.low, one.marks) == (
            other.rule,
            other.subject,
            other.value,
            other.low,
            other.marks,
        )
        assert (one.unbounded, one.how.detail) == (None, None)
        assert (one.how.method, one.how.confidence, one.how.of) == (
            other.how.method,
            other.how.confidence,
            other.how.of,
        )
    assert [book.value_at_risk for book in old.books] == [book.value_at_risk for book in standings.books]


def test_json_of_a_check_gives_the_bounds_or_says_why_there_is_none(tmp_path):
    lines = [
        rule(
            "both",
            "{name: value_at_risk, method: normal, window: 4}",
            "limit: 90 %",
            "of_nav",
            applies_to="{book: quay}",
        ),
        rule("one", "{name: value_at_risk, confidence: 0.99, window: 4}", applies_to="{book: quay}"),
        rule("none", "{name: gross}", applies_to="{book: quay}"),
        rule("no-figure", "{name: tail_index, window: 4}", "limit_below: 2", "number", applies_to="{book: quay}"),
        rule(
            "odd",
            "{name: expected_shortfall, method: volatility_scaled, confidence: 0.99, window: 4}",
            applies_to="{book: quay}",
        ),
    ]
    site = SmallSite(tmp_path / "site", rules(*lines))
    site.leave("instruments.csv", ["instrument,currency,calendar", "ALFA,EUR,XDUB"])
    site.prices({"ALFA": (10.0, 11.0, 9.0, 9.5, 10.0)})
    site.positions("quay,ALFA,1", "west,,", "east,,")
    site.navs("quay,200", "west,100", "east,100")
    with site.state() as (state, terms):
        checked = check_evening(state, terms, FRIDAY, next(iter(state.terms(terms).rounds)), NOW, tell=False)
        again = check_evening(state, terms, FRIDAY, next(iter(state.terms(terms).rounds)), NOW, tell=False)
        document = evening_document(state, checked)
        assert evening_document(state, again) == document  # as it was recorded
    text = json.dumps(document, allow_nan=False)
    found = {standing["rule"]: standing for standing in json.loads(text)["standings"]}

    width = 1.959963984540054 / np.sqrt(2 * 3)
    both = found["both"]
    assert both["low"] == pytest.approx(both["value"] * np.exp(-width))
    assert both["high"] == pytest.approx(both["value"] * np.exp(width))
    assert both["unbounded"] is None
    # By order, of four: that the second worst is as bad as the 99 % quantile has a probability of 0.06 %, the worst of
    # 3.9 %, too much for a lower bound; that none is, of 96 %, far too much for an upper one.
    assert (found["one"]["low"], found["one"]["high"]) == (pytest.approx(-10 * (10 / 9.5 - 1)), None)
    assert found["one"]["unbounded"] == "too few scenarios for a bound at this confidence"
    assert (found["none"]["low"], found["none"]["high"], found["none"]["unbounded"]) == (None, None, None)
    assert (found["no-figure"]["value"], found["no-figure"]["reason"]) == (None, LACK_TEXT[Lack.FEW_IN_TAIL])
    assert found["odd"]["detail"] == "scaled by exponentially weighted volatility, decay 0.94"
    worst = "less than one scenario lies in the tail: the worst one stands in for the mean"
    assert {"mark": "method", "note": worst} in found["odd"]["marks"]
