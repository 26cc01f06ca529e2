"""Historical, normal and Cornish-Fisher value at risk, volatility and EWMA of 10,000 positions over 500 days.

    OMP_NUM_THREADS=1 .venv/bin/python tests/benchmarks/bench_tails.py [REPEATS]

Three levels (95, 97.5 and 99 %), with the shortfall. Against (1) the ordinary script, pandas and scipy objects,
position by position, a function for each method called for each level; (2) the same script, thrifty, which works out
once what the levels have in common; both run on a seeded sample of the positions and scaled up by their number; and
(3), for historical alone, whole-array numpy: np.quantile at the three levels in one call (value at risk only), in
three calls, and with the shortfall by a masked mean. Fast and slow take turns in one process; printed are medians of
processor seconds and their ratios. The figures of the sample are compared first. Goals: 500x the script, 3x
whole-array np.quantile.

The returns are simulated: Student's t with 4 degrees of freedom, volatility that comes in clusters.
"""

from __future__ import annotations

import statistics
import sys
import time
from collections.abc import Callable
from decimal import Decimal

import numpy as np
import pandas as pd
import scipy.stats
from bench_common import simulated, tell

from monitor.risk.cornish_fisher import cornish_fisher_at
from monitor.risk.historical import historical_at
from monitor.risk.normal import normal_at
from monitor.risk.volatility import ewma, sample

POSITIONS, DAYS, SAMPLE = 10_000, 500, 50
LEVELS = [Decimal("0.95"), Decimal("0.975"), Decimal("0.99")]
SHARES = [float(1 - level) for level in LEVELS]
DECAY = 0.94


def historical_of(series: pd.Series, share: float) -> tuple[float, float]:
    ordered = series.sort_values()
    within = share * len(series)
    whole = int(within + 1e-9)
    at_risk = -ordered.iloc[int(np.ceil(within - 1e-9)) - 1]
    beyond = ordered.iloc[:whole].sum() + (within - whole) * ordered.iloc[whole]
    return at_risk, -beyond / within


def normal_of(series: pd.Series, share: float) -> tuple[float, float]:
    sigma, z = series.std(), scipy.stats.norm.ppf(share)
    return -sigma * z, sigma * scipy.stats.norm.pdf(z) / share


def cornish_fisher_of(series: pd.Series, share: float) -> tuple[float, float]:
    sigma, skew, kurtosis = series.std(), scipy.stats.skew(series), scipy.stats.kurtosis(series)
    return corrected(sigma, skew, kurtosis, share)


def corrected(sigma: float, skew: float, kurtosis: float, share: float) -> tuple[float, float]:
    z = scipy.stats.norm.ppf(share)
    quantile = z + (z**2 - 1) * skew / 6 + (z**3 - 3 * z) * kurtosis / 24 - (2 * z**3 - 5 * z) * skew**2 / 36
    mean_beyond = scipy.stats.norm.pdf(z) / share
    mean_beyond *= 1 + z * skew / 6 + (z**2 - 1) * kurtosis / 24 - (2 * z**2 - 1) * skew**2 / 36
    return -sigma * quantile, sigma * mean_beyond


def ewma_of(series: pd.Series) -> float:
    seeded = pd.concat([pd.Series([(series**2).mean()]), series**2], ignore_index=True)
    return np.sqrt(seeded.ewm(alpha=1 - DECAY, adjust=False).mean().iloc[-1])


def script(frame: pd.DataFrame) -> list[list[float]]:
    """Every figure of each position, a column of the frame, in the order of `fast`."""
    answers = []
    for name in frame:
        series = frame[name]
        figures = []
        for method in (historical_of, normal_of, cornish_fisher_of):
            for share in SHARES:
                figures += method(series, share)
        answers.append([*figures, series.std(), ewma_of(series)])
    return answers


