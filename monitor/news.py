"""What evenings hand over to be told: gathered from the world, the register and the record."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterable, Mapping
from datetime import date

from monitor import evenings, results
from monitor.excesses import store
from monitor.excesses.register import Excess
from monitor.facts import EveningChecked, ExcessCured, ExcessOpened, ExcessVoided, FileRefused
from monitor.feed.calendars import Sessions
from monitor.feed.known import refused_between
from monitor.notices.figures import not_measured
from monitor.notices.news import EveningNews, PastEvening, SummaryNews
from monitor.report.pages import page_name
from monitor.settle import ExcessFact, Settled
from monitor.state import State
from monitor.words import ExcessState
from monitor.world import Answer, Standings, Terms, World


def evening_news(
    state: State,
    index: sqlite3.Connection,
    world: World,
    standings: Standings,
    settled: Settled,
    edition: int,
    entry: tuple[int, str],
) -> EveningNews:
    """One evening as it is being settled. index: as it was before. entry: seq and hash of its ledger entry."""
    recipe = world.recipe
    answers = {(answer.rule, answer.subject.key): answer for answer in standings.answers}
    before = evenings.before(index, recipe.date, recipe.round)
    aged_on = max(evenings.newest_day(index) or recipe.date, recipe.date)
    new = {excess.id for excess in settled.opened}
    alive_again = [excess for excess in (*settled.opened, *settled.reopened) if excess.alive]

    def tonight(excess: Excess, decided_on: date | None) -> Answer | None:
        return answers.get((excess.rule, excess.subject.key)) if decided_on == recipe.date else None

    return EveningNews(
        site=world.terms.firm.site,
        recipe=recipe,
        edition=edition,
        seq=entry[0],
        hash=entry[1],
        standings=standings,
        rules={rule.id: rule for rule in world.terms.rules},
        opened=tuple((excess, tonight(excess, excess.last_on)) for excess in alive_again),
        cured=tuple((excess, tonight(excess, excess.cured_on)) for excess in settled.cured),
        on_record=frozenset(excess.id for excess in (*settled.reopened, *settled.cured)) - new,
        voided=settled.voided,
        told=_told_then(state, index, settled.voided),
        alive=days_of(state, settled.alive, world.terms, aged_on),
        aged_on=aged_on,
        refused=_refused_since(state, index, before.seq if before else 0, recipe.known),
        before=before.counts if before else None,
        nightly=state.site.settings.notices.nightly_note,
        page=page_name(recipe.date, recipe.round, edition),
    )


def summary_news(state: State, untold: list[evenings.CheckedEvening], terms: Terms) -> SummaryNews:
    """Evenings that were checked days after their date, for one summary."""
    last = untold[-1]
    latest = latest_by_date(untold)
    shown = latest[-1]
    index = state.index()
    aged_on = evenings.newest_day(index) or shown.recipe.date
    register = store.load(index)
    facts = _changes_of(state, untold)
    opened, cured, void = (
        {fact.excess for fact in facts if isinstance(fact, kind)} for kind in (ExcessOpened, ExcessCured, ExcessVoided)
    )
    voided = tuple(excess for excess in register if excess.id in void - opened)
    return SummaryNews(
        site=terms.firm.site,
        evenings=tuple(_past(state, own) for own in latest),
        seq=last.seq,
        hash=last.hash,
        rules={rule.id: rule for rule in terms.rules},
        opened=tuple(excess for excess in register if excess.id in opened and excess.state is not ExcessState.VOID),
        cured=tuple(excess for excess in register if excess.id in cured and excess.state is ExcessState.CURED),
        voided=voided,
        told=_told_then(state, index, voided),
        alive=days_of(state, [excess for excess in register if excess.alive], terms, aged_on),
        aged_on=aged_on,
        nightly=state.site.settings.notices.nightly_note,
        page=page_name(shown.recipe.date, shown.recipe.round, shown.edition),
    )


def latest_by_date(recorded: list[evenings.CheckedEvening]) -> list[evenings.CheckedEvening]:
    """Of evenings in the order they were recorded the latest edition of each, by date."""
    latest = {(own.recipe.date, own.recipe.round): own for own in recorded}
    return sorted(latest.values(), key=lambda own: (own.recipe.date, own.seq))


def _changes_of(state: State, untold: list[evenings.CheckedEvening]) -> list[ExcessFact]:
    """What these evenings changed in the register: the entries that follow theirs in the same transactions."""
    seqs = {own.seq for own in untold}
    found: list[ExcessFact] = []
    ours = False
    for entry in state.ledger.entries(min(seqs) - 1):
        if isinstance(entry.fact, EveningChecked):
            ours = entry.seq in seqs
        elif ours and isinstance(entry.fact, ExcessFact):
            found.append(entry.fact)
    return found


def _told_then(state: State, index: sqlite3.Connection, voided: Iterable[Excess]) -> dict[str, tuple[str, ...]]:
    """By excess the groups that its rule named when its opening was recorded."""
    found = {}
    for excess in voided:
        opened_by = evenings.newest_at(index, store.recorded_at(index, excess.id))
        rules = state.terms(opened_by.recipe.rules).rules
        found[excess.id] = next((rule.tell for rule in rules if rule.id == excess.rule), ())
    return found


def days_of(state: State, alive: Iterable[Excess], terms: Terms, day: date) -> dict[Excess, int]:
    """On which business day of its subject's calendar each excess is, 1 on the evening it opened."""
    books = {book.id: book.calendar for book in terms.firm.books}
    calendars: Mapping[str, Sessions] = {
        name: state.history.sessions(name, until=day) for name in {*books.values(), terms.firm.calendar}
    }
    return {
        excess: 1 + calendars[books.get(excess.subject.book or "", terms.firm.calendar)].count(excess.opened_on, day)
        for excess in alive
    }


def _refused_since(state: State, index: sqlite3.Connection, after: int, upto: int) -> tuple[FileRefused, ...]:
    facts = [state.ledger.entry(seq).fact for seq in refused_between(index, after, upto)]
    return tuple(fact for fact in facts if isinstance(fact, FileRefused))


def _past(state: State, own: evenings.CheckedEvening) -> PastEvening:
    standings = results.decode(state.archive.get(own.results))
    reasons = list(standings.lacking)
    if standings.unmeasured:
        first = standings.unmeasured[0].reason
        reasons.append(f"{not_measured(len(standings.unmeasured))}, the first because {first}")
    return PastEvening(own.recipe.date, own.recipe.round, own.outcome, own.counts, tuple(reasons))
