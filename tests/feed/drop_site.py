"""A small site on disk with a real drop, ledger and archive, for the tests of feed and limits. Everything is invented.

Its firm is in EUR on Dublin's calendar: quay in EUR on XDUB, west in USD on XNYS, east in JPY on XTKS. The week is that
of 2026-03-02, in which all three exchanges are open from Monday to Friday; the evening is the Friday.
"""

from __future__ import annotations

import shutil
import tempfile
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import replace
from datetime import UTC, date, datetime, timedelta
from functools import cache
from pathlib import Path

import numpy as np

from monitor.feed.build import build
from monitor.feed.calendars import Sessions
from monitor.feed.history import History
from monitor.limits.evaluate import evaluate
from monitor.run import open_for_checking, prepare
from monitor.site import open_site
from monitor.state import State
from monitor.words import Recipe
from monitor.world import Answer, Standings, World

NOW = datetime(2026, 3, 6, 20, 0, tzinfo=UTC)
MONDAY = date(2026, 3, 2)
WEEK = [MONDAY + timedelta(days=days) for days in range(5)]
THURSDAY, FRIDAY = WEEK[3], WEEK[4]
SITE = """\
site: Small Trust
base_currency: EUR
calendar: XDUB
time_zone: UTC
books:
  - {{id: quay, currency: EUR, calendar: XDUB}}
  - {{id: west, currency: USD, calendar: XNYS}}
  - {{id: east, currency: JPY, calendar: XTKS}}
channels:
  - {{id: tray, kind: folder, path: tray}}
defaults: {{window: {window}, confidence: 0.75, nav_age: {nav_age}}}
{more}"""
RULES = "rules:\n  - {id: firm-count, measure: {name: count}, limit: 1000}\n"


@cache
def _with_sessions() -> Path:
    """A history file that knows the sessions of the three calendars, which take seconds to work out."""
    path = Path(tempfile.mkdtemp()) / "history.sqlite"
    history = History(path, read=_nothing)
    for calendar in ("XDUB", "XNYS", "XTKS"):
        history.sessions(calendar, until=FRIDAY)
    history.close()
    return path


def sessions_worked_out(calendar: str) -> Sessions:
    """In place of `calendars.from_library`, for tests that begin the cache anew."""
    history = History(_with_sessions(), read=_nothing)
    try:
        return history.sessions(calendar, until=FRIDAY)
    finally:
        history.close()


def _nothing(sha256: str) -> bytes:
    raise KeyError(sha256)


class SmallSite:
    """The folder of a site; what it is asked, it asks the program, with the real files."""

    def __init__(self, folder: Path, rules: str = RULES, window: int = 4, nav_age: int = 2, more: str = "") -> None:
        self.folder = folder
        for part in ("drop", "rules", "state"):
            (folder / part).mkdir(parents=True)
        shutil.copy(_with_sessions(), folder / "state" / "history.sqlite")
        self.settle(rules, window, nav_age, more)

    def settle(self, rules: str = RULES, window: int = 4, nav_age: int = 2, more: str = "") -> None:
        (self.folder / "site.yaml").write_text(SITE.format(window=window, nav_age=nav_age, more=more))
        (self.folder / "rules" / "limits.yaml").write_text(rules)

    def leave(self, name: str, content: str | bytes | Sequence[str]) -> None:
        """Put a file into the drop; a sequence stands for its lines."""
        if not isinstance(content, str | bytes):
            content = "\n".join([*content, ""])
        data = content.encode() if isinstance(content, str) else content
        (self.folder / "drop" / name).write_bytes(data)

    def prices(self, closes: Mapping[str, Sequence[float | None]], days: Sequence[date] = WEEK) -> None:
        """A price file for each day; None where an instrument has no close."""
        for at, day in enumerate(days):
            rows = [f"{name},{series[at]!r}" for name, series in closes.items() if series[at] is not None]
            self.leave(f"prices_{day}.csv", ["instrument,close", *rows])

    def rates(self, rates: Mapping[str, Sequence[float | None]], days: Sequence[date] = WEEK) -> None:
        for at, day in enumerate(days):
            rows = [f"{pair},{series[at]!r}" for pair, series in rates.items() if series[at] is not None]
            self.leave(f"fx_{day}.csv", ["pair,rate", *rows])

    def positions(self, *rows: str, day: date = FRIDAY) -> None:
        self.leave(f"positions_{day}.csv", ["book,instrument,quantity", *rows])

    def navs(self, *rows: str, day: date = FRIDAY) -> None:
        self.leave(f"nav_{day}.csv", ["book,nav", *rows])

    @contextmanager
    def state(self) -> Iterator[tuple[State, str]]:
        """The state after settings and drop were taken in, and the hash of what is in force."""
        with open_for_checking(open_site(self.folder / "site.yaml")) as state:
            yield state, prepare(state, NOW)

    def world(
        self, day: date = FRIDAY, known: int | None = None, round_id: str | None = None, ranges: bool = False
    ) -> World:
        """ranges: as if a rule needed opening, highest and lowest prices."""
        with self.state() as (state, terms):
            if known is None:
                known = state.ledger.head().seq
            chosen = round_id or list(state.terms(terms).rounds)[-1]
            sources = state.sources(day)
            if ranges:
                sources = replace(sources, terms=lambda sha256: replace(state.terms(sha256), needs_ranges=True))
            return build(Recipe(day, chosen, day, day, day, terms, known), sources)

    def standings(self, day: date = FRIDAY, round_id: str | None = None) -> Standings:
        return evaluate(self.world(day, round_id=round_id))

    def answers(self, day: date = FRIDAY) -> dict[tuple[str, str], Answer]:
        return by_key(self.standings(day))


def by_key(standings: Standings) -> dict[tuple[str, str], Answer]:
    """The answers by rule and subject key, of which there may be one each only."""
    found = {(answer.rule, answer.subject.key): answer for answer in standings.answers}
    assert len(found) == len(standings.answers)
    return found


def rule(name: str, measure: str, limit: str = "limit: 1000", unit: str = "amount", **more: str) -> str:
    """One rule in YAML; `more` are further keys."""
    keys = "".join(f", {key}: {value}" for key, value in more.items())
    return f"  - {{id: {name}, measure: {measure}, {limit}, unit: {unit}{keys}}}\n"


def rules(*lines: str) -> str:
    return "rules:\n" + "".join(lines)


def with_expiry(world: World, name: str, expiry: date) -> World:
    """The same world in which a contract expires on another day."""
    instruments = tuple(replace(item, expiry=expiry) if item.id == name else item for item in world.market.instruments)
    return replace(world, market=replace(world.market, instruments=instruments))


def place_of(world: World, name: str) -> int:
    """The number of an instrument."""
    return [item.id for item in world.market.instruments].index(name)


def same(left: World, right: World) -> bool:
    """Whether two worlds hold the same, array by array."""
    return _plain(left) == _plain(right)


def _plain(value: object) -> object:
    if isinstance(value, np.ndarray):
        return value.dtype.str, value.shape, value.tobytes()
    if hasattr(value, "__dataclass_fields__"):
        return {name: _plain(getattr(value, name)) for name in value.__dataclass_fields__}
    if isinstance(value, Mapping):
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, tuple):
        return [_plain(item) for item in value]
    return value
