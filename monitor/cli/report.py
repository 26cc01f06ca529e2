"""duskcheck report: the pages again."""

from __future__ import annotations

from datetime import date
from pathlib import Path

import click

from monitor import evenings
from monitor.cli.options import Day, json_option, print_json, site_option
from monitor.evening import recall
from monitor.paging import draw_evening
from monitor.site import open_site
from monitor.state import open_state
from monitor.words import WrongUse


@click.command()
@site_option
@click.option("--date", "day", type=Day(), help="The business date; the newest one on record when left out.")
@json_option
def report(site_file: Path, day: date | None, as_json: bool) -> None:
    """Draw the pages of an evening again, from the record."""
    with open_state(open_site(site_file)) as state:
        recorded = evenings.latest_of_all(state.index())
        newest = max((own.recipe.date for own in recorded), default=None)
        chosen = [own for own in recorded if own.recipe.date == (day or newest)]
        if not chosen:
            known = (
                f"one from {recorded[0].recipe.date} to {newest}" if recorded else "one that was checked: none was yet"
            )
            raise WrongUse(f"found no evening of {day or 'any date'} on record; expected {known}")
        drawn = [draw_evening(state, own, recall(state, own).standings) for own in chosen]
    if as_json:
        print_json([str(path) for path in drawn])
    else:
        for path in drawn:
            click.echo(path)
