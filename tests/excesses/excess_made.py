"""Made-up answers and evenings for the fold, and a register kept both in memory and from ledger entries."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Iterable
from dataclasses import replace
from datetime import UTC, date, datetime, timedelta
from itertools import count
from typing import Any

from monitor import facts
from monitor.excesses import store
from monitor.excesses.register import Excess
from monitor.excesses.step import Evening, Held, step
from monitor.facts import Entry
from monitor.settle import Settled, settle_again, settle_newest
from monitor.words import ExcessState, Side, Standing, Subject, SubjectKind, Unit

FIRM = Subject("firm", SubjectKind.FIRM, None)
QUAY = Subject("book:quay", SubjectKind.BOOK, "quay")
KELP = Subject("position:quay/KELP", SubjectKind.POSITION, "quay")
ISSUER = Subject("group:issuer=Kelp", SubjectKind.GROUP, None)
IN_QUAY = Subject("group:book=quay; sector=sea", SubjectKind.GROUP, "quay")
START = date(2026, 3, 2)


def day(number: int) -> date:
    return START + timedelta(days=number)


def held(value: float | None, subject: Subject = QUAY, limit: float = 100.0, **changes: Any) -> Held:
    """An answer of the rule `gross`: over above its limit, unmeasured without a value."""
    distance = None if value is None else value - limit
    standing = Standing.UNMEASURED if distance is None else Standing.OVER if distance > 0 else Standing.WITHIN
    made = Held(
        rule="gross",
        subject=subject,
        standing=standing,
        doubtful=value is None,
        side=Side.ABOVE,
        unit=Unit.AMOUNT,
        currency="EUR",
        value=value,
        distance=distance,
        level=limit,
        owner="m.osei",
    )
    return replace(made, **changes)


def evening(on: date, *answers: Held, **changes: Any) -> Evening:
    """An evening of the books quay and east, on which everything was known."""
    made = Evening(
        day=on,
        held=answers,
        rules=frozenset({"gross", "net"}),
        site_books=frozenset({"quay", "east"}),
        known=frozenset({"quay", "east"}),
        whole=frozenset({"quay", "east", None}),
    )
    return replace(made, **changes)


def fold(evenings: Iterable[Evening]) -> tuple[Excess, ...]:
    """The register by nothing but one step after the other."""
    register: tuple[Excess, ...] = ()
    ids = (f"x{number}" for number in count(1))
    for each in evenings:
        register = step(register, each, ids)
    return register


class Record:
    """Evenings settled as the program does, each fact written as JSON and folded into the table from what was read.

    latest: the latest edition of each evening by date. believed: ids of the excesses that are alive for somebody who
    goes by what was told alone.
    """

    def __init__(self) -> None:
        self.index = sqlite3.connect(":memory:")
        for statement in store.TABLES.split(";"):
            self.index.execute(statement)
        self.seq = 0
        self.latest: dict[date, Evening] = {}
        self.believed: set[str] = set()
        self.ids: list[str] = []

    def settle(self, tonight: Evening) -> Settled:
        ids = store.new_ids(self.index)
        newest = not self.latest or tonight.day > max(self.latest)
        self.latest[tonight.day] = tonight
        if newest:
            settled = settle_newest(self.register(), tonight, ids)
        else:
            in_order = [self.latest[on] for on in sorted(self.latest)]
            settled = settle_again(self.register(), in_order, tonight.day, ids)
        for fact in settled.facts:
            self._append(fact)
        self._tell(settled)
        return settled

    def register(self) -> tuple[Excess, ...]:
        return store.load(self.index)

    def alive(self) -> tuple[Excess, ...]:
        return tuple(excess for excess in self.register() if excess.alive)

    def void(self) -> tuple[Excess, ...]:
        return tuple(excess for excess in self.register() if excess.state is ExcessState.VOID)

    def _append(self, fact: facts.Fact) -> None:
        self.seq += 1
        body = json.loads(json.dumps(facts.encode(fact)))
        read = facts.decode(fact.KIND, fact.V, body)
        at = datetime(2026, 3, 2, tzinfo=UTC).isoformat()
        store.record(self.index, Entry(self.seq, at, "", "", read))
        if isinstance(read, facts.ExcessOpened):
            self.ids.append(read.excess)

    def _tell(self, settled: Settled) -> None:
        self.believed |= {excess.id for excess in (*settled.opened, *settled.reopened) if excess.alive}
        self.believed -= {excess.id for excess in (*settled.cured, *settled.voided)}


def plain(register: Iterable[Excess]) -> list[Excess]:
    """What is comparable between two registers: all but ids, without the void ones."""
    found = [replace(excess, id="") for excess in register if excess.state is not ExcessState.VOID]
    return sorted(found, key=lambda excess: (excess.rule, excess.subject.key, excess.opened_on))
