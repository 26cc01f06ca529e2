"""The levels of a rule: as written, as floats in the rule's unit, and how they fit together."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from decimal import Decimal

from monitor.limits.catalogue import Measure
from monitor.reading.document import Document, Path
from monitor.reading.values import Percent
from monitor.words import Unit

KEYS = ("near", "limit", "near_below", "limit_below")
_SHARES = (Unit.OF_NAV, Unit.OF_GROSS)
_LARGEST_FRACTION = 5  # 5 times NAV; a larger plain number was meant as a percentage
_BELOW = (("near", "limit"), ("limit_below", "near_below"), ("limit_below", "limit"), ("near_below", "near"))


@dataclass(frozen=True)
class Levels:
    near: float | None
    limit: float | None
    near_below: float | None
    limit_below: float | None


def read_levels(
    document: Document, path: Path, written: Mapping[str, Decimal | Percent], measure: Measure, unit: Unit
) -> Levels:
    """The levels as floats, percentages as fractions. With a lower limit alone, `near` is the lower side's.

    written: the levels that are there, by key. Every contradiction is a finding.
    """
    for key, level in written.items():
        _check_unit(document, (*path, key), level, measure, unit)
    if measure.name == "tail_index" and "limit" in written:
        remedy = "The smaller a tail index, the fatter the tail"
        document.refuse((*path, "limit"), "`limit_below`", "`limit` for tail_index", remedy=remedy, at_key=True)
    keys = {key: key for key in written}
    if "limit_below" in keys and "limit" not in keys and "near" in keys and "near_below" not in keys:
        keys["near_below"] = keys.pop("near")
    values = {key: _float(written[source]) for key, source in keys.items()}
    levels = Levels(*(values.get(key) for key in KEYS))
    if document.sound(*((*path, key) for key in KEYS)):
        _check_order(document, path, written, keys, values)
    return levels


def _float(level: Decimal | Percent) -> float:
    return float(level.fraction if isinstance(level, Percent) else level)


def _check_unit(document: Document, path: Path, level: Decimal | Percent, measure: Measure, unit: Unit) -> None:
    if isinstance(level, Percent):
        if unit not in (*_SHARES, Unit.RATIO):
            document.refuse(
                path, f"a number, for the unit is {unit}", remedy="Percentages go with of_nav, of_gross and ratio"
            )
    elif (unit in _SHARES or (unit is Unit.RATIO and measure.name != "leverage")) and abs(level) > _LARGEST_FRACTION:
        document.refuse(path, "a percentage, or a fraction of 1", remedy=f"Write {level} % if that is meant")
    if measure.name == "loss_probability" and document.sound(path) and not 0 <= _float(level) <= 1:
        document.refuse(path, "a probability from 0 % to 100 %")


def _check_order(
    document: Document,
    path: Path,
    written: Mapping[str, Decimal | Percent],
    keys: Mapping[str, str],
    values: Mapping[str, float],
) -> None:
    if "limit" not in values and "limit_below" not in values:
        document.refuse(path, "`limit`, `limit_below` or both", "a rule without a limit")
        return
    for near, limit in (("near", "limit"), ("near_below", "limit_below")):
        if near in values and limit not in values:
            document.refuse((*path, keys[near]), f"`{limit}` beside it", f"`{near}` without `{limit}`", at_key=True)
            return
    for lower, upper in _BELOW:
        if lower in values and upper in values and values[lower] >= values[upper]:
            at = keys[lower] if lower.startswith("near") else keys[upper]
            other = keys[upper] if at == keys[lower] else keys[lower]
            side = "below" if at == keys[lower] else "above"
            found = f"`{at}` at {written[at]}, with `{other}` at {written[other]}"
            document.refuse((*path, at), f"`{at}` {side} `{other}`", found)
