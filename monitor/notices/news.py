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

    rules: by id. opened, voided, cured: what changed tonight; a cure has no answer when its rule or subject is no more.
    alive: the excesses open or waived after tonight, with the number of their day. refused: files refused since the
    evening before. before: counts by standing of the evening before, None on the first. nightly: the tell group of
    the nightly note. page: name of the evening's page, None where none is drawn.
    """

    site: str
    recipe: Recipe
    edition: int
    seq: int
    hash: str
    standings: Standings
    rules: Mapping[str, Rule]
    opened: tuple[tuple[Excess, Answer], ...]
    cured: tuple[tuple[Excess, Answer | None], ...]
    voided: tuple[Excess, ...]
    alive: Mapping[Excess, int]
    refused: tuple[FileRefused, ...]
    before: Mapping[str, int] | None
    nightly: str
    page: str | None


@dataclass(frozen=True)
class PastEvening:
    """One of the old evenings of a summary. `lacking`: what had not come, in words."""

    day: date
    round: str
    outcome: Outcome
    counts: Mapping[str, int]
    lacking: tuple[str, ...] = ()


@dataclass(frozen=True)
class SummaryNews:
    """Evenings that were checked days after their date. seq, hash: the newest of their entries.

    opened, cured: every excess that did so in these evenings. alive: those open or waived after the last, with the
    number of their day.
    """

    site: str
    evenings: tuple[PastEvening, ...]
    seq: int
    hash: str
    rules: Mapping[str, Rule]
    opened: tuple[Excess, ...]
    cured: tuple[Excess, ...]
    alive: Mapping[Excess, int]
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
