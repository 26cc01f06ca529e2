"""Readers of the drop's files: whatever the bytes, a file is accepted or refused with a place; nothing else happens."""

from __future__ import annotations

from datetime import date

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.currencies import CURRENCIES
from monitor.feed.kinds import READERS, Panel, Parsed, PositionRows, Vocabulary, parse
from monitor.words import FileKind

DAY = date(2026, 3, 6)
WORDS = Vocabulary(("quay", "west"), CURRENCIES, lambda calendar: calendar in ("XDUB", "XTKS"))
KINDS = list(FileKind)


def read(kind: FileKind, *lines: str) -> Parsed:
    return parse(kind, "file.csv", "\n".join([*lines, ""]).encode(), DAY, WORDS)


def refused(parsed: Parsed) -> list[tuple[int | None, int | None, str]]:
    return [(found.line, found.column, found.found) for found in parsed.findings]


def decided(parsed: Parsed) -> None:
    """Accepted with sound content, or refused with places that a reader can go to."""
    if parsed.findings:
        for finding in parsed.findings:
            assert finding.file == "file.csv"
            assert finding.line is not None and finding.line >= 1
            assert finding.found and finding.expected
            assert len(str(finding)) < 2000
    elif isinstance(parsed.content, Panel):
        assert parsed.content.values.shape == (len(parsed.content.days), len(parsed.content.names))
        assert not np.isinf(parsed.content.values).any()
        assert list(parsed.content.days) == sorted(set(parsed.content.days))
    elif isinstance(parsed.content, PositionRows):
        assert not parsed.content.flat & set(parsed.content.book)


CELLS = st.one_of(
    st.sampled_from(
        "|0|-1|1.5|1e400|1e17|nan|inf|1,5|1_0|１２|EUR|EURUSD|USDUSD|quay|any|2026-03-06|2026-02-30|0001-01-01|9999-12-31|"
        "2026-W10-5|future|external|XDUB|24/7".split("|")
    ),
    st.text(max_size=8),
)


@st.composite
def tables(draw: st.DrawFn) -> tuple[FileKind, bytes]:
    kind = draw(st.sampled_from(KINDS))
    required, optional, _, _ = READERS[kind]
    wanted = [*required, *draw(st.lists(st.sampled_from([*optional, "sector", "x y"]), max_size=4))]
    rows = draw(st.lists(st.lists(CELLS, min_size=len(wanted), max_size=len(wanted)), max_size=5))
    quoted = ['"' + cell.replace('"', '""') + '"' if draw(st.booleans()) else cell for row in rows for cell in row]
    lines = [",".join(wanted), *(",".join(quoted[at : at + len(wanted)]) for at in range(0, len(quoted), len(wanted)))]
    return kind, "\n".join(lines).encode()


@given(st.sampled_from(KINDS), st.binary(max_size=200))
def test_any_bytes_are_accepted_or_refused_with_a_place(kind, data):
    decided(parse(kind, "file.csv", data, DAY, WORDS))


@settings(max_examples=400)
@given(tables())
def test_any_table_is_accepted_or_refused_with_a_place(table):
    kind, data = table

    first = parse(kind, "file.csv", data, DAY, WORDS)

    decided(first)
    if not first.findings:  # and is read alike from the archive, where the words of the site are not asked again
        again = parse(kind, "prices", data, DAY, Vocabulary())
        assert not again.findings
        assert repr(again.content) == repr(first.content)


@pytest.mark.parametrize(
    ("lines", "place"),
    [
        (("instrument,close", "A,1", "B,x"), (3, 3, "'x' as close")),
        (("instrument,close", "A,1", "A,2"), (3, 1, "a second row of 'A'")),
        (("instrument,close", "A,1,2"), (2, 1, "a row of 3 columns")),
        (("instrument,close", "A"), (2, 1, "a row of 1 columns")),
        (("instrument,close", " A,1"), (2, 1, "' A' as instrument")),
        (("instrument,close", ",1"), (2, 1, "'' as instrument")),
        (("instrument,close", "A,"), (2, 3, "'' as close")),
        (("instrument,close", "A,1e18"), (2, 3, "'1e18' as close")),
        (("instrument,close", "A,٣"), (2, 3, "'٣' as close")),
        (("instrument,close", "A\x0bB,1"), (2, 1, "'A\\x0bB' as instrument")),
        (("instrument,close,close", "A,1,2"), (1, 18, "a second column 'close'")),
        (("instrument,clsoe", "A,1"), (1, 12, "the column 'clsoe'")),
        (("instrument,close,currency", "A,1,EURO"), (2, 5, "'EURO' as currency")),
    ],
)
def test_what_is_wrong_in_a_price_file_is_named_with_its_place(lines, place):
    assert place in refused(read(FileKind.PRICES, *lines))


