"""The measures by name: each is one function over a slice of the world.

A measure gives one figure a subject, in the slice's currency when it is an amount, or the reason why there is none.
To add one: write the function, enter it in MEASURES, describe it in catalogue.py, and test it against a source.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from monitor.limits.slices import Denominator, Slice, stray_marks
from monitor.limits.subjects import Members, books_under, members_of
from monitor.risk.figures import LACK_TEXT, Codes, Figures, Lack
from monitor.risk.historical import historical
from monitor.risk.normal import normal
from monitor.risk.probability import loss_probability as probability_of_loss
from monitor.risk.student import student_t
from monitor.risk.tail import FIT_NOTE_TEXT, FitNote, Tail
from monitor.risk.volatility import annualised, ewma, sample
from monitor.words import Mark, MarkKind, Unit
from monitor.world import Booleans, Floats, How, Integers

Parameters = Mapping[str, Any]
WORST_FOR_MEAN = "less than one scenario lies in the tail: the worst one stands in for the mean"


@dataclass
class Measured:
    """A measure's answer. value: (subjects,), NaN exactly where `reasons` says why. amount: in the slice's currency.

    n: (subjects,) sessions used, or None for measures of tonight alone. marks: doubts of the measure's own, by subject.
    """

    value: Floats
    reasons: list[str | None]
    amount: bool
    n: Integers | None = None
    how: How = field(default_factory=How)
    marks: dict[int, list[Mark]] = field(default_factory=dict)

    def leave_out(self, at: int, reason: str) -> None:
        """Take the figure of one subject back and say why."""
        self.value[at] = np.nan
        self.reasons[at] = reason

    def mark(self, at: int, marks: Iterable[Mark]) -> None:
        self.marks.setdefault(at, []).extend(marks)

    def figure(self, at: int) -> tuple[float | None, str | None]:
        """The figure of one subject, or the reason why there is none."""
        value, reason = float(self.value[at]), self.reasons[at]
        if reason is None and not math.isfinite(value):
            reason = "the figure is too large to calculate with"
        return (value, None) if reason is None else (None, reason)


Measure = Callable[[Slice, Parameters, Unit], Measured]


def gross(part: Slice, _parameters: Parameters, _unit: Unit) -> Measured:
    """The sum of the absolute exposures of the subject's positions. Amount, never negative."""
    return _of_exposures(part, np.abs(part.exposure))


def net(part: Slice, _parameters: Parameters, _unit: Unit) -> Measured:
    """The sum of the signed exposures. Amount; negative when short."""
    return _of_exposures(part, part.exposure)


def long(part: Slice, _parameters: Parameters, _unit: Unit) -> Measured:
    """The sum of the exposures above zero. Amount, never negative."""
    return _of_exposures(part, np.maximum(part.exposure, 0.0))


def short(part: Slice, _parameters: Parameters, _unit: Unit) -> Measured:
    """The size of the exposures below zero. Amount, never negative."""
    return _of_exposures(part, np.maximum(-part.exposure, 0.0))


def count(part: Slice, _parameters: Parameters, _unit: Unit) -> Measured:
    """How many positions the subject holds. Number; needs no price."""
    value = part.members.sum(np.ones(len(part.exposure)))
    return Measured(value, [None] * part.size, amount=False)


def leverage(part: Slice, _parameters: Parameters, _unit: Unit) -> Measured:
    """Gross exposure without cash in the subject's own currency, over NAV. Ratio.

    The gross method of Delegated Regulation (EU) 231/2013, article 7: absolute values, base-currency cash left out.
    """
    measured = _of_exposures(part, np.where(part.own_cash, 0.0, np.abs(part.exposure)))
    measured.amount = False
    return divide(measured, part.denominator("nav"))


def weight(part: Slice, _parameters: Parameters, _unit: Unit) -> Measured:
    """The absolute exposures of the subject, to be divided by the denominator that the rule's unit names."""
    return _of_exposures(part, np.abs(part.exposure))


def largest_weight(part: Slice, _parameters: Parameters, _unit: Unit) -> Measured:
    """The largest absolute exposure in one instrument among the subject's positions, netted over its books.

    To be divided by the denominator that the rule's unit names. Zero for a flat subject.
    """
    measured = _of_exposures(part, part.exposure)
    instruments = part.world.holdings.instrument
    pairs = np.stack([part.members.owner, instruments[part.members.position]], axis=1)
    unique, place = np.unique(pairs, axis=0, return_inverse=True)
    netted = np.zeros(len(unique))
    np.add.at(netted, place.reshape(-1), part.exposure[part.members.position])
    largest = np.zeros(part.size)
    np.maximum.at(largest, unique[:, 0], np.abs(netted))
    measured.value = np.where(np.isnan(measured.value), np.nan, largest)
    return measured


