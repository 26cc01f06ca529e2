"""The measures by name: each is one function over a slice of the world.

A measure gives one figure a subject, in the slice's currency when it is an amount, or the reason why there is none.
To add one: write the function, enter it in MEASURES, describe it in catalogue.py, and test it against a source.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np

from monitor.limits.contributions import component, incremental, marginal
from monitor.limits.measured import Measure, Measured, Parameters, divide, leave_out_troubled, pairs
from monitor.limits.slices import Slice, stray_marks
from monitor.limits.subjects import books_under, members_of
from monitor.limits.windowed import expected_shortfall, loss_probability, tail_index, value_at_risk, volatility
from monitor.words import Mark, MarkKind, Unit
from monitor.world import Floats, How


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
    broken = dict(pairs(earlier, np.isnan(last.pnl)))
    measured = Measured(np.zeros(part.size), [None] * part.size, amount=True, how=How(method="hypothetical"))
    marks: dict[int, list[Mark]] = {}
    for owner, position in pairs(earlier, last.carried):
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


def _of_exposures(part: Slice, values: Floats) -> Measured:
    """values: (positions,). Sums over the subjects; a subject with an unknown exposure has no figure."""
    measured = Measured(np.asarray(part.members.sum(values), dtype=np.float64), [None] * part.size, amount=True)
    leave_out_troubled(part, measured, part.exposure_troubles())
    return measured


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
    "component": component,
    "incremental": incremental,
    "marginal": marginal,
    "tail_index": tail_index,
    "day_loss": day_loss,
}
