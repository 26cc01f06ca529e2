"""Student's t fitted to scenarios by maximum likelihood, many subjects at once.

Newton's method with the exact Hessian on (log s, log nu) and, where the location is free, the location in units of s.
Each subject has its own step and its own damping, and leaves the block when it has settled. A first search in single
precision, which takes half the time, finds where a second in double precision begins and mostly ends at once. Blocks
keep the arithmetic in the processor's cache, in memory that is used again: fresh memory costs more than the arithmetic.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.special import digamma, gammaln

from monitor.risk.figures import Booleans, Codes, Floats, Lack
from monitor.risk.normal import fit_normal
from monitor.risk.tail import Drift, FitNote

Indices = npt.NDArray[np.intp]
Singles = npt.NDArray[np.float32]
Reals = Floats | Singles

NU_FLOOR = 2.01  # above 2: the variance is finite, so the root of time has a meaning
NU_CEILING = 1e4  # beyond, the quantiles are the normal's to 2 parts in 10,000 at 99 %
LEAST_SCENARIOS = 20  # fewer say nothing about tails; a cautious choice, no source
TIE_SHARE = 0.2  # more equal scenarios than this are no sample of a density; its likelihood may have no maximum

_BLOCK = 2048  # rows that are searched together
_AT_ONCE = 128  # rows whose arithmetic stays in the processor's cache
_PIECE = 256  # numpy sorts rows so short several times faster for each scenario than longer ones
_FLATTEST = 1e-10  # a curvature flatter than this is taken as this

_LOG_SCALE, _LOG_NU, _LOCATION = 0, 1, 2


@dataclass(frozen=True)
class StudentFit:
    """One day's distribution of each subject, all (subjects,): location + scale x t(nu), in the scenarios' unit.

    nu is infinite where the normal stands in; note (FitNote) says why. lack as for the normal.
    """

    location: Floats
    scale: Floats
    nu: Floats
    note: Codes
    lack: Codes


@dataclass(frozen=True)
class _Search:
    """When a row has settled, and how long it is waited for.

    gain: what the next step would still add to the log-likelihood. close: a step so short leaves an error of its
    square. rounding: noise of a log-likelihood of a few thousand scenarios.
    """

    rounds: int
    gain: float
    close: float
    rounding: float


_ROUGH = _Search(rounds=8, gain=1e-6, close=3e-3, rounding=1e-2)  # in single precision
_FINE = _Search(rounds=100, gain=1e-12, close=1e-5, rounding=1e-8)


def fit_student(pnl: Floats, drift: Drift) -> StudentFit:
    """Maximum likelihood of scale and degrees of freedom; location 0 for drift zero, fitted for drift sample.

    The density of z = (x - m) / s is Gamma((nu + 1) / 2) / (sqrt(nu pi) Gamma(nu / 2)) (1 + z^2 / nu)^(-(nu + 1) / 2)
    (Lange, Little and Taylor 1989, "Robust statistical modeling using the t distribution").

    pnl: (subjects, n). The normal of `fit_normal` stands in for a subject with too few scenarios, with too many equal
    ones, without a maximum at finite degrees of freedom, or whose fit does not settle.
    """
    stand_in = fit_normal(pnl, drift)
    scenarios = np.ascontiguousarray(pnl, dtype=np.float64)
    location, scale = stand_in.location.copy(), stand_in.sigma.copy()
    nu = np.full(len(scenarios), np.inf)
    note = np.full(len(scenarios), FitNote.AS_ASKED, dtype=np.int8)
    moving = (stand_in.lack == Lack.NONE) & (stand_in.sigma > 0)
    if scenarios.shape[1] < LEAST_SCENARIOS:
        note[moving] = FitNote.NORMAL_FOR_TOO_FEW
        return StudentFit(location, scale, nu, note, stand_in.lack)
    with np.errstate(all="ignore"):
        candidates = np.flatnonzero(moving)
        memory = _Memory.of(min(_BLOCK, len(candidates)), scenarios.shape[1])
        for start in range(0, len(candidates), _BLOCK):
            block = candidates[start : start + _BLOCK]
            fitted = _fit_block(scenarios, block, drift == "sample", memory)
            note[block] = fitted.note
            took = np.isfinite(fitted.nu)
            location[block[took]] = fitted.location[took]
            scale[block[took]] = fitted.scale[took]
            nu[block[took]] = fitted.nu[took]
    return StudentFit(location, scale, nu, note, stand_in.lack)


@dataclass(frozen=True)
class _Memory:
    """What one block works in and the next one again."""

    standard: Floats  # (rows, n)
    rough: Singles  # (rows, n)
    room: Floats  # (3, rows at once, n)
    rough_room: Singles  # (3, rows at once, n)

    @staticmethod
    def of(rows: int, n: int) -> _Memory:
        at_once = min(rows, _AT_ONCE)
        return _Memory(
            np.empty((rows, n)),
            np.empty((rows, n), dtype=np.float32),
            np.empty((3, at_once, n)),
            np.empty((3, at_once, n), dtype=np.float32),
        )


def _fit_block(scenarios: Floats, block: Indices, free: bool, memory: _Memory) -> StudentFit:
    """Fit these rows of the scenarios; nu is infinite, and the note says why, where there is no fit."""
    rows = len(block)
    standard, rough = memory.standard[:rows], memory.rough[:rows]
    centre, unit, normal_level = np.empty((3, rows))
    tied = np.empty(rows, dtype=np.bool_)
    for start in range(0, rows, _AT_ONCE):
        few = slice(start, start + _AT_ONCE)
        own = standard[few]
        np.take(scenarios, block[few], axis=0, out=own, mode="clip")  # any other mode takes a copy
        centre[few], unit[few], tied[few] = _start(own, free, memory.room[0, : len(own)])
        own -= centre[few, np.newaxis]
        own /= unit[few, np.newaxis]
        normal_level[few] = _normal_limit(own, free)
        rough[few] = own
    usable = ~tied & np.isfinite(normal_level)
    best = np.tile([0.0, np.log(4.0), 0.0], (rows, 1))
    level = np.full(rows, np.nan)
    best[usable], _ = _maximise(_only(rough, usable), best[usable], free, _ROUGH, memory.rough_room)
    best[usable], level[usable] = _maximise(_only(standard, usable), best[usable], free, _FINE, memory.room)

    settled = np.isfinite(level)
    nu = np.exp(best[:, _LOG_NU])
    limit = settled & ((nu >= NU_CEILING) | (normal_level >= level))
    note = np.full(rows, FitNote.AS_ASKED, dtype=np.int8)
    note[nu <= NU_FLOOR] = FitNote.NU_AT_FLOOR
    note[~settled] = FitNote.NORMAL_FOR_NO_FIT
    note[tied] = FitNote.NORMAL_FOR_TIES
    note[limit] = FitNote.NORMAL_AS_LIMIT
    return StudentFit(
        location=centre + unit * best[:, _LOCATION],
        scale=unit * np.exp(best[:, _LOG_SCALE]),
        nu=np.where(settled & ~limit, nu, np.inf),
        note=note,
        lack=np.zeros(rows, dtype=np.int8),
    )


def _start(scenarios: Floats, free: bool, ordered: Floats) -> tuple[Floats, Floats, Booleans]:
    """A centre and a scale that few scenarios can sway, and which rows are tied, all (rows,).

    Half of Student's t with 4 degrees lies within 0.741 of 0. Long rows are sorted in pieces, whose quantiles are
    averaged: it is only where the search begins. ordered: memory to work in, as scenarios.
    """
    rows, n = scenarios.shape
    (np.positive if free else np.abs)(scenarios, out=ordered)
    pieces = np.array_split(ordered, math.ceil(n / _PIECE), axis=1)
    suspect = np.zeros(rows, dtype=np.bool_)
    for piece in pieces:
        piece.sort(axis=1)
        # What makes up more than a share of the row makes up more than that share of one of its pieces.
        suspect |= _run(piece, int(TIE_SHARE * n) // len(pieces))
    tied = np.zeros(rows, dtype=np.bool_)
    tied[suspect] = _run(np.sort(scenarios[suspect], axis=1), int(TIE_SHARE * n))
    quartiles = np.zeros((3, rows))
    for piece in pieces:
        quartiles += piece[:, [int(share * piece.shape[1]) for share in (0.25, 0.5, 0.75)]].T / len(pieces)
    lower, middle, upper = quartiles
    if free:
        return middle, (upper - lower) / (2 * 0.741), tied
    return np.zeros(rows), middle / 0.741, tied


def _run(ascending: Floats, length: int) -> Booleans:
    """Rows in which one value stands more than `length` times."""
    return np.asarray((ascending[:, length:] == ascending[:, : ascending.shape[1] - length]).any(axis=1))


def _maximise(scenarios: Reals, start: Floats, free: bool, search: _Search, room: Reals) -> tuple[Floats, Floats]:
    """Damped Newton from the start (rows, 3). Returns the best point (rows, 3) and its log-likelihood (rows,).

    The log-likelihood is NaN where a row did not settle within the rounds allowed. room: memory to work in.
    """
    found, found_level = start.copy(), np.full(len(scenarios), np.nan)
    row = np.arange(len(scenarios))
    here = start.copy()
    level = np.full(len(scenarios), -np.inf)
    step = np.zeros((len(scenarios), 3 if free else 2))
    gain = np.full(len(scenarios), np.inf)
    for _ in range(search.rounds):
        trial = _moved(here, step)
        trial_level, gradient, hessian = _derivatives(scenarios, trial, free, room)
        better = np.isfinite(trial_level) & (trial_level >= level - search.rounding)
        here[better], level[better] = trial[better], trial_level[better]
        step *= 0.25
        step[better], gain[better] = _newton(gradient[better], hessian[better], here[better])
        settled = better & ((gain < search.gain) | (np.abs(step).max(axis=1) < search.close))
        found[row[settled]] = _moved(here[settled], step[settled])
        found_level[row[settled]] = level[settled]
        left = ~settled
        if not left.any():
            break
        if settled.any():
            row, scenarios, here, level = row[left], scenarios[left], here[left], level[left]
            step, gain = step[left], gain[left]
    return found, found_level


def _only(scenarios: Reals, wanted: Booleans) -> Reals:
    """These rows, without a copy when they are all wanted."""
    return scenarios if wanted.all() else scenarios[wanted]


def _moved(here: Floats, step: Floats) -> Floats:
    """Take the steps, keeping nu between its floor and its ceiling. The location's step is in units of the scale."""
    moved = here.copy()
    moved[:, _LOG_SCALE] += step[:, _LOG_SCALE]
    moved[:, _LOG_NU] = np.clip(here[:, _LOG_NU] + step[:, _LOG_NU], np.log(NU_FLOOR), np.log(NU_CEILING))
    if step.shape[1] > _LOCATION:
        moved[:, _LOCATION] += step[:, _LOCATION] * np.exp(here[:, _LOG_SCALE])
    return moved


