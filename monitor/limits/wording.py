"""Rules in plain English: one sentence for each, and what differs between two sets."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from decimal import Decimal
from typing import Any

from monitor.limits.catalogue import MEASURES
from monitor.words import Unit
from monitor.world import Rule, Selector

_SHARES = {Unit.OF_NAV: "NAV", Unit.OF_GROSS: "gross exposure"}
_SUBJECTS = "the subject's "
_METHODS = {
    "historical": "historical simulation",
    "age_weighted": "age-weighted historical simulation",
    "volatility_scaled": "volatility-scaled historical simulation",
    "normal": "normal distribution",
    "student_t": "Student's t distribution",
    "cornish_fisher": "Cornish-Fisher expansion",
    "peaks_over_threshold": "peaks over threshold with a generalised Pareto tail",
    "monte_carlo": "Monte Carlo simulation",
    "sample": "sample standard deviation",
    "ewma": "exponentially weighted",
    "garch": "GARCH(1,1)",
    "parkinson": "Parkinson's estimator from highs and lows",
    "garman_klass": "Garman and Klass's estimator from opens, highs, lows and closes",
}
_OVERLAPPING = "overlapping periods"
_VOLATILITIES = {"ewma": "exponentially weighted volatility", "garch": "GARCH volatility"}
_DISTRIBUTIONS = {"normal": "the normal distribution", "student_t": "Student's t distribution"}


def sentence(rule: Rule) -> str:
    """One sentence that says the whole limit: subjects, measure with its parameters, levels with unit, from when."""
    text = f"{rule.id}: {_subject(rule)} {_demand(rule)}"
    return f"{text}{_in_force(rule)}."


def made_title(rule: Rule) -> str:
    """A title for a rule that has none."""
    text = f"{MEASURES[rule.measure.name].noun} {_whose(rule).rstrip(',')}{_to(rule)}: {_limits(rule)}{_unit(rule)}"
    return text[0].upper() + text[1:]


def differences(old: Iterable[Rule], new: Iterable[Rule]) -> list[str]:
    """What changed from one set of rules to another, one line a change. Where a rule is written does not count."""
    before = {rule.id: rule for rule in old}
    after = {rule.id: rule for rule in new}
    lines = [f"new rule {sentence(rule)}" for name, rule in after.items() if name not in before]
    lines += [f"rule {name} is no more ({rule.title})" for name, rule in before.items() if name not in after]
    for name, rule in after.items():
        if name in before:
            lines += _changes(before[name], rule)
    return lines


def _changes(old: Rule, new: Rule) -> Iterator[str]:
    was, now = _parts(old), _parts(new)
    for part, text in now.items():
        if text != was[part]:
            yield f"rule {new.id}: {part} was {was[part]}, is now {text}"


def _parts(rule: Rule) -> Mapping[str, str]:
    """Everything that a rule says, in words."""
    levels = {key: getattr(rule, key) for key in ("near", "limit", "near_below", "limit_below")}
    return {
        "title": f"'{rule.title}'",
        "applies to": ", ".join(map(_selector, rule.applies_to)) or "everything",
        "each": rule.each or "one subject",
        "measure": rule.measure.name + _to(rule) + _parameters(rule),
        "unit": rule.unit + (f" in {rule.currency}" if rule.currency else ""),
        **{
            key.replace("_", " "): "none" if level is None else _figure(rule, level) + _unit(rule)
            for key, level in levels.items()
        },
        "class": rule.kind or "none",
        "owner": rule.owner or "nobody",
        "told": ", ".join(rule.tell),
        "in force": _in_force(rule).strip(", ") or "always",
        "because": f"'{rule.because}'" if rule.because else "no reason given",
    }


def _subject(rule: Rule) -> str:
    noun = MEASURES[rule.measure.name].noun
    if _to(rule):
        return f"the {noun} {_whose(rule)}{_to(rule)}{_parameters(rule)}"
    return f"the {noun}{_parameters(rule)} {_whose(rule)}"


def _to(rule: Rule) -> str:
    """What a contribution is one to: ` to its book's value at risk`; nothing for other measures."""
    given = rule.measure.parameters
    if "within" not in given:
        return ""
    return f" to {_owner(rule) or _SUBJECTS}{MEASURES[given['of']].noun}"


def _demand(rule: Rule) -> str:
    sides = ((rule.near_below, "down"), (rule.near, "up"))
    near = [f"{_figure(rule, level)} {way}" for level, way in sides if level is not None]
    return f"must be {_limits(rule)}{_unit(rule, _owner(rule))}" + (
        f" (near from {' or from '.join(near)})" if near else ""
    )


def _limits(rule: Rule) -> str:
    said = []
    if rule.limit_below is not None:
        said.append(f"at least {_figure(rule, rule.limit_below)}")
    if rule.limit is not None:
        said.append(f"at most {_figure(rule, rule.limit)}")
    return " and ".join(said)


def _figure(rule: Rule, level: float) -> str:
    exact = Decimal(repr(level))
    if rule.unit in _SHARES or (rule.unit is Unit.RATIO and rule.measure.name != "leverage"):
        return percent(exact)
    return f"{exact:,f}".removesuffix(".0")


def _unit(rule: Rule, owner: str = "") -> str:
    """The unit after a figure. owner: whose NAV, gross exposure or currency it is."""
    if rule.unit in _SHARES:
        return f" of {owner}{_SHARES[rule.unit]}"
    if rule.unit is Unit.AMOUNT:
        return f" {rule.currency}" if rule.currency else f" in {owner or _SUBJECTS}currency"
    return " of each further unit of exposure" if rule.measure.name == "marginal" else ""


def _owner(rule: Rule) -> str:
    """Whose NAV, gross exposure or currency; empty where the rule alone does not say how many books are left."""
    if rule.measure.parameters.get("within") == "firm":
        return "the firm's "
    if rule.each in ("position", "book"):
        return "its book's "
    books = next((item for item in rule.applies_to if item.tag == "book" and item.values is not None), None)
    if books is None or (len(books.values or ()) > 1 and not books.negated):
        return "the firm's "
    return "" if books.negated else "the book's "


def _whose(rule: Rule) -> str:
    """The subjects: `of the firm`, `of book north-quay`, `of each issuer, where kind is equity`.

    Any book and any instrument leave nothing out.
    """
    narrowed = [item for item in rule.applies_to if item.values is not None or item.tag not in ("book", "instrument")]
    where = " and ".join(map(_selector, narrowed))
    if rule.each:
        return f"of each {rule.each}" + (f", where {where}," if where else "")
    if [(item.tag, len(item.values or ()), item.negated) for item in narrowed] == [("book", 1, False)]:
        return f"of book {(narrowed[0].values or ('',))[0]}"
    return f"of all positions where {where}" if where else "of the firm"


def _selector(selector: Selector) -> str:
    if selector.values is None:
        return f"{selector.tag} is any"
    if len(selector.values) == 1:
        return f"{selector.tag} is {'not ' if selector.negated else ''}{selector.values[0]}"
    return f"{selector.tag} is {'none' if selector.negated else 'one'} of {', '.join(selector.values)}"


def _parameters(rule: Rule) -> str:
    """The parameters in brackets, every one with its unit; nothing for a measure without."""
    given = rule.measure.parameters
    said: list[str] = []
    if "threshold" in given:
        share = given["of"]
        threshold = Decimal(repr(given["threshold"]))
        size = (
            f"{percent(threshold)} of {_owner(rule)}{_SHARES[Unit(f'of_{share}')]}"
            if share
            else f"{threshold.normalize():,f} in {_owner(rule) or _SUBJECTS}currency"
        )
        said.append(f"above {size}")
    if "method" in given:
        said.append(_METHODS[str(given["method"])])
    if "confidence" in given:
        said.append(f"confidence {percent(given['confidence'])}")
    if "horizon_days" in given:
        said.append("horizon " + _counted(given["horizon_days"], "day") + _way(given))
    if "window" in given:
        said.append("window " + _counted(given["window"], "session"))
    said += [words for words in details(given) if words != _OVERLAPPING]
    if "drift" in given:
        said.append("drift " + ("as in the window" if given["drift"] == "sample" else "zero"))
    if "basis" in given:
        said.append(f"{given['basis']} P&L")
    return f" ({', '.join(said)})" if said else ""


def _way(parameters: Mapping[str, Any]) -> str:
    """How the horizon is reached. A day is there already, and Monte Carlo draws its days."""
    if parameters.get("horizon") == "overlapping":
        return f" by {_OVERLAPPING}"
    drawn = parameters.get("method") == "monte_carlo"
    return "" if drawn or parameters["horizon_days"] == 1 else " by the root of time"


def method_words(parameters: Mapping[str, Any]) -> str:
    """A method of value at risk with everything that it was told, in a few words."""
    window, confidence = _counted(parameters["window"], "session"), percent(parameters["confidence"])
    drift = ["drift as in the window"] if parameters.get("drift") == "sample" else []
    return ", ".join([_METHODS[parameters["method"]], *details(parameters), *drift, confidence, window])


def details(parameters: Mapping[str, Any]) -> list[str]:
    """What a method was told beyond confidence, horizon, window and drift, in words."""
    said = []
    if "scaling" in parameters:
        said.append(f"scaled by {_VOLATILITIES[parameters['scaling']]}")
    if "decay" in parameters and ("scaling" in parameters or parameters["method"] in ("ewma", "age_weighted")):
        said.append(f"decay {parameters['decay']}")
    if parameters.get("fit") == "kurtosis":
        said.append("fitted to the kurtosis")
    if "tail_share" in parameters:
        of = "periods" if parameters.get("horizon") == "overlapping" else "sessions"
        said.append(f"from the worst {percent(parameters['tail_share'])} of the {of}")
    if "paths" in parameters:
        said.append(f"{parameters['paths']:,} draws of {_DISTRIBUTIONS[parameters['distribution']]}")
    if parameters.get("horizon") == "overlapping":
        said.append(_OVERLAPPING)
    return said


def percent(fraction: object) -> str:
    return f"{(Decimal(str(fraction)) * 100).normalize():f} %"


def _counted(count: object, word: str) -> str:
    return f"{count} {word}" + ("" if count == 1 else "s")


def _in_force(rule: Rule) -> str:
    first = f", from {rule.in_force_from}" if rule.in_force_from else ""
    last = f", up to {rule.in_force_to}" if rule.in_force_to else ""
    return first + last
