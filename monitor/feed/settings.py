"""What the site file says of books and of the files in the drop."""

from __future__ import annotations

from collections.abc import Mapping

from monitor.feed.names import DEFAULT_PATTERNS
from monitor.reading.document import Document
from monitor.reading.fields import Calendar, Currency, FilePath, Id, Line
from monitor.reading.shapes import Shape
from monitor.words import FileKind
from monitor.world import Book

RESERVED_BOOKS = ("firm", "any")  # `firm` names all books together, `any` selects every book
LATER_FILES = {
    "actions": "splits and dividends",
    "scenario_pnl": "scenario P&L of another system",
    "manifest": "control totals",
}
LATER_FILE_KEYS = {
    "source": "sources of a file",
    "sources": "sources of a file",
    "columns": "the mapping of columns",
    "mapping": "the mapping of columns",
    "separator": "other separators",
    "manifest": "control totals",
    "tolerance": "tolerance of bad rows",
}


class BookShape(Shape):
    id: Id
    name: Line | None = None
    currency: Currency | None = None
    calendar: Calendar | None = None

    def book(self, base_currency: str, calendar: str | None) -> Book:
        """The book, with the site's currency and calendar where it names none."""
        chosen = self.calendar or calendar
        if chosen is None:
            raise ValueError(f"book {self.id} has no calendar")
        return Book(self.id, self.name or self.id, self.currency or base_currency, chosen)


class FileShape(Shape):
    pattern: FilePath


def read_books(document: Document) -> list[BookShape]:
    """The list `books`; every problem is a finding of the document."""
    made: list[BookShape] = []
    for path in document.items(("books",)):
        shape = document.shape(path, BookShape)
        book = document.data["books"][path[-1]]
        if not isinstance(book, dict):
            continue
        if book.get("id") in RESERVED_BOOKS:
            document.refuse((*path, "id"), f"another id than {' and '.join(RESERVED_BOOKS)}, which have a meaning here")
        if "calendar" not in book and "calendar" not in document.data:
            remedy = "Give the book a calendar, or the site one for all books"
            document.refuse(
                path, "the key 'calendar', an ISO 10383 code such as XLON", "a book without 'calendar'", remedy
            )
        if shape:
            made.append(shape)
    document.refuse_doubled_ids(("books",))
    return made


def read_patterns(document: Document) -> Mapping[FileKind, str]:
    """The pattern of each kind of file: those of `files`, the default for the others."""
    given: dict[FileKind, str] = {}
    kinds = [kind.value for kind in FileKind]
    for kind in document.mapping(("files",)) if document.has(("files",)) else ():
        path = ("files", kind)
        if kind not in kinds:
            document.refuse_key(path, kinds, LATER_FILES)
            continue
        shape = document.shape(path, FileShape, LATER_FILE_KEYS)
        if shape and document.sound((*path, "pattern")):
            given[FileKind(kind)] = shape.pattern
            _check_pattern(document, FileKind(kind), shape.pattern)
    patterns = {kind: given.get(kind, pattern) for kind, pattern in DEFAULT_PATTERNS.items()}
    for kind, pattern in given.items():
        twin = next((other for other in patterns if other is not kind and patterns[other] == pattern), None)
        if twin:
            found = f"the pattern of {twin}, {pattern!r}"
            document.refuse(("files", kind.value, "pattern"), f"a pattern that tells {kind} from {twin}", found)
    return patterns


def _check_pattern(document: Document, kind: FileKind, pattern: str) -> None:
    path = ("files", kind.value, "pattern")
    dated = "{date}" in DEFAULT_PATTERNS[kind]
    bare = pattern.replace("{date}", "", 1)
    if dated is not ("{date}" in pattern) or (dated and "*" in bare):
        expected = "a name with {date} in it once, and no *" if dated else "a name without {date}"
        document.refuse(path, expected, remedy=f"The default is {DEFAULT_PATTERNS[kind]}")
    elif any(character in bare for character in "{}[]?/\\"):
        document.refuse(path, "a file name, in which only {date} and * stand for something")
    elif not pattern.endswith(".csv"):
        document.refuse(path, "a name that ends in .csv", remedy="Other formats are not there yet in this edition")
