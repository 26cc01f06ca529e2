"""What a notice is, and the id by which a receiver tells a repeat from news."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from enum import StrEnum
from typing import Any


class Topic(StrEnum):
    EXCESS_OPENED = "excess_opened"
    EXCESS_CURED = "excess_cured"
    EXCESS_VOIDED = "excess_voided"
    RULE_DIGEST = "rule_digest"
    INCOMPLETE = "incomplete"
    NIGHTLY_NOTE = "nightly_note"
    SUMMARY = "summary"
    TERMS_CHANGED = "terms_changed"
    EVENING_MISSED = "evening_missed"
    TROUBLE = "trouble"


@dataclass(frozen=True)
class Notice:
    """Something to be told. `key` tells notices of one topic about one entry apart: an excess, a rule, a date.

    tell: names of tell groups. data: plain JSON, with `site` and `record`.
    """

    topic: Topic
    key: str
    title: str
    tell: tuple[str, ...]
    text: str
    html: str
    data: dict[str, Any]


def notice_id(site: str, after: str, topic: str, key: str, channel: str, person: str | None) -> str:
    """The same for the same notice to the same receiver about the same entry (its hash), however often it is made."""
    parts = "\x1f".join((site, after, topic, key, channel, person or ""))
    return hashlib.sha256(parts.encode()).hexdigest()[:24]


def one_line(text: str) -> str:
    """Text fit for a subject line: control characters and runs of blanks become one blank."""
    return " ".join("".join(c if c.isprintable() else " " for c in text).split())
