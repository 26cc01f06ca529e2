"""duskcheck check: an evening now, or several in order."""

from __future__ import annotations

import time
from collections import Counter
from collections.abc import Iterator, Sequence
from datetime import UTC, date, datetime, timedelta
from pathlib import Path

import click
from rich.console import Console
from rich.progress import track

from monitor.cli.documents import evening_document
from monitor.cli.options import Day, json_option, print_json, site_option
from monitor.cli.screen import print_evening
from monitor.daemon.schedule import newest_due
from monitor.evening import Checked
from monitor.facts import FileRefused
from monitor.feed import intake
from monitor.feed.known import refused_between
from monitor.notices import outbox
from monitor.notices.figures import count
from monitor.run import (
    Due,
    check_in_order,
    evenings_between,
    finish,
    open_for_checking,
    prepare,
    sessions_of,
    worst,
)
from monitor.site import open_site
from monitor.state import State
from monitor.words import Exit, Outcome, WrongUse

SETTLING_SECONDS = 1  # a file that stands still for so long is no longer being written
EXITS = {Outcome.INCOMPLETE: Exit.INCOMPLETE, Outcome.OVER: Exit.OVER}


@click.command()
@site_option
@click.option("--date", "day", type=Day(), help="The business date; the newest one that is due when left out.")
@click.option("--from", "first", type=Day(), help="The first business date of several.")
@click.option("--to", "last", type=Day(), help="The last business date of several.")
@click.option("--round", "round_id", help="One round only; all of the date's rounds when left out.")
@json_option
def check(
    site_file: Path, day: date | None, first: date | None, last: date | None, round_id: str | None, as_json: bool
) -> int:
    """Check an evening now, or several in order.

    Takes in the drop, works out the figures, holds them against the rules, records, tells and shows. The same evening
    checked again records nothing unless something that it depends on has changed.
    """
    if (first is None) is not (last is None) or (day is not None and first is not None):
        raise click.UsageError("give --date, or --from and --to together, or neither")
    if first is not None and last is not None and first > last:
        raise click.UsageError(f"--from {first} lies after --to {last}")
    site = open_site(site_file)
    now = datetime.now(UTC)
    with open_for_checking(site) as state:
        before = state.ledger.head().seq
        terms = prepare(state, now, _settled(site.drop))
        _say_what_was_refused(state, before)
        due = _due(state, terms, (first or day, last or day), round_id, now)
        checked = None
        outcomes = []
        for checked in _in_order(check_in_order(state, terms, due, now), due, as_json):
            outcomes.append(checked.standings.outcome)
            if as_json:
                print_json(evening_document(state, checked))
        sent = finish(state, terms, checked, now)
        if checked is not None and not as_json:
            print_evening(state, checked, outcomes)
        _say_what_waits(sent)
    return EXITS.get(worst(outcomes), Exit.DONE)


def _due(
    state: State, terms: str, span: tuple[date | None, date | None], round_id: str | None, now: datetime
) -> list[Due]:
    first, last = span
    what = f"the round {round_id}" if round_id else "any book"
    rounds = {each.id: each for each in state.site.settings.rounds if round_id in (None, each.id)}
    if not rounds:
        known = ", ".join(each.id for each in state.site.settings.rounds)
        raise WrongUse(f"found the round {round_id!r}; expected one of {known}")
    if first is None or last is None:
        sessions = sessions_of(state, terms, now.date() + timedelta(days=1))
        newest = newest_due(list(rounds.values()), state.terms(terms), sessions, now)
        if not newest:
            raise WrongUse(f"found no session of the calendars of {what} lately; give the evening's --date")
        return [Due(day, name) for name, day in newest if day == max(day for _, day in newest)]
    today = max(each.today(now) for each in rounds.values())
    if last > today:
        raise WrongUse(f"found the date {last}, which is still to come; expected one up to today, {today}")
    found = evenings_between(state, terms, first, last, round_id)
    begun = [due for due in found if due.day <= rounds[due.round].today(now)]
    if not begun:
        days = f"the date {first}, which is" if first == last else f"the dates {first} to {last}, which hold"
        raise WrongUse(f"found {days} no session of the calendars of {what}; expected a business date")
    return begun


def _settled(drop: Path) -> list[intake.Lying]:
    """The files in the drop that nobody is writing any more; those still written wait for the next check."""
    lying = intake.look(drop)
    if all(file.changed < time.time_ns() - SETTLING_SECONDS * 10**9 for file in lying):
        return lying
    time.sleep(SETTLING_SECONDS)
    again = set(intake.look(drop))
    for file in lying:
        if file not in again:
            click.echo(f"duskcheck: {file.name} is still being written and was left for the next check", err=True)
    return [file for file in lying if file in again]


def _say_what_was_refused(state: State, after: int) -> None:
    """Every reason why a file was refused just now, one line a reason."""
    for seq in refused_between(state.index(), after, state.ledger.head().seq):
        fact = state.ledger.entry(seq).fact
        if isinstance(fact, FileRefused):
            for finding in fact.findings:
                click.echo(f"duskcheck: refused: {finding}", err=True)
            if left := fact.reasons - len(fact.findings):
                click.echo(f"duskcheck: refused: {fact.name}: {count(left, 'further reason')}", err=True)


def _say_what_waits(sent: Sequence[outbox.Result]) -> None:
    """What could not be told just now, one line a channel and reason."""
    failed = Counter((own.notice.channel, own.said, own.final) for own in sent if not own.sent)
    for (channel, reason, final), number in failed.items():
        then = "given up" if final else "the next check or the daemon tries again"
        what = count(number, "notice")
        click.echo(f"duskcheck: {what} not taken by the channel {channel}: {reason}; {then}", err=True)


def _in_order(checked: Iterator[Checked], due: Sequence[Due], as_json: bool) -> Iterator[Checked]:
    """The evenings, with a progress bar for a person who waits for many."""
    console = Console(stderr=True)
    if as_json or len(due) < 5 or not console.is_terminal:
        return checked
    return iter(track(checked, description="Checking evenings", total=len(due), console=console))
