"""An old evening again: its recorded recipe built and evaluated from the archive, and held against the record."""

from __future__ import annotations

from monitor import results
from monitor.evenings import CheckedEvening
from monitor.feed.build import build
from monitor.limits.evaluate import evaluate
from monitor.state import State
from monitor.world import Standings


def replay(state: State, evening: CheckedEvening) -> Standings:
    """What the recorded recipe says today, from the archived files, rules, settings and sessions alone."""
    return evaluate(build(evening.recipe, state.recorded_sources(evening.sessions)))


def same_as_recorded(state: State, evening: CheckedEvening) -> bool:
    """Whether a replay gives the recorded results to the last digit."""
    return results.encode(replay(state, evening)) == state.archive.get(evening.results)
