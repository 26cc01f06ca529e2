"""Takes in what lies in the drop: each new file is hashed, archived, parsed, and accepted or refused with reasons."""

from __future__ import annotations

import hashlib
import os
import sqlite3
import stat
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, replace
from datetime import date
from pathlib import Path

from monitor.facts import FileAccepted, FileRefused
from monitor.feed.history import History
from monitor.feed.holdings import describe
from monitor.feed.kinds import Panel, Vocabulary, parse
from monitor.feed.known import LATEST, Known, decisions
from monitor.feed.names import UNFINISHED, Name, comes_later, read_name
from monitor.feed.tables import MOST_FINDINGS
from monitor.words import FileKind, Finding, WrongUse
from monitor.world import Instrument


@dataclass(frozen=True)
class Lying:
    """A file in the drop as one look found it. changed: nanoseconds. name: as it can be recorded, in UTF-8."""

    path: Path
    name: str
    size: int
    changed: int
    regular: bool


@dataclass(frozen=True)
class Taken:
    """The decision about one file, and what it holds of prices and rates, or of instruments."""

    lying: Lying
    fact: FileAccepted | FileRefused
    panel: Panel | None = None
    instruments: tuple[Instrument, ...] = ()


def look(drop: Path) -> list[Lying]:
    """Everything in the drop that is not plainly unfinished, by name. Raises WrongUse when there is no drop."""
    try:
        paths = sorted(drop.iterdir())
    except OSError as error:
        raise WrongUse(
            f"the drop {drop} cannot be read: {error.strerror}. Create it or name another in paths"
        ) from None
    found = []
    for path in paths:
        if UNFINISHED.fullmatch(path.name):
            continue
        try:
            about = path.lstat()
        except FileNotFoundError:  # taken away between the two looks
            continue
        found.append(Lying(path, _recordable(path.name), about.st_size, about.st_mtime_ns, stat.S_ISREG(about.st_mode)))
    return found


def take(
    lying: list[Lying],
    index: sqlite3.Connection,
    history: History,
    put: Callable[[bytes], str],
    patterns: Mapping[FileKind, str],
    words: Vocabulary,
) -> Iterator[Taken]:
    """Decide about each file that is new or changed. What was decided before is passed over without a word.

    The caller records the facts, and then calls `remember` for each.
    """
    decided = decisions(index)
    seen = history.seen()
    described = describe(Known(index, seq=LATEST, until=date.max), history)
    currency_of = {name: item.currency for name, item in described.items()}
    words = replace(words, knows_calendar=history.knows_calendar, currency_of=currency_of)
    named = [(file, read_name(file.name, patterns)) for file in lying]
    # What instruments are comes first, for their prices are held against it.
    for file, name in sorted(named, key=lambda pair: pair[1] is None or pair[1].kind is not FileKind.INSTRUMENTS):
        identity = (name.kind, name.source, name.day) if name else None
        known = seen.get((file.name, file.size, file.changed))
        if known is not None and decided.stands(file.name, identity, known):
            continue
        data = _read(file)
        sha256 = hashlib.sha256(data).hexdigest() if isinstance(data, bytes) else None
        if not decided.stands(file.name, identity, sha256):
            taken = _decide(file, name, data, put, words)
            currency_of.update((item.id, item.currency) for item in taken.instruments)
            yield taken
        elif sha256 is not None:
            history.remember_seen(file.name, file.size, file.changed, sha256)


def remember(taken: Taken, history: History) -> None:
    """Keep in the cache what a recorded file holds and that it was seen."""
    if taken.panel is not None and taken.fact.sha256 is not None:
        history.keep(taken.fact.sha256, taken.fact.day, taken.panel)
    if taken.fact.sha256 is not None:
        history.remember_seen(taken.lying.name, taken.lying.size, taken.lying.changed, taken.fact.sha256)


def _recordable(name: str) -> str:
    return os.fsencode(name).decode("utf-8", "replace")


def _read(file: Lying) -> bytes | Finding:
    if not file.regular:
        return Finding(file.name, None, None, "a folder, link or special file", "a regular file")
    try:
        return file.path.read_bytes()
    except OSError as error:
        found = f"a file that cannot be read ({error.strerror})"
        return Finding(file.name, None, None, found, "a readable file", "Check its owner and permissions.")


def _decide(
    file: Lying, name: Name | None, data: bytes | Finding, put: Callable[[bytes], str], words: Vocabulary
) -> Taken:
    if isinstance(data, Finding):
        return Taken(file, _refusal(file, name, None, (data,)))
    if name is None:
        return Taken(file, _refusal(file, None, put(data), (_unnamed(file.name),)))
    parsed = parse(name.kind, file.name, data, name.day, words)
    sha256 = put(data)
    if parsed.findings:
        return Taken(file, _refusal(file, name, sha256, parsed.findings))
    accepted = FileAccepted(
        name=file.name,
        file=name.kind,
        source=name.source,
        day=name.day,
        sha256=sha256,
        size=len(data),
        rows=parsed.rows,
        first=parsed.first,
        last=parsed.last,
    )
    content = parsed.content
    if isinstance(content, Panel):
        return Taken(file, accepted, panel=content)
    instruments = [item for item in content if isinstance(item, Instrument)] if isinstance(content, tuple) else []
    return Taken(file, accepted, instruments=tuple(instruments))


def _refusal(file: Lying, name: Name | None, sha256: str | None, findings: tuple[Finding, ...]) -> FileRefused:
    return FileRefused(
        name=file.name,
        file=name.kind if name else None,
        source=name.source if name else "",
        day=name.day if name else None,
        sha256=sha256,
        size=file.size,
        reasons=len(findings),
        findings=findings[:MOST_FINDINGS],
    )


def _unnamed(name: str) -> Finding:
    if comes_later(name):
        return Finding(name, None, None, "a kind of file that is not there yet", "the kinds that the README names")
    expected = "a name by the patterns of the site, as prices_2026-01-31.csv"
    return Finding(name, None, None, "a name that fits no pattern", expected, "Rename it or take it out of the drop.")
