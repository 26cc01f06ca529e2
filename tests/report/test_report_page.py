"""The page of an evening, read as HTML: what it may load, how it is built, what it says, and extremes."""

from __future__ import annotations

import base64
import hashlib
import os
import re
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from reading import Reading, read
from report_scene import DAY, FIRM, RULES, answer, book, evening, excess, figures_of, position, rule, standings

from monitor.notices.story import CAUTIONS
from monitor.report.draw import draw
from monitor.report.page import AgedExcess, Page
from monitor.report.rows import MOST_WITHIN
from monitor.words import Mark, MarkKind, Outcome, Standing, Unit
from monitor.world import How, Standings, Unmeasured

NOTHING = Standings((), (), (), (), ())


@pytest.fixture(scope="module")
def drawn() -> bytes:
    return draw(evening())


@pytest.fixture(scope="module")
def reading(drawn: bytes) -> Reading:
    return read(drawn)


def bare(found: Standings) -> Page:
    """A first evening: nothing before it, no excess, no series."""
    return replace(evening(), standings=found, before=None, alive=(), opened=(), cured=(), series=())


def test_the_page_runs_nothing_and_loads_nothing_from_outside(drawn: bytes, reading: Reading) -> None:
    assert not reading.all("script")
    assert not re.search(rb"https?://|javascript:|@import|url\(", drawn.replace(b"http://www.w3.org/", b""))
    for address in reading.loads:
        assert address.startswith(("data:", "#")) or re.fullmatch(r"[\w.-]+\.html", address), address[:80]
    for _, attributes in reading.tags:
        assert "style" not in attributes, "the policy would block it"
        assert not [name for name in attributes if name.startswith("on")]


def test_the_policy_names_the_style_by_its_hash(drawn: bytes, reading: Reading) -> None:
    policy = next(tag["content"] for tag in reading.all("meta") if tag.get("http-equiv") == "Content-Security-Policy")
    style = re.findall(rb"<style>(.*?)</style>", drawn, re.DOTALL)
    assert len(style) == 1
    digest = base64.b64encode(hashlib.sha256(style[0]).digest()).decode()
    parts = dict(part.strip().split(" ", 1) for part in (policy or "").split(";"))
    assert parts == {
        "default-src": "'none'",
        "style-src": f"'sha256-{digest}'",
        "img-src": "data:",
        "base-uri": "'none'",
        "form-action": "'none'",
    }


def test_it_is_built_so_that_everybody_can_read_it(reading: Reading) -> None:
    assert reading.all("html")[0]["lang"] == "en"
    assert len(reading.all("h1")) == 1
    assert all(head.get("scope") in ("col", "row", "rowgroup") for head in reading.all("th"))
    assert len(reading.all("caption")) == len(reading.all("table")) >= 5
    assert all(image.get("alt") for image in reading.all("img"))
    assert all(drawing.get("aria-hidden") == "true" or drawing.get("aria-label") for drawing in reading.all("svg"))
    labels = [tag["aria-labelledby"] for _, tag in reading.tags if "aria-labelledby" in tag]
    names = [tag["id"] for _, tag in reading.tags if "id" in tag]
    assert labels and set(labels) <= set(names) and len(set(names)) == len(names)
    assert {address[1:] for address in reading.loads if address.startswith("#")} <= set(names)


def test_the_same_evening_gives_the_same_bytes(drawn: bytes) -> None:
    assert draw(evening()) == drawn
    here = Path(__file__).parent
    program = "import hashlib, report_scene as s; from monitor.report.draw import draw"
    program += "; print(hashlib.sha256(draw(s.evening())).hexdigest())"
    path = os.pathsep.join([str(here), str(here.parents[1])])
    found = subprocess.run(
        [sys.executable, "-c", program],
        env={**os.environ, "PYTHONPATH": path, "PYTHONHASHSEED": "77", "TZ": "Asia/Tokyo"},
        capture_output=True,
        text=True,
        check=True,
    )
    assert found.stdout.strip() == hashlib.sha256(drawn).hexdigest()


def test_it_says_what_happened_and_what_it_rests_on(reading: Reading) -> None:
    said = reading.text
    for part in (
        "2026-03-12 · round europe · edition 1 · checked 2026-03-12 19:15 Europe/Dublin",
        "Lacking tonight nav of cove-lane: nothing came by 19:00",
        "Excess opened 1 One-day 99 % VaR of the whole firm (the firm): EUR 2,004,120, allowed at most EUR 2,000,000",
        "Excess cured 1 Gross exposure at most twice the net assets (far-east), opened on 2026-03-09: its figure came",
        "1,301,000 to 1,878,000",
        "value at risk (VaR), historical, 99 %, 1 day, 500 sessions, n = 487 short: 487 of 500 sessions",
        "212 of 500 sessions have a return; at least 95 % are needed",
        "carried: close of 2026-03-10, two sessions old",
        "Day 17, open opened 2026-02-18",
        "no NAV since 2026-03-06",
        "of 2026-03-11",
        "no close since 2026-02-27 and its market was open cove-lane/VENN, cove-lane/ZENN",
        "far-east/CASH-JPY, cove-lane/CASH-GBP",
        "4be1" * 16,
        "9f2c" * 16,
        "duskcheck ledger verify",
        *CAUTIONS,
    ):
        assert part in said, part


