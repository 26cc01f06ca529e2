"""How numbers are worded wherever a person reads them.

Values come in as the rules keep them: percentages as fractions.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from datetime import date
from decimal import Decimal

from monitor.words import Side, Unit
from monitor.world import Answer, How

_SHOWN_AS_PERCENTAGE = frozenset({"volatility", "loss_probability", "marginal"})
_MEASURES = {
    "value_at_risk": "value at risk (VaR)",
    "expected_shortfall": "expected shortfall (ES)",
    "day_loss": "loss of the day",
    "gross": "gross exposure",
    "net": "net exposure",
    "long": "long exposure",
    "short": "short exposure",
    "count": "number of positions",
    "component": "contribution",
    "incremental": "incremental contribution",
    "marginal": "marginal contribution",
    "loss_probability": "probability of the loss",
}
_MOST_LEVEL_DECIMALS = 6


@dataclass(frozen=True)
class _Style:
    """value x scale is printed between `before` and `after`; from `whole_from` on without decimals."""

    scale: float = 1.0
    before: str = ""
    after: str = ""
    decimals: int = 2
    whole_from: float = math.inf


def _style(unit: Unit, currency: str | None, measure: str) -> _Style:
    match unit:
        case Unit.AMOUNT:
            return _Style(before=f"{currency} " if currency else "", whole_from=1000.0)
        case Unit.OF_NAV:
            return _Style(scale=100.0, after=" % of NAV")
        case Unit.OF_GROSS:
            return _Style(scale=100.0, after=" % of gross")
        case Unit.DAYS:
            return _Style(after=" days", decimals=1)
    if measure in _SHOWN_AS_PERCENTAGE:
        return _Style(scale=100.0, after=" %")
    return _Style()


def _decimals(scaled: float, style: _Style) -> int:
    """Enough decimals for two significant digits, none for large amounts and whole numbers without a percent sign."""
    size = abs(scaled)
    if size >= style.whole_from or (style.scale == 1.0 and not style.before and scaled == int(scaled)):
        return 0
    if size == 0 or size >= 1:
        return style.decimals
    return max(style.decimals, 1 - math.floor(math.log10(size)))


def _digits(scaled: float, decimals: int) -> str:
    text = f"{scaled:,.{decimals}f}"
    return text.lstrip("-") if float(text.replace(",", "")) == 0 else text


def _trimmed(text: str) -> str:
    return text.rstrip("0").rstrip(".") if "." in text else text


def _worded(digits: str, style: _Style) -> str:
    after = " day" if style.after == " days" and digits == "1" else style.after
    return f"{style.before}{digits}{after}"


def figure(value: float, unit: Unit, currency: str | None = None, measure: str = "") -> str:
    """A value in words: `EUR 1,312,400`, `10.32 % of NAV`, `2.41`, `3 days`."""
    style = _style(unit, currency, measure)
    scaled = value * style.scale
    return _worded(_digits(scaled, _decimals(scaled, style)), style)


def amount(value: float, currency: str) -> str:
    """`EUR 1,312,400`; below a thousand with two decimals."""
    return figure(value, Unit.AMOUNT, currency)


def level(value: float, unit: Unit, currency: str | None = None, measure: str = "") -> str:
    """A level as a person would have written it, without the zeros at its end: `10 % of NAV`, `EUR 1,250,000`."""
    style = _style(unit, currency, measure)
    scaled = value * style.scale
    return _worded(_trimmed(_digits(scaled, max(_decimals(scaled, style), _MOST_LEVEL_DECIMALS))), style)


def against(
    value: float, held_against: float, unit: Unit, currency: str | None = None, measure: str = ""
) -> tuple[str, str]:
    """A value and the level it is held against, with as many digits as it takes to tell the two apart."""
    style = _style(unit, currency, measure)
    scaled, scaled_level = value * style.scale, held_against * style.scale
    decimals = _decimals(scaled, style)
    while scaled != scaled_level and _digits(scaled, decimals) == _digits(scaled_level, decimals):
        decimals += 1
    level_decimals = max(decimals, _MOST_LEVEL_DECIMALS)
    return (
        _worded(_digits(scaled, decimals), style),
        _worded(_trimmed(_digits(scaled_level, level_decimals)), style),
    )


def percentage(fraction: float, decimals: int = 1) -> str:
    """0.1234 -> `12.3 %`."""
    return f"{_digits(fraction * 100.0, decimals)} %"


def utilisation(share: float | None) -> str:
    """How much of a limit is used: `104.9 %`. Only what is exactly at its limit prints as 100 %."""
    if share is None:
        return "no utilisation"
    decimals = 1
    while share != 1.0 and float(_digits(share * 100.0, decimals).replace(",", "")) == 100.0:
        decimals += 1
    return percentage(share, decimals)


def count(number: int, one: str, many: str = "") -> str:
    """`1 excess`, `1,204 excesses`."""
    return f"{number:,} {one if number == 1 else many or one + 's'}"


def not_measured(number: int) -> str:
    """How many positions and books have no figure; a rule for a subject is not among them."""
    return f"{count(number, 'position or book', 'positions or books')} not measured"


def day(on: date | None) -> str:
    return "no date" if on is None else on.isoformat()


def measure_name(measure: str) -> str:
    return _MEASURES.get(measure, measure.replace("_", " "))


def confidence(value: Decimal) -> str:
    """Decimal("0.975") -> `97.5 %`, exactly as it was written."""
    return f"{_trimmed(format(value * 100, 'f'))} %"


def how_made(how: How, n: int | None = None) -> str:
    """The method behind a figure: `historical, 99 %, 1 day, 500 sessions, n = 500`; empty for plain sums."""
    to = how.of in ("value_at_risk", "expected_shortfall")
    parts = [
        how.method.replace("_", " ") if how.method else None,
        confidence(how.confidence) if how.confidence is not None else None,
        count(how.horizon_days, "day") if how.horizon_days is not None else None,
        count(how.window, "session") if how.window is not None else None,
        f"n = {n}" if n is not None else None,
        how.detail,
        f"{'to' if to else 'of'} {measure_name(how.of)}" if how.of else None,
    ]
    return ", ".join(part for part in parts if part)


def held_against(answer: Answer) -> float | None:
    """The level that decides an answer: the upper limit, or the lower one when the answer is held against that."""
    return answer.limit if answer.side is Side.ABOVE else answer.limit_below


def value_of(answer: Answer) -> str:
    """An answer's value with its unit, never printed as equal to a limit that it differs from."""
    if answer.value is None:
        return "unmeasured"
    limit = held_against(answer)
    if limit is None:
        return figure(answer.value, answer.unit, answer.currency, answer.measure)
    return against(answer.value, limit, answer.unit, answer.currency, answer.measure)[0]


