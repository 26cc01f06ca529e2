"""The evenings on record as a table: which dates were checked, in which editions, with what outcome."""

from __future__ import annotations

import json
import sqlite3
from dataclasses import dataclass
from datetime import date
from typing import Any

from monitor.facts import Entry, EveningChecked, EveningMissed
from monitor.words import Outcome, Recipe

TABLES = """
CREATE TABLE evening (
    seq INTEGER PRIMARY KEY, hash TEXT NOT NULL, at TEXT NOT NULL, day TEXT NOT NULL, round TEXT NOT NULL,
    edition INTEGER NOT NULL, recipe TEXT NOT NULL, inputs TEXT NOT NULL, sessions TEXT NOT NULL,
    completes INTEGER NOT NULL, outcome TEXT NOT NULL, counts TEXT NOT NULL, results TEXT NOT NULL,
    told INTEGER NOT NULL
) STRICT;
CREATE INDEX evening_day ON evening (day, round, edition);
CREATE TABLE book_line (
    seq INTEGER NOT NULL, subject TEXT NOT NULL, currency TEXT NOT NULL, value_at_risk REAL, pnl REAL,
    PRIMARY KEY (seq, subject)
) STRICT, WITHOUT ROWID;
CREATE TABLE missed (seq INTEGER PRIMARY KEY, day TEXT NOT NULL, round TEXT NOT NULL) STRICT;
"""


@dataclass(frozen=True)
class CheckedEvening:
    """One edition of an evening, as its ledger entry says. at: UTC text."""

    seq: int
    hash: str
    at: str
    edition: int
    recipe: Recipe
    inputs: str
    sessions: str
    completes: bool
    outcome: Outcome
    counts: dict[str, int]
    results: str
    told: bool


def record(index: sqlite3.Connection, entry: Entry) -> None:
    """Fold one ledger entry into the tables."""
    match entry.fact:
        case EveningChecked() as fact:
            index.execute(
                "INSERT INTO evening VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
                (
                    entry.seq,
                    entry.hash,
                    entry.at,
                    fact.recipe.date.isoformat(),
                    fact.recipe.round,
                    fact.edition,
                    _recipe_text(fact.recipe),
                    fact.inputs,
                    fact.sessions,
                    fact.completes,
                    fact.outcome,
                    json.dumps(fact.counts),
                    fact.results,
                    fact.told,
                ),
            )
            index.executemany(
                "INSERT INTO book_line VALUES (?, ?, ?, ?, ?)",
                [(entry.seq, own.subject, own.currency, own.value_at_risk, own.pnl) for own in fact.books],
            )
        case EveningMissed() as fact:
            index.execute("INSERT INTO missed VALUES (?, ?, ?)", (entry.seq, fact.day.isoformat(), fact.round))


def latest(index: sqlite3.Connection, day: date, round_id: str) -> CheckedEvening | None:
    """The newest edition of an evening."""
    return _first(index, "WHERE day = ? AND round = ? ORDER BY edition DESC", (day.isoformat(), round_id))


def all_editions(index: sqlite3.Connection) -> list[CheckedEvening]:
    """Every edition of every evening, in the order they were recorded."""
    return _rows(index, "ORDER BY seq", ())


def latest_of_all(index: sqlite3.Connection) -> list[CheckedEvening]:
    """The newest edition of each evening, by date and then in the order of checking."""
    return _rows(
        index,
        "AS e WHERE edition = (SELECT MAX(edition) FROM evening AS o WHERE o.day = e.day AND o.round = e.round)"
        " ORDER BY day, seq",
        (),
    )


def newest_at(index: sqlite3.Connection, seq: int) -> CheckedEvening:
    """The evening whose transaction recorded the entry of a number."""
    return _rows(index, "WHERE seq <= ? ORDER BY seq DESC LIMIT 1", (seq,))[0]


def before(index: sqlite3.Connection, day: date, round_id: str) -> CheckedEvening | None:
    """The newest edition of the evening before a date, of the same round."""
    return _first(index, "WHERE day < ? AND round = ? ORDER BY day DESC, edition DESC", (day.isoformat(), round_id))


