"""Autocorrelation against NIST's certified sets, and critical values of the tests' distributions."""

import math
import re

import numpy as np
import pytest
from scipy.special import chdtrc
from test_published_volatility import NIST, digits_right, read_nist

from monitor.risk.goodness import autocorrelation

# Correct digits reached on the data read as doubles; NumAcc3 and 4 lose theirs in reading 1000000.2 and 10000000.2.
DIGITS = {
    "Lottery": 14.5,
    "Lew": 14.5,
    "Mavro": 13.5,
    "Michelso": 13.0,
    "NumAcc1": 15,
    "NumAcc2": 14.5,
    "NumAcc3": 11.5,
    "NumAcc4": 10.5,
    "PiDigits": 14.5,
}


@pytest.mark.parametrize("name", DIGITS)
def test_lag_one_autocorrelation_has_nists_certified_digits(name):
    """Source: NIST StRD univariate, the certified values in the header of each file."""
    observations, _, _ = read_nist(name)
    header = (NIST / f"{name}.dat").read_text().partition("Data: Y")[0]
    certified = re.search(r"^Sample Autocorrelation Coefficient \(lag 1\)[^:]*:\s*(\S+)", header, re.MULTILINE)
    assert certified
    found = autocorrelation(observations[np.newaxis], 1)
    assert found.shape == (1, 1)
    assert digits_right(found[0, 0], float(certified[1])) >= DIGITS[name]


@pytest.mark.parametrize(("level", "critical"), [(0.1, 4.6051701860), (0.05, 5.9914645471), (0.01, 9.2103403720)])
def test_the_distribution_behind_jarque_bera(level, critical):
    """Chi-squared with 2 degrees of freedom: standard tables, recomputed; its quantile is -2 log(level)."""
    assert critical == pytest.approx(-2 * math.log(level), abs=5e-11)
    assert chdtrc(2.0, critical) == pytest.approx(level, rel=1e-9)
