"""How heavy the tail of the losses is, by Hill's estimator, and whether a normal's would look like it."""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction

import numpy as np
from scipy.special import gammaincc, ndtr, ndtri

from monitor.risk.figures import Figures, Floats, Lack, screen
from monitor.risk.peaks_over_threshold import TENTH, Counts, tail_count, worst_losses

LEAST_LOSSES = 10  # the standard error is then a third of the index; a cautious choice, no source
LARGEST_SHARE = Fraction(1, 5)  # nearer the middle the logarithms say little of a tail, and the p-value is off

_NODES = 80


@dataclass(frozen=True)
class TailIndex(Figures):
    """The tail index of each subject, no unit; the smaller, the heavier the tail. Fields are (subjects,) but for one.

    standard_error: index / sqrt(losses). p_value: the chance of an index this low or lower if the losses were normal
    about 0. Both are NaN where lack is not NONE. losses: how many lie beyond the threshold. under_normal: one number,
    the index to expect of the normal at this tail share, NaN below LEAST_LOSSES; finite because the share is.
    """

    standard_error: Floats
    p_value: Floats
    losses: Counts
    under_normal: float


def tail_index(pnl: Floats, tail_share: Decimal | Fraction = TENTH) -> TailIndex:
    """Hill's index of the tail of the losses: P(loss > x) falls as x^(-index) far out.

    pnl: (subjects, n). With u the (k + 1)-th worst loss, k = floor(tail_share n), and L the losses strictly larger
    than u, N of them: index = N / sum log(L / u) (Hill 1975, "A simple general approach to inference about the tail
    of a distribution"). u must be a loss: a subject with k or fewer losses, or with fewer than LEAST_LOSSES beyond u,
    lacks an index as FEW_IN_TAIL, a flat book among them. tail_share: at most LARGEST_SHARE, ValueError otherwise.

    p_value: of normal losses about 0 the sum of logarithms has a distribution without parameters. Its mean and
    variance follow from the normal beyond u and from how much u itself varies; a gamma with these stands for it
    (own derivation, no source; at a tail share of a tenth or less p-values of 1 and 5 % are right to a tenth of
    themselves in simulation, with larger shares they come out too small).
    Cautions: a tail is a power only far out, so that the index at a tenth of the scenarios is too low, that of the
    normal itself about 3.5; compare with under_normal, and don't read an index below 4 as a proof that the kurtosis is
    infinite. Volatility that clusters makes standard error and p-value too small.

    Properties: scale-free (any unit, any size of the position); not translation-free; the order of the scenarios does
    not matter; a row alone is the row in a block.
    """
    scenarios, lack = screen(pnl, least=1)
    subjects, n = scenarios.shape
    k = tail_count(tail_share, n)
    if tail_share > LARGEST_SHARE:
        raise ValueError(f"the tail share of a tail index must be at most {LARGEST_SHARE} (got {tail_share})")
    total, losses = np.full(subjects, np.nan), np.zeros(subjects, dtype=np.int64)
    candidates = np.flatnonzero(lack == Lack.NONE)
    with np.errstate(all="ignore"):
        if len(candidates):
            worst = worst_losses(scenarios, candidates, k)
            threshold = worst[:, k:]
            # log1p keeps what a loss just beyond the threshold adds.
            logs = np.log1p((worst[:, :k] - threshold) / threshold)
            positive = threshold[:, 0] > 0
            total[candidates] = logs.sum(axis=1)
            losses[candidates] = np.where(positive, (worst[:, :k] > threshold).sum(axis=1), 0)
        lack[(lack == Lack.NONE) & (losses < LEAST_LOSSES)] = Lack.FEW_IN_TAIL
        lack[(lack == Lack.NONE) & ~np.isfinite(total)] = Lack.OUT_OF_RANGE
        index = Figures.of(losses / total, lack)
        mean, variance = _of_normal(k, n) if k >= LEAST_LOSSES else (np.nan, np.nan)
        shape = losses * mean**2 / variance
        p_value = np.where(index.lack == Lack.NONE, gammaincc(shape, total * mean / variance), np.nan)
        return TailIndex(index.value, index.lack, index.value / np.sqrt(losses), p_value, losses, 1 / mean)


def _of_normal(k: int, n: int) -> tuple[float, float]:
    """Mean of log(L / u) of a normal beyond its (k + 1)-th worst of n, and k times the variance of the mean of k.

    With Q = P(Z > z) at the quantile z for u, the mean is the integral of P(Z > z e^t) / Q over t from 0, the mean
    square that of 2 t P(Z > z e^t) / Q. The variance adds that of z, by the mean's slope in z.
    """
    share = (k + 1) / (n + 1)
    z = -float(ndtri(share))
    furthest = np.log(12 / z)  # beyond 12 deviations lies nothing that a double would show
    nodes, weights = np.polynomial.legendre.leggauss(_NODES)
    t = (nodes + 1) / 2 * furthest
    beyond = weights * furthest / 2 * ndtr(-z * np.exp(t)) / share
    mean, mean_square = float(beyond.sum()), float((2 * t * beyond).sum())
    density = np.exp(-z * z / 2) / np.sqrt(2 * np.pi)
    slope = -1 / z + mean * density / share
    variance_of_z = share * (1 - share) / (n * density**2)
    return mean, float(mean_square - mean**2 + k * slope**2 * variance_of_z)
