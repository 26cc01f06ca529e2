"""The story of one evening: what came, what the world was, what the rules say of it, what changed, who is told."""

from __future__ import annotations

import importlib.metadata
import platform
import sqlite3
from dataclasses import dataclass
from datetime import date, datetime
from functools import cache

import monitor
from monitor import evenings, results
from monitor.amend import evenings_in_order
from monitor.currencies import CURRENCIES
from monitor.evenings import CheckedEvening
from monitor.excesses import store
from monitor.excesses.step import Evening
from monitor.facts import BookLine, EveningChecked, FileAccepted, FileRefused, UsedFile
from monitor.feed import intake
from monitor.feed.build import build
from monitor.feed.digest import digest_inputs
from monitor.feed.kinds import Vocabulary
from monitor.feed.known import HINDSIGHT, Known
from monitor.limits.evaluate import evaluate
from monitor.news import evening_news
from monitor.notices.compose import compose
from monitor.settle import Settled, as_evening, settle_again, settle_newest
from monitor.state import State
from monitor.words import FileKind, Recipe
from monitor.world import Standings, World


@dataclass(frozen=True)
class Checked:
    """An evening on record and what it said. new: whether this check recorded it, or found nothing new to say."""

    evening: CheckedEvening
    standings: Standings
    new: bool


def take_in(state: State, now: datetime, lying: list[intake.Lying] | None = None) -> list[FileAccepted | FileRefused]:
    """Accept or refuse every new file in the drop, in one transaction. lying: what a look found; None: look now."""
    settings = state.site.settings
    words = Vocabulary(settings.book_ids(), CURRENCIES)
    found = intake.look(state.site.drop) if lying is None else lying
    taken = list(intake.take(found, state.index(), state.history, state.archive.put, settings.patterns, words))
    if taken:
        with state.ledger.transaction(now) as transaction:
            for file in taken:
                transaction.append(file.fact)
        for file in taken:
            intake.remember(file, state.history)
    return [file.fact for file in taken]


def check_evening(state: State, terms: str, day: date, round_id: str, now: datetime, tell: bool) -> Checked:
    """Check one round for one business date, and record it unless the same inputs were checked before.

    terms: hash of the settings and rules in force. tell: queue the evening's notices; a summary covers it otherwise.
    """
    world = build(_recipe(state, terms, day, round_id), state.sources(day))
    inputs = digest_inputs(world)
    earlier = evenings.latest(state.index(), day, round_id)
    if earlier is not None and earlier.inputs == inputs:
        return recall(state, earlier)
    standings = evaluate(world)
    edition = earlier.edition + 1 if earlier else 1
    evening = _record(state, world, standings, inputs, edition, now, tell)
    return Checked(evening, standings, new=True)


def would_lack(state: State, terms: str, day: date, round_id: str) -> tuple[str, ...]:
    """What an evening checked now would lack, in words."""
    return build(_recipe(state, terms, day, round_id), state.sources(day)).lacking


def recall(state: State, evening: CheckedEvening) -> Checked:
    """An evening as it was recorded."""
    return Checked(evening, results.decode(state.archive.get(evening.results)), new=False)


def _recipe(state: State, terms: str, day: date, round_id: str) -> Recipe:
    """Tonight's recipe: everything of the date itself, as known now. What arrives meanwhile waits."""
    return Recipe(day, round_id, day, day, day, rules=terms, known=state.ledger.head().seq)


def _record(
    state: State, world: World, standings: Standings, inputs: str, edition: int, now: datetime, tell: bool
) -> CheckedEvening:
    """One transaction: the evening, what it changes in the register, and the notices of both."""
    recipe, index, signed = world.recipe, state.index(), state.signed(world.recipe.rules)
    fact = EveningChecked(
        recipe=recipe,
        edition=edition,
        inputs=inputs,
        files=_files_of(Known(index, recipe.known, recipe.date)),
        settings=signed.settings,
        rules=tuple(sha256 for _, sha256 in signed.rules),
        sessions=state.keep_sessions(world.calendars, recipe.date),
        versions=_versions(),
        completes=world.scope.completes,
        outcome=standings.outcome,
        counts=standings.counts(),
        books=tuple(BookLine(own.subject.key, own.currency, own.value_at_risk, own.pnl) for own in standings.books),
        results=state.archive.put(results.encode(standings)),
        told=tell,
    )
    settled = _settle(state, index, as_evening(recipe, standings, world.terms), recipe)
    with state.ledger.transaction(now) as transaction:
        entry = transaction.append(fact)
        for change in settled.facts:
            transaction.append(change)
        if tell:
            news = evening_news(state, index, world, standings, settled, edition, (entry.seq, entry.hash))
            state.queue(transaction, compose(news), (entry.seq, entry.hash))
    found = evenings.latest(state.index(), recipe.date, recipe.round)
    if found is None:
        raise RuntimeError(f"the evening of {recipe.date} was recorded and cannot be found")
    return found


def _settle(state: State, index: sqlite3.Connection, tonight: Evening, recipe: Recipe) -> Settled:
    """What tonight changes in the register; a late evening or a new edition is put in its place among the others."""
    register, ids = store.load(index), store.new_ids(index)
    if evenings.latest(index, recipe.date, recipe.round) or evenings.any_after(index, recipe.date):
        return settle_again(register, evenings_in_order(state, tonight, recipe), recipe.date, ids)
    return settle_newest(register, tonight, ids)


def _files_of(known: Known) -> tuple[UsedFile, ...]:
    """The files of the evening's date, and those that have none, as far as evenings rest on them."""
    kinds = [kind for kind in FileKind if kind is not HINDSIGHT]
    return tuple(
        file for kind in kinds for file in known.files(kind, since=known.until) if file.day in (None, known.until)
    )


@cache
def _versions() -> dict[str, str]:
    libraries = {name: importlib.metadata.version(name) for name in ("numpy", "scipy", "exchange_calendars")}
    return {"duskcheck": monitor.__version__, "python": platform.python_version(), **libraries}
