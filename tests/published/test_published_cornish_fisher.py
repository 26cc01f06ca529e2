"""The Cornish-Fisher expansion and its domain, and Student's t by matching kurtosis, against published figures."""

from decimal import Decimal

import numpy as np
import pytest
from scipy.special import ndtri

from monitor.risk.cornish_fisher import cornish_fisher, expansion, in_domain, standard_cornish_fisher_tail
from monitor.risk.figures import Lack
from monitor.risk.student import match_kurtosis, student_t

NINETY_NINE = Decimal("0.99")

# Probability, skewness, excess kurtosis: quantile. The first nine from the unit tests of a general numerical library
# in the D language (confirmed, recomputed); the last two recomputed only.
QUANTILES = [
    (0.9, 0.1, 0.0, 1.292868),
    (0.9, 0.1, 1.0, 1.220374),
    (0.9, 0.1, -1.0, 1.365363),
    (0.99, 0.1, 0.0, 2.396116),
    (0.99, 0.1, 1.0, 2.629904),
    (0.99, 0.1, -1.0, 2.162328),
    (0.01, 0.1, 0.0, -2.249053),
    (0.01, 0.1, 1.0, -2.482841),
    (0.01, 0.1, -1.0, -2.015265),
    (0.01, -0.5, 2.0, -3.0674968),
    (0.05, -0.5, 2.0, -1.7419251),
]


@pytest.mark.parametrize(("probability", "skewness", "kurtosis", "quantile"), QUANTILES)
def test_quantiles(probability, skewness, kurtosis, quantile):
    digits = len(str(quantile).split(".")[1])
    assert round(float(expansion(ndtri(probability), skewness, kurtosis)), digits) == quantile


@pytest.mark.parametrize(("probability", "skewness", "kurtosis", "quantile"), QUANTILES)
def test_the_same_quantiles_as_losses(probability, skewness, kurtosis, quantile):
    """A lower quantile of the P&L is a loss; an upper one is that of the P&L with its sign turned."""
    share, sign = (probability, -1) if probability < 0.5 else (1 - probability, 1)
    pnl_skewness = np.array([-sign * skewness])
    found, _ = standard_cornish_fisher_tail(pnl_skewness, np.array([kurtosis]), share)
    assert found[0] == pytest.approx(sign * quantile, abs=6e-7)


# Maillard 2012 (revised 2018), A user's guide to the Cornish Fisher expansion: where the quantile is monotone (abstract
# seen, formulas from memory, the bounds recomputed): skewness: least and greatest excess kurtosis.
DOMAIN = {
    0.0: (0.0, 8.0),
    0.25: (0.0973, 8.0555),
    0.5: (0.3897, 8.2214),
    1.0: (1.5690, 8.8754),
    1.5: (3.5779, 9.9221),
    2.0: (6.5371, 11.2407),
}


@pytest.mark.parametrize("skewness", [sign * size for size in DOMAIN for sign in (1, -1)])
def test_domain(skewness):
    least, greatest = DOMAIN[abs(skewness)]
    hair = 5e-5  # the bounds are printed to four digits
    around = np.array([least - 2 * hair, least + hair, (least + greatest) / 2, greatest - hair, greatest + 2 * hair])
    assert in_domain(np.full(5, skewness), around).tolist() == [False, True, True, True, False]


def test_largest_skewness_of_the_domain():
    """6 (sqrt(2) - 1) = 2.4852814 (from memory, recomputed): inside it some kurtosis will do, outside none."""
    kurtosis = np.linspace(-5, 60, 650_001)
    for skewness, any_will_do in ((2.48528, True), (2.48529, False), (-2.48528, True), (-2.48529, False)):
        assert in_domain(np.full(kurtosis.shape, skewness), kurtosis).any() == any_will_do


def test_six_of_the_published_quantiles_lie_outside_the_domain():
    """At skewness .1 the kurtosis must be at least .0156 (recomputed): (.1, 0) and (.1, -1) get no figure."""
    skewness, kurtosis = np.full(5, 0.1), np.array([0.0, -1.0, 1.0, 0.0155, 0.0157])
    assert in_domain(skewness, kurtosis).tolist() == [False, False, True, False, True]


def test_a_subject_outside_the_domain_gets_its_reason_and_no_figure():
    """Scenarios with skewness .1 and excess kurtosis of about -1 and 1, made of three values each."""
    below, above = _three_values(0.1, -1.0), _three_values(0.1, 1.0)
    tail = cornish_fisher(np.stack([below, above]), NINETY_NINE)
    assert tail.value_at_risk.lack.tolist() == tail.expected_shortfall.lack.tolist() == [Lack.OUTSIDE_DOMAIN, Lack.NONE]
    # 2.482841 is for (.1, 1) exactly; the three values come within a hundredth of that pair.
    assert tail.value_at_risk.value[1] / above.std(ddof=1) == pytest.approx(2.482841, abs=0.01)


def _three_values(skewness, kurtosis, n=100_000):
    """Scenarios -a, 0, b with mean 0, variance 1 and these moments, up to the rounding of their counts."""
    spread = np.sqrt(4 * (kurtosis + 3) - 3 * skewness**2)
    a, b = (spread - skewness) / 2, (spread + skewness) / 2
    low, high = round(n / (a * (a + b))), round(n / (b * (a + b)))
    return np.repeat([-a, 0.0, b], [low, n - low - high, high])


# Student's t with unit variance at 99 %: quantile, shortfall (recomputed; the formula is McNeil, Frey and Embrechts,
# section 2.2, from memory). Matching reaches nu above 4 only, so the rows of nu 3 and 4 cannot be used: their kurtosis
# does not exist.
UNIT_VARIANCE = {5: (2.606464, 3.448837), 10: (2.471991, 3.008184), 30: (2.373940, 2.768459)}


@pytest.mark.parametrize(("nu", "nonzero", "n"), [(5, 4, 36), (10, 10, 40), (30, 26, 84)])
def test_student_of_unit_variance_by_matching_kurtosis(nu, nonzero, n):
    """Equally many -x and x among zeros have excess kurtosis n / nonzero - 3, which is 6 / (nu - 4) here."""
    row = np.repeat([-1.0, 0.0, 1.0], [nonzero // 2, n - nonzero, nonzero // 2])
    row /= row.std(ddof=1)
    assert match_kurtosis(row[np.newaxis], "zero").nu[0] == pytest.approx(nu, rel=1e-12)
    tail = student_t(row[np.newaxis], NINETY_NINE, fit="kurtosis")
    found = (tail.value_at_risk.value[0], tail.expected_shortfall.value[0])
    assert found == pytest.approx(UNIT_VARIANCE[nu], abs=5.1e-7)
