"""The measures by name: each is one function over a slice of the world.

A measure gives one figure a subject, in the slice's currency when it is an amount, or the reason why there is none.
To add one: write the function, enter it in MEASURES, describe it in catalogue.py, and test it against a source.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from monitor.limits.slices import Slice
from monitor.limits.subjects import members_of
from monitor.risk.figures import LACK_TEXT, Figures, Lack
from monitor.risk.historical import historical
from monitor.risk.normal import normal
from monitor.risk.probability import loss_probability as probability_of_loss
from monitor.risk.student import student_t
from monitor.risk.tail import FIT_NOTE_TEXT, FitNote, Tail
from monitor.risk.volatility import annualised, ewma, sample
from monitor.words import Mark, MarkKind, Unit
from monitor.world import Floats, How, Integers

Parameters = Mapping[str, Any]


@dataclass
class Measured:
    """A measure's answer. value: (subjects,), NaN exactly where `reasons` says why. amount: in the slice's currency.

    n: (subjects,) sessions used, or None for measures of tonight alone. marks: doubts of the method, by subject.
    """

    value: Floats
    reasons: list[str | None]
    amount: bool
    n: Integers | None = None
    how: How = field(default_factory=How)
    marks: dict[int, Mark] = field(default_factory=dict)

    def leave_out(self, at: int, reason: str) -> None:
        """Take the figure of one subject back and say why."""
        self.value[at] = np.nan
        self.reasons[at] = reason


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
    return divide(measured, *part.denominator("nav"))


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
    return _of_tail(part, parameters, lambda tail: tail.expected_shortfall)


def volatility(part: Slice, parameters: Parameters, unit: Unit) -> Measured:
    """A year's standard deviation: of a position's instrument (ratio), or of a subject's scenario P&L (amount).

    The log returns of an instrument count in the slice's currency, those of a future in its own. Scaled to a year by
    the root of the site's days a year.
    """
    by_instrument = unit is Unit.RATIO

    def figures(rows: Floats, _subjects: Integers) -> tuple[Figures, None]:
        made = sample(rows) if parameters["method"] == "sample" else ewma(rows, float(parameters["decay"]))
        return annualised(made, part.world.terms.days_a_year), None

    how = How(method=parameters["method"], window=parameters["window"])
    return _over_window(part, parameters["window"], figures, how, amount=not by_instrument, of_returns=by_instrument)


def loss_probability(part: Slice, parameters: Parameters, _unit: Unit) -> Measured:
    """The probability of losing more than the threshold over the horizon. Ratio from 0 to 1.

    The threshold is an amount in the slice's currency, or a share of the denominator that `of` names.
    """
    threshold = np.full(part.size, float(parameters["threshold"]))
    lacking: list[str | None] = [None] * part.size
    if parameters.get("of"):
        denominator, lacking = part.denominator(parameters["of"])
        threshold = np.nan_to_num(threshold * denominator)

    def figures(rows: Floats, subjects: Integers) -> tuple[Figures, Integers]:
        made = probability_of_loss(
            rows, threshold[subjects], parameters["horizon_days"], parameters["method"], parameters["drift"]
        )
        return made, made.note.astype(np.int64)

    how = How(
        method=parameters["method"],
        horizon_days=parameters["horizon_days"],
        window=parameters["window"],
        of=parameters.get("of"),
    )
    measured = _over_window(part, parameters["window"], figures, how, amount=False)
    for at, reason in enumerate(lacking):
        if reason is not None:
            measured.leave_out(at, reason)
    return measured


def day_loss(part: Slice, _parameters: Parameters, _unit: Unit) -> Measured:
    """What the positions held before the session just ended lost on it. Amount; negative when they gained.

    The hypothetical P&L of the design: no trades of the day, no fees. Zero on an evening that is no session.
    """
    held, pnl, _ = part.valuation.last_session(part.calendar, part.currency)
    earlier = members_of(part.rule, replace(part.world, holdings=held))
    place = {subject.key: at for at, subject in enumerate(earlier.subjects)}
    totals = earlier.sum(np.nan_to_num(pnl))
    broken = earlier.sum(np.isnan(pnl).astype(np.float64)) > 0
    measured = Measured(np.zeros(part.size), [None] * part.size, amount=True, how=How(method="hypothetical"))
    for at, subject in enumerate(part.members.subjects):
        missing = [reason for book, reason in held.missing.items() if subject.book in (None, book)]
        own = place.get(subject.key)
        if missing:
            measured.leave_out(at, missing[0])
        elif own is not None and broken[own]:
            measured.leave_out(at, f"a position held on {held.on} has no close to compare with")
        elif own is not None:
            measured.value[at] = 0.0 - totals[own]
    return measured


def divide(measured: Measured, denominator: Floats, reasons: list[str | None]) -> Measured:
    """Turn amounts into shares of a denominator; a subject without one has no figure."""
    with np.errstate(all="ignore"):
        measured.value = measured.value / denominator
    for at, reason in enumerate(reasons):
        if reason is not None and measured.reasons[at] is None:
            measured.leave_out(at, reason)
    return measured


def _of_exposures(part: Slice, values: Floats) -> Measured:
    """values: (positions,). Sums over the subjects; a subject with an unknown exposure has no figure."""
    measured = Measured(np.asarray(part.members.sum(values), dtype=np.float64), [None] * part.size, amount=True)
    _leave_out_troubled(part, measured, part.exposure_troubles())
    return measured


def _of_tail(part: Slice, parameters: Parameters, chosen: Callable[[Tail], Figures]) -> Measured:
    confidence, horizon, method = parameters["confidence"], parameters["horizon_days"], parameters["method"]

    def figures(rows: Floats, _subjects: Integers) -> tuple[Figures, Integers]:
        if method == "historical":
            tail = historical(rows, confidence, horizon)
        elif method == "normal":
            tail = normal(rows, confidence, horizon, parameters["drift"])
        else:
            tail = student_t(rows, confidence, horizon, parameters["drift"])
        return chosen(tail), tail.note.astype(np.int64)

    how = How(method=method, confidence=confidence, horizon_days=horizon, window=parameters["window"])
    return _over_window(part, parameters["window"], figures, how, amount=True)


def _over_window(
    part: Slice,
    window: int,
    figures: Callable[[Floats, Integers], tuple[Figures, Integers | None]],
    how: How,
    amount: bool,
    of_returns: bool = False,
) -> Measured:
    """Ask a function of the risk room for all subjects at once, those with a shorter history apart.

    figures: rows (k, n) of k subjects, and their places in the slice, to a figure a row and a note on the fit.
    """
    made = part.scenarios(window)
    rows = part.members.sum(np.nan_to_num(made.log_returns) if of_returns else made.pnl)
    used = part.sessions_used(window)
    measured = Measured(np.full(part.size, np.nan), [None] * part.size, amount, used, how)
    for n in np.unique(used):
        subjects = np.flatnonzero(used == n)
        figure, notes = figures(rows[subjects, rows.shape[1] - n :], subjects)
        measured.value[subjects] = figure.value
        for at, lack in zip(subjects.tolist(), figure.lack.tolist(), strict=True):
            if lack != Lack.NONE:
                measured.reasons[at] = LACK_TEXT[Lack(lack)]
        if notes is not None:
            for at in np.flatnonzero(notes != FitNote.AS_ASKED).tolist():
                measured.marks[int(subjects[at])] = Mark(MarkKind.METHOD, FIT_NOTE_TEXT[FitNote(notes[at])])
        if n < window:
            for at in subjects.tolist():
                measured.marks.setdefault(at, Mark(MarkKind.SHORT, f"{n} of the {window} sessions of the window"))
    _leave_out_troubled(part, measured, part.exposure_troubles() | part.window_troubles(window, used))
    return measured


def _leave_out_troubled(part: Slice, measured: Measured, troubles: Mapping[int, str]) -> None:
    """A subject that holds a position with a trouble has no figure: a part of it would be less than the truth."""
    if not troubles:
        return
    found: dict[int, list[str]] = {}
    for owner, at in zip(part.members.owner.tolist(), part.members.position.tolist(), strict=True):
        if at in troubles:
            found.setdefault(owner, []).append(troubles[at])
    for owner, reasons in found.items():
        distinct = list(dict.fromkeys(reasons))
        more = f"; and {len(distinct) - 1} more positions" if len(distinct) > 1 else ""
        measured.leave_out(owner, distinct[0] + more)


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
