"""Saltmere Trust in small: one book, two shares, a short history. Invented, and cheap enough to run many times.

Harbour has 1,000 at 10.00, so its gross is 10,000 and its limit 15,000; `big` doubles the position and opens an excess.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from pathlib import Path
from typing import Any

from monitor.evenings import all_editions
from monitor.excesses import store
from monitor.ledger.archive import Archive
from monitor.ledger.verify import verify
from monitor.notices.outbox import waiting
from monitor.site import open_site
from monitor.state import open_state

HERE = Path(__file__).parent
DRIVER = HERE / "evening_driver.py"
# Weekdays of January to March 2026, on each of which Dublin's exchange is open.
DAYS = [day for day in (date(2026, 1, 5) + timedelta(days=n) for n in range(80)) if day.weekday() < 5]
HISTORY, EVENINGS = DAYS[:45], DAYS[45:]  # the evenings are those from 2026-03-09 on
LONG_AGO = 1.6e9  # so that nothing in the drop looks as if it were still being written
FIRST, SECOND, THIRD = EVENINGS[:3]
TRAY = "- {id: tray, kind: folder, path: tray}"
RULES = """\
rules:
  - id: gross
    title: Gross exposure
    applies_to: {book: any}
    each: book
    measure: {name: gross}
    near: 14000
    limit: 15000
    unit: amount
  - id: tail
    title: Value at risk
    applies_to: {book: any}
    each: book
    measure: {name: value_at_risk, method: historical, confidence: 0.9, horizon_days: 1, window: 30}
    limit: 4000
    unit: amount
  - id: weight
    title: Weight of one share
    applies_to: {book: any}
    each: position
    measure: {name: weight}
    limit: 150 %
    unit: of_nav
"""


def site_text(channels: Sequence[str] = (TRAY,), rounds: str = "", more: str = "") -> str:
    rounds = rounds or '- {id: all, at: "18:00", files_due_by: "17:45", give_up_at: "20:00"}'
    listed = "\n".join(f"  {channel}" for channel in channels)
    return f"""\
site: Saltmere Trust
base_currency: EUR
calendar: XDUB
time_zone: UTC
books:
  - {{id: harbour, name: Harbour, currency: EUR, calendar: XDUB}}
rounds:
  {rounds}
people:
  - {{id: m.osei, name: M. Osei, address: m.osei@saltmere.example}}
channels:
{listed}
defaults: {{window: 30, confidence: 0.9}}
{more}"""


def write_site(folder: Path, days: Sequence[date] = HISTORY, **settings: Any) -> Path:
    """A site with its history up to the last of `days`, and no evening's files yet. Returns the site file."""
    for part in ("drop", "rules"):
        (folder / part).mkdir(parents=True)
    (folder / "site.yaml").write_text(site_text(**settings))
    (folder / "rules" / "limits.yaml").write_text(RULES)
    site = folder / "site.yaml"
    leave(site, "instruments.csv", "instrument,currency,kind\nQUAY,EUR,equity\nTIDE,EUR,equity\n")
    rows = [f"{day},{name},{close(name, day)}" for day in days for name in ("QUAY", "TIDE")]
    leave(site, "history.csv", "\n".join(["date,instrument,close", *rows, ""]))
    return site


def close(name: str, day: date) -> float:
    """Invented closes near 10, swinging by up to 2 %."""
    swing = (day.toordinal() * (7 if name == "QUAY" else 11)) % 17 - 8
    return round(10 * (1 + swing / 400), 4)


def leave_files(
    site: Path, day: date, big: bool = False, kinds: Sequence[str] = ("prices", "positions", "nav")
) -> None:
    """What other systems leave for an evening."""
    quantity = 1500 if big else 700
    content = {
        "prices": "instrument,close\n" + "".join(f"{name},{close(name, day)}\n" for name in ("QUAY", "TIDE")),
        "positions": f"book,instrument,quantity\nharbour,QUAY,{quantity}\nharbour,TIDE,300\n",
        "nav": f"book,nav\nharbour,{20000 + day.day}\n",
    }
    for kind in kinds:
        leave(site, f"{kind}_{day}.csv", content[kind])


def leave(site: Path, name: str, text: str) -> Path:
    path = site.parent / "drop" / name
    path.write_text(text)
    os.utime(path, (LONG_AGO, LONG_AGO))
    return path


def evening_of(day: date, clock: str = "19:00") -> str:
    return f"{day}T{clock}:00+00:00"


def command(at: str, *arguments: str | Path) -> list[str]:
    """The real command line, with the clock standing at `at`."""
    return [sys.executable, str(DRIVER), at, *map(str, arguments)]


def environment() -> dict[str, str]:
    root = str(HERE.parents[1])
    return os.environ | {"NO_COLOR": "1", "PYTHONPATH": root, "OPENBLAS_NUM_THREADS": "1", "COLUMNS": "80"}


@dataclass(frozen=True)
class Ended:
    """How a command ended; `code` is negative when a signal did it."""

    code: int
    stdout: str
    stderr: str


class Commands:
    """The real command in processes of its own, which are forks of one that has everything loaded."""

    def __init__(self, folder: Path) -> None:
        self._streams = folder / "stdout", folder / "stderr"
        self._server = subprocess.Popen(
            [sys.executable, str(DRIVER)], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, env=environment()
        )

    def __call__(self, at: str, *arguments: str | Path, kill: int = 0, bytes_at_most: int = 0) -> Ended:
        job = {
            "at": at,
            "arguments": [str(argument) for argument in arguments],
            "stdout": str(self._streams[0]),
            "stderr": str(self._streams[1]),
            "kill": kill,
            "bytes_at_most": bytes_at_most,
        }
        assert self._server.stdin and self._server.stdout
        self._server.stdin.write(json.dumps(job) + "\n")
        self._server.stdin.flush()
        code = int(self._server.stdout.readline())
        return Ended(code, *(stream.read_text() for stream in self._streams))

    def close(self) -> None:
        assert self._server.stdin and self._server.stdout
        self._server.stdin.close()
        self._server.wait(timeout=30)
        self._server.stdout.close()


def documents(ended: Ended) -> list[dict[str, Any]]:
    """What `--json` printed: one document a line and nothing else."""
    return [json.loads(line) for line in ended.stdout.splitlines()]


def account(site: Path) -> dict[str, Any]:
    """What the record of a site says, without what differs from run to run: its times and hashes."""
    opened = open_site(site)
    report = verify(opened.state / "ledger.sqlite", Archive(opened.state / "archive"))
    with open_state(opened) as state:
        index = state.index()
        evenings = [
            (str(own.recipe.date), own.recipe.round, own.edition, own.outcome.value, own.results)
            for own in all_editions(index)
        ]
        excesses = [str(own) for own in store.load(index)]
        notices = [(row.topic, row.channel, row.person, row.title, row.state) for row in waiting(index)]
        kinds = [entry.fact.KIND for entry in state.ledger.entries()]
    return {
        "problems": report.problems,
        "evenings": evenings,
        "excesses": excesses,
        "notices": sorted(notices, key=str),
        "entries": {kind: kinds.count(kind) for kind in sorted(set(kinds))},
        "delivered": sorted(path.name.split("_")[1] + path.suffix for path in (site.parent / "tray").glob("*.*")),
        "pages": sorted(path.name for path in (site.parent / "pages").glob("*.html")),
    }
