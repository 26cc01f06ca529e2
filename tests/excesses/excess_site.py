"""Two small books on real calendars, run by the program's own run of evenings. Invented.

Quay is in EUR on Dublin's calendar, East in JPY on Tokyo's. All closes are 1 EUR or 1 JPY, so that the quantity of a
position is its exposure; one EUR costs 100 JPY. A share that nobody holds makes each day's files differ. Quay's gross
limit is 100, a position's 80, an issuer's 90 in the whole firm, East's 5,000 JPY.
"""

from __future__ import annotations

import json
import shutil
from collections.abc import Mapping
from contextlib import AbstractContextManager
from dataclasses import dataclass
from datetime import UTC, date, datetime, time, timedelta
from pathlib import Path
from typing import Any

from monitor import evenings
from monitor.evening import Checked
from monitor.excesses import store
from monitor.excesses.register import Excess
from monitor.run import Due, check_in_order, evenings_between, finish, open_for_checking, prepare
from monitor.settle import ExcessFact
from monitor.site import open_site
from monitor.state import State, open_state

FIRST = date(2026, 4, 20)  # a Monday; Tokyo is closed on 2026-04-29 and on 2026-05-04 to 06, Dublin on 2026-05-04
HISTORY = [FIRST - timedelta(days=days) for days in range(60, 0, -1)]
ROUNDS = """\
rounds:
  - {id: asia, books: [east], time_zone: Asia/Tokyo, at: "18:00", files_due_by: "17:30", give_up_at: "20:00"}
  - {id: europe, books: [quay], at: "19:15", files_due_by: "19:00", give_up_at: "22:00"}
"""
SITE = """\
site: Small Trust
base_currency: EUR
calendar: XDUB
time_zone: Europe/Dublin
books:
  - {id: quay, name: Quay, currency: EUR, calendar: XDUB}
  - {id: east, name: East, currency: JPY, calendar: XTKS}
people:
  - {id: risk, name: Risk desk, address: risk@small.example}
  - {id: board, name: The board, address: board@small.example}
channels:
  - {id: tray, kind: folder, path: tray}
  - {id: shelf, kind: folder, path: shelf}
tell:
  risk-desk: {people: [risk], channels: [tray]}
  board: {people: [board], channels: [shelf]}
defaults: {window: 10}
nightly_note: risk-desk
"""
QUAY_GROSS = """\
  - id: quay-gross
    title: Gross exposure of Quay
    applies_to: {book: quay}
    measure: {name: gross}
    limit: 100
    unit: amount
    owner: risk
    tell: [board]
"""
RULES = f"""\
rules:
{QUAY_GROSS}\
  - id: east-gross
    title: Gross exposure of East
    applies_to: {{book: east}}
    measure: {{name: gross}}
    limit: 5000
    unit: amount
    tell: [risk-desk]
  - id: line
    title: One position
    applies_to: {{book: quay}}
    each: position
    measure: {{name: gross}}
    limit: 80
    unit: amount
    tell: [risk-desk]
  - id: issuer
    title: One issuer in the whole firm
    each: issuer
    measure: {{name: gross}}
    limit: 90
    unit: amount
    tell: [risk-desk]
"""
SHARES = {"KELP": "EUR", "PIER": "EUR", "SAND": "JPY", "TORII": "JPY"}  # the issuer is the share's name in small


def instruments(*left_out: str) -> str:
    rows = [
        f"{name},{currency},equity,{name.lower()},{'XTKS' if currency == 'JPY' else 'XDUB'}"
        for name, currency in SHARES.items()
        if name not in left_out
    ]
    return "\n".join(["instrument,currency,kind,issuer,calendar", *rows, ""])


def at_nine(on: date) -> datetime:
    return datetime.combine(on, time(21), UTC)


