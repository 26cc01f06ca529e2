"""YAML to plain values: every scalar, the limits, and hostile input in reasonable time."""

from __future__ import annotations

import time
from decimal import Decimal

import pytest
import yaml
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from test_site_settings import FULL

from monitor.limits.rules import read_rules
from monitor.reading.document import MOST_FINDINGS
from monitor.reading.plain import MOST_BYTES, read_yaml
from monitor.reading.values import Odd, Percent, plain_value
from monitor.site import read_site
from monitor.words import WrongUse

LOADERS = [yaml.SafeLoader, *([yaml.CSafeLoader] if hasattr(yaml, "CSafeLoader") else [])]
CONTEXT = read_site("site.yaml", FULL.encode()).rule_context()


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("5", 5),
        ("-5", -5),
        ("0", 0),
        ("1e6", Decimal("1000000")),
        ("2.50", Decimal("2.50")),
        ("-1.5E-3", Decimal("-0.0015")),
        ("true", True),
        ("false", False),
        ("9 %", Percent(Decimal(9))),
        ("9%", Percent(Decimal(9))),
        ("-0.5 %", Percent(Decimal("-0.5"))),
        ("2026-01-02", "2026-01-02"),
        ("North Quay", "North Quay"),
        ("127.0.0.1", "127.0.0.1"),
        ("5 business days", "5 business days"),
        ("5  %", "5  %"),
        ("-", "-"),
    ],
)
def test_plain_scalar(text: str, value: object) -> None:
    assert plain_value(text) == value
    assert type(plain_value(text)) is type(value)


ODD = ["", "~", "null", "NO", "no", "Yes", "ON", "off", "True", "FALSE", "Null", "<<", "0123", "1_000", "0x1F", "0o17"]
ODD += ["18:30", "18:30:15", ".5", "5.", ".inf", "-.INF", ".nan", "+012", "1e1000", "9" * 26]


@pytest.mark.parametrize("text", ODD)
def test_odd_scalar_is_refused(text: str) -> None:
    assert isinstance(plain_value(text), Odd)


def test_percentage_is_exact() -> None:
    assert Percent(Decimal("0.1")).fraction == Decimal("0.001")
    assert float(Percent(Decimal(9)).fraction) == 0.09


@pytest.mark.parametrize("loader", LOADERS)
def test_quoted_text_stays_text(loader: type) -> None:
    document = read_yaml("f", b'a: "0123"\nb: \'NO\'\nc: |\n  5\nd: "5 %"\n', loader)

    assert document.data == {"a": "0123", "b": "NO", "c": "5\n", "d": "5 %"}
    assert document.findings == []


@pytest.mark.parametrize("loader", LOADERS)
def test_places_count_characters_from_one(loader: type) -> None:
    document = read_yaml("f", "\ufeffä: {ü: [x, y]}\r\nz: 1\r\n".encode(), loader)

    assert document.places["ä", "ü", 1].value == (1, 12)
    assert document.places["ä", "ü"].key == (1, 5)
    assert document.places[("z",)].value == (2, 4)


BOMB = b"a: &a [x, x, x, x, x, x, x, x, x]\n" + b"".join(
    b"%c: &%c [%s]\n" % (name + 1, name + 1, b", ".join([b"*%c" % name] * 9)) for name in range(ord("a"), ord("j"))
)
HOSTILE = {
    "aliases": BOMB,
    "nested lists": b"[" * 400_000,
    "nested mappings": b"{a: " * 200_000,
    "nested keys": b"? " * 300_000,
    "many values": b"a: [" + b"1," * 400_000 + b"1]",
    "many keys": b"{" + b",".join(b"k%d: 1" % number for number in range(90_000)) + b"}",
    "a long number": b"a: " + b"1" * 900_000,
    "a long odd number": b"a: " + b"1" * 450_000 + b"_" * 450_000 + b"x",
    "one long key": b"k" * 900_000 + b": 1",
    "too many bytes": b"#" * (MOST_BYTES + 1),
}


@pytest.mark.parametrize("data", HOSTILE.values(), ids=HOSTILE)
def test_hostile_input_ends_soon_in_findings(data: bytes) -> None:
    start = time.perf_counter()
    with pytest.raises(WrongUse) as caught:
        read_site("site.yaml", data)

    assert 0 < len(caught.value.findings) <= MOST_FINDINGS + 1
    assert time.perf_counter() - start < 15  # 2.5 s at most on an idle machine


