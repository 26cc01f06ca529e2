"""The likelihood of GARCH(1,1) climbed for many series at once.

The recursion runs over time and is vectorised over series: arrays are (sessions, columns), a series a column. Newton's
method with the exact gradient and Hessian; each column has its own step and its own damping, and when it has settled
the next series takes its seat. The number of columns is always a multiple of 8, filled up with idle ones: sums then
add in the same order for a series alone and in any company.

The search runs on (mean, log omega, -log(1 - persistence), alpha / persistence) of series with mean 0 and variance 1:
every constraint is then a bound on one coordinate, and a coordinate at a bound that it wants to cross is held there.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from monitor.risk.figures import Floats

Indices = npt.NDArray[np.int64]

PERSISTENCE_CEILING = 1 - 1e-6  # below 1, so that a long-run variance exists; 1 itself would be no likelier to see
OMEGA_FLOOR = 1e-8  # of the variance: at trailing zeros the likelihood grows without bound as omega falls to 0

_WIDTH = 128  # columns: wide enough to spread the cost of a step in time, narrow enough for the processor's cache
_LEAST_WIDTH = 8
_GRID_WIDTH = 32
_ROUNDS = 100
_SETTLED = 1e-9  # what the next step would still add to the log-likelihood
_ROUNDING = 1e-8  # noise of a log-likelihood of a few thousand sessions
_RUNAWAY = 1.0  # what a smaller omega, by a factor e, may still add at the floor before we say that it has no end

# Where to look first, at the sample's mean and variance. Near no ARCH effect the likelihood can have several maxima, by
# a long, a middling and a short memory: the best point of each part of the grid may then start a climb of its own.
_GRID_PARTS = 3
_GRID = np.array(
    [(alpha, persistence) for persistence in (0.985, 0.997) for alpha in (0.005, 0.03, 0.08, 0.16)]
    + [(alpha, persistence) for persistence in (0.85, 0.94) for alpha in (0.03, 0.08, 0.2, 0.5)]
    + [(alpha, persistence) for persistence in (0.3, 0.65) for alpha in (0.03, 0.1, 0.2, 0.3)]
)
_CLEAR_EFFECT = 10.0  # log-likelihood above that of one variance throughout: one climb is enough
_FAR_BEHIND = 5.0  # log-likelihood below the best start: not worth a climb

_MEAN, _LOG_OMEGA, _MEMORY, _SHARE = 0, 1, 2, 3
_OMEGA, _ALPHA, _BETA = 1, 2, 3
_LOW = np.array([-1.0, np.log(OMEGA_FLOOR), 0.0, 0.0])
_HIGH = np.array([1.0, np.log(10.0), -np.log1p(-PERSISTENCE_CEILING), 1.0])


def variances(residuals: Floats, presample: Floats, omega: Floats, alpha: Floats, beta: Floats) -> Floats:
    """h(t) = omega + alpha e(t-1)^2 + beta h(t-1) for every session and the one after the last.

    residuals: (sessions, columns). presample, omega, alpha, beta: (columns,); the presample value stands for both
    e(0)^2 and h(0). Returns (sessions + 1, columns).
    """
    h = np.empty((len(residuals) + 1, residuals.shape[1]))
    np.square(residuals, out=h[1:])
    h[0] = presample
    _fill_variances(h, presample, omega, alpha, beta)
    return h


def _fill_variances(h: Floats, presample: Floats, omega: Floats, alpha: Floats, beta: Floats) -> None:
    """Turn e(t-1)^2, the presample's first, into h(t), in place. h: (sessions, ..., columns)."""
    h *= alpha
    h += omega
    h[0] += beta * presample
    _accumulate(h, np.broadcast_to(beta, h.shape[1:]).copy())


def _accumulate(rows: Floats, beta: Floats) -> None:
    """x(t) += beta x(t-1), in place and in time order. rows: (sessions, ...) with beta of the shape of a row."""
    carried = np.empty_like(rows[0])
    multiply, add = np.multiply, np.add
    sessions = list(rows)
    for before, now in pairwise(sessions):
        multiply(before, beta, carried)
        add(now, carried, now)


