"""Every measure by name: what it says, its parameters, and what a rule may ask of it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from monitor.limits.parameters import (
    ComponentParameters,
    DayLossParameters,
    LossProbabilityParameters,
    Parameters,
    TailIndexParameters,
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
    "month_loss",
    "loss_since_cost",
    "drawdown",
    "days_to_liquidate",
    "share_of_volume",
    "stress_loss",
    "stale_days",
    "backtest_exceptions",
    "change",
)


@dataclass(frozen=True)
class Measure:
    """One measure.

    noun: its name inside a sentence. units: those a rule may use.
    position_units: those for `each: position`; none means that the measure says nothing of a single position.
    """

    name: str
    noun: str
    units: tuple[Unit, ...]
    position_units: tuple[Unit, ...]
    parameters: type[Parameters] = Parameters

    def units_for(self, each: str | None) -> tuple[Unit, ...]:
        return self.position_units if each == "position" else self.units


_ALL = (
    Measure("gross", "gross exposure", LOSS_UNITS, LOSS_UNITS),
    Measure("net", "net exposure", LOSS_UNITS, LOSS_UNITS),
    Measure("long", "long exposure", LOSS_UNITS, LOSS_UNITS),
    Measure("short", "short exposure", LOSS_UNITS, LOSS_UNITS),
    Measure("count", "number of positions", (Unit.NUMBER,), ()),
    Measure("leverage", "leverage", (Unit.RATIO,), ()),
    Measure("weight", "weight", (Unit.OF_NAV, Unit.OF_GROSS), (Unit.OF_NAV, Unit.OF_GROSS)),
    Measure("largest_weight", "largest weight of one instrument", (Unit.OF_NAV, Unit.OF_GROSS), ()),
    Measure("volatility", "annualised volatility", LOSS_UNITS, (*LOSS_UNITS, Unit.RATIO), VolatilityParameters),
    Measure("value_at_risk", "value at risk", LOSS_UNITS, LOSS_UNITS, TailParameters),
    Measure("expected_shortfall", "expected shortfall", LOSS_UNITS, LOSS_UNITS, TailParameters),
    Measure("loss_probability", "probability of a loss", (Unit.RATIO,), (Unit.RATIO,), LossProbabilityParameters),
    Measure("component", "contribution", LOSS_UNITS, LOSS_UNITS, ComponentParameters),
    Measure("incremental", "incremental contribution", LOSS_UNITS, LOSS_UNITS, ComponentParameters),
    Measure("marginal", "marginal contribution", (Unit.RATIO,), (Unit.RATIO,), ComponentParameters),
    Measure(
        "tail_index",
        "tail index of losses",
        (Unit.NUMBER,),
        (Unit.NUMBER,),
        TailIndexParameters,
    ),
    Measure("day_loss", "loss of the day", LOSS_UNITS, LOSS_UNITS, DayLossParameters),
)
MEASURES: Mapping[str, Measure] = {measure.name: measure for measure in _ALL}
