"""What a single value may be: text, ids, codes, dates, times, numbers. Each takes a plain value or raises `unfit`."""

from __future__ import annotations

import re
import unicodedata
import zoneinfo
from collections.abc import Callable, Iterable, Mapping
from datetime import date, time
from decimal import Decimal
from typing import Annotated

from pydantic import PlainValidator

from monitor.currencies import CURRENCIES
from monitor.reading.shapes import unfit
from monitor.reading.values import Percent, percent_of

_ID = re.compile(r"[a-z0-9][a-z0-9._-]*")
_WORD = re.compile(r"[a-z][a-z0-9_]*")
_CALENDAR = re.compile(r"[A-Z0-9]{4}")
_DAY = re.compile(r"[0-9]{4}-[0-9]{2}-[0-9]{2}")
_TIME = re.compile(r"([01][0-9]|2[0-3]):([0-5][0-9])")
_ADDRESS = re.compile(r"[^@\s<>,;\"]{1,64}@[^@\s<>,;\"]{1,190}")
LONGEST_ID = 64
LONGEST_LINE = 300
LONGEST_PATH = 1000
_QUOTE = "Quote it if it is meant as text"


def one_line(value: object, longest: int = LONGEST_LINE) -> str:
    """Text that fits on one line of a page and into the subject of a mail."""
    if not isinstance(value, str):
        raise unfit("text", remedy="" if isinstance(value, list | dict) else _QUOTE)
    if not value.strip():
        raise unfit("text that is not blank")
    if len(value) > longest:
        raise unfit(f"at most {longest} characters", f"a text of {len(value):,} characters")
    if any(unicodedata.category(character) in ("Cc", "Cs", "Zl", "Zp") for character in value):
        raise unfit("text on one line, without control characters")
    return value


def identifier(value: object) -> str:
    """An id: it names a book, rule or person for ever."""
    text = one_line(value)
    if len(text) > LONGEST_ID or not _ID.fullmatch(text):
        expected = f"an id: lower-case letters, digits, dots, dashes and underscores, at most {LONGEST_ID}"
        raise unfit(expected, remedy="It starts with a letter or digit")
    return text


def plain_word(value: object) -> str:
    text = one_line(value)
    if len(text) > LONGEST_ID or not _WORD.fullmatch(text):
        raise unfit("a word of lower-case letters, digits and underscores, starting with a letter")
    return text


def currency_code(value: object) -> str:
    text = one_line(value)
    if text not in CURRENCIES:
        expected, upper = "an ISO 4217 currency code such as EUR", text.upper()
        raise unfit(expected, remedy=f"Write {upper}" if upper in CURRENCIES else "")
    return text


def calendar_code(value: object) -> str:
    text = one_line(value)
    if not _CALENDAR.fullmatch(text):
        raise unfit("an ISO 10383 code of four capital letters or digits, such as XLON")
    return text


def zone_name(value: object) -> str:
    """A time zone of the IANA database."""
    text = one_line(value)
    try:
        zoneinfo.ZoneInfo(text)
        known = text != "localtime"
    except (zoneinfo.ZoneInfoNotFoundError, ValueError, OSError):
        known = False
    if not known:
        raise unfit("a time zone such as Europe/Dublin or UTC", near=(text, sorted(zoneinfo.available_timezones())))
    return text


def clock_time(value: object) -> time:
    found = _TIME.fullmatch(value) if isinstance(value, str) else None
    if not found:
        raise unfit('a time from "00:00" to "23:59", in quotes')
    return time(int(found[1]), int(found[2]))


def day(value: object) -> date:
    try:
        if isinstance(value, str) and _DAY.fullmatch(value):
            return date.fromisoformat(value)
    except ValueError:
        pass
    raise unfit("a date written year-month-day, such as 2026-01-31")


def mail_address(value: object) -> str:
    text = one_line(value)
    if not _ADDRESS.fullmatch(text):
        raise unfit("one mail address, such as desk@firm.example")
    return text


def file_path(value: object) -> str:
    return one_line(value, LONGEST_PATH)


def whole(least: int, most: int) -> Callable[[object], int]:
    def read(value: object) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not least <= value <= most:
            raise unfit(f"a whole number from {least:,} to {most:,}", remedy=_separators(value))
        return value

    return read


def level(value: object) -> Decimal | Percent:
    """A limit as written: a number or a percentage."""
    if isinstance(value, str):
        value = percent_of(value) or value
    if isinstance(value, Percent):
        return value
    if isinstance(value, bool) or not isinstance(value, int | Decimal):
        raise unfit("a number, or a percentage such as 10 %", remedy=_separators(value))
    return Decimal(value)


def probability(
    least: str, open_end: str = "1", what: str = "a probability", such_as: str = "0.99 or 99 %"
) -> Callable[[object], Decimal]:
    """A probability from `least` to below `open_end`, exactly as written; percentages count as hundredths."""

    def read(value: object) -> Decimal:
        if isinstance(value, str):
            value = percent_of(value) or value
        if isinstance(value, Percent):
            value = value.fraction
        if isinstance(value, bool) or not isinstance(value, int | Decimal):
            raise unfit(f"{what} such as {such_as}")
        if not Decimal(least) <= value < Decimal(open_end):
            remedy = f"Write {value} %" if value > 1 and Decimal(least) <= value / 100 < Decimal(open_end) else ""
            raise unfit(f"{what} from {least} to below {open_end}, such as {such_as}", remedy=remedy)
        return Decimal(value)

    return read


def one_of(words: Iterable[str], later: Mapping[str, str] | Iterable[str] = ()) -> Callable[[object], str]:
    """One of the words; those in `later` are known, but not there yet."""
    known, not_yet = tuple(map(str, words)), tuple(later)

    def read(value: object) -> str:
        if not isinstance(value, str) or value not in known:
            expected = known[0] if len(known) == 1 else "one of " + ", ".join(known)
            if isinstance(value, str) and value in not_yet:
                raise unfit(expected, f"{value!r}, which is not there yet in this edition")
            raise unfit(expected, near=(value, known) if isinstance(value, str) else None)
        return value

    return read


def _separators(value: object) -> str:
    if isinstance(value, str) and re.fullmatch(r"[0-9][0-9 ,.'_]*", value):
        return "Write it without quotes and separators, as 1250000 or 0.5"
    return ""


Line = Annotated[str, PlainValidator(one_line)]
Id = Annotated[str, PlainValidator(identifier)]
Word = Annotated[str, PlainValidator(plain_word)]
Currency = Annotated[str, PlainValidator(currency_code)]
Calendar = Annotated[str, PlainValidator(calendar_code)]
Zone = Annotated[str, PlainValidator(zone_name)]
Clock = Annotated[time, PlainValidator(clock_time)]
Day = Annotated[date, PlainValidator(day)]
Address = Annotated[str, PlainValidator(mail_address)]
FilePath = Annotated[str, PlainValidator(file_path)]
Level = Annotated[Decimal | Percent, PlainValidator(level)]