def maximise(scenarios: Floats, mean: Floats, unit: Floats, presample: Floats, follows: bool) -> tuple[Floats, Floats]:
    """The likeliest (mean, omega, alpha, beta) of each row, (rows, 4), and its log-likelihood, (rows,).

    scenarios: (rows, sessions), finite. mean, unit: (rows,), what standardises a row to mean 0 and variance 1; the
    answer is that of the standardised rows. presample: (rows,), e(0)^2 = h(0) at mean 0. follows: whether that is the
    mean square of the residuals, so that it moves with the mean. The log-likelihood is NaN where no climb settled, and
    infinite where it grew without end towards a variance of 0.
    """
    series = _Series(scenarios, mean, unit, presample, follows)
    best, best_level = np.zeros((len(scenarios), 4)), np.full(len(scenarios), np.nan)
    points, levels, row_of = _climb(series, *_starts(series))
    order = np.argsort(levels, kind="stable")  # NaN last: the likeliest of the settled is written last
    order = order[~np.isnan(levels[order])]
    best[row_of[order]], best_level[row_of[order]] = _parameters(points[order]), levels[order]
    return best, best_level


@dataclass(frozen=True)
class _Series:
    """What `maximise` is given, read by the column."""

    scenarios: Floats
    mean: Floats
    unit: Floats
    presample: Floats
    follows: bool

    def columns(self, row: Indices) -> Floats:
        """The standardised series of these rows, (sessions, rows)."""
        return np.asarray(((self.scenarios[row] - self.mean[row, np.newaxis]) / self.unit[row, np.newaxis]).T)


def _width(needed: int) -> int:
    """The number of columns to work with: the same for every number of series within a factor of two."""
    width = _LEAST_WIDTH
    while width < min(needed, _WIDTH):
        width *= 2
    return width


