"""YAML text to plain values: one walk over the parser's events.

Events show what nodes and loaded values hide: anchors, tags, doubled keys. The walk stops at its limits before anything
grows, so neither an alias bomb nor deep nesting costs more than reading the bytes.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from typing import Any

import yaml

from monitor.reading.document import Document, Path, Place
from monitor.reading.values import BY_REFERENCE, HUSHED, UNREADABLE, Odd, plain_value, show_scalar, shown
from monitor.words import Finding, WrongUse

MOST_BYTES = 1_000_000
MOST_VALUES = 100_000
MOST_DEPTH = 20
_UNPRINTABLE = re.compile(
    "[^\\t\\n\\r\\x20-\\x7e\\x85\\xa0-\\ud7ff\\ue000-\\ufefe\\uff00-\\ufffd\\U00010000-\\U0010ffff]"
)
_Loader: Any = getattr(yaml, "CSafeLoader", yaml.SafeLoader)  # 7 times faster; missing where libyaml is


class _Stop(Exception):
    """The rest of the file cannot be read; the reason is among the findings."""


def read_yaml(name: str, data: bytes, loader: Any = _Loader) -> Document:
    """Read one YAML document as plain values. Raises WrongUse when the text cannot be read to its end.

    What was refused on the way (anchors, tags, doubled keys, odd scalars) stands in the document's findings.
    """
    document = Document(name)
    try:
        document.data = _Walk(document, yaml.parse(_text(name, data), Loader=loader)).document()
    except _Stop:
        pass
    except yaml.MarkedYAMLError as error:
        line, column = _position(error.problem_mark or error.context_mark)
        found = ": ".join(part for part in (error.context, error.problem) if part)
        document.findings.append(Finding(name, line, column, f"broken YAML ({found})", "YAML that can be read"))
    except (yaml.YAMLError, ValueError, OverflowError) as error:  # the latter: the pure parser's, for an odd escape
        document.findings.append(Finding(name, None, None, f"broken YAML ({error})", "YAML that can be read"))
    else:
        return document
    raise WrongUse(findings=document.report())


def _text(name: str, data: bytes) -> str:
    if len(data) > MOST_BYTES:
        found = f"{len(data):,} bytes"
        raise WrongUse(findings=(Finding(name, None, None, found, f"a file of at most {MOST_BYTES:,} bytes"),))
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        before = data[: error.start]
        line, column = before.count(b"\n") + 1, error.start - before.rfind(b"\n")
        found = f"the byte 0x{data[error.start]:02x}, which is not UTF-8"
        raise WrongUse(findings=(Finding(name, line, column, found, "text in UTF-8"),)) from None
    odd = _UNPRINTABLE.search(text)
    if odd:
        line, column = text.count("\n", 0, odd.start()) + 1, odd.start() - text.rfind("\n", 0, odd.start())
        found = f"the control character U+{ord(odd[0]):04X}"
        raise WrongUse(findings=(Finding(name, line, column, found, "text without control characters"),))
    return text


def _position(mark: Any) -> tuple[int | None, int | None]:
    return (mark.line + 1, mark.column + 1) if mark else (None, None)


class _Walk:
    def __init__(self, document: Document, events: Iterator[Any]) -> None:
        self.found = document
        self.events = events
        self.values = 0

    def document(self) -> Any:
        next(self.events)
        start = next(self.events)
        if isinstance(start, yaml.StreamEndEvent):
            self._stop(start, "an empty file", "a mapping of keys to values")
        if start.version or start.tags:
            self._wrong(start, "a directive (%)", "YAML without directives")
        value = self._value(next(self.events), (), None, 0)
        next(self.events)
        another = next(self.events)
        if not isinstance(another, yaml.StreamEndEvent):
            self._stop(another, "a second document (---)", "one document in a file")
        return value

    def _value(self, event: Any, path: Path, key: tuple[int, int] | None, depth: int) -> Any:
        self.values += 1
        if self.values > MOST_VALUES:
            self._stop(event, f"more than {MOST_VALUES:,} values", "a smaller file")
        if depth > MOST_DEPTH:
            self._stop(event, f"values nested more than {MOST_DEPTH} deep", "a flatter file")
        self.found.places[path] = Place((event.start_mark.line + 1, event.start_mark.column + 1), key)
        if isinstance(event, yaml.AliasEvent):
            return self._unreadable(path, f"the alias *{event.anchor}", "the value itself", "Write it out here")
        if event.anchor is not None:
            self._wrong(event, f"the anchor &{event.anchor}", "the value alone", "Remove the anchor")
        if isinstance(event, yaml.MappingStartEvent):
            value: Any = self._mapping(path, depth)
        elif isinstance(event, yaml.SequenceStartEvent):
            value = self._list(path, depth)
        else:
            value = self._scalar(event, path)
        if event.tag is not None:
            return self._unreadable(path, f"the tag {shown(event.tag)}", "the value alone", "Remove the tag")
        return value

    def _mapping(self, path: Path, depth: int) -> dict[str, Any]:
        made: dict[str, Any] = {}
        lines: dict[str, int] = {}
        while not isinstance(event := next(self.events), yaml.MappingEndEvent):
            line, column = event.start_mark.line + 1, event.start_mark.column + 1
            key = self._key(event, path, depth)
            if key in made:
                self._wrong(event, f"the key {shown(key)} again (first on line {lines[key]})", "each key once")
                key = None
            if key is None:
                self._value(next(self.events), self._aside(path), None, depth + 1)
                continue
            lines[key] = line
            made[key] = UNREADABLE
            made[key] = self._value(next(self.events), (*path, key), (line, column), depth + 1)
        return made

    def _aside(self, path: Path) -> Path:
        """A path that nobody asks for, for a value that does not count but may have more wrong in it."""
        return (*path, -1 - self.values)

    def _key(self, event: Any, path: Path, depth: int) -> str | None:
        """The key that an event stands for; None, with a finding, when it cannot be one."""
        if not isinstance(event, yaml.ScalarEvent):
            self._wrong(event, "a key that is not plain text", "a word as key")
            self._value(event, self._aside(path), None, depth + 1)
            return None
        if event.anchor is not None or event.tag is not None:
            self._wrong(event, "an anchor or a tag on a key", "the key alone")
        if event.style:
            return str(event.value)
        if event.value == "<<":
            self._wrong(event, "the merge key <<", "the keys themselves", "Write them out here")
            return None
        value = plain_value(event.value)
        if isinstance(value, str):
            return value
        self._wrong(event, f"{shown(event.value)} as a key", "a word as key", "Quote it if it is meant")
        return None

    def _list(self, path: Path, depth: int) -> list[Any]:
        made: list[Any] = []
        while not isinstance(event := next(self.events), yaml.SequenceEndEvent):
            made.append(self._value(event, (*path, len(made)), None, depth + 1))
        return made

    def _scalar(self, event: Any, path: Path) -> Any:
        if event.style:
            return event.value
        value = plain_value(event.value)
        if not isinstance(value, Odd):
            return value
        found = show_scalar(event.value, path[-1] if path else None)
        if found == HUSHED:
            return self._unreadable(path, found, BY_REFERENCE)
        return self._unreadable(path, found, value.expected, value.remedy)

    def _unreadable(self, path: Path, found: str, expected: str, remedy: str = "") -> Any:
        self.found.refuse(path, expected, found, remedy)
        return UNREADABLE

    def _wrong(self, event: Any, found: str, expected: str, remedy: str = "") -> None:
        line, column = _position(event.start_mark)
        self.found.note(Finding(self.found.name, line, column, found, expected, remedy))

    def _stop(self, event: Any, found: str, expected: str) -> None:
        self._wrong(event, found, expected)
        raise _Stop
