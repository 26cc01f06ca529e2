"""What rules may name of a site."""

from __future__ import annotations

from dataclasses import dataclass

from monitor.limits.defaults import Defaults


@dataclass(frozen=True)
class RuleContext:
    """Ids of books and people, names of the groups that can be told, and what a rule may leave out."""

    books: tuple[str, ...]
    people: tuple[str, ...]
    groups: tuple[str, ...]
    told_by_default: str
    defaults: Defaults