def test_number_of_findings_left_out_is_said() -> None:
    with pytest.raises(WrongUse) as caught:
        read_site("site.yaml", b"{" + b",".join(b"k%d: 1" % number for number in range(1000)) + b"}")

    # 1000 unknown keys, and the four that a site must have
    assert (
        str(caught.value.findings[-1]) == "site.yaml: found 804 more problems like these; expected at most 200 at once"
    )


RULES = b"""\
rules:
  - id: nq-var
    applies_to: {book: north-quay, kind: {not: [cash]}}
    each: issuer
    measure: {name: value_at_risk, method: historical, confidence: 0.99, horizon_days: 1, window: 500}
    near: 9 %
    limit: 10 %
    unit: of_nav
    in_force: {from: 2026-01-02}
"""
PIECES = [
    b"&a ",
    b"*a",
    b"<<: ",
    b"!!str ",
    b"---\n",
    b"? ",
    b"- ",
    b": ",
    b"{",
    b"}",
    b"[",
    b"]",
    b"%",
    b'"',
    b"'",
    b"|\n",
]
PIECES += [
    b"NO",
    b"~",
    b"1e99",
    b"\\ud800",
    b"\\U00110000",
    b"\xff",
    b"\x00",
    b"\t",
    b"\n",
    b"0x1",
    b"not: ",
    b"any",
    b"#",
]


@st.composite
def mutated(draw: st.DrawFn, text: bytes) -> bytes:
    """The text with a few pieces put in, cut out or copied elsewhere."""
    for _ in range(draw(st.integers(1, 4))):
        at = draw(st.integers(0, len(text)))
        to = draw(st.integers(at, min(len(text), at + 40)))
        middle = draw(st.sampled_from(PIECES) | st.binary(max_size=4) | st.just(text[at:to] * 2))
        text = text[:at] + middle + text[to:]
    return text


FUZZ = settings(max_examples=300, deadline=5000, suppress_health_check=[HealthCheck.too_slow])


def assert_answers(data: bytes) -> None:
    """Reading ends in a value or in findings, whatever the bytes are; anything else escapes as an error."""
    for read in (lambda: read_site("f", data), lambda: read_rules([("f", data)], CONTEXT)):
        try:
            read()
        except WrongUse as error:
            assert error.findings
            assert all(str(finding).isprintable() for finding in error.findings)


@FUZZ
@given(st.binary(max_size=200))
def test_any_bytes_give_a_value_or_findings(data: bytes) -> None:
    assert_answers(data)


@FUZZ
@given(mutated(FULL.encode()))
def test_any_broken_site_gives_a_value_or_findings(data: bytes) -> None:
    assert_answers(data)


@FUZZ
@given(mutated(RULES))
def test_any_broken_rules_give_a_value_or_findings(data: bytes) -> None:
    assert_answers(data)


@FUZZ
@given(mutated(RULES) | mutated(FULL.encode()), st.sampled_from(LOADERS))
def test_every_parser_of_yaml_gives_a_document_or_findings(data: bytes, loader: type) -> None:
    try:
        read_yaml("f", data, loader)
    except WrongUse as error:
        assert error.findings


@settings(FUZZ, max_examples=150)
@given(
    st.recursive(
        st.sampled_from(["any", 5, True, "2026-01-02", "9 %", "not", "m.osei"]) | st.text(max_size=5),
        lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.sampled_from(["id", "not", "name", "x"]), inner),
        max_leaves=4,
    ),
    st.data(),
)
def test_any_value_in_any_place_gives_a_value_or_findings(value: object, data: st.DataObject) -> None:
    for text in (FULL, RULES.decode()):
        tree = yaml.safe_load(text)
        whole = tree
        while isinstance(tree, dict | list) and tree:
            key = data.draw(st.sampled_from(list(tree) if isinstance(tree, dict) else range(len(tree))))
            if not isinstance(tree[key], dict | list) or data.draw(st.booleans()):
                tree[key] = value
                break
            tree = tree[key]
        assert_answers(yaml.dump(whole, Dumper=yaml.SafeDumper, allow_unicode=True).encode())
