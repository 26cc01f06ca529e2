"""duskcheck excess: what is over its limit, since when, and how it went."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import click
from rich.console import Console
from rich.table import Table

from monitor.cli.documents import excess_document
from monitor.cli.options import json_option, print_json, site_option
from monitor.excesses import store
from monitor.excesses.register import Excess
from monitor.facts import ExcessChanged, ExcessCured, ExcessOpened, ExcessVoided
from monitor.news import days_of
from monitor.notices import figures
from monitor.site import open_site
from monitor.state import State, open_state
from monitor.words import ExcessState, WrongUse


@click.group()
def excess() -> None:
    """The register of excesses."""


@excess.command("list")
@site_option
@json_option
@click.option("--state", "wanted", type=click.Choice([*ExcessState, "all"]), help="Open and waived when left out.")
@click.option("--book", help="Excesses of one book only.")
@click.option("--owner", help="Excesses of one owner only.")
def list_excesses(site_file: Path, as_json: bool, wanted: str | None, book: str | None, owner: str | None) -> None:
    """The excesses, oldest first."""
    with open_state(open_site(site_file)) as state:
        found = [
            own
            for own in store.load(state.index())
            if (own.alive if wanted is None else wanted in ("all", own.state))
            and book in (None, own.subject.book)
            and owner in (None, own.owner)
        ]
        found.sort(key=lambda own: (own.opened_on, store.number_of(own.id)))
        days = _days(state, found)
    if as_json:
        print_json([excess_document(own, days.get(own)) for own in found])
        return
    if not found:
        click.echo("no excess" if wanted == "all" else f"no excess is {wanted or 'open or waived'}")
        return
    table = Table(box=None, pad_edge=False)
    for heading in ("excess", "state", "day", "opened", "rule", "subject", "last over", "limit", "worst", "owner"):
        table.add_column(heading, justify="right" if heading in ("day", "last over", "limit", "worst") else "left")
    for own in found:
        table.add_row(
            own.id,
            own.state.value,
            str(days.get(own, "")),
            str(own.opened_on),
            own.rule,
            own.subject.name,
            figures.figure(own.last_value, own.unit, own.currency),
            figures.level(own.level, own.unit, own.currency),
            figures.figure(own.worst_value, own.unit, own.currency),
            own.owner or "",
        )
    Console(highlight=False).print(table)


@excess.command("show")
@site_option
@json_option
@click.argument("excess_id", metavar="EXCESS")
def show_excess(site_file: Path, as_json: bool, excess_id: str) -> None:
    """The story of one excess, as the ledger tells it."""
    with open_state(open_site(site_file)) as state:
        register = {own.id: own for own in store.load(state.index())}
        if excess_id not in register:
            newest = f"one of e1 to e{len(register)}" if register else "nothing yet: no excess was ever opened"
            raise WrongUse(f"found the excess {excess_id!r}; expected {newest}. `duskcheck excess list --state all`")
        own = register[excess_id]
        day = _days(state, [own]).get(own)
        story = [
            (entry.seq, entry.at, _told(entry.fact, own))
            for entry in state.ledger.entries()
            if isinstance(entry.fact, ExcessOpened | ExcessChanged | ExcessCured | ExcessVoided)
            and entry.fact.excess == excess_id
        ]
    if as_json:
        told: dict[str, Any] = {"story": [{"seq": seq, "at": at, "what": what} for seq, at, what in story]}
        print_json(excess_document(own, day) | told)
        return
    state_now = f"{own.state.value}, day {day}" if day else own.state.value
    click.echo(f"{own.id}: rule {own.rule}, {own.subject.name}: {state_now}")
    for seq, _, what in story:
        click.echo(f"  {what}  (entry {seq})")


def _days(state: State, found: list[Excess]) -> dict[Excess, int]:
    adopted = state.last_adopted()
    if adopted is None:
        return {}
    today = datetime.now(UTC).date()
    (last,) = state.index().execute("SELECT MAX(day) FROM evening").fetchone()
    newest = datetime.fromisoformat(last).date() if last else today
    return days_of(state, [own for own in found if own.alive], state.terms(adopted[0]), newest)


def _told(fact: ExcessOpened | ExcessChanged | ExcessCured | ExcessVoided, own: Excess) -> str:
    def worded(value: float | None) -> str:
        return "" if value is None else figures.figure(value, own.unit, own.currency)

    match fact:
        case ExcessOpened():
            return f"{fact.day}  opened at {worded(fact.value)}, limit {worded(fact.level)}"
        case ExcessChanged():
            return f"{fact.day}  {fact.reason}: {worded(fact.last_value)}, limit {worded(fact.level)}"
        case ExcessCured():
            value = f" at {worded(fact.value)}" if fact.value is not None else ""
            return f"{fact.day}  cured by {fact.by.replace('_', ' ')}{value}"
        case ExcessVoided():
            return f"{fact.day}  void: {fact.reason}"
