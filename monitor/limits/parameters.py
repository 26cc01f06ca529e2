"""The parameters of each measure: which there are, what they may be, and what is filled in where a rule is silent."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from decimal import Decimal
from typing import Annotated, Any

from pydantic import PlainValidator

from monitor.limits.defaults import Confidence, Decay, Defaults, WindowLength
from monitor.reading.fields import Level, Line, one_of, probability, whole
from monitor.reading.shapes import Shape
from monitor.reading.values import Percent
from monitor.words import Unit
from monitor.world import MeasureCall

TAIL_METHODS = (
    "historical",
    "age_weighted",
    "volatility_scaled",
    "normal",
    "student_t",
    "cornish_fisher",
    "peaks_over_threshold",
    "monte_carlo",
)
COMPONENT_METHODS = ("historical", "age_weighted", "volatility_scaled", "normal", "student_t")
PROBABILITY_METHODS = ("normal", "student_t", "historical")
RANGE_METHODS = ("parkinson", "garman_klass")
VOLATILITY_METHODS = ("sample", "ewma", "garch", *RANGE_METHODS)
# As in `risk`, which reading rules need not load.
LEAST_EXCEEDANCES = 20  # of peaks_over_threshold
LEAST_IN_TAIL = 10  # paths of monte_carlo
LEAST_SESSIONS = 100  # of garch
LEAST_AGE_DECAY = 0.9  # fewer than 19 sessions speak: a cautious choice, no source
LARGEST_INDEX_SHARE = "0.2"  # of tail_index
LATER_PARAMETERS = {
    "participation": "the share of traded volume",
    "reference": "a reference portfolio",
    "days": "a number of days",
    "stresses": "stress scenarios",
    "net_by": "netting",
}
# The methods that a parameter goes with; a parameter that is not here goes with all of its measure.
GOES_WITH = {
    "drift": ("normal", "student_t", "cornish_fisher", "monte_carlo"),
    "decay": ("age_weighted", "volatility_scaled", "ewma"),
    "scaling": ("volatility_scaled",),
    "fit": ("student_t",),
    "tail_share": ("peaks_over_threshold",),
    "distribution": ("monte_carlo",),
    "paths": ("monte_carlo",),
    "horizon": ("historical", "age_weighted", "normal", "student_t", "cornish_fisher", "peaks_over_threshold"),
}

TailMethod = Annotated[str, PlainValidator(one_of(TAIL_METHODS))]
ComponentMethod = Annotated[str, PlainValidator(one_of(COMPONENT_METHODS))]
ProbabilityMethod = Annotated[str, PlainValidator(one_of(PROBABILITY_METHODS))]
VolatilityMethod = Annotated[str, PlainValidator(one_of(VOLATILITY_METHODS))]
Drift = Annotated[str, PlainValidator(one_of(("zero", "sample")))]
HorizonDays = Annotated[int, PlainValidator(whole(1, 250))]
Horizon = Annotated[str, PlainValidator(one_of(("square_root", "overlapping")))]
Scaling = Annotated[str, PlainValidator(one_of(("ewma", "garch")))]
Fit = Annotated[str, PlainValidator(one_of(("likelihood", "kurtosis")))]
TailShare = Annotated[Decimal, PlainValidator(probability("0.01", "0.5", "a share", "0.1 or 10 %"))]
IndexShare = Annotated[Decimal, PlainValidator(probability("0.01", LARGEST_INDEX_SHARE, "a share", "0.1 or 10 %"))]
Whole = Annotated[str, PlainValidator(one_of(("book", "firm")))]
Distribution = Annotated[str, PlainValidator(one_of(("normal", "student_t")))]
Paths = Annotated[int, PlainValidator(whole(10_000, 1_000_000))]
TailName = Annotated[str, PlainValidator(one_of(("value_at_risk", "expected_shortfall")))]
Contradiction = tuple[str, str, str]
Filled = Mapping[str, Any]


class Parameters(Shape):
    """The keys of `measure`. The class as it stands: a measure without parameters."""

    name: Line

    def filled(self, defaults: Defaults) -> dict[str, object]:
        """Every parameter that goes with the method, as a plain value, the site's defaults where the rule is silent."""
        given = {key: getattr(self, key) for key in self.written_keys() if key != "name" and self._goes(key)}
        return {key: getattr(defaults, key, None) if value is None else value for key, value in given.items()}

    def contradictions(self, filled: Filled) -> Iterator[Contradiction]:
        """Parameters that do not go with others: the key, what was found, what was expected.

        filled: all of them, the site's defaults where the rule is silent.
        """
        for key, fitting in GOES_WITH.items():
            if key in self.model_fields_set and not self._goes(key):
                known = [name for name in fitting if name in self._methods()]
                methods = known[0] if len(known) == 1 else f"{', '.join(known[:-1])} or {known[-1]}"
                yield (
                    key,
                    f"`{key}` with the method {getattr(self, 'method', '')}",
                    f"no {key}, or the method {methods}",
                )

    def misfits(self, each: str | None, unit: Unit) -> Iterator[Contradiction]:
        """Parameters that do not go with the rule's subjects or its unit, as contradictions are."""
        return iter(())

    def _goes(self, key: str) -> bool:
        method = getattr(self, "method", None)
        return method is None or key not in GOES_WITH or method in GOES_WITH[key]

    def _methods(self) -> tuple[str, ...]:
        """The methods that this measure knows."""
        return TAIL_METHODS