def _newton(gradient: Floats, hessian: Floats, here: Floats) -> tuple[Floats, Floats]:
    """An uphill step (rows, parameters) and what it promises to gain (rows,).

    Curvatures are taken as negative whatever their sign, so that the step climbs away from a saddle too. nu at a
    bound that it wants to cross is held there.
    """
    log_nu = here[:, _LOG_NU]
    uphill = gradient[:, _LOG_NU]
    held = ((log_nu <= np.log(NU_FLOOR)) & (uphill < 0)) | ((log_nu >= np.log(NU_CEILING)) & (uphill > 0))
    gradient[held, _LOG_NU] = 0.0
    hessian[held, _LOG_NU, :] = 0.0
    hessian[held, :, _LOG_NU] = 0.0
    hessian[held, _LOG_NU, _LOG_NU] = -1.0
    step, concave = _solved(gradient, hessian)
    if not concave.all():
        step[~concave] = _climbing(gradient[~concave], hessian[~concave])
    step /= np.maximum(np.abs(step).max(axis=1, initial=0.0), 1.0)[:, np.newaxis]
    return step, (gradient * step).sum(axis=1)


def _solved(gradient: Floats, hessian: Floats) -> tuple[Floats, Booleans]:
    """Newton's own step by elimination, and the rows in which it is one: where every curvature is negative."""
    rows, parameters = gradient.shape
    matrix, step = -hessian, gradient.copy()
    concave = np.ones(rows, dtype=np.bool_)
    for i in range(parameters):
        concave &= matrix[:, i, i] > _FLATTEST
        for j in range(i + 1, parameters):
            factor = matrix[:, j, i] / matrix[:, i, i]
            matrix[:, j, i:] -= factor[:, np.newaxis] * matrix[:, i, i:]
            step[:, j] -= factor * step[:, i]
    for i in reversed(range(parameters)):
        for j in range(i + 1, parameters):
            step[:, i] -= matrix[:, i, j] * step[:, j]
        step[:, i] /= matrix[:, i, i]
    return step, concave


