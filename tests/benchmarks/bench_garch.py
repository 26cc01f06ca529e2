"""GARCH(1,1) fitted to many series at once, as a multiple of a loop of the library arch: side by side in one process.

    OMP_NUM_THREADS=1 .venv/bin/python tests/benchmarks/bench_garch.py [SERIES]

1,000 sessions, constant mean. Simulated returns: t(4) with volatility clusters (alpha .02 to .15, persistence .85 to
.995), seeded. The baseline is the ordinary script: a pandas Series, `arch_model(...).fit()`, one after another, on a
sample of 100 and scaled up by the number of series. Both use arch's start (backcast). Timed in turns, 5 times, by the
processor time of this process; printed are the medians, their ratio (goal: at least 15), and the share of the sample
in which ours, and arch's, is more than 0.1 below the better likelihood (goal: at most 1 %). It fails when the two do
not agree where they reach the same maximum.
"""

from __future__ import annotations

import math
import statistics
import sys
import time
import warnings

import numpy as np
import pandas as pd
from arch import arch_model
from bench_common import tell

from monitor.risk.garch import conditional_variances, fit_garch

SESSIONS, SAMPLE, TURNS = 1000, 100, 5


def clustered(seed: int, rows: int) -> np.ndarray:
    random = np.random.RandomState(seed)
    alpha, persistence = random.uniform(0.02, 0.15, rows), random.uniform(0.85, 0.995, rows)
    shocks = random.standard_t(4, size=(SESSIONS + 300, rows)) / math.sqrt(2)
    returns, h = np.empty_like(shocks), np.ones(rows)
    for t, shock in enumerate(shocks):
        returns[t] = np.sqrt(h) * shock
        h = 1 - persistence + alpha * returns[t] ** 2 + (persistence - alpha) * h
    return np.ascontiguousarray(0.01 * returns[300:].T)


def by_arch(series: list[pd.Series]) -> tuple[np.ndarray, np.ndarray]:
    """Log-likelihoods and forecast volatilities, in the unit of the returns."""
    levels, volatilities = [], []
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # of climbs that arch did not finish
        for one in series:
            result = arch_model(one * 100, mean="Constant", vol="GARCH", p=1, q=1, rescale=False).fit(
                disp="off", show_warning=False
            )
            levels.append(result.loglikelihood + SESSIONS * math.log(100))
            volatilities.append(math.sqrt(result.forecast(horizon=1, reindex=False).variance.iloc[-1, 0]) / 100)
    return np.array(levels), np.array(volatilities)


def measure(count: int) -> None:
    returns = clustered(2025, count)
    sample = [pd.Series(row) for row in returns[:SAMPLE]]
    fit_garch(returns[:8], "backcast")
    by_arch(sample[:2])
    ours, theirs = [], []
    for _ in range(TURNS):
        start = time.process_time()
        fit = fit_garch(returns, "backcast")
        volatility = np.sqrt(conditional_variances(fit, returns)[:, -1])
        middle = time.process_time()
        level, reference = by_arch(sample)
        ours.append((middle - start) / count)
        theirs.append((time.process_time() - middle) / len(sample))

    ahead = fit.log_likelihood[:SAMPLE] - level
    same = np.abs(ahead) < 1e-4
    apart = np.abs(volatility[:SAMPLE] / reference - 1)[same].max()
    if apart > 1e-3:
        raise RuntimeError(f"the volatilities do not agree: {apart:.1e} apart at the same maximum")
    one, other = statistics.median(ours), statistics.median(theirs)
    print(
        f"{count} series of {SESSIONS} sessions: ours {one * 1000:.2f} ms a series, arch {other * 1000:.1f} ms a series"
    )
    turns = ", ".join(f"{script / batch:.1f}" for batch, script in zip(ours, theirs, strict=True))
    print(f"by turn {turns}")
    tell(f"GARCH(1,1), {count} series", "a loop of arch", other / one, 15)
    print(
        f"more than 0.1 below the better likelihood: ours {(ahead < -0.1).mean():.1%} (goal 1 %), "
        f"arch {(ahead > 0.1).mean():.1%}; not settled {(~fit.converged).sum()}"
    )
    print(f"same maximum in {same.mean():.0%}, volatilities there at most {apart:.1e} apart")


if __name__ == "__main__":
    measure(int(sys.argv[1]) if len(sys.argv) > 1 else 1000)
