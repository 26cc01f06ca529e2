"""What evenings hand over to be told: gathered from the world, the register and the record."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from datetime import date

from monitor import evenings, results
from monitor.excesses import store
from monitor.excesses.register import Excess
from monitor.facts import FileRefused
from monitor.feed.calendars import Sessions
from monitor.notices.news import EveningNews, PastEvening, SummaryNews
from monitor.report.pages import page_name
from monitor.settle import Settled
from monitor.state import State
from monitor.world import Standings, Terms, World


def evening_news(
    state: State, world: World, standings: Standings, settled: Settled, edition: int, seq: int, entry_hash: str
) -> EveningNews:
    """One evening as it is being settled. seq, hash: its ledger entry."""
    recipe = world.recipe
    answers = {(answer.rule, answer.subject.key): answer for answer in standings.answers}
    before = evenings.before(state.index(), recipe.date, recipe.round)
    return EveningNews(
        site=world.terms.firm.site,
        recipe=recipe,
        edition=edition,
        seq=seq,
        hash=entry_hash,
        standings=standings,
        rules={rule.id: rule for rule in world.terms.rules},
        opened=tuple((excess, answers[excess.rule, excess.subject.key]) for excess in settled.opened if excess.alive),
        cured=tuple((excess, answers.get((excess.rule, excess.subject.key))) for excess in settled.cured),
        voided=settled.voided,
        alive=days_of(state, settled.alive, world.terms, recipe.date),
        refused=_refused_since(state, before.seq if before else 0, recipe.known),
        before=before.counts if before else None,
        nightly=state.site.settings.notices.nightly_note,
        page=page_name(recipe.date, recipe.round, edition),
    )


def summary_news(state: State, untold: list[evenings.CheckedEvening], terms: Terms) -> SummaryNews:
    """Evenings that were checked days after their date, for one summary."""
    last = untold[-1]
    register = store.load(state.index())
    days = {own.recipe.date for own in untold}
    return SummaryNews(
        site=terms.firm.site,
        evenings=tuple(_past(state, own) for own in untold),
        seq=last.seq,
        hash=last.hash,
        rules={rule.id: rule for rule in terms.rules},
        opened=tuple(excess for excess in register if excess.opened_on in days),
        cured=tuple(excess for excess in register if excess.cured_on in days),
        alive=days_of(state, [excess for excess in register if excess.alive], terms, last.recipe.date),
        nightly=state.site.settings.notices.nightly_note,
        page=page_name(last.recipe.date, last.recipe.round, last.edition),
    )


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


def _refused_since(state: State, after: int, upto: int) -> tuple[FileRefused, ...]:
    rows = state.index().execute("SELECT seq FROM refused WHERE seq > ? AND seq <= ? ORDER BY seq", (after, upto))
    facts = [state.ledger.entry(seq).fact for (seq,) in rows.fetchall()]
    return tuple(fact for fact in facts if isinstance(fact, FileRefused))


def _past(state: State, own: evenings.CheckedEvening) -> PastEvening:
    standings = results.decode(state.archive.get(own.results))
    return PastEvening(own.recipe.date, own.recipe.round, own.outcome, own.counts, standings.lacking)
