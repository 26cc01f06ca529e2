"""One link of the chain: the bytes of an entry, and whether they follow the entry before. Standard library only.

The bytes are the RFC 8785 canonical JSON of {seq, at, kind, v, body, prev}; the hash is the SHA-256 of those bytes in
lower-case hexadecimal. The first entry has seq 1 and a prev of 64 zeros.
"""

from __future__ import annotations

import hashlib
import json
import re
from dataclasses import dataclass
from typing import Any

from monitor.facts import Body
from monitor.words import Damaged

AT = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d\.\d{3}Z")


@dataclass(frozen=True)
class Head:
    """The newest entry's number and hash; a pair kept outside the state is a witness of all entries up to it."""

    seq: int
    hash: str


START = Head(0, "0" * 64)


@dataclass(frozen=True)
class Link:
    """An entry whose bytes hold together, not yet decoded into its fact. `at` is UTC text with milliseconds."""

    seq: int
    at: str
    kind: str
    v: int
    body: Body
    prev: str
    hash: str

    @property
    def head(self) -> Head:
        return Head(self.seq, self.hash)


def digest(data: bytes) -> str:
    return hashlib.sha256(data).hexdigest()


def link_after(before: Head, seq: object, data: object, stored_hash: object) -> Link:
    """The link in a stored row (seq, bytes, hash as bytes), when it is the sound successor of `before`.

    Raises Damaged, naming the entry and what is wrong with it.
    """
    here = before.seq + 1
    if seq != here:
        raise Damaged(f"entry {here} is missing: in its place stands one numbered {seq}")
    if not isinstance(data, bytes) or not isinstance(stored_hash, bytes):
        raise Damaged(f"entry {here}: its bytes or its hash are not of the type that was stored")
    found = digest(data)
    if stored_hash != found.encode():
        raise Damaged(f"entry {here}: its bytes and its hash do not belong together; one of them was altered")
    link = _parse(here, data, found)
    if link.seq != here:
        raise Damaged(f"entry {here}: its bytes say that it is entry {link.seq}")
    if link.prev != before.hash:
        raise Damaged(
            f"entry {here}: it follows an entry with the hash {link.prev}, but the one stored before it has "
            f"{before.hash}"
        )
    return link


def _parse(here: int, data: bytes, found: str) -> Link:
    try:
        document = json.loads(data.decode())
    except (ValueError, RecursionError):
        raise Damaged(f"entry {here}: its bytes are not JSON") from None
    if not _is_entry(document):
        raise Damaged(f"entry {here}: its bytes are not {{seq, at, kind, v, body, prev}}")
    return Link(**document, hash=found)


def _is_entry(document: Any) -> bool:
    return (
        isinstance(document, dict)
        and document.keys() == {"seq", "at", "kind", "v", "body", "prev"}
        and type(document["seq"]) is int
        and isinstance(document["at"], str)
        and AT.fullmatch(document["at"]) is not None
        and isinstance(document["kind"], str)
        and type(document["v"]) is int
        and isinstance(document["body"], dict)
        and isinstance(document["prev"], str)
    )
