"""What a further evening costs, as a multiple of building and evaluating its world: the demo firm, side by side.

    .venv/bin/python tests/benchmarks/bench_evening.py [EVENINGS]

Each evening of the demo is run as `duskcheck demo` does (files taken in, world, standings, register, one transaction,
notices written to a folder; no page), and right after it its recorded recipe is built and evaluated again. Printed are
the medians and their ratio. Goal: at most 3.
"""

from __future__ import annotations

import statistics
import sys
import tempfile
import time
from itertools import islice
from pathlib import Path

from demo_feed import story
from monitor import evenings
from monitor.demonstration import set_up
from monitor.evening import check_evening
from monitor.feed.build import build
from monitor.limits.evaluate import evaluate
from monitor.run import evenings_between, open_for_checking, prepare, send
from monitor.site import open_site

WARM_UP = 20


def measure(folder: Path, count: int) -> tuple[list[float], list[float]]:
    site = open_site(set_up(folder))
    whole, world = [], []
    with open_for_checking(site) as state:
        for number, evening in enumerate(islice(story.evenings(), count + WARM_UP)):
            for name, data in evening.files.items():
                (site.drop / name).write_bytes(data)
            round_ = site.settings.rounds[0]
            now = round_.moment(evening.date, round_.at)
            start = time.perf_counter()
            terms = prepare(state, now)
            for due in evenings_between(state, terms, evening.date, evening.date, None):
                check_evening(state, terms, due.day, due.round, now, tell=True)
            send(state, now)
            middle = time.perf_counter()
            recorded = evenings.latest(state.index(), evening.date, round_.id)
            if recorded is None:
                raise RuntimeError(f"the evening of {evening.date} was not recorded")
            sources = state.sources(evening.date)
            before = time.perf_counter()
            evaluate(build(recorded.recipe, sources))
            if number >= WARM_UP:
                whole.append(middle - start)
                world.append(time.perf_counter() - before)
    return whole, world


if __name__ == "__main__":
    asked = int(sys.argv[1]) if len(sys.argv) > 1 else 120
    with tempfile.TemporaryDirectory() as place:
        whole, world = measure(Path(place) / "saltmere", asked)
    one, other = statistics.median(whole), statistics.median(world)
    print(f"{len(whole)} evenings: whole {one * 1000:.1f} ms, world {other * 1000:.1f} ms, ratio {one / other:.2f}")
