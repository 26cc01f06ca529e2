"""Which subjects a rule asks about, and which positions each of them is made of."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from monitor.words import Subject, SubjectKind
from monitor.world import Book, Booleans, Integers, Rule, Selector, World

FIRM = Subject("firm", SubjectKind.FIRM, None)
NOTHING: Integers = np.empty(0, dtype=np.int64)


def book_subject(book: str) -> Subject:
    return Subject(f"book:{book}", SubjectKind.BOOK, book)


def position_subject(book: str, instrument: str) -> Subject:
    return Subject(f"position:{book}/{instrument}", SubjectKind.POSITION, book)


@dataclass(frozen=True)
class Members:
    """Subjects and their positions. owner, position: parallel, ascending in owner; a flat subject has no pair.

    stray: positions that may belong to any of the subjects, for no instruments file says to which.
    """

    subjects: tuple[Subject, ...]
    owner: Integers
    position: Integers
    stray: Integers

    def sum(self, values: Any) -> Any:
        """Sums over each subject's positions: values (positions,) or (positions, n) to (subjects,) or (subjects, n)."""
        from scipy.sparse import csr_array

        shape = (len(self.subjects), len(values))
        matrix = csr_array((np.ones(len(self.owner)), (self.owner, self.position)), shape=shape)
        return matrix @ values

    def only(self, chosen: Sequence[int]) -> Members:
        """These subjects alone, in this order."""
        place = np.full(len(self.subjects), -1, dtype=np.int64)
        place[np.asarray(chosen, dtype=np.int64)] = np.arange(len(chosen))
        kept = place[self.owner] >= 0
        subjects = tuple(self.subjects[at] for at in chosen)
        return _ordered(subjects, place[self.owner[kept]], self.position[kept], self.stray)


def tag_values(world: World, tag: str) -> list[str | None]:
    """What each position of the world says for a tag; None where nothing is known."""
    holdings, books = world.holdings, world.terms.firm.books
    if tag == "book":
        return [books[at].id for at in holdings.book.tolist()]
    instruments = [world.market.instruments[at] for at in holdings.instrument.tolist()]
    if tag == "instrument":
        return [item.id for item in instruments]
    known = ~world.market.unknown[holdings.instrument]
    if tag == "kind":
        return [item.kind.value if ok else None for item, ok in zip(instruments, known, strict=True)]
    if tag == "currency":
        return [item.currency if ok else None for item, ok in zip(instruments, known, strict=True)]
    return [item.tags.get(tag) for item in instruments]


def select_positions(world: World, selectors: Sequence[Selector]) -> Booleans:
    """The positions that every selector lets through.

    An instrument that no file describes might be anything, so that no selector by a tag shuts it out: the subject it
    might belong to cannot be measured, which is safer than a figure without it.
    """
    chosen = np.ones(len(world.holdings.quantity), dtype=np.bool_)
    unknown = world.market.unknown[world.holdings.instrument]
    for selector in selectors:
        values = tag_values(world, selector.tag)
        if selector.values is None:
            passed = np.array([value is not None for value in values], dtype=np.bool_)
        else:
            named = frozenset(selector.values)
            passed = np.array([(value in named) != selector.negated for value in values], dtype=np.bool_)
        undescribed = unknown if selector.tag not in ("book", "instrument") else np.zeros_like(unknown)
        chosen &= passed | undescribed
    return chosen


def selected_books(world: World, selectors: Sequence[Selector]) -> list[Book]:
    """The books that a rule's selectors by book let through."""
    books = list(world.terms.firm.books)
    for selector in selectors:
        if selector.tag == "book" and selector.values is not None:
            books = [book for book in books if (book.id in selector.values) != selector.negated]
    return books


def books_under(rule: Rule, subject: Subject, world: World) -> list[str]:
    """The books that a subject of a rule lies in or reaches over."""
    return [subject.book] if subject.book else [book.id for book in selected_books(world, rule.applies_to)]