def _climbing(gradient: Floats, hessian: Floats) -> Floats:
    """Newton's step with every curvature taken as negative and none as flatter than _FLATTEST."""
    curvature, axes = np.linalg.eigh(hessian)
    along = (axes * gradient[:, :, np.newaxis]).sum(axis=1) / np.maximum(np.abs(curvature), _FLATTEST)
    return np.asarray((axes * along[:, np.newaxis, :]).sum(axis=2))


def _derivatives(scenarios: Reals, at: Floats, free: bool, room: Reals | None = None) -> tuple[Floats, Floats, Floats]:
    """Log-likelihood (rows,), its gradient (rows, p) and Hessian (rows, p, p) in (log s, log nu[, location / s]).

    The sums over a row are made in the precision of the scenarios. room: memory to work in, see `_sums`.
    """
    rows, n = scenarios.shape
    log_scale, log_nu = at[:, _LOG_SCALE], at[:, _LOG_NU]
    nu = np.exp(log_nu)
    root_nu = np.sqrt(nu)
    unit = np.exp(-log_scale) / root_nu
    if room is None:
        room = np.empty((3, *scenarios.shape), dtype=scenarios.dtype)
    logs, pulls, squares, leans, eased_leans = _sums(scenarios, at[:, _LOCATION], unit, free, room)
    bends = pulls - squares

    norming, norming_slope, norming_curvature = _norming(nu)
    level = n * (norming - log_scale) - (nu + 1) / 2 * logs
    by_nu = n * norming_slope - logs / 2 + (nu + 1) / (2 * nu) * pulls
    by_nu_twice = n * norming_curvature + (pulls - pulls / nu) / (2 * nu) - (nu + 1) / (2 * nu**2) * bends
    parameters = 3 if free else 2
    gradient = np.empty((rows, parameters))
    hessian = np.empty((rows, parameters, parameters))
    gradient[:, _LOG_SCALE] = (nu + 1) * pulls - n
    gradient[:, _LOG_NU] = nu * by_nu
    hessian[:, _LOG_SCALE, _LOG_SCALE] = -2 * (nu + 1) * bends
    hessian[:, _LOG_NU, _LOG_NU] = nu**2 * by_nu_twice + nu * by_nu
    hessian[:, _LOG_SCALE, _LOG_NU] = nu * pulls - (nu + 1) * bends
    if free:
        leans /= root_nu
        eased_leans /= root_nu
        gradient[:, _LOCATION] = (nu + 1) * leans
        hessian[:, _LOCATION, _LOCATION] = -(nu + 1) / nu * (n - 3 * pulls + 2 * squares)
        hessian[:, _LOG_SCALE, _LOCATION] = -2 * (nu + 1) * eased_leans
        hessian[:, _LOG_NU, _LOCATION] = nu * leans - (nu + 1) * eased_leans
        hessian[:, _LOCATION, _LOG_SCALE] = hessian[:, _LOG_SCALE, _LOCATION]
        hessian[:, _LOCATION, _LOG_NU] = hessian[:, _LOG_NU, _LOCATION]
    hessian[:, _LOG_NU, _LOG_SCALE] = hessian[:, _LOG_SCALE, _LOG_NU]
    return level, gradient, hessian


