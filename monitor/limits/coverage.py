"""What an evening says beyond its rules: figures of each book, what could not be measured, what no rule covers."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np

from monitor.limits.measured import Measured, Parameters
from monitor.limits.measures import MEASURES
from monitor.limits.slices import Slice
from monitor.limits.subjects import Members, book_subject, position_subject, selected_books
from monitor.limits.valuation import Valuation
from monitor.limits.wholes import wholes
from monitor.words import Subject, Unit
from monitor.world import BookFigures, Rule, Unmeasured, World


def figures_of_books(valuation: Valuation) -> Iterator[BookFigures]:
    """Each book of this round, and the firm when the round completes it, by the site's default measure."""
    world = valuation.world
    for part in _wholes(valuation):
        subject = part.members.subjects[0]
        tail = world.terms.default_tail
        measured = {name: _ask(part, name, {}) for name in ("gross", "net", "day_loss")}
        measured |= {name: _ask(part, name, tail.parameters) for name in ("value_at_risk", "expected_shortfall")}
        nav = part.denominator("nav")
        book_nav = world.nav.get(subject.book) if subject.book else None
        missing = [reason for book, reason in world.holdings.missing.items() if subject.book in (None, book)]
        figures = {name: own.figure(0) for name, own in measured.items()}
        values = {name: None if missing else value for name, (value, _) in figures.items()}
        reasons = [*missing[:1], *(reason for _, reason in figures.values()), nav.reasons[0]]
        sessions = measured["value_at_risk"].n
        loss = values["day_loss"]
        yield BookFigures(
            subject=subject,
            currency=part.currency,
            positions=len(part.members.position),
            gross=values["gross"],
            net=values["net"],
            nav=None if nav.reasons[0] else float(nav.value[0]),
            nav_on=book_nav.on if book_nav else None,
            value_at_risk=values["value_at_risk"],
            expected_shortfall=values["expected_shortfall"],
            pnl=None if loss is None else 0.0 - loss,
            n=int(sessions[0]) if sessions is not None else None,
            how=measured["value_at_risk"].how,
            reasons=tuple(dict.fromkeys(reason for reason in reasons if reason)),
        )


def find_unmeasured(valuation: Valuation) -> Iterator[Unmeasured]:
    """The books of this round without positions, and the positions without an exposure or without a window."""
    world = valuation.world
    window: int = world.terms.default_tail.parameters["window"]
    for part in _wholes(valuation):
        book = part.members.subjects[0].book
        if book is None:
            continue
        if book in world.holdings.missing:
            yield Unmeasured(book_subject(book), world.holdings.missing[book])
        everything = np.array([part.scenarios(window).pnl.shape[1]], dtype=np.int64)
        troubles = part.window_troubles(window, everything) | part.exposure_troubles()
        for at, reason in sorted(troubles.items()):
            yield Unmeasured(_position(world, book, at), reason)


def find_uncovered(world: World, asked: Sequence[tuple[Rule, Members]]) -> Iterator[Subject]:
    """The books of this round that no rule in force asks about, and of the other books such positions.

    A book without positions is asked about by every rule that does not leave it out.
    """
    covered = np.zeros(len(world.holdings.quantity), dtype=np.bool_)
    reached = set()
    for rule, members in asked:
        covered[members.position] = True
        reached |= {book.id for book in selected_books(world, rule.applies_to)}
    for number, book in enumerate(world.terms.firm.books):
        own = world.holdings.book == number
        if not world.scope.holds(book.id):
            continue
        if not (covered & own).any() and (own.any() or book.id not in reached):
            yield book_subject(book.id)
        else:
            yield from (_position(world, book.id, at) for at in np.flatnonzero(own & ~covered).tolist())


def _position(world: World, book: str, at: int) -> Subject:
    return position_subject(book, world.market.instruments[int(world.holdings.instrument[at])].id)


def _wholes(valuation: Valuation) -> Iterator[Slice]:
    """One slice for each book of this round, and one for the firm when the round completes it."""
    scope = valuation.world.scope
    return (part for part in wholes(valuation) if scope.holds(part.members.subjects[0].book))


def _ask(part: Slice, name: str, parameters: Parameters) -> Measured:
    return MEASURES[name](part, parameters, Unit.AMOUNT)