def thrifty_script(frame: pd.DataFrame) -> list[list[float]]:
    """`script` with what the levels have in common worked out once."""
    answers = []
    for name in frame:
        series = frame[name]
        figures = []
        for share in SHARES:
            figures += historical_of(series, share)
        sigma, skew, kurtosis = series.std(), scipy.stats.skew(series), scipy.stats.kurtosis(series)
        for share in SHARES:
            z = scipy.stats.norm.ppf(share)
            figures += [-sigma * z, sigma * scipy.stats.norm.pdf(z) / share]
        for share in SHARES:
            figures += corrected(sigma, skew, kurtosis, share)
        answers.append([*figures, sigma, ewma_of(series)])
    return answers


def fast(rows: np.ndarray) -> np.ndarray:
    answers = []
    for tails in (historical_at(rows, LEVELS), normal_at(rows, LEVELS), cornish_fisher_at(rows, LEVELS)):
        for tail in tails:
            answers += [tail.value_at_risk.value, tail.expected_shortfall.value]
    answers += [sample(rows).value, ewma(rows, DECAY).value]
    return np.stack(answers, axis=1)


def quantiles_in_one_call(rows: np.ndarray) -> object:
    return np.quantile(rows, SHARES, axis=1)


def quantiles_in_three_calls(rows: np.ndarray) -> object:
    return [np.quantile(rows, share, axis=1) for share in SHARES]


def quantiles_and_masked_means(rows: np.ndarray) -> object:
    answers = []
    for quantile in np.quantile(rows, SHARES, axis=1):
        beyond = rows <= quantile[:, np.newaxis]
        answers.append((quantile, np.where(beyond, rows, 0.0).sum(axis=1) / beyond.sum(axis=1)))
    return answers


def seconds(work: Callable[[], object]) -> float:
    start = time.process_time()
    work()
    return time.process_time() - start


if __name__ == "__main__":
    repeats = int(sys.argv[1]) if len(sys.argv) > 1 else 7
    random = np.random.default_rng(20)
    rows = simulated(random, POSITIONS, DAYS)
    chosen = random.choice(POSITIONS, SAMPLE, replace=False)
    frame = pd.DataFrame(rows[chosen].T)
    found = fast(rows)[chosen]
    measured = np.isfinite(found)  # Cornish-Fisher answers only inside its domain
    for way in (script, thrifty_script):
        np.testing.assert_allclose(found[measured], np.array(way(frame))[measured], rtol=1e-9)
    print(f"{measured.sum()} figures of the sample agree, {(~measured).sum()} outside the domain of Cornish-Fisher")

    contestants: dict[str, Callable[[], object]] = {
        "all of it": lambda: fast(rows),
        "  historical": lambda: historical_at(rows, LEVELS),
        "  normal": lambda: normal_at(rows, LEVELS),
        "  Cornish-Fisher": lambda: cornish_fisher_at(rows, LEVELS),
        "  volatility": lambda: sample(rows),
        "  EWMA": lambda: ewma(rows, DECAY),
        "script": lambda: script(frame),
        "thrifty script": lambda: thrifty_script(frame),
        "np.quantile, three levels in one call": lambda: quantiles_in_one_call(rows),
        "np.quantile, three calls": lambda: quantiles_in_three_calls(rows),
        "np.quantile and masked means": lambda: quantiles_and_masked_means(rows),
    }
    taken: dict[str, list[float]] = {name: [] for name in contestants}
    for _ in range(repeats):
        for name, work in contestants.items():
            taken[name].append(seconds(work))
    median = {name: statistics.median(times) for name, times in taken.items()}
    for name in ("script", "thrifty script"):
        median[name] *= POSITIONS / SAMPLE
    for name, value in median.items():
        print(f"{name:40s} {value * 1000:10.1f} ms")
    print(f"the scripts are scaled up from {SAMPLE} positions")
    for name, goal in (("script", 500), ("thrifty script", None)):
        tell("five methods, three levels", name, median[name] / median["all of it"], goal)
    for name, goal in zip(list(median)[-3:], (3, None, None), strict=True):
        tell("historical with shortfall, three levels", name, median[name] / median["  historical"], goal)