@dataclass
class Small:
    """One site on disk. Each check is made at nine in the evening of its date, unless another moment is given."""

    folder: Path

    @property
    def file(self) -> Path:
        return self.folder / "site.yaml"

    def drop(self, name: str, text: str) -> None:
        (self.folder / "drop").mkdir(exist_ok=True)
        (self.folder / "drop" / name).write_text(text)

    def day(self, on: date, held: Mapping[str, Mapping[str, float]], prices: tuple[str, ...] = tuple(SHARES)) -> None:
        """Leave the files of a date in the drop. held: quantity by instrument, by book; an empty book is flat."""
        rows = ["book,instrument,quantity"]
        for book, positions in held.items():
            rows += [f"{book},{name},{quantity}" for name, quantity in positions.items()] or [f"{book},,"]
        self.drop(f"positions_{on}.csv", "\n".join([*rows, ""]))
        closes = [*(f"{name},1" for name in prices), f"CLOCK,{on.toordinal()}"]
        self.drop(f"prices_{on}.csv", "\n".join(["instrument,close", *closes, ""]))
        self.drop(f"fx_{on}.csv", f"pair,rate\nEURJPY,100\nEURXOF,{on.toordinal()}\n")

    def quay(self, on: date, kelp: float, east: float = 100.0) -> None:
        """The files of a date on which Quay holds so much Kelp, and East so much Sand."""
        self.day(on, {"quay": {"KELP": kelp} if kelp else {}, "east": {"SAND": east} if east else {}})

    def check(
        self, first: date, last: date | None = None, round_: str | None = None, now: datetime | None = None
    ) -> list[Checked]:
        now = now or at_nine(last or first)
        with open_for_checking(open_site(self.file)) as state:
            terms = prepare(state, now)
            due = evenings_between(state, terms, first, last or first, round_)
            checked = list(check_in_order(state, terms, due, now))
            finish(state, terms, checked[-1] if checked else None, now)
        return checked

    def check_and_die(self, due: list[Due], after: int, now: datetime) -> None:
        """Check some evenings and stop after so many, as a run does that is cut off."""
        with open_for_checking(open_site(self.file)) as state:
            terms = prepare(state, now)
            each = check_in_order(state, terms, due, now)
            for _ in range(after):
                next(each)

    def opened(self) -> AbstractContextManager[State]:
        return open_state(open_site(self.file))

    def register(self) -> dict[str, Excess]:
        with self.opened() as state:
            return {excess.id: excess for excess in store.load(state.index())}

    def alive(self) -> dict[tuple[str, str], Excess]:
        return {(own.rule, own.subject.name): own for own in self.register().values() if own.alive}

    def editions(self) -> list[evenings.CheckedEvening]:
        with self.opened() as state:
            return evenings.all_editions(state.index())

    def entries(self) -> list[Any]:
        with self.opened() as state:
            return [entry.fact for entry in state.ledger.entries()]

    def changes(self) -> list[Any]:
        return [fact for fact in self.entries() if isinstance(fact, ExcessFact)]

    def notices(self, topic: str | None = None, tray: str = "tray") -> list[dict[str, Any]]:
        """The data of the notices that lie in a folder channel, by the entry that they follow."""
        events = [json.loads(path.read_text()) for path in (self.folder / tray).glob("*.json")]
        found = [event["data"] for event in events]
        found.sort(key=lambda data: data["record"]["seq"])
        return [data for data in found if topic in (None, data["topic"])]


def make(folder: Path, rounds: str = "", rules: str = RULES) -> Small:
    (folder / "rules").mkdir(parents=True)
    (folder / "site.yaml").write_text(SITE + rounds)
    (folder / "rules" / "rules.yaml").write_text(rules)
    small = Small(folder)
    small.drop("instruments.csv", instruments())
    closes = [f"{day},{name},1" for day in HISTORY for name in SHARES]
    small.drop("history.csv", "\n".join(["date,instrument,close", *closes, ""]))
    rates = [f"{day},EURJPY,100" for day in HISTORY]
    small.drop("history_fx.csv", "\n".join(["date,pair,rate", *rates, ""]))
    return small


def copied(template: Small, folder: Path, rounds: str = "") -> Small:
    """A site of its own that begins with the template's sessions, which take long to load."""
    shutil.copytree(template.folder, folder)
    (folder / "site.yaml").write_text(SITE + rounds)
    return Small(folder)
