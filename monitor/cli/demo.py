"""duskcheck demo: the invented firm, from its first evening to its last."""

from __future__ import annotations

from collections import Counter
from pathlib import Path

import click
from rich.console import Console
from rich.progress import track

from monitor.cli.screen import print_evening
from monitor.notices.figures import count
from monitor.words import Exit


@click.command()
@click.argument("folder", type=click.Path(path_type=Path, file_okay=False), default=Path("demo_site"))
def demo(folder: Path) -> int:
    """Set up Saltmere Trust in FOLDER and run a year of its evenings, with things going wrong.

    The firm, its people, books and instruments are invented. Every evening is checked at the time its round is due,
    as if that day had come, and the record bears those times. At the end each evening's recipe is built and evaluated
    again and held against what was recorded.
    """
    from demo_feed import story
    from monitor.demonstration import draw_last_pages, replayed, run_evenings, set_up
    from monitor.excesses import store
    from monitor.notices.outbox import waiting
    from monitor.site import open_site
    from monitor.state import open_state

    console = Console(highlight=False)
    progress = Console(stderr=True)
    site_file = set_up(folder)
    evenings = track(
        run_evenings(site_file), description="Checking evenings", total=len(story.evenings()), console=progress
    )
    checked = list(evenings)
    with open_state(open_site(site_file)) as state:
        again = list(track(replayed(state), description="Replaying them", total=len(checked), console=progress))
        page = draw_last_pages(state)
        register = store.load(state.index())
        sent = len(waiting(state.index(), "sent"))
        console.print()
        console.print("What happens in the story:")
        for event in story.EVENTS:
            console.print(f"  {event.date}  {event.text}")
        console.print()
        print_evening(state, checked[-1], [own.standings.outcome for own in checked])
    differing = [str(own.recipe.date) for own, found in again if found.differences]
    exact = sum(found.exact for _, found in again)
    counts = Counter(own.state.value for own in register)
    excesses = ", ".join(f"{number} {word}" for word, number in sorted(counts.items()))
    console.print()
    console.print(f"Excesses over the year: {len(register)} ({excesses}). Notices sent: {sent}.")
    console.print(f"Replayed from the archive: {exact} of {len(again)} evenings, exactly as recorded.")
    if rounded := len(again) - exact - len(differing):
        console.print(f"{count(rounded, 'further evening')} the same within the stated tolerance of each measure.")
    console.print()
    console.print("Where to look:")
    console.print(f"  the last evening's page   {page}", soft_wrap=True)
    console.print(f"  the list of all evenings  {page.parent / 'index.html'}", soft_wrap=True)
    console.print(f"  the notices               {folder / 'tray'}", soft_wrap=True)
    console.print(f"  the register              duskcheck excess list --state all --site {site_file}", soft_wrap=True)
    console.print(f"  any evening's page        duskcheck report --date 2025-06-16 --site {site_file}", soft_wrap=True)
    console.print(f"  how the model has done    duskcheck backtest --site {site_file}", soft_wrap=True)
    console.print(f"  proof of the record       duskcheck ledger verify --site {site_file}", soft_wrap=True)
    if differing:
        click.echo(f"duskcheck: these evenings differ from the record: {', '.join(differing)}", err=True)
        return Exit.FAILED
    return Exit.DONE
