"""A fact of every kind, made from its field types so that new kinds are covered by themselves; and ways to tamper."""

from __future__ import annotations

import os
import sqlite3
import sys
from collections.abc import Iterator, Mapping
from contextlib import closing, contextmanager
from dataclasses import fields, is_dataclass
from datetime import UTC, date, datetime, timedelta
from enum import Enum
from pathlib import Path
from types import NoneType
from typing import Any, get_args, get_origin, get_type_hints

import monitor
from monitor.facts import FACTS, Fact
from monitor.ledger.archive import Archive
from monitor.ledger.chain import Ledger
from monitor.ledger.links import digest
from monitor.ledger.verify import BLOB_FIELDS

NOON = datetime(2026, 3, 2, 12, tzinfo=UTC)


def blob(where: str) -> bytes:
    return f"the content that {where} names".encode()


def sample(kind: type, where: str = "") -> Any:
    """One value of a dataclass; every field that names a blob has the hash of `blob` of its place."""
    hints = get_type_hints(kind)
    return kind(**{field.name: _value(hints[field.name], f"{where}/{field.name}") for field in fields(kind)})


def _value(hint: Any, where: str) -> Any:
    name = where.rpartition("/")[2]
    if get_origin(hint) is tuple:
        return (_value(get_args(hint)[0], where),)
    if get_origin(hint) is Mapping:
        return {"one": _value(get_args(hint)[1], where)}
    if NoneType in get_args(hint):
        return _value(next(part for part in get_args(hint) if part is not NoneType), where)
    if isinstance(hint, type) and (is_dataclass(hint) or issubclass(hint, Enum)):
        return sample(hint, where) if is_dataclass(hint) else next(iter(hint))
    text = digest(blob(where)) if name in BLOB_FIELDS else f"<{name}>"
    return {str: text, int: 3, float: 2.0, bool: True, date: date(2026, 3, 2)}[hint]


def every_fact() -> list[Fact]:
    return [sample(kind, name) for name, kind in FACTS.items()]


def every_blob() -> list[bytes]:
    places: list[bytes] = []

    def walk(kind: type, where: str) -> None:
        for field in fields(kind):
            place = f"{where}/{field.name}"
            hint = get_type_hints(kind)[field.name]
            for part in (hint, *get_args(hint)):
                if is_dataclass(part):
                    walk(part, place)
                elif part is str and field.name in BLOB_FIELDS:
                    places.append(blob(place))

    for name, kind in FACTS.items():
        walk(kind, name)
    return places


def make_ledger(path: Path, facts: list[Fact]) -> None:
    """A ledger with one transaction for each fact, a second apart."""
    with Ledger.open(path, create=True) as ledger:
        for number, fact in enumerate(facts):
            with ledger.transaction(NOON + timedelta(seconds=number)) as transaction:
                transaction.append(fact)


def make_archive(root: Path) -> Archive:
    archive = Archive(root)
    archive.put_many(every_blob())
    return archive


@contextmanager
def tampering(path: Path) -> Iterator[sqlite3.Connection]:
    """A connection to the ledger's file without the triggers, which are put back as they were at the end."""
    with closing(sqlite3.connect(path, isolation_level=None)) as connection:
        triggers = connection.execute("SELECT name, sql FROM sqlite_schema WHERE type = 'trigger'").fetchall()
        for name, _ in triggers:
            connection.execute(f"DROP TRIGGER {name}")
        yield connection
        for _, sql in triggers:
            connection.execute(sql)


def rows_of(path: Path) -> list[tuple[int, bytes, str]]:
    with closing(sqlite3.connect(path)) as connection:
        return connection.execute("SELECT seq, bytes, hash FROM entries ORDER BY seq").fetchall()


def environment() -> dict[str, str]:
    """For a Python started by a test: it finds the same packages, from whatever folder."""
    return {**os.environ, "PYTHONPATH": os.pathsep.join([str(Path(monitor.__file__).parents[1]), *sys.path])}
