"""duskcheck excess: what is over its limit, since when, and how it went."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import date
from pathlib import Path
from typing import Any

import click
from rich.console import Console
from rich.table import Table

from monitor import evenings
from monitor.cli.documents import excess_document
from monitor.cli.options import json_option, print_json, site_option
from monitor.excesses import store
from monitor.excesses.register import Excess
from monitor.facts import ExcessChanged, ExcessCured, ExcessOpened, ExcessVoided
from monitor.news import days_of
from monitor.notices import figures
from monitor.notices.excess_words import last_over, worst_of
from monitor.settle import ExcessFact
from monitor.site import open_site
from monitor.state import State, open_state
from monitor.words import CuredBy, ExcessState, Unit, WrongUse
from monitor.world import Rule

CURED_BY = {
    CuredBy.FIGURE: "cured: within its limit",
    CuredBy.END_OF_RULE: "cured: its rule is no longer in force",
    CuredBy.END_OF_SUBJECT: "cured: its subject is no longer held, or its rule no longer asks about it",
}


@click.group()
def excess() -> None:
    """The register of excesses."""


@excess.command("list")
@site_option
@json_option
@click.option(
    "--state",
    "wanted",
    type=click.Choice([*(state.value for state in ExcessState), "all"]),
    help="Open and waived when left out.",
)
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
        days, aged_on = _days(state, found)
        rules = _rules(state)
    if as_json:
        print_json([excess_document(own, days.get(own)) for own in found])
        return
    if not found:
        click.echo("no excess" if wanted == "all" else f"no excess is {wanted or 'open or waived'}")
        return
    table = Table(box=None, pad_edge=False, padding=(0, 1, 0, 0))
    for heading in ("excess", "opened on"):
        table.add_column(heading, no_wrap=True)
    table.add_column("state", min_width=len("2026-12-31"))
    table.add_column("rule and subject", min_width=16, overflow="fold")
    owned = any(own.owner for own in found)
    for heading in ("last over at", "limit", *(["owner"] if owned else [])):
        table.add_column(heading, overflow="fold", min_width=len(heading))
    for own in found:
        table.add_row(
            own.id,
            str(own.opened_on),
            _state(own, days.get(own)),
            f"{own.rule} of {own.subject.name}",
            *last_over(own, None, rules),
            *([own.owner or ""] if owned else []),
        )
    console = Console(highlight=False)
    console.print(table)
    if days:
        console.print(f"Days are business days of the subject's calendar, counted to {aged_on}, the newest on record.")


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
        rules = _rules(state)
        days, aged_on = _days(state, [own])
        story = [
            (entry.seq, entry.at, _told(entry.fact, own, rules))
            for entry in state.ledger.entries()
            if isinstance(entry.fact, ExcessFact) and entry.fact.excess == excess_id
        ]
    day = days.get(own)
    if as_json:
        told: dict[str, Any] = {"story": [{"seq": seq, "at": at, "what": what} for seq, at, what in story]}
        print_json(excess_document(own, day) | told)
        return
    counted = f" (business days up to {aged_on})" if day else ""
    title = f" ({rules[own.rule].title})" if own.rule in rules else ""
    click.echo(f"{own.id}: {own.rule}{title} of {own.subject.name}: {_state(own, day)}{counted}")
    click.echo(f"  owner {own.owner or 'none'}, worst {worst_of(own, rules)}")
    for seq, _, what in story:
        click.echo(f"  {what}  (entry {seq})")


def _state(own: Excess, day: int | None) -> str:
    if day is not None:
        return f"{own.state.value}, day {day}"
    return f"cured on {own.cured_on}" if own.state is ExcessState.CURED else own.state.value


def _days(state: State, found: list[Excess]) -> tuple[dict[Excess, int], date | None]:
    """The day of each that is alive, and the date up to which days are counted."""
    adopted, newest = state.last_adopted(), evenings.newest_day(state.index())
    if adopted is None or newest is None:
        return {}, None
    return days_of(state, [own for own in found if own.alive], state.terms(adopted[0]), newest), newest


def _rules(state: State) -> Mapping[str, Rule]:
    adopted = state.last_adopted()
    return {rule.id: rule for rule in state.terms(adopted[0]).rules} if adopted else {}


def _told(fact: ExcessFact, own: Excess, rules: Mapping[str, Rule]) -> str:
    measure = rules[own.rule].measure.name if own.rule in rules else ""

    def against(value: float, level: float, unit: Unit, currency: str | None) -> str:
        worded, limit = figures.against(value, level, unit, currency, measure)
        return f"{worded}, limit {limit}"

    match fact:
        case ExcessOpened():
            return f"{fact.day}  opened at {against(fact.value, fact.level, fact.unit, fact.currency)}"
        case ExcessChanged():
            last = against(fact.last_value, fact.level, fact.unit, fact.currency)
            if fact.last_on == fact.day:
                return f"{fact.day}  {fact.reason}: {last}"
            return f"{fact.day}  {fact.reason}: opened on {fact.opened_on}, last over on {fact.last_on} at {last}"
        case ExcessCured():
            value = (
                f", at {figures.figure(fact.value, own.unit, own.currency, measure)}" if fact.value is not None else ""
            )
            return f"{fact.day}  {CURED_BY[fact.by]}{value}"
        case ExcessVoided():
            return f"{fact.day}  void: {fact.reason}"
