"""What a site keeps: its ledger, archive, index and history, opened together. Three files and a folder."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import date
from functools import partial

from monitor import evenings
from monitor.excesses import store
from monitor.facts import Entry, RulesAdopted
from monitor.feed import calendars, known
from monitor.feed.build import Sources
from monitor.feed.calendars import Sessions
from monitor.feed.history import History
from monitor.feed.known import Known
from monitor.ledger.archive import Archive
from monitor.ledger.chain import Ledger, Transaction
from monitor.ledger.disk import disk_errors
from monitor.ledger.index import Index, Projection
from monitor.ledger.links import Head
from monitor.ledger.table import is_damage, sqlite_errors
from monitor.limits.rules import read_rules
from monitor.notices import outbox
from monitor.notices.message import Notice
from monitor.site import Site, read_site
from monitor.words import Damaged, DuskcheckError
from monitor.world import Terms

ADOPTED = "CREATE TABLE adopted (seq INTEGER PRIMARY KEY, rules TEXT NOT NULL, settings TEXT NOT NULL) STRICT"


def _record_adopted(index: sqlite3.Connection, entry: Entry) -> None:
    if isinstance(entry.fact, RulesAdopted):
        index.execute("INSERT INTO adopted VALUES (?, ?, ?)", (entry.seq, entry.fact.rules, entry.fact.settings))


PROJECTIONS = (
    Projection("adopted", 1, ADOPTED, _record_adopted),
    Projection("files", 1, known.TABLES, known.record),
    Projection("evenings", 1, evenings.TABLES, evenings.record),
    Projection("excesses", 1, store.TABLES, store.record),
    outbox.OUTBOX,
)


@dataclass(frozen=True)
class Signed:
    """The hashes of a site file and of the rule files, by name, that were in force together."""

    settings: str
    rules: tuple[tuple[str, str], ...]


class State:
    """The opened state of one site. Use it in one thread, and close it."""

    def __init__(self, site: Site, ledger: Ledger) -> None:
        self.site = site
        self.ledger = ledger
        self.archive = Archive(site.state / "archive")
        self.history = History(site.state / "history.sqlite", self.archive.get)
        self._index = Index(site.state / "index.sqlite", PROJECTIONS)
        self._terms: dict[str, Terms] = {}
        self._kept: dict[tuple[tuple[str, ...], int], str] = {}

    def close(self) -> None:
        self._index.close()
        self.history.close()
        self.ledger.close()

    def index(self) -> sqlite3.Connection:
        """The derived tables, caught up with the ledger."""
        return self._index.caught_up(self.ledger)

    def signed(self, rules: str) -> Signed:
        """The files that were signed together, by the hash that recipes name."""
        named = json.loads(self.archive.get(rules))
        return Signed(named["settings"], tuple((name, sha256) for name, sha256 in named["rules"]))

    def terms(self, rules: str) -> Terms:
        """What was signed, read; from the archive alone."""
        if rules not in self._terms:
            self._terms[rules] = _read_terms(self.signed(rules), self.archive)
        return self._terms[rules]

    def last_adopted(self) -> tuple[str, str] | None:
        """The hashes of the terms and of the settings adopted last."""
        row = self.index().execute("SELECT rules, settings FROM adopted ORDER BY seq DESC LIMIT 1").fetchone()
        return (row[0], row[1]) if row else None

    def witness(self, heads: Iterable[Head]) -> None:
        """Write numbers and hashes of entries to the heads file outside the state, where the site names one.

        Those that stand there already are not written again.
        """
        path = self.site.heads
        if path is None:
            return
        with disk_errors(f"writing the heads file {path}"), path.open("a+") as file:
            file.seek(0)
            written = file.read()
            new = [line for line in (f"{head.seq} {head.hash}\n" for head in heads) if line not in written]
            # A line that a full disk cut off stays by itself.
            file.write(("\n" if written and not written.endswith("\n") else "") + "".join(new))

    def queue(self, transaction: Transaction, notices: Sequence[Notice], after: tuple[int, str]) -> None:
        """Record what must be told, for every channel and receiver. after: seq and hash of the entry it follows."""
        for queued in outbox.queue(notices, self.site.settings.notices, self.archive, after):
            transaction.append(queued)

    def sources(self, day: date) -> Sources:
        """For building the world of a date: the sessions are those the installed package knows."""
        return self._sources(lambda name: self.history.sessions(name, until=day))

    def recorded_sources(self, sessions: str) -> Sources:
        """For building a recorded recipe again: the sessions are those the archive kept under a hash."""
        return self._sources(calendars.from_bytes(self.archive.get(sessions)).__getitem__)

    def keep_sessions(self, names: tuple[str, ...], day: date) -> str:
        """Archive the sessions of calendars up to the end of a date's year; returns their hash."""
        key = (names, day.year)
        if key not in self._kept:
            used = {name: self.history.sessions(name, until=day) for name in names}
            self._kept[key] = self.archive.put(calendars.to_bytes(used, day))
        return self._kept[key]

    def _sources(self, sessions: Callable[[str], Sessions]) -> Sources:
        return Sources(known=partial(Known, self.index()), history=self.history, sessions=sessions, terms=self.terms)


@contextmanager
def open_state(site: Site, create: bool = False) -> Iterator[State]:
    """Raises DuskcheckError when there is no ledger and `create` is not set, Damaged when it alone is gone."""
    path = site.state / "ledger.sqlite"
    if create and not path.exists() and (site.state / "archive").exists():
        raise Damaged(
            f"{path} is missing, but the archive beside it is there. Go back to a backup; to begin a new record, move "
            f"{site.state} away"
        )
    with Ledger.open(path, create=create) as ledger:
        state = State(site, ledger)
        try:
            with _index_errors(state):
                yield state
        finally:
            state.close()


@contextmanager
def _index_errors(state: State) -> Iterator[None]:
    """What goes wrong while the index is asked, in words; a broken one is thrown away, for it can be made again."""
    try:
        yield
    except sqlite3.Error as error:  # the ledger and the history put theirs into words themselves
        path = state.site.state / "index.sqlite"
        if is_damage(error):
            state.close()
            path.unlink(missing_ok=True)
            raise DuskcheckError(
                f"{path} was broken and has been thrown away. It is a cache: run the command again, and it is made anew"
            ) from error
        with sqlite_errors(path, "using"):
            raise


def _read_terms(signed: Signed, archive: Archive) -> Terms:
    settings = read_site("site.yaml", archive.get(signed.settings))
    rules = read_rules([(name, archive.get(sha256)) for name, sha256 in signed.rules], settings.rule_context())
    return settings.terms(rules)
