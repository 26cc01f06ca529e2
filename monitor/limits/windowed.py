"""The measures that look back over a window of sessions: value at risk, expected shortfall, volatility and so on."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import numpy as np

from monitor.limits.measured import Measured, Parameters, leave_out_troubled, rest_on
from monitor.limits.parameters import RANGE_METHODS
from monitor.limits.slices import Slice
from monitor.limits.wording import details
from monitor.risk.bounds import Bounds, TailBounds
from monitor.risk.figures import Codes, Figures, Floats
from monitor.risk.garch import garch
from monitor.risk.methods import TailCall, bound_tail, measure_tail
from monitor.risk.probability import loss_probability as probability_of_loss
from monitor.risk.ranges import garman_klass, parkinson
from monitor.risk.tail import FIT_NOTE_TEXT, FitNote, Tail
from monitor.risk.tail_index import tail_index as index_of_tail
from monitor.risk.volatility import annualised, ewma, sample
from monitor.words import Mark, MarkKind, Unit
from monitor.world import How, Integers

WORST_FOR_QUANTILE = "less than one scenario lies in the tail: the figure is the worst of the window"
WORST_FOR_MEAN = "less than one scenario lies in the tail: the worst one stands in for the mean"


@dataclass(frozen=True)
class Found:
    """What the risk room says of some rows: figures, by row a note on one, and sampling bounds where there are any."""

    figures: Figures
    notes: Mapping[int, str] = field(default_factory=dict)
    bounds: Bounds | None = None


def value_at_risk(part: Slice, parameters: Parameters, _unit: Unit) -> Measured:
    """The loss that is exceeded with probability 1 - confidence over the horizon. Amount, positive when a loss."""
    return _of_tail(
        part, parameters, lambda tail: tail.value_at_risk, lambda bounds: bounds.value_at_risk, WORST_FOR_QUANTILE
    )


def expected_shortfall(part: Slice, parameters: Parameters, _unit: Unit) -> Measured:
    """The mean loss in the worst share 1 - confidence of outcomes. Amount, positive when a loss."""
    return _of_tail(
        part,
        parameters,
        lambda tail: tail.expected_shortfall,
        lambda bounds: bounds.expected_shortfall,
        WORST_FOR_MEAN,
    )


def volatility(part: Slice, parameters: Parameters, unit: Unit) -> Measured:
    """A year's standard deviation: of a position's instrument (ratio), or of a subject's scenario P&L (amount).

    The log returns of an instrument count in the slice's currency, those of a future in its own. Scaled to a year by
    the root of the site's days a year. From highs and lows: of the instrument's price in its own currency, on the
    sessions themselves, so that moves between sessions are not in it.
    """
    method, window = parameters["method"], parameters["window"]
    by_instrument = unit is Unit.RATIO
    days_a_year = part.world.terms.days_a_year

    def figures(rows: Floats, subjects: Integers) -> Found:
        if method in RANGE_METHODS:
            opened, high, low, close, counted = part.ranges(rows.shape[1], subjects)
            if method == "parkinson":
                made = parkinson(high, low, counted)
            else:
                made = garman_klass(opened, high, low, close, counted)
        elif method == "ewma":
            made = ewma(rows, float(parameters["decay"]))
        else:
            made = garch(rows) if method == "garch" else sample(rows)
        return Found(annualised(made, days_a_year))

    how = how_of(parameters)
    return _over_window(part, window, figures, how, amount=not by_instrument, rows=_returns if by_instrument else _pnl)


def tail_index(part: Slice, parameters: Parameters, _unit: Unit) -> Measured:
    """How fast the tail of losses thins out (Hill 1975): the smaller, the heavier. Number above 0.

    Moments of the index's order and above are infinite; daily returns of shares commonly show 3 to 5.
    """

    def figures(rows: Floats, _subjects: Integers) -> Found:
        return Found(index_of_tail(rows, parameters["tail_share"]))

    return _over_window(part, parameters["window"], figures, how_of(parameters), amount=False)


def loss_probability(part: Slice, parameters: Parameters, _unit: Unit) -> Measured:
    """The probability of losing more than the threshold over the horizon. Ratio from 0 to 1.

    The threshold is an amount in the slice's currency, or a share of the denominator that `of` names.
    """
    threshold = np.full(part.size, float(parameters["threshold"]))
    share_of = part.denominator(parameters["of"]) if parameters["of"] else None
    if share_of is not None:
        threshold = np.nan_to_num(threshold * share_of.value)
    overlap = _overlap(parameters)
    drift = parameters.get("drift", "zero")

    def figures(rows: Floats, subjects: Integers) -> Found:
        days = 1 if overlap > 1 else parameters["horizon_days"]
        made = probability_of_loss(rows, threshold[subjects], days, parameters["method"], drift)
        return Found(made, _fit_notes(made.note))

    how = how_of(parameters)
    measured = _over_window(part, parameters["window"], figures, how, amount=False, days=overlap)
    if share_of is not None:
        rest_on(measured, share_of)
    return measured


def _of_tail(
    part: Slice,
    parameters: Parameters,
    chosen: Callable[[Tail], Figures],
    bounds: Callable[[TailBounds], Bounds],
    inexact: str,
) -> Measured:
    """inexact: what to say where less than one scenario lies in the tail."""
    call = tail_call(parameters)
    world = part.world
    seed = (world.terms.firm.site, world.recipe.date.isoformat())

    def figures(rows: Floats, subjects: Integers) -> Found:
        names = [(*seed, part.members.subjects[at].key) for at in subjects.tolist()]
        tail = measure_tail(rows, call, names)
        notes = tail_notes(tail, inexact)
        found = bounds(bound_tail(rows, call, tail, (*seed, "bounds"))) if part.bounded else None
        return Found(chosen(tail), notes, found)

    return _over_window(part, parameters["window"], figures, how_of(parameters), amount=True, days=_overlap(parameters))


def tail_call(parameters: Parameters) -> TailCall:
    """What a rule's parameters ask of the risk room."""
    overlap = _overlap(parameters)
    names = ("method", "confidence", "drift", "decay", "scaling", "fit", "tail_share", "distribution", "paths")
    given = {name: parameters[name] for name in names if name in parameters}
    if "decay" in given:
        given["decay"] = float(given["decay"])
    return TailCall(horizon_days=1 if overlap > 1 else parameters["horizon_days"], overlapping=overlap, **given)