def with_past(rule: Rule, world: World, tonight: Members) -> Members:
    """Also the subjects that held something before the session just ended and are gone since, without positions."""
    calendars = {book.id: book.calendar for book in world.terms.firm.books}
    gone = {}
    for calendar, held in sorted(world.past.held_before.items()):
        for subject in members_of(rule, replace(world, holdings=held)).subjects:
            if calendars.get(subject.book or "", world.terms.firm.calendar) == calendar:
                gone[subject.key] = subject
    for subject in tonight.subjects:
        gone.pop(subject.key, None)
    return replace(tonight, subjects=(*tonight.subjects, *gone.values()))


def members_of(rule: Rule, world: World) -> Members:
    """The subjects of a rule tonight, whatever the round."""
    chosen = np.flatnonzero(select_positions(world, rule.applies_to))
    books = selected_books(world, rule.applies_to)
    narrowed = [item for item in rule.applies_to if item.values is not None or item.tag not in ("book", "instrument")]
    whole = all(selector.tag == "book" for selector in narrowed)
    one_book = books[0].id if len(books) == 1 and any(selector.tag == "book" for selector in narrowed) else None
    if rule.each is None:
        subject = _whole(narrowed, whole, one_book)
        return Members((subject,), np.zeros(len(chosen), dtype=np.int64), chosen, NOTHING)
    if rule.each == "book":
        return _each_book(world, chosen, books, narrowed, whole)
    if rule.each == "position":
        return _each_position(world, chosen)
    return _each_value(world, chosen, rule.each, narrowed, one_book)


def _whole(narrowed: Sequence[Selector], whole: bool, one_book: str | None) -> Subject:
    if not narrowed:
        return FIRM
    if whole and one_book is not None:
        return book_subject(one_book)
    return _group(narrowed, one_book)


def _group(narrowed: Sequence[Selector], book: str | None, *more: tuple[str, str]) -> Subject:
    """Named alike in whatever order the rule file lists selectors and values."""
    parts = [
        f"{item.tag}={'not ' if item.negated else ''}{'|'.join(sorted(item.values or ('any',)))}"
        for item in sorted(narrowed, key=lambda item: item.tag)
    ]
    parts += [f"{tag}={value}" for tag, value in more]
    return Subject("group:" + "; ".join(parts), SubjectKind.GROUP, book)


def _each_book(
    world: World, chosen: Integers, books: Sequence[Book], narrowed: Sequence[Selector], whole: bool
) -> Members:
    number = {book.id: at for at, book in enumerate(world.terms.firm.books)}
    other = [selector for selector in narrowed if selector.tag != "book"]
    subjects = tuple(book_subject(book.id) if whole else _group(other, book.id, ("book", book.id)) for book in books)
    place = {number[book.id]: at for at, book in enumerate(books)}
    owner = np.array([place[at] for at in world.holdings.book[chosen].tolist()], dtype=np.int64)
    return _ordered(subjects, owner, chosen, NOTHING)


def _each_position(world: World, chosen: Integers) -> Members:
    books, instruments = tag_values(world, "book"), tag_values(world, "instrument")
    subjects = tuple(position_subject(str(books[at]), str(instruments[at])) for at in chosen)
    return Members(subjects, np.arange(len(chosen)), chosen, NOTHING)


def _each_value(
    world: World, chosen: Integers, tag: str, narrowed: Sequence[Selector], one_book: str | None
) -> Members:
    values = tag_values(world, tag)
    found = [(value, at) for at in chosen.tolist() if (value := values[at]) is not None]
    names = sorted({value for value, _ in found})
    place = {name: at for at, name in enumerate(names)}
    subjects = tuple(_group(narrowed, one_book, (tag, name)) for name in names)
    owner = np.array([place[value] for value, _ in found], dtype=np.int64)
    unknown = world.market.unknown[world.holdings.instrument[chosen]]
    return _ordered(subjects, owner, np.array([at for _, at in found], dtype=np.int64), chosen[unknown])


def _ordered(subjects: tuple[Subject, ...], owner: Integers, position: Integers, stray: Integers) -> Members:
    order = np.argsort(owner, kind="stable")
    return Members(subjects, owner[order], position[order], stray)
