"""Simulated value at risk and shortfall of linear groups: each group's own draws against joint draws of all factors.

    OMP_NUM_THREADS=1 .venv/bin/python tests/benchmarks/bench_monte_carlo.py [ROUNDS]

500 factors, 200 overlapping groups of about 50 factors each, 100,000 paths, 99 %; 500 days of returns t(5) with
clusters of volatility that all factors share. The baseline is the ordinary way: the factors' covariance, its Cholesky
factor, joint draws of multivariate t(5) in pieces of 5,000 paths, P&L of each group, np.quantile and the mean beyond
it. It is run whole, on no sample. Ours is `monte_carlo`, and the baseline alternates with it in one process; printed
are medians of processor seconds and their ratio, and the part that ours spends on the fit of nu for each group, which
the baseline does not make. Then ours with half of the groups in each of two threads, whose figures are the same as no
group's draws depend on another's: by elapsed time, so that it says something only where two processors are idle.
Checked: each lies within five standard errors of its own closed form, and both agree within five standard errors of
their difference where they draw the same law. Goals: at least 8; 15 in two threads.
"""

from __future__ import annotations

import statistics
import sys
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from decimal import Decimal
from fractions import Fraction

import numpy as np
from bench_common import tell

from monitor.risk.monte_carlo import PATHS, SimulatedTail, monte_carlo, simulate_standard_tail
from monitor.risk.randomness import random_state
from monitor.risk.student import standard_student_tail, student_t
from monitor.risk.student_fit import fit_student

FACTORS, GROUPS, DAYS, NU, AT_ONCE = 500, 200, 500, 5.0, 5_000
CONFIDENCE, SHARE = Decimal("0.99"), Fraction(1, 100)


def market() -> tuple[np.ndarray, np.ndarray]:
    """Exposures (groups, factors) and returns (factors, days)."""
    random = np.random.RandomState(8)
    loadings = random.normal(size=(FACTORS, 12))
    volatility = np.empty(DAYS)
    log_volatility = 0.0
    for day in range(DAYS):
        log_volatility = 0.97 * log_volatility + 0.1 * random.normal()
        volatility[day] = 0.01 * np.exp(log_volatility)
    common = loadings @ random.normal(size=(12, DAYS)) / 4 + random.normal(size=(FACTORS, DAYS))
    returns = common * np.sqrt(NU / random.chisquare(NU, size=DAYS)) * volatility
    exposures = (random.random_sample((GROUPS, FACTORS)) < 0.1) * random.normal(1e6, 5e5, size=(GROUPS, FACTORS))
    return exposures, returns


def joint(exposures: np.ndarray, returns: np.ndarray, random: np.random.RandomState) -> np.ndarray:
    """Value at risk and shortfall (2, groups) from joint draws of the t(nu) that has the sample's covariance."""
    root = np.linalg.cholesky(np.cov(returns) * (NU - 2) / NU + 1e-12 * np.eye(FACTORS))
    profits = np.empty((GROUPS, PATHS))
    for start in range(0, PATHS, AT_ONCE):
        normals = random.standard_normal((AT_ONCE, FACTORS)) @ root.T
        draws = normals * np.sqrt(NU / random.chisquare(NU, size=(AT_ONCE, 1)))
        profits[:, start : start + AT_ONCE] = exposures @ draws.T
    figures = np.empty((2, GROUPS))
    for group, profit in enumerate(profits):
        quantile = np.quantile(profit, float(SHARE))
        figures[:, group] = -quantile, -profit[profit <= quantile].mean()
    return figures


def check(exposures: np.ndarray, returns: np.ndarray, slow: np.ndarray, fast: object, pnl: np.ndarray) -> None:
    """Raise where a figure lies too far from its closed form, or slow and fast from each other."""
    closed = student_t(pnl, CONFIDENCE)
    for name in ("value_at_risk", "expected_shortfall"):
        apart = (getattr(fast, name).value - getattr(closed, name).value) / getattr(fast, f"{name}_error")
        print(f"{name}: ours against its closed form, largest of {GROUPS}: {np.abs(apart).max():.2f} standard errors")
        if np.abs(apart).max() > 5:
            raise RuntimeError(f"{name} is too far from its closed form")
    covariance = np.cov(returns) * (NU - 2) / NU + 1e-12 * np.eye(FACTORS)
    scale = np.sqrt(np.einsum("gf,fk,gk->g", exposures, covariance, exposures, optimize=True))
    told = np.array(standard_student_tail(np.array([NU]), float(SHARE))).reshape(2)
    same_law = np.array(
        [simulate_standard_tail(NU, SHARE, 1, PATHS, random_state("bench", str(group))) for group in range(GROUPS)]
    ).T
    for place, name in enumerate(("value_at_risk", "expected_shortfall")):
        standard, error = slow[place] / scale, same_law[2 + place].mean()
        from_truth = np.abs((standard - told[place]) / error).max()
        from_ours = np.abs((standard - same_law[place]) / (error * np.sqrt(2))).max()
        print(
            f"{name}: baseline against its closed form {from_truth:.2f}, against ours {from_ours:.2f} standard errors"
        )
        if max(from_truth, from_ours) > 5:
            raise RuntimeError(f"{name} of baseline and ours disagree")


def in_two_threads(work: Callable[[slice], object]) -> None:
    with ThreadPoolExecutor(2) as pool:
        list(pool.map(work, (slice(0, GROUPS // 2), slice(GROUPS // 2, GROUPS))))


if __name__ == "__main__":
    rounds = int(sys.argv[1]) if len(sys.argv) > 1 else 5
    exposures, returns = market()
    pnl = exposures @ returns
    names = [("bench", "2026-03-02", f"group-{group}") for group in range(GROUPS)]

    def ours(groups: slice) -> SimulatedTail:
        return monte_carlo(pnl[groups], CONFIDENCE, names[groups], distribution="student_t")

    work: dict[str, Callable[[], object]] = {
        "joint": lambda: joint(exposures, returns, np.random.RandomState(rounds)),
        "ours": lambda: ours(slice(0, GROUPS)),
        "fit": lambda: fit_student(pnl, "zero"),
        "two threads": lambda: in_two_threads(ours),
    }
    processor: dict[str, list[float]] = {name: [] for name in work}
    elapsed: dict[str, list[float]] = {name: [] for name in work}
    for _ in range(rounds):
        for name, one in work.items():
            start, since = time.process_time(), time.perf_counter()
            one()
            processor[name].append(time.process_time() - start)
            elapsed[name].append(time.perf_counter() - since)
    check(exposures, returns, joint(exposures, returns, np.random.RandomState(8)), ours(slice(0, GROUPS)), pnl)
    for name in work:
        spent, passed = statistics.median(processor[name]), statistics.median(elapsed[name])
        print(f"{name:<12} {spent:.3f} processor seconds, {passed:.3f} s elapsed, {rounds} rounds")
    baseline, one_by_one = statistics.median(processor["joint"]), statistics.median(processor["ours"])
    tell(f"Monte Carlo, {GROUPS} groups", "joint draws, processor time", baseline / one_by_one, 8)
    together = statistics.median(elapsed["joint"]) / statistics.median(elapsed["two threads"])
    tell("the same, half of the groups in each of two threads", "joint draws in one, elapsed time", together, 15)