def value_at_risk(part: Slice, parameters: Parameters, _unit: Unit) -> Measured:
    """The loss that is exceeded with probability 1 - confidence over the horizon. Amount, positive when a loss."""
    return _of_tail(part, parameters, lambda tail: tail.value_at_risk)


def expected_shortfall(part: Slice, parameters: Parameters, _unit: Unit) -> Measured:
    """The mean loss in the worst share 1 - confidence of outcomes. Amount, positive when a loss."""
    return _of_tail(part, parameters, lambda tail: tail.expected_shortfall, WORST_FOR_MEAN)


def volatility(part: Slice, parameters: Parameters, unit: Unit) -> Measured:
    """A year's standard deviation: of a position's instrument (ratio), or of a subject's scenario P&L (amount).

    The log returns of an instrument count in the slice's currency, those of a future in its own. Scaled to a year by
    the root of the site's days a year.
    """
    by_instrument = unit is Unit.RATIO

    def figures(rows: Floats, _subjects: Integers) -> tuple[Figures, dict[int, str]]:
        made = sample(rows) if parameters["method"] == "sample" else ewma(rows, float(parameters["decay"]))
        return annualised(made, part.world.terms.days_a_year), {}

    how = How(method=parameters["method"], window=parameters["window"])
    return _over_window(part, parameters["window"], figures, how, amount=not by_instrument, of_returns=by_instrument)


def loss_probability(part: Slice, parameters: Parameters, _unit: Unit) -> Measured:
    """The probability of losing more than the threshold over the horizon. Ratio from 0 to 1.

    The threshold is an amount in the slice's currency, or a share of the denominator that `of` names.
    """
    threshold = np.full(part.size, float(parameters["threshold"]))
    share_of = part.denominator(parameters["of"]) if parameters["of"] else None
    if share_of is not None:
        threshold = np.nan_to_num(threshold * share_of.value)

    def figures(rows: Floats, subjects: Integers) -> tuple[Figures, dict[int, str]]:
        made = probability_of_loss(
            rows, threshold[subjects], parameters["horizon_days"], parameters["method"], parameters["drift"]
        )
        return made, _fit_notes(made.note)

    how = How(
        method=parameters["method"],
        horizon_days=parameters["horizon_days"],
        window=parameters["window"],
        of=parameters["of"],
    )
    measured = _over_window(part, parameters["window"], figures, how, amount=False)
    if share_of is not None:
        _rest_on(measured, share_of)
    return measured


def day_loss(part: Slice, _parameters: Parameters, _unit: Unit) -> Measured:
    """What the positions held before the session just ended lost on it. Amount; negative when they gained.

    The hypothetical P&L of the design: no trades of the day, no fees. Zero on an evening that is no session.
    """
    world, last = part.world, part.last_session()
    held = last.holdings
    earlier = members_of(part.rule, replace(world, holdings=held))
    names = [world.market.instruments[at].id for at in held.instrument.tolist()]
    place = {subject.key: at for at, subject in enumerate(earlier.subjects)}
    totals = earlier.sum(np.nan_to_num(last.pnl))
    broken = dict(_pairs(earlier, np.isnan(last.pnl)))
    measured = Measured(np.zeros(part.size), [None] * part.size, amount=True, how=How(method="hypothetical"))
    marks: dict[int, list[Mark]] = {}
    for owner, position in _pairs(earlier, last.carried):
        marks.setdefault(owner, []).append(Mark(MarkKind.CARRIED, f"{names[position]} on an older price or FX rate"))
    stray = stray_marks(names[at] for at in earlier.stray.tolist())
    for at, subject in enumerate(part.members.subjects):
        missing = [held.missing[book] for book in books_under(part.rule, subject, world) if book in held.missing]
        own = place.get(subject.key, -1)
        measured.mark(at, [*marks.get(own, []), *stray])
        if missing:
            measured.leave_out(at, missing[0])
        elif own in broken:
            measured.leave_out(
                at, f"{names[broken[own]]}, held on {held.on}, has no P&L: no description, price or rate"
            )
        elif own >= 0:
            measured.value[at] = 0.0 - totals[own]
    return measured


def divide(measured: Measured, denominator: Denominator) -> Measured:
    """Turn amounts into shares of a denominator; a subject without one has no figure."""
    with np.errstate(all="ignore"):
        measured.value = measured.value / denominator.value
    _rest_on(measured, denominator)
    return measured


