"""What the site's `defaults` say: parameters that a rule may leave out."""

from __future__ import annotations

from decimal import Decimal
from typing import Annotated

from pydantic import PlainValidator

from monitor.reading.fields import probability, whole
from monitor.reading.shapes import Shape

_DECAY = probability("0.5", what="a decay", such_as="0.94")
Confidence = Annotated[Decimal, PlainValidator(probability("0.5"))]
Decay = Annotated[float, PlainValidator(lambda value: float(_DECAY(value)))]
WindowLength = Annotated[int, PlainValidator(whole(2, 10_000))]


class Defaults(Shape):
    """window: sessions. decay: of EWMA. days_a_year: for annualising. nav_age: business days a NAV may be old."""

    window: WindowLength = 500
    confidence: Confidence = Decimal("0.99")
    decay: Decay = 0.94
    days_a_year: Annotated[int, PlainValidator(whole(1, 366))] = 252
    nav_age: Annotated[int, PlainValidator(whole(0, 250))] = 2
