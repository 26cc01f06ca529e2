"""The digest of an evening's inputs: another one for whatever could change an answer, the same for all else."""

from __future__ import annotations

from collections.abc import Callable
from datetime import date

import pytest
from drop_site import FRIDAY, MONDAY, THURSDAY, WEEK, SmallSite, rule, rules

from monitor.feed.digest import digest_inputs

RULES = rules(rule("food", "{name: gross}", applies_to="{sector: food}"), rule("each", "{name: gross}", each="desk"))
INSTRUMENTS = [
    "instrument,currency,kind,multiplier,calendar,expiry,sector,desk,name",
    "ALFA,EUR,equity,1,XDUB,,food,one,Alfa",
    "BETA,USD,equity,1,XNYS,,steel,two,Beta",
    "GONE,EUR,equity,1,XDUB,,steel,two,Gone",
    "NOBODY,EUR,equity,1,XDUB,,steel,two,Nobody",
]
CLOSES = dict.fromkeys(("ALFA", "BETA", "GONE", "NOBODY"), (10.0, 10.5, 10.5, 10.75, 11.25))
RATES = {"EURUSD": (1.25,) * 5, "EURJPY": (160.0,) * 5, "EURCHF": (0.95,) * 5}


def write(site: SmallSite) -> None:
    site.leave("instruments.csv", INSTRUMENTS)
    site.prices(CLOSES)
    site.rates(RATES)
    site.navs("quay,1000", "west,1000", "east,1000")
    site.positions("quay,ALFA,10", "quay,GONE,3", "west,BETA,5", "east,,", day=THURSDAY)
    site.positions("quay,ALFA,10", "west,BETA,5", "east,,")


def closes(name: str, at: int, close: float | None) -> Callable[[SmallSite], None]:
    series = list(CLOSES[name])
    series[at] = close
    return lambda site: site.prices(CLOSES | {name: series})


def rates(pair: str, at: int, rate: float | None) -> Callable[[SmallSite], None]:
    series = list(RATES[pair])
    series[at] = rate
    return lambda site: site.rates(RATES | {pair: series})


def described(old: str, new: str) -> Callable[[SmallSite], None]:
    lines = [line.replace(old, new) for line in INSTRUMENTS]
    assert lines != INSTRUMENTS
    return lambda site: site.leave("instruments.csv", lines)


RELEVANT = {
    "a close tonight": closes("ALFA", 4, 11.26),
    "a close in the window": closes("BETA", 1, 10.51),
    "the close before the first return": closes("BETA", 0, 10.1),
    "no close tonight": closes("ALFA", 4, None),
    "no close in the window": closes("ALFA", 2, None),
    "a close of what was sold today": closes("GONE", 4, 11.0),
    "a rate tonight": rates("EURUSD", 4, 1.26),
    "a rate in the window": rates("EURUSD", 2, 1.26),
    "no rate in the window": rates("EURUSD", 2, None),
    "a position": lambda site: site.positions("quay,ALFA,11", "west,BETA,5", "east,,"),
    "another instrument": lambda site: site.positions("quay,GONE,10", "west,BETA,5", "east,,"),
    "a missing book": lambda site: site.positions("quay,ALFA,10", "west,BETA,5"),
    "a position before": lambda site: site.positions(
        "quay,ALFA,9", "quay,GONE,3", "west,BETA,5", "east,,", day=THURSDAY
    ),
    "a nav": lambda site: site.navs("quay,1001", "west,1000", "east,1000"),
    "no nav": lambda site: site.navs("quay,1000", "west,1000"),
    "an older nav": lambda site: site.leave(f"nav_{FRIDAY}.csv", ["book,nav,nav_date", f"quay,1000,{THURSDAY}"]),
    "a multiplier": described("BETA,USD,equity,1", "BETA,USD,equity,2"),
    "a currency": described("BETA,USD", "BETA,EUR"),
    "a kind": described("BETA,USD,equity", "BETA,USD,fund"),
    "a calendar": described("equity,1,XNYS", "equity,1,XTKS"),
    "a selected tag": described("steel,two,Beta", "food,two,Beta"),
    "a tag of each": described("steel,two,Beta", "steel,one,Beta"),
    "an instrument that is described no more": lambda site: site.leave("instruments.csv", INSTRUMENTS[:-3]),
    "a refused file": lambda site: site.leave(f"prices_{FRIDAY}.csv", "instrument,close\nALFA,x\n"),
    "a rule": lambda site: site.settle(RULES + rule("more", "{name: net}")),
    "a setting": lambda site: site.settle(RULES, nav_age=3),
}
IRRELEVANT = {
    "nothing": write,
    "the same written otherwise": lambda site: site.leave(
        f"prices_{FRIDAY}.csv", ["instrument,close,volume", *(f"{name},11.250,7" for name in sorted(CLOSES))]
    ),
    "a close of what nobody holds": closes("NOBODY", 4, 99.0),
    "a rate that nobody needs": rates("EURCHF", 4, 0.5),
    "a name": described("Beta", "Beta plc"),
    "a tag that no rule names": described("desk,name", "desk,nickname"),
    "another instrument described": lambda site: site.leave(
        "instruments.csv", [*INSTRUMENTS, "NEW,USD,fund,1,,,x,y,z"]
    ),
    "the lots of a position": lambda site: site.positions("quay,ALFA,4", "quay,ALFA,6", "west,BETA,5", "east,,"),
    "positions of an older evening": lambda site: site.positions("quay,ALFA,1", day=MONDAY),
    "a file of a later date": lambda site: site.positions("quay,ALFA,1", day=date(2026, 3, 9)),
    "closes before the window": lambda site: site.leave("history.csv", ["date,instrument,close", "2026-02-20,ALFA,1"]),
    "an outranked history": lambda site: site.leave(
        "history.csv", ["date,instrument,close", *(f"{day},ALFA,1" for day in WEEK)]
    ),
    "a file that is not ours": lambda site: site.leave("notes.txt", "hello"),
}


@pytest.fixture(scope="module")
def before(tmp_path_factory) -> str:
    site = SmallSite(tmp_path_factory.mktemp("before") / "site", RULES)
    write(site)
    return digest_inputs(site.world())


def digest_after(tmp_path, change: Callable[[SmallSite], None]) -> str:
    site = SmallSite(tmp_path / "site", RULES)
    write(site)
    with site.state():
        pass
    change(site)
    return digest_inputs(site.world())


@pytest.mark.parametrize("what", RELEVANT)
def test_whatever_could_change_an_answer_changes_the_digest(tmp_path, before, what):
    assert digest_after(tmp_path, RELEVANT[what]) != before


@pytest.mark.parametrize("what", IRRELEVANT)
def test_whatever_cannot_change_an_answer_leaves_the_digest(tmp_path, before, what):
    assert digest_after(tmp_path, IRRELEVANT[what]) == before


def test_a_round_that_does_not_complete_the_date_rests_on_its_own_books_alone(tmp_path):
    more = """\
rounds:
  - {id: asia, books: [east], at: "10:00", files_due_by: "09:00", give_up_at: "11:00"}
  - {id: later, books: [quay, west], at: "21:00", files_due_by: "20:00", give_up_at: "22:00"}
"""
    site = SmallSite(tmp_path / "site", RULES, more=more)
    write(site)
    asia, later = (digest_inputs(site.world(round_id=name)) for name in ("asia", "later"))

    site.positions("quay,ALFA,11", "west,BETA,5", "east,,")
    site.navs("quay,1", "west,1000", "east,1000")

    assert digest_inputs(site.world(round_id="asia")) == asia
    assert digest_inputs(site.world(round_id="later")) != later
