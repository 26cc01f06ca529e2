"""Historical simulation on every window of a long history, exactly and at once."""

from __future__ import annotations

import math
from decimal import Decimal
from fractions import Fraction

import numpy as np

from monitor.risk.figures import Figures, Floats, Lack
from monitor.risk.tail import Tail, tail_share

_ROWS = 512
_BYTES = 2**25  # of the lists kept for one block of rows: they shrink the block when the window or the tail is long


def rolling_historical(pnl: Floats, window: int, confidence: Decimal) -> Tail:
    """Value at risk and expected shortfall by `historical.historical` of every `window` consecutive sessions.

    pnl: (subjects, sessions) in time order. Every array of the answer is (subjects, sessions - window + 1): column t
    is measured on sessions t to t + window - 1 and so is the forecast for session t + window. With fewer sessions
    than the window there is no column. A session that is missing or not finite takes the figures of the windows that
    hold it, and of no others. The value at risk is that of `historical` to the last bit, the shortfall to 1e-12 of
    the largest scenario in the tail (it adds the same scenarios in another order).

    Time is cut into blocks as long as the window. A window starts in one block and ends in the next, so its k worst
    are among the k worst from its start to the end of the one and the k worst from there to its end: two lists that
    are kept up to date session by session, for many subjects together (the idea of van Herk 1992, "A fast algorithm
    for local minimum and maximum filters on rectangular and octagonal kernels", for the k smallest instead of one).

    Holds: whatever holds of `historical`, window by window; a row alone = the row in a block to the last bit.
    Raises ValueError when the window is not at least 1 or pnl does not have two axes.
    """
    share = tail_share(confidence)
    if window < 1:
        raise ValueError(f"the window must be at least 1 session (got {window})")
    if pnl.ndim != 2:
        raise ValueError(f"the matrix must be (subjects, sessions) (got {pnl.ndim} axes)")
    within = share * window
    subjects, sessions = pnl.shape
    windows = max(sessions - window + 1, 0)
    value_at_risk, shortfall = np.empty((subjects, windows)), np.empty((subjects, windows))
    rank = math.ceil(within)
    rows = min(_ROWS, max(_BYTES // (3 * 8 * rank * (window + 1)), 1))
    # Two columns at least, for numpy adds down a single one in another order.
    lists = np.empty((3, window + 1, rank, max(min(rows, subjects), 2)))
    for start in range(0, subjects if windows else 0, rows):
        block = slice(start, start + rows)
        value_at_risk[block], shortfall[block] = _roll(pnl[block], max(within, Fraction(1)), lists)
    lack = np.where(np.isnan(value_at_risk), Lack.NOT_FINITE, Lack.NONE).astype(np.int8)
    return Tail(
        Figures.of(value_at_risk, lack),
        Figures.of(shortfall, lack),
        exact_tail=within >= 1,
        note=np.zeros_like(lack),
    )


def _roll(pnl: Floats, counted: Fraction, lists: Floats) -> tuple[Floats, Floats]:
    """Both figures of a few rows, (rows, windows), NaN where a window holds what is not finite.

    counted: how many scenarios the shortfall is the mean of. lists: room to work in, (3, window + 1, rank, rows or
    more), one for all calls because fresh memory costs more than the arithmetic.
    """
    window, rank, width = lists.shape[1] - 1, *lists.shape[2:]
    subjects, sessions = pnl.shape
    windows = sessions - window + 1
    by_session = np.zeros((sessions, width))
    by_session[:, :subjects] = np.where(np.isfinite(pnl), pnl, np.nan).T
    last, before_last = np.empty((windows, width)), np.empty((windows, width))
    to_end, from_start, merged = lists
    with np.errstate(all="ignore"):
        for first in range(0, windows, window):
            middle = first + window
            count = min(window, windows - first)
            _keep_smallest(by_session[first:middle][::-1], to_end[::-1])
            _keep_smallest(by_session[middle : middle + count - 1], from_start[:count])
            here = slice(first, first + count)
            for length, figure, summary in ((rank, last, np.maximum), (rank - 1, before_last, np.add)):
                smallest = merged[:count, :length]
                # The smallest of two ascending lists, in no order.
                np.minimum(to_end[:count, :length], from_start[:count, :length][:, ::-1], out=smallest)
                summary.reduce(smallest, axis=1, out=figure[here])
        value_at_risk = -last
        shortfall = -(before_last + float(counted - (rank - 1)) * last) / float(counted)
        # As in `historical`: the mean of equal losses can round to just below them.
        np.maximum(shortfall, value_at_risk, out=shortfall)
    return value_at_risk[:, :subjects].T, shortfall[:, :subjects].T


def _keep_smallest(sessions: Floats, lists: Floats) -> None:
    """Fill lists[i], (rank, rows), with the smallest of the first i sessions: ascending, infinity if fewer.

    sessions: (sessions, rows). lists: (sessions + 1, rank, rows). A NaN fills all lists from its session on.
    """
    lists[0] = np.inf
    for session, before, after in zip(sessions, lists[:-1], lists[1:], strict=True):
        np.minimum(before, session, out=after)
        np.maximum(after[1:], before[:-1], out=after[1:])