def _overlap(parameters: Parameters) -> int:
    """How many days the scenarios span: the horizon where it is reached by overlapping periods, else 1."""
    return int(parameters["horizon_days"]) if parameters.get("horizon") == "overlapping" else 1


def how_of(parameters: Parameters) -> How:
    return How(
        method=parameters.get("method"),
        confidence=parameters.get("confidence"),
        horizon_days=parameters.get("horizon_days"),
        window=parameters["window"],
        of=parameters.get("of"),
        detail=", ".join(details(parameters)) or None,
    )


def _pnl(part: Slice, window: int) -> Floats:
    return np.asarray(part.members.sum(part.scenarios(window).pnl))


def _returns(part: Slice, window: int) -> Floats:
    return np.asarray(part.members.sum(part.log_returns(window)))


def _over_window(
    part: Slice,
    window: int,
    figures: Callable[[Floats, Integers], Found],
    how: How,
    amount: bool,
    days: int = 1,
    rows: Callable[[Slice, int], Floats] = _pnl,
) -> Measured:
    """Ask a function of the risk room for all subjects at once, those with a shorter history apart.

    figures: rows (k, n) of k subjects, and their places in the slice, to what is found. days: how many sessions each
    scenario spans. rows: what the subjects made on each session.
    """
    made = np.asarray(part.members.sum(part.overlapping(window, days))) if days > 1 else rows(part, window)
    used = part.sessions_used(window)
    measured = Measured(np.full(part.size, np.nan), [None] * part.size, amount, used, how)
    for n in np.unique(used):
        subjects = np.flatnonzero(used == n)
        spans = max(int(n) - days + 1, 0)
        own = made if len(subjects) == len(made) and spans == made.shape[1] else made[subjects, made.shape[1] - spans :]
        found = figures(own, subjects)
        measured.fill(subjects, found.figures)
        if found.bounds is not None:
            measured.bound(subjects, found.bounds)
        for row, text in found.notes.items():
            measured.mark(int(subjects[row]), [Mark(MarkKind.METHOD, text)])
        if n < window:
            for at in subjects.tolist():
                measured.mark(at, [short_mark(int(n), window)])
    leave_out_troubled(part, measured, part.window_troubles(window, used) | part.exposure_troubles())
    return measured


def short_mark(n: int, window: int) -> Mark:
    return Mark(MarkKind.SHORT, f"{n} of the {window} sessions of the window")


def tail_notes(tail: Tail, inexact: str) -> dict[int, str]:
    """By row, what a reader must know about a tail. inexact: what to say where less than one scenario lies in it."""
    first = dict.fromkeys(range(len(tail.note)), inexact) if not tail.exact_tail else {}
    return first | _fit_notes(tail.note)


def _fit_notes(notes: Codes) -> dict[int, str]:
    """By row, what a reader must know about the fit."""
    return {row: FIT_NOTE_TEXT[FitNote(notes[row])] for row in np.flatnonzero(notes != FitNote.AS_ASKED).tolist()}
