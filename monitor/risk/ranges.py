"""Volatility per session from the day's range of prices: Parkinson, and Garman and Klass.

Both take the price within a session to be a geometric Brownian motion without drift, seen all the time. What that
leaves out pushes both the same way, DOWN: the move from one close to the next open is not in any range, so they
understate the volatility from close to close wherever markets close for the night; and with few trades a session the
highest and lowest trade lie inside the true range (Garman and Klass 1980). Trends push them up.

Holds for both: the figure does not depend on the unit of the prices, on the order of sessions or of subjects, on what
happens between sessions; a subject alone is the subject in a block, bit for bit.
"""

from __future__ import annotations

import math

import numpy as np

from monitor.risk.figures import Booleans, Codes, Figures, Floats, Lack, screen


def parkinson(high: Floats, low: Floats, counted: Booleans | None = None) -> Figures:
    """sigma^2 = mean(ln(H / L)^2) / (4 ln 2) (Parkinson 1980, "The extreme value method for estimating the variance of
    the rate of return"): on its assumptions about 5 times as efficient as squared returns from open to close.

    high, low: (subjects, sessions), prices, at least 1 session. counted: alike, the sessions on which the subject's
    own market was open; all when left out. Every one of those must have finite 0 < L <= H, else the subject lacks
    NO_RANGE: no session is left out in silence. H = L throughout gives 0. Raises ValueError when the shapes differ.
    """
    (highs, lows), lack = _checked(high, low)
    usable = np.isfinite(highs) & np.isfinite(lows) & (lows > 0) & (lows <= highs)
    with np.errstate(all="ignore"):
        return _root_of_mean(np.square(np.log(highs / lows)) / (4 * math.log(2)), usable, lack, counted)


def garman_klass(open_: Floats, high: Floats, low: Floats, close: Floats, counted: Booleans | None = None) -> Figures:
    """sigma^2 = mean(ln(H / L)^2 / 2 - (2 ln 2 - 1) ln(C / O)^2) (Garman and Klass 1980, "On the estimation of security
    price volatilities from historical data"): the practical form of their best estimator, for a session without the
    night before it; on its assumptions about 7.4 times as efficient as squared returns from open to close.

    open_, high, low, close: (subjects, sessions), prices, at least 1 session; counted as for `parkinson`. Every session
    counted must have finite 0 < L <= O, C <= H, else the subject lacks NO_RANGE; so kept, no session's term is
    negative. H = L throughout gives 0. Raises ValueError when the shapes differ.
    """
    (opens, highs, lows, closes), lack = _checked(open_, high, low, close)
    finite = np.isfinite(highs) & np.isfinite(lows) & (lows > 0)
    inside = (lows <= opens) & (opens <= highs) & (lows <= closes) & (closes <= highs)
    with np.errstate(all="ignore"):
        ranges, moves = np.square(np.log(highs / lows)), np.square(np.log(closes / opens))
        return _root_of_mean(0.5 * ranges - (2 * math.log(2) - 1) * moves, finite & inside, lack, counted)


def _checked(*prices: Floats) -> tuple[list[Floats], Codes]:
    """The matrices in the layout of every method, and TOO_SHORT where there is no session."""
    if len({np.shape(matrix) for matrix in prices}) != 1:
        raise ValueError(f"the prices must have one shape (got {', '.join(str(np.shape(m)) for m in prices)})")
    matrices = [screen(matrix, least=1)[0] for matrix in prices]
    rows, sessions = matrices[0].shape
    return matrices, np.full(rows, Lack.NONE if sessions else Lack.TOO_SHORT, dtype=np.int8)


def _root_of_mean(terms: Floats, usable: Booleans, lack: Codes, counted: Booleans | None) -> Figures:
    """The root of each row's mean over the sessions counted, where every one of these is usable."""
    if counted is None:
        counted = np.ones_like(usable)
    sessions = counted.sum(axis=1)
    unusable = (counted & ~usable).any(axis=1) | (sessions == 0)
    lack = np.where((lack == Lack.NONE) & unusable, Lack.NO_RANGE, lack).astype(np.int8)
    total = np.where(counted, terms, 0.0).sum(axis=1) / np.maximum(sessions, 1)
    return Figures.of(np.sqrt(np.maximum(total, 0.0)), lack)