def _sums(scenarios: Reals, location: Floats, unit: Floats, free: bool, room: Reals) -> Floats:
    """Over each row, with z = unit x (scenario - location): the sums (5, rows) of log(1 + z^2), of the pull
    p = z^2 / (1 + z^2), of p^2, and where the location is free of w = z / (1 + z^2) and of w (1 - p).

    room: memory for as many rows as are worked on at once, (3, rows at once, n), as precise as the scenarios.
    """
    n, precision = scenarios.shape[1], scenarios.dtype
    sums = np.zeros((5, len(scenarios)))
    ones = np.ones(n, dtype=precision)  # the product with them is the sum, faster than by sum
    location, unit = location[:, np.newaxis].astype(precision), unit[:, np.newaxis].astype(precision)
    for start in range(0, len(scenarios), room.shape[1]):
        rows = slice(start, start + room.shape[1])
        z, ratio, work = room[:, : len(scenarios[rows])]
        if free:
            np.subtract(scenarios[rows], location[rows], out=z)
        np.multiply(z if free else scenarios[rows], unit[rows], out=z)
        np.square(z, out=ratio)
        sums[0, rows] = np.vecdot(np.log1p(ratio, out=work), ones)
        np.add(ratio, 1, out=work)
        pull = np.divide(ratio, work, out=ratio)
        sums[1, rows] = np.vecdot(pull, ones)
        sums[2, rows] = np.vecdot(pull, pull)
        if free:
            z /= work
            sums[3, rows] = np.vecdot(z, ones)
            sums[4, rows] = sums[3, rows] - np.vecdot(z, pull)
    return sums


