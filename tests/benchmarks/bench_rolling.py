"""Value at risk and shortfall at 99 % of every window of 2,000 histories of 2,500 days.

    OMP_NUM_THREADS=1 .venv/bin/python tests/benchmarks/bench_rolling.py [REPEATS] [WINDOW]

Against (1) the rolling script: pandas rolling.apply with a function that sorts the window, once for the value at risk
and once for the shortfall, position by position, (2) a loop of numpy that sorts each window once for both figures,
and (3) pandas rolling.quantile alone (value at risk only), all on seeded samples scaled up by their number. Fast and
slow take turns in one process; printed are medians of processor seconds and their ratios. The figures of the samples
are compared first. Goals: 500x the script, 2.5x rolling.quantile.

The returns are simulated: Student's t with 4 degrees of freedom, volatility that comes in clusters.
"""

from __future__ import annotations

import math
import statistics
import sys
import time
from collections.abc import Callable
from decimal import Decimal

import numpy as np
import pandas as pd
from bench_common import simulated, tell

from monitor.risk.rolling import rolling_historical

POSITIONS, DAYS = 2_000, 2_500
SCRIPTED, LOOPED, ROLLED = 2, 10, 100  # positions in the samples
CONFIDENCE = Decimal("0.99")


def at_risk(window: pd.Series) -> float:
    return -window.sort_values().iloc[math.ceil(len(window) / 100) - 1]


def shortfall(window: pd.Series) -> float:
    within = len(window) / 100
    ordered = window.sort_values()
    whole = int(within)
    return -(ordered.iloc[:whole].sum() + (within - whole) * ordered.iloc[whole]) / within


def script(rows: np.ndarray, window: int) -> tuple[np.ndarray, np.ndarray]:
    first, second = [], []
    for row in rows:
        rolling = pd.Series(row).rolling(window)
        first.append(rolling.apply(at_risk).to_numpy()[window - 1 :])
        second.append(rolling.apply(shortfall).to_numpy()[window - 1 :])
    return np.array(first), np.array(second)


def loop(rows: np.ndarray, window: int) -> tuple[np.ndarray, np.ndarray]:
    within = window / 100
    whole = int(within)
    both = np.empty((2, len(rows), DAYS - window + 1))
    for place, row in enumerate(rows):
        for start in range(DAYS - window + 1):
            ordered = np.sort(row[start : start + window])
            both[0, place, start] = -ordered[math.ceil(within) - 1]
            both[1, place, start] = -(ordered[:whole].sum() + (within - whole) * ordered[whole]) / within
    return both[0], both[1]


def rolling_quantile(rows: np.ndarray, window: int) -> object:
    return [pd.Series(row).rolling(window).quantile(0.01) for row in rows]


def seconds(work: Callable[[], object]) -> float:
    start = time.process_time()
    work()
    return time.process_time() - start


if __name__ == "__main__":
    repeats = int(sys.argv[1]) if len(sys.argv) > 1 else 3
    window = int(sys.argv[2]) if len(sys.argv) > 2 else 500
    rows = simulated(np.random.default_rng(22), POSITIONS, DAYS)
    tail = rolling_historical(rows, window, CONFIDENCE)
    for slow, size in ((script, SCRIPTED), (loop, LOOPED)):
        wanted_at_risk, wanted_shortfall = slow(rows[:size], window)
        np.testing.assert_array_equal(tail.value_at_risk.value[:size], wanted_at_risk)
        np.testing.assert_allclose(tail.expected_shortfall.value[:size], wanted_shortfall, rtol=1e-12)

    contestants: dict[str, tuple[int, Callable[[], object]]] = {
        "rolling_historical": (POSITIONS, lambda: rolling_historical(rows, window, CONFIDENCE)),
        "pandas rolling.apply, both figures": (SCRIPTED, lambda: script(rows[:SCRIPTED], window)),
        "numpy sort of each window": (LOOPED, lambda: loop(rows[:LOOPED], window)),
        "pandas rolling.quantile, one figure": (ROLLED, lambda: rolling_quantile(rows[:ROLLED], window)),
    }
    taken: dict[str, list[float]] = {name: [] for name in contestants}
    for _ in range(repeats):
        for name, (size, work) in contestants.items():
            taken[name].append(seconds(work) * POSITIONS / size)
    ours = statistics.median(taken["rolling_historical"])
    print(f"rolling_historical: {ours:.2f} s")
    for name, goal in zip(list(taken)[1:], (500, None, 2.5), strict=True):
        median, size = statistics.median(taken[name]), contestants[name][0]
        print(f"{name}: {median:.2f} s, scaled up from {size} positions")
        tell(f"rolling value at risk and shortfall, {window} days", name, median / ours, goal)