def _rest_on(measured: Measured, denominator: Denominator) -> None:
    """What is lacking or doubtful in the denominator is so in the figure."""
    for at, (reason, doubts) in enumerate(zip(denominator.reasons, denominator.doubts, strict=True)):
        if reason is not None and measured.reasons[at] is None:
            measured.leave_out(at, reason)
        if doubts:
            measured.mark(at, doubts)


def _of_exposures(part: Slice, values: Floats) -> Measured:
    """values: (positions,). Sums over the subjects; a subject with an unknown exposure has no figure."""
    measured = Measured(np.asarray(part.members.sum(values), dtype=np.float64), [None] * part.size, amount=True)
    _leave_out_troubled(part, measured, part.exposure_troubles())
    return measured


def _of_tail(
    part: Slice, parameters: Parameters, chosen: Callable[[Tail], Figures], inexact: str | None = None
) -> Measured:
    """inexact: what to say where less than one scenario lies in the tail."""
    confidence, horizon, method = parameters["confidence"], parameters["horizon_days"], parameters["method"]

    def figures(rows: Floats, _subjects: Integers) -> tuple[Figures, dict[int, str]]:
        if method == "historical":
            tail = historical(rows, confidence, horizon)
        elif method == "normal":
            tail = normal(rows, confidence, horizon, parameters["drift"])
        else:
            tail = student_t(rows, confidence, horizon, parameters["drift"])
        if inexact and not tail.exact_tail:
            return chosen(tail), dict.fromkeys(range(len(rows)), inexact)
        return chosen(tail), _fit_notes(tail.note)

    how = How(method=method, confidence=confidence, horizon_days=horizon, window=parameters["window"])
    return _over_window(part, parameters["window"], figures, how, amount=True)


def _over_window(
    part: Slice,
    window: int,
    figures: Callable[[Floats, Integers], tuple[Figures, dict[int, str]]],
    how: How,
    amount: bool,
    of_returns: bool = False,
) -> Measured:
    """Ask a function of the risk room for all subjects at once, those with a shorter history apart.

    figures: rows (k, n) of k subjects, and their places in the slice, to a figure a row and, by row, a note on it.
    """
    made = part.scenarios(window)
    rows = part.members.sum(made.log_returns() if of_returns else made.pnl)
    used = part.sessions_used(window)
    measured = Measured(np.full(part.size, np.nan), [None] * part.size, amount, used, how)
    for n in np.unique(used):
        subjects = np.flatnonzero(used == n)
        figure, notes = figures(rows[subjects, rows.shape[1] - n :], subjects)
        measured.value[subjects] = figure.value
        for row in np.flatnonzero(figure.lack != Lack.NONE).tolist():
            measured.reasons[int(subjects[row])] = LACK_TEXT[Lack(figure.lack[row])]
        for row, text in notes.items():
            measured.mark(int(subjects[row]), [Mark(MarkKind.METHOD, text)])
        if n < window:
            for at in subjects.tolist():
                measured.mark(at, [Mark(MarkKind.SHORT, f"{n} of the {window} sessions of the window")])
    _leave_out_troubled(part, measured, part.exposure_troubles() | part.window_troubles(window, used))
    return measured


def _leave_out_troubled(part: Slice, measured: Measured, troubles: Mapping[int, str]) -> None:
    """A subject that holds a position with a trouble has no figure: a part of it would be less than the truth."""
    troubled = np.zeros(len(part.exposure), dtype=np.bool_)
    troubled[list(troubles)] = True
    found: dict[int, list[str]] = {}
    for owner, position in _pairs(part.members, troubled):
        found.setdefault(owner, []).append(troubles[position])
    for owner, reasons in found.items():
        distinct = list(dict.fromkeys(reasons))
        others = len(distinct) - 1
        more = f"; and {others} more position{'' if others == 1 else 's'}" if others else ""
        measured.leave_out(owner, distinct[0] + more)


def _pairs(members: Members, positions: Booleans) -> list[tuple[int, int]]:
    """Subjects and their positions, as far as these are among the positions (positions,)."""
    chosen = positions[members.position]
    return list(zip(members.owner[chosen].tolist(), members.position[chosen].tolist(), strict=True))


def _fit_notes(notes: Codes) -> dict[int, str]:
    """By row, what a reader must know about the fit."""
    return {row: FIT_NOTE_TEXT[FitNote(notes[row])] for row in np.flatnonzero(notes != FitNote.AS_ASKED).tolist()}


MEASURES: Mapping[str, Measure] = {
    "gross": gross,
    "net": net,
    "long": long,
    "short": short,
    "count": count,
    "leverage": leverage,
    "weight": weight,
    "largest_weight": largest_weight,
    "volatility": volatility,
    "value_at_risk": value_at_risk,
    "expected_shortfall": expected_shortfall,
    "loss_probability": loss_probability,
    "day_loss": day_loss,
}
