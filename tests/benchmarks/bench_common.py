"""What the benchmarks have in common: simulated returns, and the line in which a kernel is told beside its goal."""

from __future__ import annotations

import numpy as np

MARK = "= "  # a told kernel begins with it, for run_all to find


def simulated(random: np.random.Generator, positions: int, days: int) -> np.ndarray:
    """Returns (positions, days): Student's t with 4 degrees of freedom, volatility that comes in clusters."""
    log_volatility = np.zeros(days)
    for day in range(1, days):
        log_volatility[day] = 0.97 * log_volatility[day - 1] + 0.1 * random.normal()
    return 0.01 * np.exp(log_volatility) * random.standard_t(4, size=(positions, days))


def tell(kernel: str, baseline: str, ratio: float, goal: float | None = None) -> None:
    """One line: how many times faster the kernel is than the baseline. goal: None where none was set."""
    wanted = "" if goal is None else f"goal {goal:g}x"
    print(f"{MARK}{kernel:<44} {baseline:<46} {ratio:8.1f}x  {wanted}".rstrip())
