"""Volatility per session, and the same for a year."""

from __future__ import annotations

import math

import numpy as np

from monitor.risk.figures import Figures, Floats, screen
from monitor.risk.moments import mean_and_deviation

_BLOCK = 256


def sample(returns: Floats) -> Figures:
    """Standard deviation per session with denominator n - 1, in the unit of the returns.

    returns: (subjects, sessions), at least 2 sessions. A row of one value has volatility 0.
    """
    scenarios, lack = screen(returns, least=2)
    if scenarios.shape[1] < 2:
        return Figures.of(np.zeros(len(scenarios)), lack)
    with np.errstate(all="ignore"):
        return Figures.of(mean_and_deviation(scenarios)[1], lack)


def ewma(returns: Floats, decay: float) -> Figures:
    """Exponentially weighted volatility, the forecast for the session after the last, in the unit of the returns.

    s2(t+1) = L s2(t) + (1 - L) x(t)^2 with no mean taken off, started with the mean square of the window
    (J.P. Morgan/Reuters 1996, RiskMetrics Technical Document, 4th ed., ch. 5). returns: (subjects, sessions), at
    least 1. decay: L, above 0 and below 1; ValueError otherwise.
    """
    scenarios, lack = screen(returns, least=1)
    if scenarios.shape[1] < 1:
        return Figures.of(np.zeros(len(scenarios)), lack)
    with np.errstate(all="ignore"):
        mean_square = np.vecdot(scenarios, scenarios) / scenarios.shape[1]
        return Figures.of(np.sqrt(ewma_variance(mean_square, scenarios, decay)), lack)


def ewma_variance(start: Floats, returns: Floats, decay: float) -> Floats:
    """Take the variance `start`, forecast for the first session, through all sessions to the one after the last.

    start: (subjects,). returns: (subjects, sessions), finite. Returns (subjects,). See `ewma` for the formula.
    """
    check_decay(decay)
    subjects, n = returns.shape
    weights = (1 - decay) * decay ** np.arange(n - 1, -1, -1)
    variance = decay**n * start
    room = np.empty((min(_BLOCK, subjects), n))
    for first in range(0, subjects, _BLOCK):
        rows = slice(first, first + _BLOCK)
        squares = np.square(returns[rows], out=room[: len(returns[rows])])
        variance[rows] += np.vecdot(squares, weights)
    return np.asarray(variance)


def ewma_variances(returns: Floats, decay: float) -> Floats:
    """The variance forecast for each session from those before it, and last the one for the session to come.

    returns: (subjects, sessions), at least 1 session. Returns (subjects, sessions + 1), row by row in memory. See
    `ewma` for the formula: the first forecast is the mean square of the whole window, for nothing lies before it.
    """
    check_decay(decay)
    by_session = np.empty((returns.shape[1] + 1, returns.shape[0]))  # a session's subjects side by side: faster
    by_session[0] = np.square(returns).mean(axis=1)
    np.square(returns.T, out=by_session[1:])
    by_session[1:] *= 1 - decay
    for session in range(returns.shape[1]):
        by_session[session + 1] += decay * by_session[session]
    return np.ascontiguousarray(by_session.T)


def check_decay(decay: float) -> None:
    """Raise ValueError when the decay is not above 0 and below 1."""
    if not 0 < decay < 1:
        raise ValueError(f"the decay must be above 0 and below 1 (got {decay})")


def annualised(volatility: Figures, days_a_year: float) -> Figures:
    """Volatility a year from volatility a session, by the square root of time.

    Exact for the variance of independent sessions; too low where they are positively autocorrelated, too high where
    negatively.
    """
    with np.errstate(all="ignore"):
        return Figures.of(volatility.value * math.sqrt(days_a_year), volatility.lack)
