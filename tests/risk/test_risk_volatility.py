"""EWMA against the recursion written out, one session after another."""

import math

import numpy as np
import pytest

from monitor.risk.figures import Lack
from monitor.risk.volatility import ewma, ewma_variance


def by_recursion(start, returns, decay):
    variance = start
    for move in returns:
        variance = decay * variance + (1 - decay) * move**2
    return variance


@pytest.mark.parametrize("decay", [0.5, 0.94, 0.97])
@pytest.mark.parametrize("sessions", [1, 2, 7, 500])
def test_ewma_is_the_recursion_started_with_the_mean_square(decay, sessions):
    returns = 0.002 + 0.01 * np.random.default_rng(sessions).standard_t(4, size=(5, sessions))
    wanted = [math.sqrt(by_recursion(float(np.mean(row**2)), row, decay)) for row in returns]
    figures = ewma(returns, decay)
    assert figures.value == pytest.approx(wanted, rel=1e-12)
    assert (figures.lack == Lack.NONE).all()

    starts = np.arange(1.0, 6.0)
    wanted = [by_recursion(start, row, decay) for start, row in zip(starts, returns, strict=True)]
    assert ewma_variance(starts, returns, decay) == pytest.approx(wanted, rel=1e-12)


def test_the_last_session_weighs_most():
    early, late = np.zeros(100), np.zeros(100)
    early[0], late[-1] = 1.0, 1.0
    older, newer = ewma(np.stack([early, late]), 0.94).value
    assert newer > 3 * older
