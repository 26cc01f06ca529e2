"""Every measure by name: what it says, its parameters, and what a rule may ask of it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from monitor.limits.parameters import (
    DayLossParameters,
    LossProbabilityParameters,
    Parameters,
    TailParameters,
    VolatilityParameters,
)
from monitor.words import Unit

LOSS_UNITS = (Unit.AMOUNT, Unit.OF_NAV, Unit.OF_GROSS)
LATER_MEASURES = (
    "quantity",
    "sum_of_large_weights",
    "herfindahl",
    "var_to_reference",
    "component",
    "month_loss",
    "loss_since_cost",
    "drawdown",
    "days_to_liquidate",
    "share_of_volume",
    "stress_loss",
    "stale_days",
    "backtest_exceptions",
    "tail_index",
    "change",
)


@dataclass(frozen=True)
class Measure:
    """One measure.

    noun: its name inside a sentence. meaning: what it is, in one sentence. units: those a rule may use.
    position_units: those for `each: position`; none means that the measure says nothing of a single position.
    """

    name: str
    noun: str
    meaning: str
    units: tuple[Unit, ...]
    position_units: tuple[Unit, ...]
    parameters: type[Parameters] = Parameters

    def units_for(self, each: str | None) -> tuple[Unit, ...]:
        return self.position_units if each == "position" else self.units


_ALL = (
    Measure("gross", "gross exposure", "The sum of the absolute exposures of all positions.", LOSS_UNITS, LOSS_UNITS),
    Measure("net", "net exposure", "The sum of the signed exposures of all positions.", LOSS_UNITS, LOSS_UNITS),
    Measure("long", "long exposure", "The sum of the exposures above zero.", LOSS_UNITS, LOSS_UNITS),
    Measure(
        "short",
        "short exposure",
        "The size of the exposures below zero, never negative.",
        LOSS_UNITS,
        LOSS_UNITS,
    ),
    Measure("count", "number of positions", "How many positions there are.", (Unit.NUMBER,), ()),
    Measure(
        "leverage",
        "leverage",
        "Gross exposure over NAV, without cash in the own currency.",
        (Unit.RATIO,),
        (),
    ),
    Measure(
        "weight",
        "weight",
        "The absolute exposures of the subject over net asset value or gross exposure.",
        (Unit.OF_NAV, Unit.OF_GROSS),
        (Unit.OF_NAV, Unit.OF_GROSS),
    ),
    Measure(
        "largest_weight",
        "largest weight of an instrument",
        "The weight of the instrument whose exposure, netted over the books, is the largest in size.",
        (Unit.OF_NAV, Unit.OF_GROSS),
        (),
    ),
    Measure(
        "volatility",
        "annualised volatility",
        "The standard deviation of the P&L, or of a position's returns as a ratio, annualised.",
        LOSS_UNITS,
        (*LOSS_UNITS, Unit.RATIO),
        VolatilityParameters,
    ),
    Measure(
        "value_at_risk",
        "value at risk",
        "The loss that is not passed with the given confidence over the horizon; not the worst case.",
        LOSS_UNITS,
        LOSS_UNITS,
        TailParameters,
    ),
    Measure(
        "expected_shortfall",
        "expected shortfall",
        "The mean of the losses beyond the value at risk of the same confidence.",
        LOSS_UNITS,
        LOSS_UNITS,
        TailParameters,
    ),
    Measure(
        "loss_probability",
        "probability of a loss",
        "The probability of a loss above the threshold over the horizon.",
        (Unit.RATIO,),
        (Unit.RATIO,),
        LossProbabilityParameters,
    ),
    Measure(
        "day_loss",
        "loss of the day",
        "The loss that the positions held before made on the session just ended; a gain is negative.",
        LOSS_UNITS,
        LOSS_UNITS,
        DayLossParameters,
    ),
)
MEASURES: Mapping[str, Measure] = {measure.name: measure for measure in _ALL}
