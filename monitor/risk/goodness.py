"""Whether scenarios look like what a model takes them for: normal, and without clusters of large moves.

A test that does not reject proves nothing: with few scenarios it cannot. One that rejects says that the model is
wrong, not by how much the figure is.
"""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction

import numpy as np
import numpy.typing as npt
from scipy.special import chdtrc

from monitor.risk.figures import LACK_TEXT, Booleans, Codes, Figures, Floats, Lack, screen
from monitor.risk.moments import constant
from monitor.risk.peaks_over_threshold import TENTH
from monitor.risk.tail_index import TailIndex, tail_index

LAGS = 10  # two weeks of sessions
SIGNIFICANCE = 0.05  # common practice, no source

_BLOCK = 256


@dataclass(frozen=True)
class Normality(Figures):
    """Jarque and Bera's test. value: the statistic. All fields (subjects,), NaN where lack is not NONE.

    p_value: of scenarios that are normal. skewness and excess_kurtosis: what the statistic is made of, no unit.
    """

    p_value: Floats
    skewness: Floats
    excess_kurtosis: Floats


@dataclass(frozen=True)
class Clusters(Figures):
    """Ljung and Box's test on squares. value: the statistic. All fields (subjects,), NaN where lack is not NONE.

    p_value: of squares that do not depend on those before. mean_autocorrelation: of the squares, over the lags; above
    0 when large moves follow large ones.
    """

    p_value: Floats
    mean_autocorrelation: Floats


@dataclass(frozen=True)
class FitReport:
    """What the tests say of each subject, and a plain sentence on it, one a subject."""

    normality: Normality
    clusters: Clusters
    tail: TailIndex
    sentences: tuple[str, ...]


def jarque_bera(pnl: Floats) -> Normality:
    """Are the scenarios normal? n / 6 (S^2 + K^2 / 4), chi-squared with 2 degrees of freedom when they are.

    pnl: (subjects, n), n >= 4. S and K: skewness and excess kurtosis with moments of denominator n (Jarque and Bera
    1980, "Efficient tests for normality, homoscedasticity and serial independence of regression residuals"). The
    chi-squared holds for long samples: at a few hundred scenarios the p-value is rough. A flat book (all scenarios 0)
    has statistic 0 and p-value 1: nothing to test.
    Properties: free of the unit and of any sure gain; the order of the scenarios does not matter; a row alone is the
    row in a block.
    """
    scenarios, lack = screen(pnl, least=4)
    subjects, n = scenarios.shape
    skewness, kurtosis = np.zeros(subjects), np.zeros(subjects)
    with np.errstate(all="ignore"):
        for block in _moving(scenarios, lack):
            deviations = _in_units(scenarios[block] - scenarios[block].mean(axis=1)[:, np.newaxis])
            squares = np.square(deviations)
            variance = squares.mean(axis=1)
            skewness[block] = (squares * deviations).mean(axis=1) / variance**1.5
            kurtosis[block] = np.square(squares).mean(axis=1) / np.square(variance) - 3
        statistic = Figures.of(n / 6 * (np.square(skewness) + np.square(kurtosis) / 4), lack)
        missing = statistic.lack != Lack.NONE
        skewness[missing], kurtosis[missing] = np.nan, np.nan
        return Normality(statistic.value, statistic.lack, chdtrc(2.0, statistic.value), skewness, kurtosis)


def ljung_box_on_squares(pnl: Floats, lags: int = LAGS) -> Clusters:
    """Do large moves cluster? n (n + 2) sum over j of r_j^2 / (n - j), chi-squared with `lags` degrees if not.

    pnl: (subjects, n), in time order, n > lags. r_j: autocorrelation of the squared scenarios, no mean taken off
    before squaring (Ljung and Box 1978, "On a measure of lack of fit in time series models"; on squares: McLeod and Li
    1983, "Diagnostic checking ARMA time series models using squared-residual autocorrelations"). The chi-squared
    holds for long samples with a finite eighth moment: with very heavy tails the p-value is rough. A flat book has
    statistic 0 and p-value 1; a row whose squares are all equal lacks a spread as CONSTANT.
    Properties: free of the unit; not of a sure gain, nor of the order of the scenarios; a row alone is the row in a
    block. Raises ValueError below 1 lag.
    """
    if lags < 1:
        raise ValueError(f"the lags must be at least 1 (got {lags})")
    scenarios, lack = screen(pnl, least=lags + 1)
    subjects, n = scenarios.shape
    statistic, mean = np.zeros(subjects), np.zeros(subjects)
    with np.errstate(all="ignore"):
        weights = n * (n + 2) / (n - np.arange(1.0, lags + 1))
        for block in _moving(np.abs(scenarios), lack):
            correlations = autocorrelation(np.square(_in_units(scenarios[block])), lags)
            statistic[block] = (np.square(correlations) * weights).sum(axis=1)
            mean[block] = correlations.mean(axis=1)
        figures = Figures.of(statistic, lack)
        mean[figures.lack != Lack.NONE] = np.nan
        return Clusters(figures.value, figures.lack, chdtrc(float(lags), figures.value), mean)


