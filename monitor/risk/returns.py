"""Returns of instruments."""

from __future__ import annotations

import numpy as np

from monitor.risk.figures import Floats


def log_returns(prices: Floats) -> Floats:
    """ln(P_t / P_(t-1)) of each session. NaN where either price is missing, infinite or not positive.

    prices: (instruments, sessions + 1), ascending in time. Returns (instruments, sessions).
    """
    prices = np.asarray(prices, dtype=np.float64)
    with np.errstate(all="ignore"):
        usable = np.where(prices > 0, prices, np.nan)
        returns = np.log(usable[:, 1:] / usable[:, :-1])
        return np.where(np.isfinite(returns), returns, np.nan)
