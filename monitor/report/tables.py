"""The tables of excesses, of books and of what has no figure."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from monitor.notices import figures
from monitor.report.names import NOTHING, level_of, measure_of, measured_by, title, value_of
from monitor.report.page import Page
from monitor.words import Unit
from monitor.world import BookFigures, Standings


@dataclass(frozen=True)
class ExcessRow:
    id: str
    title: str
    subject: str
    how: str
    day: int
    opened_on: str
    last: str
    last_on: str
    worst: str
    worst_on: str
    past: str
    limit: str
    owner: str
    state: str


@dataclass(frozen=True)
class BookRow:
    name: str
    currency: str
    positions: str
    gross: str
    net: str
    nav: str
    nav_on: str
    value_at_risk: str
    expected_shortfall: str
    pnl: str
    how: str
    reasons: tuple[str, ...]


@dataclass(frozen=True)
class Reason:
    """Everything that has no figure for the same reason."""

    reason: str
    subjects: tuple[str, ...]


def excess_rows(page: Page) -> tuple[ExcessRow, ...]:
    """The excesses that are alive, oldest first, each with the method of tonight's answer to its rule."""
    rules = page.rules
    methods = {(answer.rule, answer.subject): measured_by(answer) for answer in page.standings.answers}
    ordered = sorted(page.alive, key=lambda aged: (-aged.day, aged.excess.rule, aged.excess.subject.key))
    return tuple(
        ExcessRow(
            id=excess.id,
            title=title(excess.rule, rules),
            subject=excess.subject.name,
            how=methods.get((excess.rule, excess.subject), ""),
            day=aged.day,
            opened_on=excess.opened_on.isoformat(),
            last=value_of(excess, excess.last_value, rules),
            last_on=excess.last_on.isoformat(),
            worst=value_of(excess, excess.worst_value, rules),
            worst_on=excess.worst_on.isoformat(),
            past=figures.figure(excess.worst_distance, excess.unit, excess.currency, measure_of(excess, rules)),
            limit=level_of(excess, rules),
            owner=excess.owner or "nobody named",
            state=excess.state.value,
        )
        for aged in ordered
        for excess in (aged.excess,)
    )


def book_rows(books: Iterable[BookFigures]) -> tuple[BookRow, ...]:
    return tuple(
        BookRow(
            name=book.subject.name,
            currency=book.currency,
            positions=f"{book.positions:,}",
            gross=_amount(book.gross, book.currency),
            net=_amount(book.net, book.currency),
            nav=_amount(book.nav, book.currency),
            nav_on=book.nav_on.isoformat() if book.nav_on else "",
            value_at_risk=_amount(book.value_at_risk, book.currency),
            expected_shortfall=_amount(book.expected_shortfall, book.currency),
            pnl=_amount(book.pnl, book.currency),
            how=figures.how_made(book.how, book.n),
            reasons=book.reasons,
        )
        for book in books
    )


def _amount(value: float | None, currency: str) -> str:
    return NOTHING if value is None else figures.figure(value, Unit.AMOUNT, currency)


def unmeasured(standings: Standings) -> tuple[Reason, ...]:
    """Every position and book that could not be measured, those with the same reason together."""
    found: dict[str, list[str]] = {}
    for item in standings.unmeasured:
        found.setdefault(item.reason, []).append(item.subject.name)
    return tuple(Reason(reason, tuple(subjects)) for reason, subjects in found.items())