class ScenarioParameters(Parameters):
    """What value at risk, expected shortfall and contributions to them have in common.

    An age-weighted rule states its decay: one for volatility is too quick.
    """

    method: str = "historical"
    confidence: Confidence | None = None
    horizon_days: HorizonDays = 1
    window: WindowLength | None = None
    drift: Drift = "zero"
    decay: Decay | None = None
    scaling: Scaling = "ewma"

    def filled(self, defaults: Defaults) -> dict[str, object]:
        parameters = super().filled(defaults)
        if parameters.get("scaling") == "garch":
            parameters.pop("decay")
        return parameters

    def contradictions(self, filled: Filled) -> Iterator[Contradiction]:
        yield from super().contradictions(filled)
        yield from _decays(self.method, self.scaling, self.decay)
        if filled.get("scaling") == "garch":
            yield from _too_few_sessions(filled["window"])


class TailParameters(ScenarioParameters):
    """Value at risk and expected shortfall."""

    method: TailMethod = "historical"
    horizon: Horizon = "square_root"
    fit: Fit = "likelihood"
    tail_share: TailShare = Decimal("0.1")
    distribution: Distribution = "normal"
    paths: Paths = 100_000

    def contradictions(self, filled: Filled) -> Iterator[Contradiction]:
        yield from super().contradictions(filled)
        if filled.get("horizon") == "overlapping":
            yield from _too_long(self.horizon_days, filled["window"])
        if self.method == "peaks_over_threshold":
            yield from _too_few_peaks(filled["window"], self.tail_share)
        if self.method == "monte_carlo":
            yield from _too_few_paths(self.paths, filled["confidence"])


def _decays(method: str, scaling: str, decay: float | None) -> Iterator[Contradiction]:
    if method == "age_weighted" and decay is None:
        yield "method", "age_weighted without a decay", "`decay` beside it, such as 0.995"
    if method == "age_weighted" and decay is not None and decay < LEAST_AGE_DECAY:
        speaking = round((1 + decay) / (1 - decay))
        yield "decay", f"a decay of {decay}, which leaves {speaking} sessions to speak", f"at least {LEAST_AGE_DECAY}"
    if method == "volatility_scaled" and scaling == "garch" and decay is not None:
        yield "decay", "a decay with the scaling garch", "no decay, or the scaling ewma"


def _too_long(days: int, window: int) -> Iterator[Contradiction]:
    if window <= days:
        yield "horizon", f"a horizon of {days} days in a window of {window}", "a longer window"


def _too_few_peaks(window: int, tail_share: Decimal) -> Iterator[Contradiction]:
    if (peaks := int(tail_share * window)) < LEAST_EXCEEDANCES:
        found = f"peaks_over_threshold with {peaks} sessions beyond the threshold in a window of {window}"
        yield "method", found, f"at least {LEAST_EXCEEDANCES}: a longer window or a larger tail_share"


def _too_few_sessions(window: int) -> Iterator[Contradiction]:
    if window < LEAST_SESSIONS:
        yield "method", f"garch in a window of {window}", f"a window of at least {LEAST_SESSIONS}"


