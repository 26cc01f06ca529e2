"""`applies_to` and `each`: which positions a rule is about, and what makes one subject."""

from __future__ import annotations

from collections.abc import Iterable
from difflib import get_close_matches
from typing import Any

from monitor.currencies import CURRENCIES
from monitor.limits.context import RuleContext
from monitor.reading.document import Document, Path
from monitor.reading.fields import one_line, plain_word
from monitor.reading.values import UNREADABLE, shown
from monitor.words import InstrumentKind
from monitor.world import Selector

ANY = "any"
SELECTED_BY = ("book", "instrument", "kind", "sector", "issuer", "country", "currency")
EACH = ("position", "book", "sector", "issuer", "country", "currency")
NO_TAGS = frozenset({"quantity", "multiplier", "calendar", "expiry", "proxy", "adv", "isin", "name", "measure", "unit"})
LATER_KINDS = ("bond_price", "external")
_SURELY_MEANT = 0.85  # a tag this near to a known word would silently select nothing


def read_selectors(document: Document, path: Path, context: RuleContext) -> tuple[Selector, ...]:
    """The selectors of `applies_to`; every problem is a finding."""
    made = []
    if document.at(path) == {}:
        document.refuse(path, "at least one selector", remedy="Leave the key out to apply to everything")
    for tag, written in document.mapping(path).items():
        at, value = (*path, tag), written
        if not _is_tag(document, at, SELECTED_BY):
            continue
        negated = isinstance(written, dict)
        if negated:
            if list(written) != ["not"]:
                document.refuse(at, "a value, a list of values, any, or {not: ...}")
                continue
            at, value = (*at, "not"), written["not"]
        values = _values(document, at, value, negated)
        _check_values(document, tag, values, context)
        names = tuple(name for _, name in values)
        made.append(Selector(tag, None if value == ANY else names, negated))
    return tuple(made)


def check_each(document: Document, path: Path) -> None:
    """What makes one subject: a known word or a tag of the site."""
    word = document.at(path)
    if not isinstance(word, str) or not document.sound(path) or word in EACH:
        return
    if word in SELECTED_BY:
        remedy = "Use each: position" if word == "instrument" else ""
        document.refuse(path, "one of " + ", ".join(EACH) + ", or a tag of the site", remedy=remedy)
    elif word in NO_TAGS or get_close_matches(word, EACH, 1, _SURELY_MEANT):
        document.refuse(path, "one of " + ", ".join(EACH) + ", or a tag of the site", near=(word, EACH))


def _is_tag(document: Document, path: Path, known: tuple[str, ...]) -> bool:
    tag = str(path[-1])
    if tag in known:
        return True
    if not document.accepts(path, plain_word, at_key=True):
        return False
    if tag in NO_TAGS or tag in EACH or get_close_matches(tag, known, 1, _SURELY_MEANT):
        expected = "one of " + ", ".join(known) + ", or a tag of the site"
        document.refuse(path, expected, f"the key {shown(tag)}", near=(tag, known), at_key=True)
        return False
    return True


def _values(document: Document, path: Path, value: Any, negated: bool) -> list[tuple[Path, str]]:
    """The values with their places; `any` gives none."""
    if value == ANY:
        if negated:
            document.refuse(path, "what to leave out", "not any, which selects nothing")
        return []
    if value is UNREADABLE:
        return []
    places = list(document.items(path)) if isinstance(value, list) else [path]
    made: list[tuple[Path, str]] = []
    for place in places:
        name = document.at(place)
        if not document.accepts(place, one_line):
            continue
        if name == ANY:
            document.refuse(place, "any alone, or a list of values", "any among other values")
        elif any(name == other for _, other in made):
            document.refuse(place, "each value once", f"{shown(name)} again")
        else:
            made.append((place, name))
    return made


def _check_values(document: Document, tag: str, values: Iterable[tuple[Path, str]], context: RuleContext) -> None:
    known: Iterable[str]
    if tag == "book":
        known, said = context.books, "one of the books: " + ", ".join(context.books)
    elif tag == "kind":
        known = [kind.value for kind in InstrumentKind]
        said = "one of " + ", ".join(known)
    elif tag == "currency":
        known, said = sorted(CURRENCIES), "an ISO 4217 currency code such as EUR"
    else:
        return
    for place, name in values:
        if name not in known:
            later = tag == "kind" and name in LATER_KINDS
            found = f"the kind {name!r}, which is not there yet in this edition" if later else None
            document.refuse(place, said, found, near=None if later else (name, known))
