"""The parameters of each measure: which there are, what they may be, and what is filled in where a rule is silent."""

from __future__ import annotations

from collections.abc import Iterator
from decimal import Decimal
from typing import Annotated

from pydantic import PlainValidator

from monitor.limits.defaults import Confidence, Decay, Defaults, WindowLength
from monitor.reading.fields import Level, Line, one_of, whole
from monitor.reading.shapes import Shape
from monitor.reading.values import Percent
from monitor.world import MeasureCall

LATER_TAIL_METHODS = (
    "age_weighted",
    "volatility_scaled",
    "cornish_fisher",
    "peaks_over_threshold",
    "monte_carlo",
)
LATER_VOLATILITY_METHODS = ("garch", "parkinson", "garman_klass")
LATER_PARAMETERS = {
    "horizon": "other ways to a longer horizon than the square root of time",
    "tail_share": "the share of the tail",
    "participation": "the share of traded volume",
    "reference": "a reference portfolio",
    "days": "a number of days",
    "stresses": "stress scenarios",
    "net_by": "netting",
}

TailMethod = Annotated[str, PlainValidator(one_of(("historical", "normal", "student_t"), LATER_TAIL_METHODS))]
FittedMethod = Annotated[str, PlainValidator(one_of(("normal", "student_t"), LATER_TAIL_METHODS))]
VolatilityMethod = Annotated[str, PlainValidator(one_of(("sample", "ewma"), LATER_VOLATILITY_METHODS))]
Drift = Annotated[str, PlainValidator(one_of(("zero", "sample")))]
HorizonDays = Annotated[int, PlainValidator(whole(1, 250))]
Contradiction = tuple[str, str, str]


class Parameters(Shape):
    """The keys of `measure`. The class as it stands: a measure without parameters."""

    name: Line

    def filled(self, defaults: Defaults) -> dict[str, object]:
        """Every parameter by name as a plain value, the site's defaults where the rule is silent."""
        given = {key: getattr(self, key) for key in self.written_keys() if key != "name"}
        return {key: getattr(defaults, key, None) if value is None else value for key, value in given.items()}

    def contradictions(self) -> Iterator[Contradiction]:
        """Parameters that do not go with others: the key, what was found, what was expected."""
        return iter(())


class TailParameters(Parameters):
    """Value at risk and expected shortfall."""

    method: TailMethod = "historical"
    confidence: Confidence | None = None
    horizon_days: HorizonDays = 1
    window: WindowLength | None = None
    drift: Drift = "zero"

    def contradictions(self) -> Iterator[Contradiction]:
        if self.method == "historical" and "drift" in self.model_fields_set:
            yield "drift", "a drift with the method historical", "no drift, or the method normal or student_t"


def default_tail(defaults: Defaults) -> MeasureCall:
    """The value at risk that a page shows of every book, whatever the rules say."""
    name = "value_at_risk"
    return MeasureCall(name, TailParameters(name=name).filled(defaults))


class VolatilityParameters(Parameters):
    method: VolatilityMethod = "sample"
    window: WindowLength | None = None
    decay: Decay | None = None

    def contradictions(self) -> Iterator[Contradiction]:
        if self.method == "sample" and "decay" in self.model_fields_set:
            yield "decay", "a decay with the method sample", "no decay, or the method ewma"


class LossProbabilityParameters(Parameters):
    """`threshold` is an amount in the subject's currency, or a percentage `of` nav or gross."""

    threshold: Level
    of: Annotated[str, PlainValidator(one_of(("nav", "gross")))] | None = None
    method: FittedMethod = "normal"
    horizon_days: HorizonDays = 1
    window: WindowLength | None = None
    drift: Drift = "zero"

    def filled(self, defaults: Defaults) -> dict[str, object]:
        threshold = self.threshold.fraction if isinstance(self.threshold, Percent) else self.threshold
        return {**super().filled(defaults), "threshold": float(threshold), "of": self.of}

    def contradictions(self) -> Iterator[Contradiction]:
        if isinstance(self.threshold, Percent) and self.of is None:
            yield "threshold", f"the percentage {self.threshold} of nothing", "`of: nav` or `of: gross` beside it"
        if not isinstance(self.threshold, Percent) and self.of is not None:
            yield "threshold", f"the number {self.threshold} with `of: {self.of}`", "a percentage such as 5 %"
        size = self.threshold.number if isinstance(self.threshold, Percent) else self.threshold
        if size <= Decimal(0):
            yield "threshold", f"the threshold {self.threshold}", "a loss above zero"


class DayLossParameters(Parameters):
    basis: Annotated[str, PlainValidator(one_of(("hypothetical",), ("actual", "nav")))] = "hypothetical"