def test_standings_come_worst_first(reading: Reading) -> None:
    said = reading.text
    table = said[said.index("Standings by utilisation") : said.index("Excesses Excesses that")]
    places = [
        table.index(word) for word in ("Over 2", "123.4 %", "100.2 %", "Near 2", "92.0 %", "Unmeasured 1", "Within")
    ]
    assert places == sorted(places)


def test_what_is_within_may_be_left_out_but_is_counted_and_nothing_else_is() -> None:
    many = []
    for place in range(5000):
        value = (1.2, 0.95, None, 0.5)[place % 4]
        many.append(answer("nq-var", position("b", f"I{place:04d}"), value, 0.9, 1.0, unit=Unit.RATIO, reason="why"))
    reading = read(draw(bare(Standings(tuple(many), (), (), (), ()))))
    shown = re.findall(r"b/I(\d{4})", reading.text[reading.text.index("Standings by utilisation") :])
    by_kind = [sum(int(number) % 4 == kind for number in shown) for kind in range(4)]
    assert by_kind == [1250, 1250, 1250, MOST_WITHIN]
    assert f"{1250 - MOST_WITHIN:,} more within" in reading.text
    assert "duskcheck check --date 2026-03-12 --round europe --json" in reading.text


def test_as_many_within_as_fit_are_all_shown() -> None:
    few = tuple(answer("nq-var", position("b", f"I{n}"), 0.5, 0.9, 1.0, unit=Unit.RATIO) for n in range(MOST_WITHIN))
    assert "more within" not in read(draw(bare(Standings(few, (), (), (), ())))).text


def test_an_empty_evening_says_so() -> None:
    said = read(draw(bare(NOTHING))).text
    for part in ("No rule was asked tonight", "no earlier evening", "No excess is open", "No book was checked"):
        assert part in said


def test_a_figure_that_is_missing_is_shown_as_missing() -> None:
    none = replace(
        figures_of(FIRM, "EUR", 1e6), gross=None, net=None, nav=None, nav_on=None, value_at_risk=None,
        expected_shortfall=None, pnl=None, n=None, how=How(), reasons=("no positions came",),
    )  # fmt: skip
    unheld = replace(answer("nq-var", FIRM, 1.0, None, None, how=How(), n=None), standing=Standing.WITHIN)
    said = read(draw(bare(Standings((unheld,), (none,), (), (), ())))).text
    assert "– – – – – –" in said and "no positions came" in said
    assert "None" not in said and "nan" not in said.split()


def test_a_rule_that_is_no_longer_known_is_shown_by_its_id() -> None:
    page = replace(evening(), rules={})
    assert "nq-var (north-quay)" in read(draw(page)).text


def test_what_stands_over_never_reads_as_at_its_limit() -> None:
    close = answer("nq-var", FIRM, 1_250_000.0004, 1_000_000, 1_250_000, currency="EUR")
    assert close.standing is Standing.OVER
    said = read(draw(bare(Standings((close,), (), (), (), ())))).text
    assert "EUR 1,250,000.0004" in said and "100.0 %" not in said.replace("limit, 100 %", "")


def hostile(name: str) -> Page:
    """An evening in which every text that comes from outside is `name`."""
    about = replace(book("b"), key=f"book:{name}")
    bad = answer("r", about, 2.0, 0.9, 1.0, unit=Unit.RATIO, marks=(Mark(MarkKind.CARRIED, name),), reason=name)
    lost = answer(name, about, None, 0.9, 1.0, unit=Unit.RATIO, reason=name)
    held = replace(excess(1, "r", about, DAY, 2.0, 1.0, Unit.RATIO), owner=name, id=name)
    figures = replace(figures_of(about, "EUR", 1e6), reasons=(name,))
    found = Standings((bad, lost), (figures,), (Unmeasured(about, name),), (about,), (name,))
    series = replace(evening().series[0], subject=about)
    recipe = replace(evening().recipe, rules=name)
    return replace(
        evening(), site=name, recipe=recipe, hash=name, checked_at=name, standings=found, opened=(held,), cured=(held,),
        alive=(AgedExcess(held, 3),), rules={"r": rule("r", name)}, series=(series,),
    )  # fmt: skip


@settings(max_examples=10, deadline=None)
@given(st.text(st.characters(exclude_categories=("Cs", "Cc", "Zs", "Zl", "Zp", "Co", "Cn")), min_size=1, max_size=60))
def test_any_name_comes_out_as_the_text_it_is(name: str) -> None:
    bold = f"<b onclick='x'>&amp;{name}</b><script>\"{{{{ 7*7 }}}}"
    page = draw(hostile(bold))
    reading = read(page)
    assert not reading.all("script") and not reading.all("b")
    assert reading.text.count(" ".join(bold.split())) >= 10


def test_huge_names_are_kept_whole_in_tables_and_short_in_sentences() -> None:
    name = "x" * 20_000
    reading = read(draw(hostile(name)))
    assert name in reading.text
    heading = "".join(data for tag, data in reading.texts if tag == "h1")
    assert len(heading) < 400 and "…" in heading


def test_the_scene_is_what_it_claims_to_be() -> None:
    found = standings()
    assert found.outcome is Outcome.INCOMPLETE
    assert found.counts() == {"within": 34, "near": 2, "over": 2, "unmeasured": 1}
    assert {made.rule for made in found.answers} <= set(RULES)