def _norming(nu: Floats) -> tuple[Floats, Floats, Floats]:
    """The logarithm of the standard t's density at 0, and its first and second derivative by nu, each as nu.

    Above nu 100 by the asymptotic series of log Gamma(x + 1/2) - log Gamma(x): the gammas are then huge and nearly
    equal, and what is left of their difference would be too coarse for Newton's method to settle on.
    """
    value = gammaln((nu + 1) / 2) - gammaln(nu / 2) - np.log(nu * np.pi) / 2
    slope = (digamma((nu + 1) / 2) - digamma(nu / 2) - 1 / nu) / 2
    curvature = (_trigamma((nu + 1) / 2) - _trigamma(nu / 2) + 2 / nu**2) / 4
    far = nu > 100
    x = nu[far]
    value[far] = -np.log(2 * np.pi) / 2 - 1 / (4 * x) + 1 / (24 * x**3) - 1 / (20 * x**5)
    slope[far] = 1 / (4 * x**2) - 1 / (8 * x**4) + 1 / (4 * x**6)
    curvature[far] = -1 / (2 * x**3) + 1 / (2 * x**5) - 3 / (2 * x**7)
    return value, slope, curvature


def _trigamma(x: Floats) -> Floats:
    """The second derivative of log Gamma, as x, for x >= 1 to 1e-12: eight steps of its recurrence, then the
    asymptotic series (Abramowitz and Stegun 1964, 6.4.6 and 6.4.12). scipy's takes many times as long.
    """
    steps = np.zeros_like(x)
    for step in range(8):
        steps += 1 / np.square(x + step)
    y = 1 / (x + 8)
    square = y * y
    series = 1 / 6 - square * (1 / 30 - square * (1 / 42 - square * (1 / 30 - square * (5 / 66))))
    return np.asarray(steps + y * (1 + y / 2 + square * series))


def _normal_limit(scenarios: Floats, free: bool) -> Floats:
    """The log-likelihood of the best normal (rows,): what Student's t tends to as nu grows without bound."""
    n = scenarios.shape[1]
    variance = np.vecdot(scenarios, scenarios) / n
    if free:  # the median is within one deviation of the mean: nothing is lost in the difference
        variance -= np.square(scenarios.mean(axis=1))
    return np.asarray(-n / 2 * (np.log(2 * np.pi * variance) + 1))
