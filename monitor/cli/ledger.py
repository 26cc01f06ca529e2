"""duskcheck ledger: does the record hold together, and what does it say."""

from __future__ import annotations

import json
import re
from pathlib import Path

import click

from monitor.cli.options import json_option, print_json, site_option
from monitor.facts import FACTS
from monitor.ledger.archive import Archive
from monitor.ledger.chain import Ledger
from monitor.ledger.links import Head
from monitor.ledger.verify import verify
from monitor.site import open_site
from monitor.words import Exit, WrongUse

HEAD = re.compile(r"(\d+)[ :]([0-9a-f]{64})")


@click.group()
def ledger() -> None:
    """The record: verify it, show its entries."""


@ledger.command("verify")
@site_option
@json_option
@click.option("--head", help="Number and hash of an entry from an old notice, as 412:0a1b...; shows a lost tail.")
def verify_ledger(site_file: Path, as_json: bool, head: str | None) -> int:
    """Check every entry's bytes, hash and place in the chain, and every file that the archive keeps for them."""
    site = open_site(site_file)
    report = verify(site.state / "ledger.sqlite", Archive(site.state / "archive"), _head(head))
    if as_json:
        print_json(
            {
                "entries": report.entries,
                "seq": report.head.seq,
                "head": report.head.hash,
                "sound": report.sound,
                "problems": list(report.problems),
                "notes": list(report.notes),
            }
        )
    else:
        for problem in report.problems:
            click.echo(f"damaged: {problem}")
        if report.sound:
            click.echo(f"sound: {report.entries} entries, newest {report.head.seq}, hash {report.head.hash}")
        for note in report.notes:
            click.echo(f"note: {note}")
    return Exit.DONE if report.sound else Exit.DAMAGED


@ledger.command("show")
@site_option
@json_option
@click.option("--from", "first", type=int, default=1, help="The first entry.")
@click.option("--to", "last", type=int, help="The last entry; the newest when left out.")
@click.option(
    "--kind", type=click.Choice(list(FACTS)), metavar="KIND", help="Entries of one kind only, as evening.checked."
)
def show_ledger(site_file: Path, as_json: bool, first: int, last: int | None, kind: str | None) -> None:
    """The entries, one a line. With --json each line is the exact text that was hashed."""
    site = open_site(site_file)
    with Ledger.open(site.state / "ledger.sqlite") as opened:
        newest = opened.head().seq
        if first > newest + 1:
            raise WrongUse(f"found --from {first}; expected the number of an entry: the newest is {newest}")
        for entry in opened.entries(max(first, 1) - 1, min(last or newest, newest)):
            if kind not in (None, entry.fact.KIND):
                continue
            raw = opened.raw(entry.seq).decode()
            if as_json:
                click.echo(raw)
            else:
                body = json.dumps(json.loads(raw)["body"], ensure_ascii=False)
                click.echo(f"{entry.seq:>6}  {entry.at}  {entry.fact.KIND:<16}  {body}")


def _head(text: str | None) -> Head | None:
    if text is None:
        return None
    found = HEAD.fullmatch(text.strip())
    if found is None:
        raise click.UsageError(f"found --head {text!r}; expected the entry's number and its hash, as 412:0a1b...")
    return Head(int(found[1]), found[2])
