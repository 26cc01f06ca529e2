"""Historical simulation."""

from __future__ import annotations

import math
from decimal import Decimal
from fractions import Fraction

import numpy as np

from monitor.risk.figures import Figures, Floats, screen
from monitor.risk.tail import Tail, root_of_time, tail_share


def historical(pnl: Floats, confidence: Decimal, horizon_days: int = 1) -> Tail:
    """Value at risk and expected shortfall of equally weighted scenarios.

    pnl: (subjects, n), n >= 1. With P ascending and m = (1 - confidence) n, exactly:
    value at risk = -P_(k), k = ceil(m), the convention of Hull (RMFI, ch. 13);
    expected shortfall = -(P_(1) + ... + P_(j) + (m - j) P_(j+1)) / m, j = floor(m) (Acerbi and Tasche 2002, "On the
    coherence of expected shortfall"), or -P_(1) with exact_tail False when m < 1.
    Beyond one day both grow with the square root of the horizon.
    """
    share = tail_share(confidence)
    root = root_of_time(horizon_days)
    scenarios, lack = screen(pnl, least=1)
    subjects, n = scenarios.shape
    within = share * n
    note = np.zeros(subjects, dtype=np.int8)
    if n < 1:
        nothing = Figures.of(np.zeros(subjects), lack)
        return Tail(nothing, nothing, exact_tail=False, note=note)
    rank = math.ceil(within)
    worst = np.partition(scenarios, rank - 1, axis=1)[:, :rank]
    worst.sort(axis=1)
    counted = max(within, Fraction(1))
    weights = np.array([float(min(counted - place, 1)) for place in range(rank)])
    with np.errstate(all="ignore"):
        value_at_risk = -worst[:, -1]
        # The mean of equal losses can round to just below them; the shortfall is never below the value at risk.
        shortfall = np.maximum(-(worst * weights).sum(axis=1) / float(counted), value_at_risk)
        return Tail(
            Figures.of(value_at_risk * root, lack),
            Figures.of(shortfall * root, lack),
            exact_tail=within >= 1,
            note=note,
        )
