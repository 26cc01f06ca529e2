"""What an evening, or a run of old evenings, hands over to be told. Data only."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date
from typing import Any

from monitor.excesses.register import Excess
from monitor.facts import FileRefused
from monitor.notices import figures
from monitor.words import Outcome, Recipe
from monitor.world import Answer, Rule, Standings


@dataclass(frozen=True)
class EveningNews:
    """One evening as it was settled. seq, hash: its `evening.checked` entry.

    rules: by id. opened: alive and new on record, or open again because their cure was taken back. cured: with a new
    cure. Both come with tonight's answer where that is what opened or cured them. on_record: ids of those opened and
    cured that were on record before tonight. voided: excesses that were told and should not have been. told: groups by
    excess that were told when it opened, of those voided. alive: the excesses open or waived after tonight, with the
    number of their day on `aged_on`, the newest business date on record. refused: files refused since the evening
    before. before: counts by standing of the evening before, None on the first. nightly: the tell group of the nightly
    note. page: name of the evening's page, None where none is drawn.
    """

    site: str
    recipe: Recipe
    edition: int
    seq: int
    hash: str
    standings: Standings
    rules: Mapping[str, Rule]
    opened: tuple[tuple[Excess, Answer | None], ...]
    cured: tuple[tuple[Excess, Answer | None], ...]
    on_record: frozenset[str]
    voided: tuple[Excess, ...]
    told: Mapping[str, tuple[str, ...]]
    alive: Mapping[Excess, int]
    aged_on: date
    refused: tuple[FileRefused, ...]
    before: Mapping[str, int] | None
    nightly: str
    page: str | None


@dataclass(frozen=True)
class PastEvening:
    """One of the old evenings of a summary. `reasons`: why it is incomplete, in words."""

    day: date
    round: str
    outcome: Outcome
    counts: Mapping[str, int]
    reasons: tuple[str, ...] = ()


@dataclass(frozen=True)
class SummaryNews:
    """Evenings that were checked days after their date. seq, hash: the newest of their entries.

    opened, cured: every excess that did so by the check of these evenings. voided: those that it showed should not
    have been told; told: groups by excess that were told when it opened. alive: those open or waived by now, with the
    number of their day on `aged_on`, the newest business date on record.
    """

    site: str
    evenings: tuple[PastEvening, ...]
    seq: int
    hash: str
    rules: Mapping[str, Rule]
    opened: tuple[Excess, ...]
    cured: tuple[Excess, ...]
    voided: tuple[Excess, ...]
    told: Mapping[str, tuple[str, ...]]
    alive: Mapping[Excess, int]
    aged_on: date
    nightly: str
    page: str | None


def record(seq: int, entry_hash: str, page: str | None) -> tuple[tuple[str, str], ...]:
    """Where the ledger says the same; a receiver who keeps this can later show that no entry was lost or altered."""
    written = (("Ledger entry", f"{seq}"), ("Its hash", entry_hash))
    return (*written, ("Page", page)) if page else written


def when(news: EveningNews) -> tuple[tuple[str, str], ...]:
    recipe = news.recipe
    return (
        ("Business date", figures.day(recipe.date)),
        ("Round", recipe.round),
        ("Edition", f"{news.edition}" if news.edition == 1 else f"{news.edition} (this evening was checked before)"),
    )


def evening_data(news: EveningNews) -> dict[str, Any]:
    """What the data of every notice of an evening starts with."""
    return {
        "site": news.site,
        "business_date": news.recipe.date.isoformat(),
        "round": news.recipe.round,
        "edition": news.edition,
        "page": news.page,
        "record": {"seq": news.seq, "hash": news.hash},
    }
