"""Several evenings in a row: settings adopted, files taken in, each evening checked in order, notices sent."""

from __future__ import annotations

import getpass
import os
import socket
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import date, datetime
from zoneinfo import ZoneInfo

from monitor import evenings
from monitor.adoption import adopt
from monitor.evening import Checked, check_evening, recall, take_in
from monitor.evenings import CheckedEvening
from monitor.facts import Hand
from monitor.feed import intake
from monitor.feed.build import calendars_of, rounds_due
from monitor.feed.calendars import Sessions
from monitor.ledger.links import Head
from monitor.ledger.lock import lock
from monitor.news import latest_by_date, summary_news
from monitor.notices import outbox
from monitor.notices.compose import compose_summary
from monitor.notices.delivery import Surroundings
from monitor.paging import draw_evening, draw_missing
from monitor.site import Site
from monitor.state import State, open_state
from monitor.words import Outcome

OLD_AFTER = 5  # business days after which an evening is told in a summary, not by its own alarms
LOCK_WAIT = 30
EVENINGS_WITNESSED = 20  # written again where a crash or a full disk kept them out of the heads file


@dataclass(frozen=True)
class Due:
    """One evening to check: a round of a business date."""

    day: date
    round: str


@contextmanager
def evening_lock(site: Site) -> Iterator[None]:
    """Only one process at a time checks evenings of a site."""
    with lock(site.state / "evening.lock", LOCK_WAIT, what=f"the evening of {site.settings.site}"):
        yield


@contextmanager
def open_for_checking(site: Site) -> Iterator[State]:
    """The state of a site, made when it is not there yet, with the evening's lock held."""
    with evening_lock(site), open_state(site, create=True) as state:
        yield state


def hand() -> Hand:
    """Who runs this, as the machine knows them."""
    try:
        login = getpass.getuser()
    except (KeyError, OSError):
        login = f"uid {os.getuid()}"
    return Hand(login, socket.gethostname())


def prepare(state: State, now: datetime, lying: list[intake.Lying] | None = None) -> str:
    """Adopt settings and rules and take in the drop; returns the hash of what is in force.

    lying: what to take in; None: all that lies there.
    """
    terms = adopt(state, now, hand())
    take_in(state, now, lying)
    return terms


def sessions_of(state: State, terms: str, until: date) -> dict[str, Sessions]:
    """The sessions of the firm's and the books' calendars."""
    return {name: state.history.sessions(name, until=until) for name in calendars_of(state.terms(terms).firm)}


def evenings_between(state: State, terms: str, first: date, last: date, round_id: str | None) -> list[Due]:
    """The evenings of a range of dates in order; those of one round only when it is named."""
    signed = state.terms(terms)
    sessions = sessions_of(state, terms, last)
    days = [date.fromordinal(ordinal) for ordinal in range(first.toordinal(), last.toordinal() + 1)]
    found = [Due(day, name) for day in days for name in rounds_due(signed, day, sessions)]
    return [due for due in found if round_id in (None, due.round)]


def check_in_order(state: State, terms: str, due: Sequence[Due], now: datetime) -> Iterator[Checked]:
    """Check evenings one after the other. Those long past are told together afterwards, by `tell_summary`."""
    for evening in due:
        yield check_evening(state, terms, evening.day, evening.round, now, is_recent(state, terms, evening, now))


def is_recent(state: State, terms: str, due: Due, now: datetime) -> bool:
    """Whether an evening is told by notices of its own rather than in a summary."""
    today = now.astimezone(ZoneInfo(state.site.settings.time_zone)).date()
    sessions = sessions_of(state, terms, max(today, due.day))[state.terms(terms).firm.calendar]
    return due.day > today or sessions.count(due.day, today) <= OLD_AFTER


def tell_summary(state: State, terms: str, now: datetime) -> CheckedEvening | None:
    """One notice for all evenings that were checked too late for notices of their own; returns the newest of them."""
    index = state.index()
    (told,) = index.execute("SELECT COALESCE(MAX(after_seq), 0) FROM outbox WHERE topic = 'summary'").fetchone()
    untold = evenings.untold(index, told)
    if not untold:
        return None
    news = summary_news(state, untold, state.terms(terms))
    with state.ledger.transaction(now) as transaction:
        state.queue(transaction, compose_summary(news), (news.seq, news.hash))
    return latest_by_date(untold)[-1]


def send(state: State, now: datetime) -> list[outbox.Result]:
    """Send what waits in the outbox and is due."""
    around = Surroundings(state.site.file.parent, os.environ)
    return outbox.drain(state.ledger, state.index(), state.archive, state.site.settings.notices, around, now)


def finish(state: State, terms: str, last: Checked | None, now: datetime) -> list[outbox.Result]:
    """After the last evening of a run: the summary of old ones, the pages, the witness, and the notices.

    Pages or a heads file that cannot be written keep nobody from being told. Returns what became of the notices.
    """
    summed_up = tell_summary(state, terms, now)
    try:
        if summed_up is not None and (last is None or last.evening != summed_up):
            draw_evening(state, summed_up, recall(state, summed_up).standings)
        if last is not None:
            draw_evening(state, last.evening, last.standings)
        draw_missing(state)
        state.witness(_heads(state))
    finally:
        sent = send(state, now)
    return sent


def _heads(state: State) -> list[Head]:
    """The newest evenings, as their notices name them, and the newest entry."""
    newest = evenings.all_editions(state.index())[-EVENINGS_WITNESSED:]
    return [*(Head(own.seq, own.hash) for own in newest), state.ledger.head()]


def worst(outcomes: Sequence[Outcome]) -> Outcome:
    """Incomplete wins over over, over over near."""
    order = (Outcome.WITHIN, Outcome.NEAR, Outcome.OVER, Outcome.INCOMPLETE)
    return max(outcomes, key=order.index, default=Outcome.WITHIN)