def _starts(series: _Series) -> tuple[Floats, Indices]:
    """Where to climb from: points (climbs, 4), and the row that each belongs to."""
    rows, n = series.scenarios.shape
    alpha, persistence = _GRID[:, :1], _GRID[:, 1:]
    level = np.empty((len(_GRID), rows))
    h, logs = np.empty((n, len(_GRID), _GRID_WIDTH)), np.empty((n, len(_GRID), _GRID_WIDTH))
    for first in range(0, rows, _GRID_WIDTH):
        row = np.arange(first, min(first + _GRID_WIDTH, rows))
        squares, presample = np.ones((n, 1, _GRID_WIDTH)), np.ones(_GRID_WIDTH)
        np.square(series.columns(row), out=squares[:, 0, : len(row)])
        presample[: len(row)] = series.presample[row]
        h[1:], h[0] = squares[:-1], presample
        _fill_variances(h, presample, 1 - persistence, alpha, persistence - alpha)
        np.log(h, out=logs)
        np.divide(squares, h, out=h)
        logs += h
        level[:, row] = -0.5 * logs.sum(axis=0)[:, : len(row)]

    parts = level.reshape(_GRID_PARTS, len(_GRID) // _GRID_PARTS, rows)
    best = parts.max(axis=1)
    top = best.max(axis=0)
    enough = np.where(top > -n / 2 + _CLEAR_EFFECT, top, top - _FAR_BEHIND)
    part, row = np.nonzero(best >= enough)
    start_alpha, start_persistence = _GRID[part * parts.shape[1] + parts.argmax(axis=1)[part, row]].T
    log_rest = np.log1p(-start_persistence)
    return np.stack([np.zeros(len(row)), log_rest, -log_rest, start_alpha / start_persistence], axis=1), row


def _parameters(points: Floats) -> Floats:
    """(mean, omega, alpha, beta) from the coordinates of the search, both (rows, 4)."""
    persistence = -np.expm1(-points[:, _MEMORY])
    return np.stack(
        [
            points[:, _MEAN],
            np.exp(points[:, _LOG_OMEGA]),
            persistence * points[:, _SHARE],
            persistence * (1 - points[:, _SHARE]),
        ],
        axis=1,
    )


def _climb(series: _Series, start: Floats, row_of: Indices) -> tuple[Floats, Floats, Indices]:
    """Damped Newton from each start (climbs, 4), in the row that it belongs to (climbs,).

    Returns the points reached (climbs, 4), their log-likelihoods, NaN where a climb did not settle within the rounds
    allowed, and their rows.
    """
    found, found_level = np.zeros_like(start), np.full(len(start), np.nan)
    width = _width(len(start))
    climb = np.full(width, -1)  # which climb sits in each column; none below 0
    values, presample = np.zeros((series.scenarios.shape[1], width)), np.ones(width)
    here, step = np.zeros((width, 4)), np.zeros((width, 4))
    level, gain, rounds = np.full(width, -np.inf), np.full(width, np.inf), np.zeros(width, dtype=np.int64)
    room = _Room(len(values), width)
    begun = 0
    while True:
        seats = np.flatnonzero(climb < 0)[: len(start) - begun]
        if len(seats):
            climb[seats] = np.arange(begun, begun + len(seats))
            begun += len(seats)
            row = row_of[climb[seats]]
            values[:, seats], presample[seats] = series.columns(row), series.presample[row]
            here[seats], step[seats] = start[climb[seats]], 0.0
            level[seats], gain[seats], rounds[seats] = -np.inf, np.inf, 0
        seated = climb >= 0
        if not seated.any():
            return found, found_level, row_of
        if begun == len(start) and _width(int(seated.sum())) < width:
            width = _width(int(seated.sum()))
            kept = np.argsort(~seated, kind="stable")[:width]
            climb, values, presample, here, step = climb[kept], values[:, kept], presample[kept], here[kept], step[kept]
            level, gain, rounds, seated = level[kept], gain[kept], rounds[kept], seated[kept]
            room = _Room(len(values), width)

        trial = np.clip(here + step, _LOW, _HIGH)
        trial_level, gradient, hessian = _derivatives(values, presample, series.follows, trial, room)
        better = np.isfinite(trial_level) & (trial_level >= level - _ROUNDING)
        here[better], level[better] = trial[better], trial_level[better]
        step *= 0.25
        step[better], gain[better] = _newton(gradient[better], hessian[better], here[better])
        rounds += 1
        settled = seated & better & (gain < _SETTLED)
        endless = (here[:, _LOG_OMEGA] <= _LOW[_LOG_OMEGA]) & (gradient[:, _LOG_OMEGA] < -_RUNAWAY)
        found[climb[settled]] = np.clip(here[settled] + step[settled], _LOW, _HIGH)
        found_level[climb[settled]] = np.where(endless, np.inf, level)[settled]
        climb[settled | (rounds >= _ROUNDS)] = -1


def _newton(gradient: Floats, hessian: Floats, here: Floats) -> tuple[Floats, Floats]:
    """An uphill step (columns, 4) and what it promises to gain (columns,).

    Curvatures are taken as negative whatever their sign, so that the step climbs away from a saddle too.
    """
    held = ((here <= _LOW) & (gradient < 0)) | ((here >= _HIGH) & (gradient > 0))
    gradient = np.where(held, 0.0, gradient)
    hessian = np.where(held[:, :, np.newaxis] | held[:, np.newaxis, :], 0.0, hessian)
    column, coordinate = np.nonzero(held)
    hessian[column, coordinate, coordinate] = -1.0
    curvature, axes = np.linalg.eigh(hessian)
    along = (axes * gradient[:, :, np.newaxis]).sum(axis=1) / np.maximum(np.abs(curvature), 1e-8)
    step = (axes * along[:, np.newaxis, :]).sum(axis=2)
    step /= np.maximum(np.abs(step).max(axis=1, initial=0.0), 1.0)[:, np.newaxis]
    return step, (gradient * step).sum(axis=1)


class _Room:
    """Memory for `_derivatives`, used again each round: to touch new memory costs more than the arithmetic.

    recursions: h, its slopes by mean, omega, alpha and beta, and the adjoint backwards in time. The first four know
    what they are fed with beforehand and so run together through time; the last two need h, and follow together.
    """

    def __init__(self, sessions: int, width: int) -> None:
        self.residuals, self.squares, self.inverse, self.by_h, self.by_h_twice, self.product = (
            np.empty((sessions, width)) for _ in range(6)
        )
        self.recursions = np.empty((sessions, 6, width))


def _derivatives(
    values: Floats, presample: Floats, follows: bool, at: Floats, room: _Room
) -> tuple[Floats, Floats, Floats]:
    """Log-likelihood (columns,), gradient (columns, 4) and Hessian (columns, 4, 4) in the search's coordinates.

    The slopes of h follow h's own recursion, fed with other series. With g = dl/dh, the second derivatives of h enter
    only as sums of g times them: the same as sums of what their recursions are fed with, weighted by g accumulated
    backwards in time (the adjoint), so that those recursions need not be run.
    """
    n, width = values.shape
    mean, omega, alpha, beta = np.ascontiguousarray(_parameters(at).T)
    drift = mean if follows else np.zeros(width)
    before = presample + np.square(drift)
    residuals = np.subtract(values, mean, out=room.residuals)
    squares = np.square(residuals, out=room.squares)
    h, slopes, backwards = room.recursions[:, 0], room.recursions[:, 1:5], room.recursions[:, 5]

    np.multiply(squares[:-1], alpha, out=h[1:])
    h[1:] += omega
    h[0] = omega + (alpha + beta) * before
    np.multiply(residuals[:-1], -2 * alpha, out=slopes[1:, _MEAN])
    slopes[0, _MEAN] = 2 * (alpha + beta) * drift
    slopes[:, _OMEGA] = 1.0
    slopes[0, _ALPHA], slopes[1:, _ALPHA] = before, squares[:-1]
    _accumulate(room.recursions[:, :4], np.tile(beta, (4, 1)))

    slopes[0, _BETA], slopes[1:, _BETA] = before, h[:-1]
    inverse = np.divide(1.0, h, out=room.inverse)
    ratio = np.multiply(squares, inverse, out=squares)
    level = -0.5 * (n * np.log(2 * np.pi) + np.log(h, out=h).sum(axis=0) + ratio.sum(axis=0))
    by_h = np.subtract(ratio, 1.0, out=room.by_h)
    by_h *= inverse
    by_h *= 0.5
    backwards[:] = by_h[::-1]
    _accumulate(room.recursions[:, 4:], np.tile(beta, (2, 1)))
    adjoint = backwards[::-1]

    lean = np.multiply(residuals, inverse, out=room.product)
    gradient = np.einsum("tw,tkw->wk", by_h, slopes)
    gradient[:, _MEAN] += lean.sum(axis=0)

    hessian = np.zeros((width, 4, 4))
    lean *= inverse
    hessian[:, _MEAN, :] = -np.einsum("tw,tkw->wk", lean, slopes)
    hessian[:, _MEAN, _MEAN] = 2 * hessian[:, _MEAN, _MEAN] - inverse.sum(axis=0)
    by_h_twice = np.subtract(0.5, ratio, out=room.by_h_twice)
    by_h_twice *= inverse
    by_h_twice *= inverse
    for i in range(4):
        weighted = np.multiply(by_h_twice, slopes[:, i], out=room.product)
        hessian[:, i, i:] += np.einsum("tw,tkw->wk", weighted, slopes[:, i:])
    fed = np.einsum("tw,tkw->wk", adjoint[1:], slopes[:-1])
    hessian[:, :_BETA, _BETA] += fed[:, :_BETA]
    hessian[:, _BETA, _BETA] += 2 * fed[:, _BETA]
    hessian[:, _MEAN, _ALPHA] -= 2 * np.einsum("tw,tw->w", adjoint[1:], residuals[:-1])
    hessian[:, _MEAN, _MEAN] += 2 * alpha * adjoint[1:].sum(axis=0)
    if follows:
        hessian[:, _MEAN, _ALPHA] += 2 * drift * adjoint[0]
        hessian[:, _MEAN, _BETA] += 2 * drift * adjoint[0]
        hessian[:, _MEAN, _MEAN] += 2 * (alpha + beta) * adjoint[0]
    lower = np.tril_indices(4, -1)
    hessian[:, lower[0], lower[1]] = hessian[:, lower[1], lower[0]]
    return level, *_in_coordinates(at, omega, gradient, hessian)


def _in_coordinates(at: Floats, omega: Floats, gradient: Floats, hessian: Floats) -> tuple[Floats, Floats]:
    """Gradient and Hessian by the coordinates of the search from those by (mean, omega, alpha, beta)."""
    rest = np.exp(-at[:, _MEMORY])  # 1 - persistence
    share = at[:, _SHARE]
    chain = np.zeros_like(hessian)  # d parameter / d coordinate
    chain[:, _MEAN, _MEAN] = 1.0
    chain[:, _OMEGA, _LOG_OMEGA] = omega
    chain[:, _ALPHA, _MEMORY], chain[:, _BETA, _MEMORY] = rest * share, rest * (1 - share)
    chain[:, _ALPHA, _SHARE], chain[:, _BETA, _SHARE] = 1 - rest, rest - 1
    by_coordinate = (gradient[:, :, np.newaxis] * chain).sum(axis=1)
    half = (hessian[:, :, :, np.newaxis] * chain[:, np.newaxis]).sum(axis=2)
    turned = (chain[:, :, :, np.newaxis] * half[:, :, np.newaxis]).sum(axis=1)
    turned[:, _LOG_OMEGA, _LOG_OMEGA] += by_coordinate[:, _LOG_OMEGA]
    turned[:, _MEMORY, _MEMORY] -= by_coordinate[:, _MEMORY]
    bend = rest * (gradient[:, _ALPHA] - gradient[:, _BETA])
    turned[:, _MEMORY, _SHARE] += bend
    turned[:, _SHARE, _MEMORY] += bend
    return by_coordinate, turned
