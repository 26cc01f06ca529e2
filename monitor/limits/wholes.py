"""Slices that no rule of the site asks for: a book or the firm as a whole, or each position in it."""

from __future__ import annotations

from collections.abc import Iterator

from monitor.limits.slices import Slice
from monitor.limits.subjects import members_of
from monitor.limits.valuation import Valuation
from monitor.words import Unit
from monitor.world import Book, Rule, Selector, Terms


def wholes(valuation: Valuation, each: str | None = None) -> Iterator[Slice]:
    """One slice a book and then one for the firm, each of one subject.

    each: "position" for slices of the positions of each book instead, and none for the firm.
    """
    firm = valuation.world.terms.firm
    for book in firm.books:
        yield _slice(valuation, book, book.currency, book.calendar, each)
    if each is None:
        yield _slice(valuation, None, firm.base_currency, firm.calendar, each)


def whole_of(part: Slice, book: str | None) -> Slice:
    """The book, or the firm, that subjects of a slice lie in, in the slice's own currency and calendar."""
    found = next((item for item in part.world.terms.firm.books if item.id == book), None)
    return _slice(part.valuation, found, part.currency, part.calendar, None)


def _slice(valuation: Valuation, book: Book | None, currency: str, calendar: str, each: str | None) -> Slice:
    rule = _unwritten_rule(valuation.world.terms, book, each)
    return Slice(valuation, rule, members_of(rule, valuation.world), currency, calendar, bounded=False)


def _unwritten_rule(terms: Terms, book: Book | None, each: str | None) -> Rule:
    """A rule without a limit that applies to a book, or to the firm."""
    return Rule(
        id="",
        title="",
        applies_to=(Selector("book", (book.id,)),) if book else (),
        each=each,
        measure=terms.default_tail,
        unit=Unit.AMOUNT,
        currency=None,
        near=None,
        limit=None,
        near_below=None,
        limit_below=None,
        kind=None,
        owner=None,
        tell=(),
        in_force_from=None,
        in_force_to=None,
        because=None,
        file="",
        line=0,
    )
