"""The register as a table: a fold of the ledger's entries about excesses."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator
from datetime import date
from typing import Any

from monitor.excesses.register import Excess
from monitor.facts import Entry, ExcessChanged, ExcessCured, ExcessOpened, ExcessVoided
from monitor.words import CuredBy, ExcessState, Side, Subject, SubjectKind, Unit

TABLES = """
CREATE TABLE excess (
    id TEXT PRIMARY KEY, number INTEGER NOT NULL, seq INTEGER NOT NULL, rule TEXT NOT NULL, subject TEXT NOT NULL,
    kind TEXT NOT NULL, book TEXT, side TEXT NOT NULL, unit TEXT NOT NULL, currency TEXT, owner TEXT,
    state TEXT NOT NULL, opened_on TEXT NOT NULL, opened_value REAL NOT NULL,
    last_on TEXT NOT NULL, last_value REAL NOT NULL,
    worst_on TEXT NOT NULL, worst_value REAL NOT NULL, worst_distance REAL NOT NULL, level REAL NOT NULL,
    cured_on TEXT, cured_by TEXT, cured_value REAL, void_reason TEXT
) STRICT;
"""
COLUMNS = (
    "id, rule, subject, kind, book, side, unit, currency, owner, state, opened_on, opened_value, last_on, last_value,"
    " worst_on, worst_value, worst_distance, level, cured_on, cured_by, cured_value, void_reason"
)


def record(index: sqlite3.Connection, entry: Entry) -> None:
    """Fold one ledger entry into the table."""
    match entry.fact:
        case ExcessOpened() as fact:
            day = fact.day.isoformat()
            index.execute(
                "INSERT INTO excess (id, number, seq, rule, subject, kind, book, side, unit, currency, owner, state,"
                " opened_on, opened_value, last_on, last_value, worst_on, worst_value, worst_distance, level)"
                " VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, 'open', ?, ?, ?, ?, ?, ?, ?, ?)",
                (
                    fact.excess,
                    number_of(fact.excess),
                    entry.seq,
                    fact.rule,
                    fact.subject.key,
                    fact.subject.kind,
                    fact.subject.book,
                    fact.side,
                    fact.unit,
                    fact.currency,
                    fact.owner,
                    *(day, fact.value) * 3,
                    fact.distance,
                    fact.level,
                ),
            )
        case ExcessChanged() as fact:
            index.execute(
                "UPDATE excess SET state = ?, side = ?, unit = ?, currency = ?, owner = ?, opened_on = ?,"
                " opened_value = ?, last_on = ?, last_value = ?, level = ?, worst_on = ?, worst_value = ?,"
                " worst_distance = ?, cured_on = NULL, cured_by = NULL, cured_value = NULL WHERE id = ?",
                (
                    fact.state,
                    fact.side,
                    fact.unit,
                    fact.currency,
                    fact.owner,
                    fact.opened_on.isoformat(),
                    fact.opened_value,
                    fact.last_on.isoformat(),
                    fact.last_value,
                    fact.level,
                    fact.worst_on.isoformat(),
                    fact.worst_value,
                    fact.worst_distance,
                    fact.excess,
                ),
            )
        case ExcessCured() as fact:
            index.execute(
                "UPDATE excess SET state = 'cured', cured_on = ?, cured_by = ?, cured_value = ? WHERE id = ?",
                (fact.day.isoformat(), fact.by, fact.value, fact.excess),
            )
        case ExcessVoided() as fact:
            index.execute("UPDATE excess SET state = 'void', void_reason = ? WHERE id = ?", (fact.reason, fact.excess))


def load(index: sqlite3.Connection) -> tuple[Excess, ...]:
    """The whole register, in the order of opening."""
    rows = index.execute(f"SELECT {COLUMNS} FROM excess ORDER BY number")
    return tuple(_excess(row) for row in rows)


def new_ids(index: sqlite3.Connection) -> Iterator[str]:
    """Ids for excesses to be opened: e1, e2, ... after the largest on record."""
    (last,) = index.execute("SELECT COALESCE(MAX(number), 0) FROM excess").fetchone()
    while True:
        last += 1
        yield f"e{last}"


def recorded_at(index: sqlite3.Connection, excess: str) -> int:
    """The number of the entry that opened an excess."""
    (seq,) = index.execute("SELECT seq FROM excess WHERE id = ?", (excess,)).fetchone()
    return int(seq)


def number_of(excess: str) -> int:
    return int(excess.removeprefix("e"))


def _excess(row: tuple[Any, ...]) -> Excess:
    (id_, rule, subject, kind, book, side, unit, currency, owner, state, opened_on, opened_value, *rest) = row
    last_on, last_value, worst_on, worst_value, worst_distance, level, cured_on, cured_by, cured_value, void = rest
    return Excess(
        id=id_,
        rule=rule,
        subject=Subject(subject, SubjectKind(kind), book),
        side=Side(side),
        unit=Unit(unit),
        currency=currency,
        owner=owner,
        state=ExcessState(state),
        opened_on=date.fromisoformat(opened_on),
        opened_value=opened_value,
        last_on=date.fromisoformat(last_on),
        last_value=last_value,
        worst_on=date.fromisoformat(worst_on),
        worst_value=worst_value,
        worst_distance=worst_distance,
        level=level,
        cured_on=date.fromisoformat(cured_on) if cured_on else None,
        cured_by=CuredBy(cured_by) if cured_by else None,
        cured_value=cured_value,
        void_reason=void,
    )
