"""Sums, components and leave-one-out of 200 overlapping groups of 10,000 positions, 500 days, 40,000 pairs in all.

    OMP_NUM_THREADS=1 .venv/bin/python tests/benchmarks/bench_components.py [REPEATS]

Against the ordinary script: pandas and scipy objects, position by position, run on a seeded sample of the groups and
scaled up by the pairs in them (the time of the script grows with the pairs). Fast and slow take turns in one process;
printed are medians of processor seconds and their ratio. Every figure of the sample is compared. Goals: sums 25x,
components 50x, leave-one-out 40x. Also printed: leave-one-out by whole rows, historical (without the days left out)
and normal.

The P&L is simulated: Student's t with 4 degrees of freedom, one factor, volatility that comes in clusters.
"""

from __future__ import annotations

import statistics
import sys
import time
from collections.abc import Callable
from decimal import Decimal
from typing import Any

import numpy as np
import pandas as pd
import scipy.stats
from bench_common import tell

from monitor.risk.components import group_pnl, historical_components
from monitor.risk.historical import historical
from monitor.risk.leave_one_out import leave_one_out, leave_one_out_by
from monitor.risk.normal import normal

POSITIONS, DAYS, GROUPS, PAIRS = 10_000, 500, 200, 40_000
CONFIDENCE = Decimal("0.99")
RANK = 5  # of 500 at 99 %
SAMPLE = 6  # groups that the script works out


def simulated(random: np.random.Generator) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """P&L, owner and position. Group sizes from a few to some hundreds; a position is in four groups on average."""
    log_volatility = np.zeros(DAYS)
    for day in range(1, DAYS):
        log_volatility[day] = 0.95 * log_volatility[day - 1] + 0.15 * random.normal()
    market = random.standard_t(4, size=DAYS)
    own = random.standard_t(4, size=(POSITIONS, DAYS))
    pull = random.uniform(-0.2, 0.8, size=(POSITIONS, 1))
    exposure = random.lognormal(11, 1.2, size=(POSITIONS, 1)) * random.choice(
        [-1, 1], p=[0.25, 0.75], size=(POSITIONS, 1)
    )
    pnl = exposure * 0.01 * np.exp(log_volatility) * (pull * market + own)
    sizes = random.multinomial(PAIRS, random.dirichlet(np.full(GROUPS, 2.0)))
    owner = np.repeat(np.arange(GROUPS), sizes)
    position = np.concatenate([np.sort(random.choice(POSITIONS, size, replace=False)) for size in sizes])
    return pnl, owner, position


def script_sums(frame: pd.DataFrame, groups: dict[int, list[str]]) -> dict[int, tuple[float, float]]:
    answers = {}
    for group, names in groups.items():
        total = pd.Series(0.0, index=frame.index)
        for name in names:
            total = total + frame[name]
        worst = total.sort_values().iloc[:RANK]
        answers[group] = (-worst.iloc[-1], -worst.mean())
    return answers


def script_components(frame: pd.DataFrame, groups: dict[int, list[str]]) -> dict[int, list[tuple[float, float]]]:
    answers = {}
    for group, names in groups.items():
        total = frame[names].sum(axis=1)
        order = total.sort_values().index
        share, n = float(1 - CONFIDENCE), len(frame)
        weights = np.diff(scipy.stats.beta.cdf(np.arange(n + 1) / n, share * (n + 1), (1 - share) * (n + 1)))
        at_risk = -total.sort_values().iloc[:RANK].iloc[-1]
        factor = at_risk / -(total.loc[order] * weights).sum()
        ordered = frame[names].loc[order]
        answers[group] = [
            (-(ordered[name] * weights).sum() * factor, -ordered[name].iloc[:RANK].mean()) for name in names
        ]
    return answers


def script_leave_one_out(frame: pd.DataFrame, groups: dict[int, list[str]]) -> dict[int, list[tuple[float, float]]]:
    answers = {}
    for group, names in groups.items():
        total = frame[names].sum(axis=1)
        left = [(total - frame[name]).sort_values().iloc[:RANK] for name in names]
        answers[group] = [(-worst.iloc[-1], -worst.mean()) for worst in left]
    return answers


def timed(job: Callable[[], Any]) -> tuple[float, Any]:
    start = time.process_time()
    answer = job()
    return time.process_time() - start, answer


def race(name: str, goal: int, fast: Callable[[], Any], slow: Callable[[], Any], scale: float, repeats: int) -> Any:
    """Run both in turns; print the medians, the script's scaled up, and the ratio. Returns both answers."""
    fast()
    ours, theirs = [], []
    for _ in range(repeats):
        took, answer = timed(fast)
        ours.append(took)
        took, expected = timed(slow)
        theirs.append(took * scale)
    one, other = statistics.median(ours), statistics.median(theirs)
    print(f"{name:<15} {one * 1000:8.1f} ms   script {other * 1000:9.0f} ms")
    tell(f"{name}, {GROUPS} groups", "script", other / one, goal)
    return answer, expected


def main(repeats: int) -> None:
    random = np.random.default_rng(20)
    pnl, owner, position = simulated(random)
    frame = pd.DataFrame({f"P{at}": row for at, row in enumerate(pnl)})
    chosen = np.sort(random.choice(GROUPS, SAMPLE, replace=False)).tolist()
    groups = {group: [f"P{at}" for at in position[owner == group]] for group in chosen}
    scale = PAIRS / sum(map(len, groups.values()))
    print(f"the script: {SAMPLE} groups, {PAIRS / scale:.0f} of {PAIRS} pairs, its time scaled by {scale:.1f}")

    def sums():
        tail = historical(group_pnl(pnl, owner, position, GROUPS), CONFIDENCE)
        return np.column_stack([tail.value_at_risk.value, tail.expected_shortfall.value])

    def components():
        found = historical_components(pnl, owner, position, GROUPS, CONFIDENCE)
        return np.column_stack([found.value_at_risk.component, found.expected_shortfall.component])

    def without():
        tail = leave_one_out(group_pnl(pnl, owner, position, GROUPS), pnl, owner, position, CONFIDENCE)
        return np.column_stack([tail.value_at_risk.value, tail.expected_shortfall.value])

    ours, script = race("sums", 25, sums, lambda: script_sums(frame, groups), scale, repeats)
    for group, expected in script.items():
        np.testing.assert_allclose(ours[group], expected, rtol=1e-10)
    for name, goal, fast, slow in (
        ("components", 50, components, script_components),
        ("leave-one-out", 40, without, script_leave_one_out),
    ):
        ours, script = race(name, goal, fast, lambda slow=slow: slow(frame, groups), scale, repeats)
        for group, expected in script.items():
            found = ours[owner == group]
            measured = ~np.isnan(found)  # value at risk has no components where they cannot be scaled
            np.testing.assert_allclose(found[measured], np.array(expected)[measured], rtol=1e-9, atol=1e-6)

    whole = group_pnl(pnl, owner, position, GROUPS)
    ways = {
        "days that matter": without,
        "whole rows": lambda: leave_one_out_by(lambda rows: historical(rows, CONFIDENCE), whole, pnl, owner, position),
        "normal": lambda: leave_one_out_by(lambda rows: normal(rows, CONFIDENCE), whole, pnl, owner, position),
    }
    took = {name: [] for name in ways}
    for _ in range(repeats):
        for name, job in ways.items():
            took[name].append(timed(job)[0])
    medians = (f"{name} {statistics.median(times) * 1000:.0f} ms" for name, times in took.items())
    print("leave-one-out by", ", ".join(medians))


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 5)
