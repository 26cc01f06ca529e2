"""What the site's `backtest` says: how the record of the loss model is judged, and by which method beside its own."""

from __future__ import annotations

from typing import Annotated

from pydantic import PlainValidator

from monitor.limits.defaults import Defaults
from monitor.limits.parameters import TailParameters
from monitor.reading.document import Document
from monitor.reading.fields import Line, one_of
from monitor.reading.shapes import Shape
from monitor.world import MeasureCall, RecordTerms

_KEY = ("backtest",)


class Challenger(TailParameters):
    """The method that stands beside a rule's own, named before its record is known, never picked afterwards."""

    name: Line = "value_at_risk"


class RecordShape(Shape):
    """The keys of `backtest`. missing_day: whether a day without P&L or VaR counts as an exception (MAR32.5).

    pnl: whose losses are held against VaR; `larger` counts both and takes the larger count (MAR32.4).
    """

    challenger: object = None
    missing_day: Annotated[str, PlainValidator(one_of(("left_out", "exception")))] = "left_out"
    pnl: Annotated[str, PlainValidator(one_of(("hypothetical", "actual", "larger")))] = "hypothetical"


def read_record(document: Document, defaults: Defaults) -> RecordTerms:
    """The site's `backtest`, or what holds without it."""
    shape = document.shape(_KEY, RecordShape) if document.has(_KEY) else None
    shape = shape or RecordShape()
    at = (*_KEY, "challenger")
    return RecordTerms(
        challenger=_read_challenger(document, defaults) if document.has(at) else None,
        missing_counts=shape.missing_day == "exception",
        pnl=shape.pnl,
    )


def _read_challenger(document: Document, defaults: Defaults) -> MeasureCall | None:
    at = (*_KEY, "challenger")
    parameters = document.shape(at, Challenger)
    if parameters is None:
        return None
    for key, found, expected in parameters.contradictions(parameters.filled(defaults)):
        if document.sound_below(at):
            document.refuse((*at, key), expected, found)
    return MeasureCall(parameters.name, parameters.filled(defaults)) if document.sound_below(at) else None
