"""Reads a CSV file into columns, or says everything that is wrong with it."""

from __future__ import annotations

import csv
import io
import math
import re
from collections.abc import Sequence
from dataclasses import dataclass, field
from datetime import date
from difflib import get_close_matches

from monitor.reading.values import shown
from monitor.words import Finding, did_you_mean

NUMBER = re.compile(r"[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?", re.ASCII)
DAY = re.compile(r"\d{4}-\d{2}-\d{2}", re.ASCII)
MOST_FINDINGS = 20
TOO_LARGE = 1e18  # beyond any quantity, price or NAV: what is refused here cannot overflow later
SURELY_MEANT = 0.85  # a column this near to a known one is a slip, and not a tag of the site's own


@dataclass
class Table:
    """The rows of a file as text. Each check adds its findings, so that a reader learns all of them at once."""

    file: str
    columns: dict[str, int]
    rows: list[list[str]]
    lines: list[int]
    findings: list[Finding] = field(default_factory=list)

    def texts(self, column: str) -> list[str]:
        place = self.columns[column]
        return [row[place] for row in self.rows]

    def has(self, column: str) -> bool:
        return column in self.columns

    def names(self, column: str, empty: bool = False) -> list[str]:
        """Identifiers of a column, kept as written; those that would not print as they are on one line are findings."""
        texts = self.texts(column)
        for at, text in enumerate(texts):
            if (not text and not empty) or not _is_name(text):
                self.wrong(at, column, f"{shown(text)} as {column}", "a name that prints on one line, no blanks around")
        return texts

    def numbers(self, column: str, empty: float | None = None) -> list[float]:
        """Numbers with a decimal point. A blank cell gives `empty`, or is a finding when that is None."""
        numbers = []
        for at, text in enumerate(self.texts(column)):
            if not text and empty is not None:
                numbers.append(empty)
                continue
            number = float(text) if NUMBER.fullmatch(text) else math.nan
            if not abs(number) < TOO_LARGE:
                expected = f"a number with a decimal point, below {TOO_LARGE:.0e} in size"
                self.wrong(at, column, f"{shown(text)} as {column}", expected)
            numbers.append(number)
        return numbers

    def days(self, column: str, empty: date | None = None) -> list[date]:
        days = []
        for at, text in enumerate(self.texts(column)):
            day = empty if not text else read_day(text)
            if day is None:
                self.wrong(at, column, f"{shown(text)} as {column}", "a date such as 2026-01-31")
            days.append(day or date.min)
        return days

    def once(self, keys: Sequence[tuple[str, ...]], column: str) -> None:
        """Each key may stand in one row only."""
        first: dict[tuple[str, ...], int] = {}
        for at, key in enumerate(keys):
            if key in first:
                told = " ".join(key)
                self.wrong(
                    at, column, f"a second row of {shown(told)}", f"one row, as in line {self.lines[first[key]]}"
                )
            first.setdefault(key, at)

    def wrong(self, at: int, column: str, found: str, expected: str, remedy: str = "") -> None:
        place = self.columns[column]
        offset = 1 + sum(len(cell) + 1 for cell in self.rows[at][:place])
        self.findings.append(Finding(self.file, self.lines[at], offset, found, expected, remedy))


def _is_name(text: str) -> bool:
    return text.isprintable() and text == text.strip()


def read_day(text: str) -> date | None:
    """A date written year-month-day; None for anything else (fromisoformat alone takes week dates too)."""
    if not DAY.fullmatch(text):
        return None
    try:
        return date.fromisoformat(text)
    except ValueError:
        return None


def read_table(file: str, data: bytes, required: Sequence[str], optional: Sequence[str], extra: bool = False) -> Table:
    """Parse UTF-8 CSV with a header. Other columns are findings unless `extra`. Never raises on bad content."""
    table = Table(file, {}, [], [])
    text = _text(file, data, table.findings)
    if text is None:
        return table
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    try:
        header = next(reader, None)
        if header is None:
            table.findings.append(Finding(file, 1, 1, "an empty file", f"a header: {','.join(required)}"))
            return table
        table.columns.update(_columns(file, header, required, optional, extra, table.findings))
        for row in reader:
            if not row:
                continue
            if len(row) != len(header):
                expected = f"{len(header)} columns as in the header"
                table.findings.append(Finding(file, reader.line_num, 1, f"a row of {len(row)} columns", expected))
                continue
            table.rows.append(row)
            table.lines.append(reader.line_num)
    except csv.Error as error:
        table.findings.append(Finding(file, reader.line_num, 1, f"text that is not CSV ({error})", "CSV by RFC 4180"))
    return table


def _text(file: str, data: bytes, findings: list[Finding]) -> str | None:
    if b"\0" in data:
        line = data[: data.index(b"\0")].count(b"\n") + 1
        findings.append(Finding(file, line, None, "a NUL byte", "text in UTF-8"))
        return None
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        read = error.object[: error.start].decode("utf-8")  # the error counts from behind a byte order mark
        column = len(read) - read.rfind("\n")
        found = f"the byte 0x{error.object[error.start]:02x}"
        findings.append(Finding(file, read.count("\n") + 1, column, found, "text in UTF-8"))
        return None


def _meant(name: str, known: Sequence[str]) -> bool:
    return bool(get_close_matches(name.lower(), known, 1, SURELY_MEANT))


def _columns(
    file: str,
    header: list[str],
    required: Sequence[str],
    optional: Sequence[str],
    extra: bool,
    findings: list[Finding],
) -> dict[str, int]:
    columns: dict[str, int] = {}
    known = [*required, *optional]
    for place, name in enumerate(header):
        offset = 1 + sum(len(cell) + 1 for cell in header[:place])
        if name in columns:
            findings.append(Finding(file, 1, offset, f"a second column {shown(name)}", "each column once"))
        elif name not in known and not (extra and name and _is_name(name) and not _meant(name, known)):
            expected = "one of " + ", ".join(known) + (", or a tag of the site's own" if extra else "")
            remedy = did_you_mean(name.lower(), known)
            findings.append(Finding(file, 1, offset, f"the column {shown(name)}", expected, remedy))
        columns.setdefault(name, place)
    for name in required:
        if name not in columns:
            findings.append(Finding(file, 1, 1, "no column " + repr(name), "the columns " + ", ".join(required)))
    return columns
