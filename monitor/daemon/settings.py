"""When each round of books is due. Read with the site file; imports nothing of the daemon."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, datetime, time
from zoneinfo import ZoneInfo

from monitor.reading.document import Document, Path
from monitor.reading.fields import Clock, Id, Zone
from monitor.reading.shapes import Shape

DEFAULT_AT = "19:15"
LAST = time(23, 59)
HOURS_TO_GIVE_UP = 3


@dataclass(frozen=True)
class Round:
    """Books that are checked together. Times are of the business date's day, in `time_zone`."""

    id: str
    books: tuple[str, ...]
    time_zone: str
    at: time
    files_due_by: time
    give_up_at: time

    def moment(self, day: date, at: time) -> datetime:
        """One of the round's times on a business date."""
        return datetime.combine(day, at, ZoneInfo(self.time_zone))

    def today(self, now: datetime) -> date:
        """Which day it is where the round is checked."""
        return now.astimezone(ZoneInfo(self.time_zone)).date()


class RoundShape(Shape):
    id: Id
    books: tuple[Id, ...] | None = None
    time_zone: Zone | None = None
    at: Clock
    files_due_by: Clock | None = None
    give_up_at: Clock | None = None

    def round(self, books: tuple[str, ...], time_zone: str) -> Round:
        return Round(
            self.id,
            self.books or books,
            self.time_zone or time_zone,
            self.at,
            self.files_due_by or self.at,
            self.give_up_at or _later(self.at),
        )


def one_round(books: tuple[str, ...], time_zone: str) -> Round:
    """The round of a site that names none: all books, in the evening."""
    return RoundShape.model_validate({"id": "all", "at": DEFAULT_AT}).round(books, time_zone)


def read_rounds(document: Document, books: Sequence[str]) -> list[RoundShape]:
    """The list `rounds`. Every book must be in exactly one; a round that names no books has all of them."""
    if not document.has(("rounds",)):
        return []
    made: list[RoundShape] = []
    homes: dict[str, Path] = {}
    for path in document.items(("rounds",)):
        shape = document.shape(path, RoundShape)
        _check_books(document, path, books, homes)
        if shape:
            made.append(shape)
            _check_times(document, path, shape)
    homeless = [book for book in books if book not in homes]
    if homeless and document.sound_below(("rounds",)):
        document.refuse(("rounds",), "every book in one round", f"no round with the book {', '.join(homeless)}")
    document.refuse_doubled_ids(("rounds",))
    return made


def _check_times(document: Document, path: Path, shape: RoundShape) -> None:
    due, end = (*path, "files_due_by"), (*path, "give_up_at")
    if shape.files_due_by and shape.files_due_by > shape.at and document.sound(due, (*path, "at")):
        document.refuse(due, f"a time up to that of `at`, {_text(shape.at)}")
    if shape.give_up_at and shape.give_up_at < shape.at and document.sound(end, (*path, "at")):
        document.refuse(end, f"a time from that of `at`, {_text(shape.at)}, to 23:59 of the same day")


def _check_books(document: Document, path: Path, books: Sequence[str], homes: dict[str, Path]) -> None:
    """Enter the books of one round into `homes`, with its place; a book that has a home already is a finding."""
    at = (*path, "books")
    document.refuse_unknown(at, books, "books")
    written = document.at(at) if document.has(at) else list(books)
    if written == []:
        document.refuse(at, "a list with at least one book", remedy="Leave the key out for all books")
    for number, book in enumerate(written if isinstance(written, list) else ()):
        if not isinstance(book, str) or book not in books:
            continue
        if homes.setdefault(book, path) != path:
            found = f"the book {book}, which is in the round on line {document.line(homes[book])} too"
            document.refuse((*at, number) if document.has(at) else path, "each book in one round", found)


def _later(at: time) -> time:
    hour = at.hour + HOURS_TO_GIVE_UP
    return LAST if hour > LAST.hour else at.replace(hour=hour)


def _text(at: time) -> str:
    return at.strftime("%H:%M")