def autocorrelation(series: Floats, lags: int) -> Floats:
    """r_j = sum of (x_t - m)(x_(t+j) - m) / sum of (x_t - m)^2 for j = 1 ... lags. Returns (subjects, lags).

    series: (subjects, n), finite, n > lags. NaN for a row of one value.
    """
    deviations = series - series.mean(axis=1)[:, np.newaxis]
    n = series.shape[1]
    products = [(deviations[:, j:] * deviations[:, : n - j]).sum(axis=1) for j in range(1, lags + 1)]
    with np.errstate(all="ignore"):
        return np.asarray(np.stack(products, axis=1) / np.square(deviations).sum(axis=1)[:, np.newaxis])


def describe_fit(pnl: Floats, tail_share: Decimal | Fraction = TENTH, lags: int = LAGS) -> FitReport:
    """The three tests, and for each subject one sentence that a reader without statistics can use.

    pnl: (subjects, n), in time order. A test rejects when its p-value is below SIGNIFICANCE. What is not tested is
    said, with the reason.
    """
    normality, clusters, tail = jarque_bera(pnl), ljung_box_on_squares(pnl, lags), tail_index(pnl, tail_share)
    flat = np.asarray((np.asarray(pnl) == 0).all(axis=1))
    sentences = (_sentence(normality, clusters, tail, flat, lags, place) for place in range(len(flat)))
    return FitReport(normality, clusters, tail, tuple(sentences))


def _sentence(normality: Normality, clusters: Clusters, tail: TailIndex, flat: Booleans, lags: int, at: int) -> str:
    if normality.lack[at] != Lack.NONE and clusters.lack[at] != Lack.NONE:
        return f"Not tested: {LACK_TEXT[Lack(normality.lack[at])]}."
    if flat[at]:
        return "Every scenario is 0: there is nothing to test."
    shape, shape_warning = _about_shape(normality, tail, at)
    order, order_warning = _about_order(clusters, lags, at)
    warnings = " and ".join(warning for warning in (shape_warning, order_warning) if warning)
    return f"{shape}; {order}{': ' if warnings else ''}{warnings}."


def _about_shape(normality: Normality, tail: TailIndex, at: int) -> tuple[str, str]:
    """What is said of the distribution, and what follows for the figures, empty when nothing does."""
    if normality.lack[at] != Lack.NONE:
        return f"Not tested whether normal ({LACK_TEXT[Lack(normality.lack[at])]})", ""
    shape = f"Jarque-Bera {_p(normality.p_value[at])}, excess kurtosis {normality.excess_kurtosis[at]:.1f}"
    grounds = f"({shape}; {_about_tail(tail, at)})"
    if normality.p_value[at] >= SIGNIFICANCE:
        return f"Nothing speaks against the normal {grounds}", ""
    if normality.excess_kurtosis[at] <= 0:
        return f"Profits and losses are not normal, though not for fat tails {grounds}", "a normal figure is rough"
    return f"Profits and losses have fatter tails than the normal {grounds}", "a normal figure understates rare losses"


def _about_tail(tail: TailIndex, at: int) -> str:
    if tail.lack[at] != Lack.NONE:
        return f"no tail index: {LACK_TEXT[Lack(tail.lack[at])]}"
    usual = f"about {tail.under_normal:.1f} in samples of the normal"
    return f"tail index of losses {tail.value[at]:.1f}, {usual}, {_p(tail.p_value[at])}"


def _about_order(clusters: Clusters, lags: int, at: int) -> tuple[str, str]:
    """What is said of the order in time, and what follows for the figures, empty when nothing does."""
    if clusters.lack[at] != Lack.NONE:
        return f"not tested whether large moves cluster ({LACK_TEXT[Lack(clusters.lack[at])]})", ""
    grounds = f"(Ljung-Box on squares, {lags} lags, {_p(clusters.p_value[at])})"
    if clusters.p_value[at] >= SIGNIFICANCE:
        return f"large moves show no clusters {grounds}", ""
    if clusters.mean_autocorrelation[at] <= 0:
        return f"large moves follow a pattern in time, though not in clusters {grounds}", ""
    return f"large moves cluster {grounds}", "an equally weighted figure lags behind a turn from calm to wild"


def _p(value: float) -> str:
    return "p < 0.001" if value < 0.001 else f"p = {value:.3f}"


def _moving(scenarios: Floats, lack: Codes) -> list[npt.NDArray[np.intp]]:
    """The rows that can be tested, in blocks; marks rows of one value that is not 0 as lacking. Rows of 0 are left."""
    if not scenarios.shape[1]:
        return []
    same = constant(scenarios)
    lack[(lack == Lack.NONE) & same & (scenarios[:, 0] != 0)] = Lack.CONSTANT
    rows = np.flatnonzero((lack == Lack.NONE) & ~same)
    return [rows[start : start + _BLOCK] for start in range(0, len(rows), _BLOCK)]


def _in_units(rows: Floats) -> Floats:
    """Each row divided by its largest absolute value, so that powers neither overflow nor vanish."""
    return np.asarray(rows / np.abs(rows).max(axis=1)[:, np.newaxis])
