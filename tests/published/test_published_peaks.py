"""The generalised Pareto tail against Hull's worked example of extreme value theory."""

from decimal import Decimal
from fractions import Fraction
from itertools import product

import numpy as np
import pytest

from monitor.risk.figures import Lack
from monitor.risk.peaks_over_threshold import PeaksFit, fit_peaks, pareto_tail, probability_beyond

# Hull, Risk Management and Financial Institutions, ch. 13 (from memory; recomputed from its rounded inputs): losses of
# the portfolio of 500 scenarios in $000, 22 of them above 160.
SCENARIOS, BEYOND, THRESHOLD, SHAPE, SCALE = 500, 22, 160.0, 0.436, 32.532
HALF_A_DIGIT = 0.0005

PUBLISHED = {
    # what: confidence, published, recomputed from the inputs as printed
    "value at risk, 99 %": ("0.99", 0, 227.8, 227.7393),
    "value at risk, 99.9 %": ("0.999", 0, 474.0, 473.8662),
    "shortfall, 99 %": ("0.99", 1, 337.9, 337.7860),
}

# Hull's fifteen worst losses, $000 (confirmed second-hand).
FIFTEEN_WORST = [477.841, 345.435, 282.204, 277.041, 253.385, 217.974, 205.256, 201.389, 191.269, 191.050, 185.127]
FIFTEEN_WORST += [184.450, 182.707, 180.105, 172.224]


def fit(shape: float = SHAPE, scale: float = SCALE) -> PeaksFit:
    codes = np.zeros(1, dtype=np.int8)
    row = [np.array([value]) for value in (THRESHOLD, shape, scale)]
    return PeaksFit(*row, np.array([BEYOND]), np.array([np.nan]), codes, codes)


@pytest.mark.parametrize("what", PUBLISHED)
def test_hulls_figures_from_hulls_fit(what):
    """The published figure comes from parameters before rounding: it must lie within what their half digits allow."""
    confidence, which, published, recomputed = PUBLISHED[what]
    assert pareto_tail(fit(), SCENARIOS, Decimal(confidence))[which][0] == pytest.approx(recomputed, abs=5e-5)
    corners = [
        pareto_tail(fit(SHAPE + shape, SCALE + scale), SCENARIOS, Decimal(confidence))[which][0]
        for shape, scale in product((-HALF_A_DIGIT, HALF_A_DIGIT), repeat=2)
    ]
    assert min(corners) - 0.05 <= published <= max(corners) + 0.05


def test_hulls_probability_of_losing_more_than_300():
    assert probability_beyond(fit(), SCENARIOS, np.array([300.0]))[0] == pytest.approx(0.0039, abs=5e-5)


def test_hulls_fit_itself_cannot_be_repeated_from_what_is_published():
    """Of the 22 losses above 160 only fifteen are printed, and those are too few to fit."""
    pnl = np.full((1, SCENARIOS), -THRESHOLD)
    pnl[0, : len(FIFTEEN_WORST)] = -np.array(FIFTEEN_WORST)
    refused = fit_peaks(pnl, Fraction(BEYOND, SCENARIOS))
    assert (refused.threshold[0], refused.exceedances[0]) == (THRESHOLD, 15)
    assert refused.lack.tolist() == [Lack.FEW_IN_TAIL]
