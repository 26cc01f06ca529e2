"""The pages of evenings: gathered from the record, whichever evening it is, and drawn."""

from __future__ import annotations

from datetime import date, timedelta
from itertools import pairwise
from pathlib import Path

from monitor import evenings, results
from monitor.evenings import CheckedEvening
from monitor.excesses import store
from monitor.excesses.register import Excess
from monitor.ledger.disk import disk_errors
from monitor.news import days_of
from monitor.report import pages
from monitor.report.page import AgedExcess, Before, Listed, Neighbours, Page, Series
from monitor.state import State
from monitor.words import ExcessState, Subject
from monitor.world import Standings, Terms

SESSIONS_SHOWN = 250
LATELY = timedelta(days=10)  # longer back than evenings have notices of their own when they are checked


def draw_evening(state: State, evening: CheckedEvening, standings: Standings) -> Path:
    """Write the page of an evening and the list of all evenings; returns the page's path."""
    with disk_errors(f"writing the pages in {state.site.pages}"):
        written = pages.write(state.site.pages, page_of(state, evening, standings))
        newest = {own.seq for own in evenings.latest_of_all(state.index())}
        listed = [_listed(state, own, own.seq in newest) for own in evenings.all_editions(state.index())]
        pages.write_index(state.site.pages, state.site.settings.site, listed)
    return written


def draw_missing(state: State) -> None:
    """Draw what the newest evenings' notices name and is not there, as after a crash."""
    recorded = evenings.latest_of_all(state.index())
    if not recorded:
        return
    since = recorded[-1].recipe.date - LATELY
    for own in recorded:
        if own.told and own.recipe.date >= since and _drawn(state, own) is None:
            draw_evening(state, own, results.decode(state.archive.get(own.results)))


def page_of(state: State, evening: CheckedEvening, standings: Standings) -> Page:
    """Everything that the page of an evening shows."""
    index, recipe = state.index(), evening.recipe
    terms = state.terms(recipe.rules)
    earlier = evenings.before(index, recipe.date, recipe.round)
    register = [excess for excess in store.load(index) if excess.state is not ExcessState.VOID]
    scope = set(terms.rounds[recipe.round])
    ours = [excess for excess in register if evening.completes or excess.subject.book in scope]
    alive = days_of(state, [excess for excess in ours if was_alive(excess, recipe.date)], terms, recipe.date)
    return Page(
        site=terms.firm.site,
        recipe=recipe,
        edition=evening.edition,
        seq=evening.seq,
        hash=evening.hash,
        checked_at=f"{evening.at[:10]} {evening.at[11:16]} UTC",
        standings=standings,
        before=_before(state, earlier) if earlier else None,
        rules={rule.id: rule for rule in terms.rules},
        alive=tuple(AgedExcess(excess, day) for excess, day in alive.items()),
        opened=tuple(excess for excess in ours if excess.opened_on == recipe.date),
        cured=tuple(excess for excess in ours if excess.cured_on == recipe.date),
        series=tuple(_series(state, own.subject, own.currency, terms, recipe.date) for own in standings.books),
        neighbours=_neighbours(state, evening, earlier),
    )


def was_alive(excess: Excess, day: date) -> bool:
    """Whether an excess was open or waived after the evening of a date, as the register knows it now."""
    ended = excess.cured_on is not None and excess.cured_on <= day
    return excess.state is not ExcessState.VOID and excess.opened_on <= day and not ended


def _before(state: State, earlier: CheckedEvening) -> Before:
    return Before(earlier.recipe.date, results.decode(state.archive.get(earlier.results)))


def _series(state: State, subject: Subject, currency: str, terms: Terms, day: date) -> Series:
    """The forecast of the evening before each session beside the P&L of that session."""
    books = {book.id: book.calendar for book in terms.firm.books}
    sessions = state.history.sessions(books.get(subject.book or "", terms.firm.calendar), until=day)
    lines = [
        line
        for line in evenings.book_lines(state.index(), subject.key, day)
        if line[1] == currency and sessions.open_on(line[0])
    ]
    pairs = list(pairwise(lines))[-SESSIONS_SHOWN:]
    return Series(
        subject=subject,
        currency=currency,
        days=tuple(after[0] for _, after in pairs),
        value_at_risk=tuple(before[2] for before, _ in pairs),
        pnl=tuple(after[3] for _, after in pairs),
    )


def _neighbours(state: State, evening: CheckedEvening, earlier: CheckedEvening | None) -> Neighbours:
    """Links to the pages beside this one, where they are drawn."""
    later = evenings.after(state.index(), evening.recipe.date, evening.recipe.round)
    return Neighbours(
        earlier=_drawn(state, earlier) if earlier else None,
        later=_drawn(state, later) if later else None,
        index="index.html",
    )


def _drawn(state: State, evening: CheckedEvening) -> str | None:
    name = pages.page_name(evening.recipe.date, evening.recipe.round, evening.edition)
    return name if (state.site.pages / name).exists() else None


def _listed(state: State, evening: CheckedEvening, newest: bool) -> Listed:
    return Listed(
        date=evening.recipe.date,
        round=evening.recipe.round,
        edition=evening.edition,
        outcome=evening.outcome,
        counts=evening.counts,
        page=_drawn(state, evening),
        newest=newest,
    )
