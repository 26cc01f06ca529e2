"""duskcheck check: an evening now, or several in order."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from datetime import UTC, date, datetime
from pathlib import Path

import click
from rich.console import Console
from rich.progress import track

from monitor.cli.documents import evening_document
from monitor.cli.options import Day, json_option, print_json, site_option
from monitor.cli.screen import print_evening
from monitor.daemon.schedule import newest_due
from monitor.evening import Checked
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
        terms = prepare(state, now)
        due = _due(state, terms, (first or day, last or day), round_id, now)
        checked = None
        outcomes = []
        for checked in _in_order(check_in_order(state, terms, due, now), due, as_json):
            outcomes.append(checked.evening.outcome)
            if as_json:
                print_json(evening_document(state, checked))
        finish(state, terms, checked, now)
        if checked is not None and not as_json:
            print_evening(state, checked, outcomes)
    return EXITS.get(worst(outcomes), Exit.DONE)


def _due(
    state: State, terms: str, span: tuple[date | None, date | None], round_id: str | None, now: datetime
) -> list[Due]:
    first, last = span
    if first is None or last is None:
        rounds = [each for each in state.site.settings.rounds if round_id in (None, each.id)]
        sessions = sessions_of(state, terms, now.date())
        newest = newest_due(rounds, state.terms(terms), sessions, now)
        return [Due(day, name) for name, day in newest if day == max(day for _, day in newest)]
    found = evenings_between(state, terms, first, last, round_id)
    if not found:
        what = f"the round {round_id}" if round_id else "any book"
        raise WrongUse(f"{first} to {last}: no session of the calendars of {what}; expected at least one")
    return found


def _in_order(checked: Iterator[Checked], due: Sequence[Due], as_json: bool) -> Iterator[Checked]:
    """The evenings, with a progress bar for a person who waits for many."""
    console = Console(stderr=True)
    if as_json or len(due) < 5 or not console.is_terminal:
        return checked
    return iter(track(checked, description="Checking evenings", total=len(due), console=console))
