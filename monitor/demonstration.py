"""The invented firm set up in a folder, and its evenings run one by one as if each day had come."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

from demo_feed import story
from monitor import evenings, replay
from monitor.evening import Checked, check_evening, recall
from monitor.evenings import CheckedEvening
from monitor.paging import draw_evening
from monitor.run import evenings_between, open_for_checking, prepare, send
from monitor.site import open_site
from monitor.state import State
from monitor.words import WrongUse

PAGES_DRAWN = 3


def set_up(folder: Path) -> Path:
    """Write the site file, the rules and the history into an empty folder; returns the site file."""
    if folder.exists() and any(folder.iterdir()):
        raise WrongUse(f"found {folder} with something in it; expected a folder that is empty or not there yet")
    for name, data in story.site_files().items():
        _write(folder / name, data)
    for name, data in story.start_files().items():
        _write(folder / "drop" / name, data)
    return folder / "site.yaml"


def run_evenings(site_file: Path) -> Iterator[Checked]:
    """Leave each date's files in the drop and check the date at the time that its round is due, told by the story."""
    site = open_site(site_file)
    with open_for_checking(site) as state:
        for evening in story.evenings():
            for name, data in evening.files.items():
                _write(site.drop / name, data)
            for round_ in site.settings.rounds:
                now = round_.moment(evening.date, round_.at)
                terms = prepare(state, now)
                for due in evenings_between(state, terms, evening.date, evening.date, round_.id):
                    yield check_evening(state, terms, due.day, due.round, now, tell=True)
                send(state, now)


def draw_last_pages(state: State) -> Path:
    """Draw the pages of the newest evenings; returns the newest one's path."""
    drawn = [
        draw_evening(state, own, recall(state, own).standings)
        for own in evenings.latest_of_all(state.index())[-PAGES_DRAWN:]
    ]
    return drawn[-1]


def replayed(state: State) -> Iterator[tuple[CheckedEvening, replay.Replayed]]:
    """Every recorded evening, and what its recipe gives again."""
    for own in evenings.latest_of_all(state.index()):
        yield own, replay.replayed(state, own)


def _write(path: Path, data: bytes) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(data)
