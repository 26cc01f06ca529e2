"""A file's plain values with the place of each, and the findings about them."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any, TypeVar

from pydantic_core import PydanticCustomError

from monitor.reading.shapes import Shape, problems
from monitor.reading.values import UNREADABLE, describe, printable, shown
from monitor.words import Finding, did_you_mean

Path = tuple[str | int, ...]
ShapeT = TypeVar("ShapeT", bound=Shape)

MOST_FINDINGS = 200
LONGEST_SUGGESTED = 64  # nobody misspells a longer word, and difflib is slow on them


@dataclass(frozen=True)
class Place:
    """Where a value begins, and its key; line and column from 1."""

    value: tuple[int, int]
    key: tuple[int, int] | None


@dataclass
class Document:
    """Plain data with the places of its values. What is wrong with it is collected in `findings`.

    doubtful: paths about which there is a finding; whoever checks one value against another leaves these alone.
    """

    name: str
    data: Any = None
    places: dict[Path, Place] = field(default_factory=dict)
    findings: list[Finding] = field(default_factory=list)
    doubtful: set[Path] = field(default_factory=set)
    left_out: int = 0

    def at(self, path: Path) -> Any:
        value = self.data
        for step in path:
            value = value[step]
        return value

    def has(self, path: Path) -> bool:
        return path in self.places

    def line(self, path: Path) -> int:
        return self.places[path].value[0]

    def sound(self, *paths: Path) -> bool:
        """Whether nothing was found wrong at these paths."""
        return self.doubtful.isdisjoint(paths)

    def sound_below(self, *paths: Path) -> bool:
        """Whether nothing was found wrong at these paths or anywhere inside them."""
        return not any(wrong[: len(path)] == path for path in paths for wrong in self.doubtful)

    def ids(self, path: Path) -> tuple[str, ...]:
        """The ids of the mappings in the list at `path`, as written, whatever else is wrong with them."""
        items = self.at(path) if self.has(path) else ()
        found = (item.get("id") for item in items if isinstance(item, dict)) if isinstance(items, list) else ()
        return tuple(dict.fromkeys(name for name in found if isinstance(name, str)))

    def refuse(
        self,
        path: Path,
        expected: str,
        found: str | None = None,
        remedy: str = "",
        near: tuple[str, Iterable[str]] | None = None,
        at_key: bool = False,
    ) -> None:
        """Add a finding about the value at `path`, or its key. `near` is a word and those it may be meant for."""
        self.doubtful.add(path)
        if self._full():
            return
        place = self.places[path]
        line, column = place.key if at_key and place.key else place.value
        if found is None:
            found = describe(self.at(path), path[-1] if path else None)
        if near and len(near[0]) <= LONGEST_SUGGESTED:
            remedy = remedy or did_you_mean(*near)
        self.findings.append(Finding(self.name, line, column, *map(printable, (found, expected, remedy))))

    def note(self, finding: Finding) -> None:
        """Add a finding that is about no value."""
        if not self._full():
            texts = map(printable, (finding.found, finding.expected, finding.remedy))
            self.findings.append(Finding(finding.file, finding.line, finding.column, *texts))

    def _full(self) -> bool:
        full = len(self.findings) >= MOST_FINDINGS
        self.left_out += full
        return full

    def refuse_key(self, path: Path, known: Iterable[str], later: Mapping[str, str] | None = None) -> None:
        """The key at `path` is not one of those known; `later` says what belongs to a later edition."""
        key, known = str(path[-1]), tuple(known)
        expected = "one of the keys " + ", ".join(known) if len(known) > 1 else f"the key {known[0]} alone"
        if later and key in later:
            found = f"the key {key!r} ({later[key]}), which is not there yet in this edition"
            self.refuse(path, expected, found, at_key=True)
        else:
            self.refuse(path, expected, f"the unknown key {shown(key)}", near=(key, known), at_key=True)

    def mapping(self, path: Path) -> Mapping[str, Any]:
        """The mapping at `path`; anything else is a finding, and empty."""
        value = self.at(path)
        if isinstance(value, dict):
            return value
        if value is not UNREADABLE:
            self.refuse(path, "a mapping of keys to values")
        return {}

    def items(self, path: Path) -> Iterator[Path]:
        """The paths of the items of the list at `path`; anything but a list with items is a finding."""
        value = self.at(path)
        if isinstance(value, list) and value:
            yield from ((*path, place) for place in range(len(value)))
        elif value is not UNREADABLE:
            self.refuse(path, "a list with at least one item, each after a dash")

    def shape(self, path: Path, model: type[ShapeT], later: Mapping[str, str] | None = None) -> ShapeT | None:
        """The mapping at `path` in a model's shape; every problem is a finding.

        Keys with a problem are left out when the rest fits, so that checks of one key against another can go on.
        """
        value = self.at(path)
        if value is UNREADABLE:
            return None
        if not isinstance(value, dict):
            self.refuse(path, "a mapping of keys to values")
            return None
        made, found = problems(model, value)
        known = model.written_keys()
        for problem in found:
            place = (*path, *problem.at)
            if problem.unknown:
                self.refuse_key(place, known, later)
            elif problem.missing:
                key = problem.at[0]
                self.refuse(path, f"the key {key!r}", f"a mapping without {key!r}")
            elif place not in self.doubtful:
                self.refuse(place, problem.expected, problem.found, problem.remedy, problem.near)
        return made

    def refuse_doubled_ids(self, path: Path) -> None:
        """Each id in the list of mappings at `path` must be there once."""
        seen: dict[str, int] = {}
        items = self.at(path) if self.has(path) else ()
        for place, item in enumerate(items if isinstance(items, list) else ()):
            name = item.get("id") if isinstance(item, dict) else None
            if isinstance(name, str):
                at = (*path, place, "id")
                if name in seen:
                    self.refuse(at, "each id once", f"the id {shown(name)} again (first on line {seen[name]})")
                else:
                    seen[name] = self.line(at)

    def refuse_unknown(self, path: Path, known: Iterable[str], what: str) -> None:
        """Each item of the list of text at `path`, if it is there, must be one of `known`, and there once."""
        known, seen = tuple(known), set()
        items = self.at(path) if self.has(path) else ()
        for place, name in enumerate(items if isinstance(items, list) else ()):
            at = (*path, place)
            if not isinstance(name, str) or not self.sound(at):
                continue
            if name not in known:
                expected = (
                    f"one of the {what}: " + ", ".join(known) if known else f"no name, for the site has no {what}"
                )
                self.refuse(at, expected, near=(name, known))
            elif name in seen:
                self.refuse(at, "each name once", f"{shown(name)} again")
            seen.add(name)

    def accepts(self, path: Path, accept: Callable[[object], object], at_key: bool = False) -> bool:
        """Whether `accept` (of `fields`) takes the value at `path`, or its key; otherwise there is a finding."""
        value = path[-1] if at_key else self.at(path)
        if value is UNREADABLE:
            return False
        try:
            accept(value)
        except PydanticCustomError as error:
            said: Mapping[str, Any] = error.context or {}
            found = said["found"] or (f"the key {shown(str(value))}" if at_key else None)
            self.refuse(path, said["expected"], found, said["remedy"], said["near"], at_key)
            return False
        return True

    def report(self) -> tuple[Finding, ...]:
        """All findings in the order of the file."""
        ordered = sorted(self.findings, key=lambda finding: (finding.line or 0, finding.column or 0))
        if self.left_out:
            more = f"{self.left_out} more problems like these"
            ordered.append(Finding(self.name, None, None, more, f"at most {MOST_FINDINGS} at once"))
        return tuple(ordered)
