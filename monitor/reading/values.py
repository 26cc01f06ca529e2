"""Plain values: what one scalar of a YAML file stands for, and how an error names it.

A scalar is text, a whole number (int), any other number (Decimal, exactly as written), true or false, or a percentage.
What YAML 1.1 and 1.2 read differently, or what people write without meaning it (NO, 0123, 1_000, 18:30), is refused.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from decimal import Decimal
from enum import Enum
from typing import Any, Final

LONGEST_NUMBER = 25  # fewer digits than Decimal keeps, and no exponent beyond a float
_NUMBER = re.compile(r"[-+]?(0|[1-9][0-9]*)(\.[0-9]+)?([eE][-+]?[0-9]{1,2})?")
_WHOLE = re.compile(r"[-+]?(0|[1-9][0-9]*)")
_PERCENT = re.compile(rf"({_NUMBER.pattern}) ?%")
_ODD_NUMBER = re.compile(
    r"""[-+]?(0[xob][0-9a-f_]+
    | [0-9][0-9_]*(:[0-5]?[0-9])+(\.[0-9_]*)?
    | (?=[0-9_.]*[0-9])[0-9_]*\.?[0-9_]*(e[-+]?[0-9]+)?
    | \.inf | \.nan)""",
    re.IGNORECASE | re.VERBOSE,
)
_LONGEST_ODD = 64  # a longer scalar is text; the pattern above is slow on very long ones
_ODD_WORDS = frozenset({"yes", "no", "on", "off", "true", "false", "null", "<<"})
_SECRET_KEYS = frozenset({"password", "secret", "token"})
_LONGEST_SHOWN = 60
BY_REFERENCE = "{env: NAME} or {file: PATH}"
HUSHED = "a value written in clear"


@dataclass(frozen=True)
class Percent:
    """A percentage: `number` is 9 for 9 %."""

    number: Decimal

    @property
    def fraction(self) -> Decimal:
        return self.number.scaleb(-2)

    def __str__(self) -> str:
        return f"{self.number} %"


class Unreadable(Enum):
    """Stands where a value could not be read; its finding is already made."""

    VALUE = "unreadable"


UNREADABLE: Final = Unreadable.VALUE


@dataclass(frozen=True)
class Odd:
    """A scalar that is refused: what is expected in its place and what to do."""

    expected: str
    remedy: str


def plain_value(text: str) -> str | int | bool | Decimal | Percent | Odd:
    """What an unquoted scalar stands for."""
    if text in ("true", "false"):
        return text == "true"
    number = number_of(text)
    amount = percent_of(text) if number is None else number
    return _text_or_odd(text) if amount is None else amount


def _text_or_odd(text: str) -> str | Odd:
    if text in ("", "~", "null"):
        return Odd("a value", "Leave the key out when there is none")
    if text.lower() in _ODD_WORDS:
        return Odd("true, false, or quoted text", f'Readers of YAML differ on this word; quote it: "{text}"')
    if len(text) <= _LONGEST_ODD and _ODD_NUMBER.fullmatch(text):
        return Odd("a plain number such as 1000 or 0.99, or quoted text", f'As text, quote it: "{text}"')
    return text


def number_of(text: str) -> int | Decimal | None:
    """A number as written, without separators, leading zeros or other bases; None when the text is none."""
    if len(text) > LONGEST_NUMBER or not _NUMBER.fullmatch(text):
        return None
    return int(text) if _WHOLE.fullmatch(text) else Decimal(text)


def percent_of(text: str) -> Percent | None:
    """A percentage, `9 %` or `9%`; None when the text is none."""
    found = _PERCENT.fullmatch(text) if len(text) <= LONGEST_NUMBER else None
    return Percent(Decimal(found[1])) if found else None


def describe(value: object, key: object = None) -> str:
    """A value as an error names it. What stands under a key of secrets is never shown."""
    if key in _SECRET_KEYS and not isinstance(value, dict):
        return HUSHED
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, list | dict):
        return _describe_many(value)
    if isinstance(value, str):
        return f"the text {shown(value)}"
    return f"the {'percentage' if isinstance(value, Percent) else 'number'} {value}"


def _describe_many(value: list[Any] | dict[str, Any]) -> str:
    if isinstance(value, list):
        return "a list" if value else "an empty list"
    return "a mapping of keys to values" if value else "an empty mapping"


def show_scalar(text: str, key: object) -> str:
    """A scalar that could not be read, as an error names it."""
    return HUSHED if key in _SECRET_KEYS else shown(text) if text else "nothing"


def printable(text: str) -> str:
    """Text with each control character as its escape, so that an error cannot change how a terminal shows it."""
    if text.isprintable():
        return text
    return "".join(each if each.isprintable() else each.encode("unicode_escape").decode() for each in text)


def shown(text: str) -> str:
    """Text in quotes, cut to what fits into a line."""
    return repr(text if len(text) <= _LONGEST_SHOWN else text[:_LONGEST_SHOWN] + "...")