def limit_of(answer: Answer) -> str:
    limit = held_against(answer)
    if limit is None:
        return "no limit"
    if answer.value is None:
        return level(limit, answer.unit, answer.currency, answer.measure)
    return against(answer.value, limit, answer.unit, answer.currency, answer.measure)[1]


def bounds_of(answer: Answer) -> str | None:
    """The sampling bounds at 95 %, and why one does not exist; None where the measure has none."""
    if answer.low is None and answer.high is None and answer.unbounded is None:
        return None
    low, high = (
        None if bound is None else figure(bound, answer.unit, answer.currency, answer.measure)
        for bound in (answer.low, answer.high)
    )
    why = f": {answer.unbounded}" if answer.unbounded else ""
    return f"{_between(low, high)} (95 % sampling bounds{why})"


def bounds_in_short(answer: Answer) -> str:
    """The sampling bounds as bare numbers, in the unit of the value above them; empty where there is none."""
    if answer.low is None and answer.high is None:
        return ""
    style = _style(answer.unit, answer.currency, answer.measure)
    low, high = (
        None if bound is None else _digits(bound * style.scale, _decimals(bound * style.scale, style))
        for bound in (answer.low, answer.high)
    )
    return f"95 %: {_between(low, high)}"


def _between(low: str | None, high: str | None) -> str:
    if low is not None and high is not None:
        return f"{low} to {high}"
    return f"at least {low}" if low is not None else f"at most {high}" if high is not None else "no bounds"