def _too_few_paths(paths: int, confidence: Decimal) -> Iterator[Contradiction]:
    if (1 - confidence) * paths < LEAST_IN_TAIL:
        found = f"monte_carlo with less than {LEAST_IN_TAIL} of {paths:,} paths beyond a confidence of {confidence}"
        yield "method", found, "more paths, or a lower confidence"


def default_tail(defaults: Defaults) -> MeasureCall:
    """The value at risk that a page shows of every book, whatever the rules say."""
    parameters = tail_parameters("historical")
    return MeasureCall(parameters.name, parameters.filled(defaults))


def tail_parameters(method: str) -> TailParameters:
    """Value at risk by a method that nothing more is said of; age-weighted with the decay of Hull's example, 0.995.

    Hull, Risk Management and Financial Institutions, 4th ed., ch. 13.
    """
    decay = {"decay": Decimal("0.995")} if method == "age_weighted" else {}
    return TailParameters.model_validate({"name": "value_at_risk", "method": method, **decay})


class ComponentParameters(ScenarioParameters):
    """What a subject adds to the figure `of` the book that it lies in, or of the firm."""

    method: ComponentMethod = "historical"
    of: TailName = "value_at_risk"
    within: Whole = "book"

    def contradictions(self, filled: Filled) -> Iterator[Contradiction]:
        yield from super().contradictions(filled)
        if self.name != "incremental" and self.method == "age_weighted" and self.of == "value_at_risk":
            yield (
                "method",
                "age_weighted with of: value_at_risk, a single scenario that has no components",
                "of: expected_shortfall, or another method",
            )

    def misfits(self, each: str | None, unit: Unit) -> Iterator[Contradiction]:
        if each == "book" and self.within == "book":
            yield "name", f"the {self.name} of a book within itself", "`within: firm`, or another `each`"

    def _methods(self) -> tuple[str, ...]:
        return COMPONENT_METHODS


class VolatilityParameters(Parameters):
    method: VolatilityMethod = "sample"
    window: WindowLength | None = None
    decay: Decay | None = None

    def misfits(self, each: str | None, unit: Unit) -> Iterator[Contradiction]:
        if self.method in RANGE_METHODS and not (each == "position" and unit is Unit.RATIO):
            yield (
                "method",
                f"{self.method} for what has no high and low prices of its own",
                "`each: position` with `unit: ratio`, or another method",
            )

    def _methods(self) -> tuple[str, ...]:
        return VOLATILITY_METHODS

    def contradictions(self, filled: Filled) -> Iterator[Contradiction]:
        yield from super().contradictions(filled)
        if self.method == "garch":
            yield from _too_few_sessions(filled["window"])


class TailIndexParameters(Parameters):
    """`tail_share`: the share of the scenarios, the worst ones, that the index is estimated from."""

    tail_share: IndexShare = Decimal("0.1")
    window: WindowLength | None = None


class LossProbabilityParameters(Parameters):
    """`threshold` is an amount in the subject's currency, or a percentage `of` nav or gross."""

    threshold: Level
    of: Annotated[str, PlainValidator(one_of(("nav", "gross")))] | None = None
    method: ProbabilityMethod = "normal"
    horizon_days: HorizonDays = 1
    horizon: Horizon = "square_root"
    window: WindowLength | None = None
    drift: Drift = "zero"

    def filled(self, defaults: Defaults) -> dict[str, object]:
        threshold = self.threshold.fraction if isinstance(self.threshold, Percent) else self.threshold
        return {**super().filled(defaults), "threshold": float(threshold), "of": self.of}

    def contradictions(self, filled: Filled) -> Iterator[Contradiction]:
        yield from super().contradictions(filled)
        if isinstance(self.threshold, Percent) and self.of is None:
            yield "threshold", f"the percentage {self.threshold} of nothing", "`of: nav` or `of: gross` beside it"
        if not isinstance(self.threshold, Percent) and self.of is not None:
            yield "threshold", f"the number {self.threshold} with `of: {self.of}`", "a percentage such as 5 %"
        size = self.threshold.number if isinstance(self.threshold, Percent) else self.threshold
        if size <= Decimal(0):
            yield "threshold", f"the threshold {self.threshold}", "a loss above zero"

    def _methods(self) -> tuple[str, ...]:
        return PROBABILITY_METHODS


class DayLossParameters(Parameters):
    basis: Annotated[str, PlainValidator(one_of(("hypothetical",), ("actual", "nav")))] = "hypothetical"