def after(index: sqlite3.Connection, day: date, round_id: str) -> CheckedEvening | None:
    """The newest edition of the evening after a date, of the same round."""
    return _first(index, "WHERE day > ? AND round = ? ORDER BY day, edition DESC", (day.isoformat(), round_id))


def any_after(index: sqlite3.Connection, day: date) -> bool:
    """Whether an evening of a later date is on record."""
    return index.execute("SELECT 1 FROM evening WHERE day > ? LIMIT 1", (day.isoformat(),)).fetchone() is not None


def newest_day(index: sqlite3.Connection) -> date | None:
    """The newest business date that was checked or given up, of any round: the day to which excesses have aged."""
    (found,) = index.execute(
        "SELECT MAX(day) FROM (SELECT day FROM evening UNION ALL SELECT day FROM missed)"
    ).fetchone()
    return date.fromisoformat(found) if found else None


def book_lines(
    index: sqlite3.Connection, subject: str, until: date
) -> list[tuple[date, str, float | None, float | None]]:
    """Date, currency, VaR and P&L of a book or the firm in the latest edition of each evening up to a date, in order.

    When several rounds of a date tell of the subject, the one checked last counts.
    """
    rows = index.execute(
        "SELECT day, currency, value_at_risk, pnl, MAX(e.seq) FROM evening AS e JOIN book_line AS b ON b.seq = e.seq"
        " WHERE subject = ? AND day <= ? AND edition = (SELECT MAX(edition) FROM evening AS o WHERE o.day = e.day"
        " AND o.round = e.round) GROUP BY day ORDER BY day",
        (subject, until.isoformat()),
    )
    return [(date.fromisoformat(day), currency, var, pnl) for day, currency, var, pnl, _ in rows]


def untold(index: sqlite3.Connection, after: int) -> list[CheckedEvening]:
    """The evenings recorded after a sequence that queued no notices of their own."""
    return _rows(index, "WHERE told = 0 AND seq > ? ORDER BY seq", (after,))


def newest(index: sqlite3.Connection, round_id: str) -> CheckedEvening | None:
    """The newest edition of a round's newest evening."""
    return _first(index, "WHERE round = ? ORDER BY day DESC, edition DESC", (round_id,))


def days_done(index: sqlite3.Connection, round_id: str) -> set[date]:
    """The dates of a round that were checked or given up."""
    rows = index.execute(
        "SELECT day FROM evening WHERE round = ? UNION SELECT day FROM missed WHERE round = ?", (round_id, round_id)
    )
    return {date.fromisoformat(day) for (day,) in rows}


def _first(index: sqlite3.Connection, condition: str, values: tuple[Any, ...]) -> CheckedEvening | None:
    found = _rows(index, f"{condition} LIMIT 1", values)
    return found[0] if found else None


def _rows(index: sqlite3.Connection, condition: str, values: tuple[Any, ...]) -> list[CheckedEvening]:
    rows = index.execute(
        "SELECT seq, hash, at, edition, recipe, inputs, sessions, completes, outcome, counts, results, told"
        f" FROM evening {condition}",
        values,
    )
    return [
        CheckedEvening(
            seq=seq,
            hash=hash_,
            at=at,
            edition=edition,
            recipe=_recipe(recipe),
            inputs=inputs,
            sessions=sessions,
            completes=bool(completes),
            outcome=Outcome(outcome),
            counts=json.loads(counts),
            results=results,
            told=bool(told),
        )
        for seq, hash_, at, edition, recipe, inputs, sessions, completes, outcome, counts, results, told in rows
    ]


def _recipe_text(recipe: Recipe) -> str:
    days = (recipe.date, recipe.positions_on, recipe.prices_on, recipe.window_to)
    return json.dumps([*map(str, days), recipe.round, recipe.rules, recipe.known])


def _recipe(text: str) -> Recipe:
    *days, round_id, rules, known = json.loads(text)
    day, positions_on, prices_on, window_to = map(date.fromisoformat, days)
    return Recipe(day, round_id, positions_on, prices_on, window_to, rules, known)
