"""Rule files: what may stand in them, and the rules that come out."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from datetime import date
from decimal import Decimal
from typing import Annotated

from pydantic import Field, PlainValidator

from monitor.limits.catalogue import LATER_MEASURES, MEASURES, Measure
from monitor.limits.context import RuleContext
from monitor.limits.levels import KEYS, read_levels
from monitor.limits.parameters import LATER_PARAMETERS, Parameters
from monitor.limits.selection import check_each, read_selectors
from monitor.limits.wording import made_title
from monitor.reading.document import Document, Path
from monitor.reading.fields import Currency, Day, Id, Level, Line, Word, one_line, one_of
from monitor.reading.plain import read_yaml
from monitor.reading.shapes import Shape
from monitor.reading.values import UNREADABLE, Percent, shown
from monitor.words import Finding, Unit, WrongUse
from monitor.world import MeasureCall, Rule

LATER_KEYS = {
    "steps": "the steps of an escalation",
    "formerly": "renamed rules",
    "tiers": "several levels in one rule",
    "when": "conditions",
    "net_by": "netting",
}


class FileShape(Shape):
    rules: object


class RuleShape(Shape):
    """The keys of one rule. Those of type object have shapes of their own."""

    id: Id
    title: Line | None = None
    applies_to: object = None
    each: Word | None = None
    measure: object
    near: Level | None = None
    limit: Level | None = None
    near_below: Level | None = None
    limit_below: Level | None = None
    unit: Annotated[str, PlainValidator(one_of(Unit))] | None = None
    currency: Currency | None = None
    kind: Word | None = Field(None, alias="class")
    owner: Id | None = None
    tell: tuple[Id, ...] | None = None
    in_force: object = None
    because: Line | None = None

    def levels(self) -> Mapping[str, Decimal | Percent]:
        given = {key: getattr(self, key) for key in KEYS}
        return {key: level for key, level in given.items() if level is not None}


class InForceShape(Shape):
    """Both days are days in force."""

    first: Day | None = Field(None, alias="from")
    last: Day | None = Field(None, alias="to")


def read_rules(files: Sequence[tuple[str, bytes]], context: RuleContext) -> tuple[Rule, ...]:
    """The rules of all files, each a name and its bytes. Raises WrongUse with every finding of every file.

    Depends on its arguments alone, so that archived rules read as they did.
    """
    rules: list[Rule] = []
    findings: list[Finding] = []
    homes: dict[str, str] = {}
    for name, data in files:
        try:
            document = read_yaml(name, data)
        except WrongUse as error:
            findings += error.findings
            continue
        rules += _read_file(document, context, homes)
        findings += document.report()
    if findings:
        raise WrongUse(findings=tuple(findings))
    return tuple(rules)


def _read_file(document: Document, context: RuleContext, homes: dict[str, str]) -> list[Rule]:
    document.shape((), FileShape)
    made = []
    for path in document.items(("rules",)) if document.has(("rules",)) else ():
        rule = _read_rule(document, path, context)
        _check_once(document, path, homes)
        if rule:
            made.append(rule)
    return made


def _check_once(document: Document, path: Path, homes: dict[str, str]) -> None:
    """Rule ids are unique over all files; `homes` says where each was met first."""
    rule = document.at(path)
    name = rule.get("id") if isinstance(rule, dict) else None
    if isinstance(name, str):
        at = (*path, "id")
        if name in homes:
            document.refuse(
                at, "each rule id once in all files", f"the id {shown(name)} again (first at {homes[name]})"
            )
        homes.setdefault(name, f"{document.name}:{document.line(at)}")


def _read_rule(document: Document, path: Path, context: RuleContext) -> Rule | None:
    shape = document.shape(path, RuleShape, LATER_KEYS)
    written = document.at(path)
    if not isinstance(written, dict):
        return None
    selectors = read_selectors(document, (*path, "applies_to"), context) if "applies_to" in written else ()
    if "each" in written:
        check_each(document, (*path, "each"))
    measure, parameters = _read_measure(document, (*path, "measure"), context) if "measure" in written else (None, None)
    first, last = _in_force(document, (*path, "in_force")) if "in_force" in written else (None, None)
    document.refuse_unknown((*path, "tell"), context.groups, "groups")
    _check_owner(document, (*path, "owner"), context)
    if shape is None or measure is None:
        return None
    if shape.tell == ():
        document.refuse((*path, "tell"), "at least one group", remedy="Leave the key out for the nightly note's group")
    unit = _unit(document, path, shape, measure)
    if unit is None or parameters is None:
        return None
    for key, found, expected in parameters.misfits(shape.each, unit):
        if document.sound_below((*path, "measure")):
            document.refuse((*path, "measure", key), expected, found)
    levels = read_levels(document, path, shape.levels(), measure, unit)
    rule = Rule(
        id=shape.id,
        title=shape.title or "",
        applies_to=selectors,
        each=shape.each,
        measure=MeasureCall(measure.name, parameters.filled(context.defaults)),
        unit=unit,
        currency=shape.currency,
        near=levels.near,
        limit=levels.limit,
        near_below=levels.near_below,
        limit_below=levels.limit_below,
        kind=shape.kind,
        owner=shape.owner,
        tell=shape.tell or (context.told_by_default,),
        in_force_from=first,
        in_force_to=last,
        because=shape.because,
        file=document.name,
        line=document.line(path),
    )
    return rule if shape.title else replace(rule, title=made_title(rule))


def _read_measure(document: Document, path: Path, context: RuleContext) -> tuple[Measure | None, Parameters | None]:
    """The measure that a rule names and its parameters; None for what could not be read."""
    written = document.at(path)
    if written is UNREADABLE:
        return None, None
    if not isinstance(written, dict):
        document.refuse(path, "a mapping, such as {name: value_at_risk}")
        return None, None
    if "name" not in written:
        document.refuse(path, "the key 'name'", "a measure without 'name'")
        return None, None
    at = (*path, "name")
    name = written["name"]
    if not isinstance(name, str) or name not in MEASURES:
        _refuse_measure(document, at)
        return None, None
    measure = MEASURES[name]
    parameters = document.shape(path, measure.parameters, LATER_PARAMETERS)
    if parameters is not None:
        _check_parameters(document, path, parameters, context)
    return measure, parameters


def _refuse_measure(document: Document, path: Path) -> None:
    expected = "one of the measures: " + ", ".join(MEASURES)
    if not document.accepts(path, one_line):
        return
    name = document.at(path)
    if name in LATER_MEASURES:
        document.refuse(path, expected, f"the measure {name!r}, which is not there yet in this edition")
    else:
        document.refuse(path, expected, f"the unknown measure {shown(name)}", near=(name, MEASURES))


def _check_parameters(document: Document, path: Path, parameters: Parameters, context: RuleContext) -> None:
    for key, found, expected in parameters.contradictions(parameters.filled(context.defaults)):
        if document.sound_below(path):
            document.refuse((*path, key), expected, found)


def _unit(document: Document, path: Path, shape: RuleShape, measure: Measure) -> Unit | None:
    """The rule's unit: the one named, or the only one there is. None, with a finding, when it does not fit."""
    at = (*path, "unit")
    units = measure.units_for(shape.each)
    if not units:
        found = f"each: position for {measure.name}, which says nothing of one position"
        document.refuse((*path, "each"), "no `each`, or another", found)
        return None
    if not document.sound(at):
        return None
    listed = "one of the units " + ", ".join(units) if len(units) > 1 else units[0]
    if shape.unit is None:
        if len(units) > 1:
            document.refuse(path, f"the key 'unit': {listed}", "a rule without 'unit'")
            return None
        unit = units[0]
    else:
        unit = Unit(shape.unit)
    if unit not in units:
        only = " (ratio goes with each: position)" if unit in measure.position_units else ""
        document.refuse(at, f"{listed} for {measure.name}", f"the unit {unit}{only}")
        return None
    if shape.currency and unit is not Unit.AMOUNT:
        document.refuse(
            (*path, "currency"), "no currency, or unit: amount", f"a currency with the unit {unit}", at_key=True
        )
    return unit


def _in_force(document: Document, path: Path) -> tuple[date | None, date | None]:
    shape = document.shape(path, InForceShape)
    if shape is None:
        return None, None
    if shape.first and shape.last and shape.last < shape.first:
        document.refuse((*path, "to"), f"a day on or after {shape.first}")
    return shape.first, shape.last


def _check_owner(document: Document, path: Path, context: RuleContext) -> None:
    if document.has(path) and document.sound(path):
        owner = document.at(path)
        if owner not in context.people:
            people = ", ".join(context.people)
            expected = f"one of the people: {people}" if people else "no owner, for the site has no people"
            document.refuse(path, expected, near=(owner, context.people))