def test_a_name_over_two_lines_is_refused():
    assert refused(read(FileKind.PRICES, "instrument,close", '"A\nB",1')) == [(3, 1, "'A\\nB' as instrument")]


def test_a_byte_that_is_not_utf8_is_named_with_its_place_also_behind_a_byte_order_mark():
    plain = parse(FileKind.PRICES, "file.csv", "instrument,close\nÄ".encode() + b"\xff,1\n", DAY, WORDS)
    marked = parse(FileKind.PRICES, "file.csv", b"\xef\xbb\xbf" + "instrument,close\nÄ".encode() + b"\xff", DAY, WORDS)

    assert refused(plain) == refused(marked) == [(2, 2, "the byte 0xff")]


def test_a_byte_order_mark_is_no_part_of_the_header():
    data = "﻿instrument,close\nA,1\n".encode()

    assert parse(FileKind.PRICES, "file.csv", data, DAY, WORDS).findings == ()


@pytest.mark.parametrize(
    ("header", "meant"),
    [("multiplyer", "multiplier"), ("Currency", "currency"), ("kinds", "kind"), ("expirey", "expiry")],
)
def test_a_slip_in_a_column_of_the_instruments_is_no_tag(header, meant):
    """A tag `multiplyer` would leave every multiplier at 1 without a word."""
    found = read(FileKind.INSTRUMENTS, f"instrument,currency,{header}", "A,EUR,1")

    assert [finding.remedy for finding in found.findings] == [f"Did you mean {meant!r}?"]


def test_tags_are_names_and_empty_ones_are_none():
    found = read(FileKind.INSTRUMENTS, "instrument,currency,sector,desk", "A,EUR,food,", "B,EUR,,x")
    assert [dict(item.tags) for item in found.content] == [{"sector": "food"}, {"desk": "x"}]

    blank = read(FileKind.INSTRUMENTS, "instrument,currency,sector", "A,EUR, food")
    assert refused(blank) == [(2, 7, "' food' as sector")]


@pytest.mark.parametrize(
    ("row", "found"),
    [
        ("A,EUR,bond_price,1,,", "the kind 'bond_price', which is not there yet"),
        ("A,EUR,option,1,,", "the kind 'option'"),
        ("A,EUR,future,1,,", "the future 'A' without an expiry"),
        ("A,EUR,equity,0,,", "the multiplier 0"),
        ("A,EUR,equity,1,XXXX,", "the calendar 'XXXX'"),
        ("A,eur,equity,1,,", "'eur' as currency"),
    ],
)
def test_an_instrument_that_cannot_be_measured_as_it_says_is_refused(row, found):
    parsed = read(FileKind.INSTRUMENTS, "instrument,currency,kind,multiplier,calendar,expiry", row)

    assert [finding.found for finding in parsed.findings] == [found]


@pytest.mark.parametrize(
    ("rows", "found"),
    [
        (["quay,A,1", "quay,,"], "a position of quay, which another row says is flat"),
        (["quay,,5"], "a quantity without an instrument"),
        (["quay,A,"], "no quantity of 'A'"),
        (["north,A,1"], "the book 'north'"),
        (["quay,A,1e18"], "'1e18' as quantity"),
    ],
)
def test_a_position_that_says_two_things_is_refused(rows, found):
    parsed = read(FileKind.POSITIONS, "book,instrument,quantity", *rows)

    assert [finding.found for finding in parsed.findings] == [found]


@pytest.mark.parametrize("rate", ["0", "-1", "1e-18"])
def test_a_rate_is_above_zero(rate):
    assert len(read(FileKind.FX, "pair,rate", f"EURUSD,{rate}").findings) == 1


def test_a_nav_is_not_dated_after_its_file():
    parsed = read(FileKind.NAV, "book,nav,nav_date", "quay,1,2026-03-07")

    assert [finding.found for finding in parsed.findings] == ["the date 2026-03-07"]
