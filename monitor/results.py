"""The results file of an evening: its standings in columns, as JSON, so that any tool can read it for ever.

Floats are written by their shortest exact form, so that decoding gives the very figures that were recorded.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from datetime import date
from decimal import Decimal
from typing import Any

from monitor.words import Mark, MarkKind, Side, Standing, Subject, SubjectKind, Unit
from monitor.world import Answer, BookFigures, How, Standings, Unmeasured

FORMAT = 2  # 1 had no `unbounded` and no `detail` of a method; it is read as it stands


def encode(standings: Standings) -> bytes:
    """The results file. The same standings always give the same bytes."""
    content = {
        "format": FORMAT,
        "answers": _columns([_answer(answer) for answer in standings.answers]),
        "books": _columns([_book(figures) for figures in standings.books]),
        "unmeasured": _columns(
            [{"subject": _subject(gap.subject), "reason": gap.reason} for gap in standings.unmeasured]
        ),
        "uncovered": [_subject(subject) for subject in standings.uncovered],
        "lacking": list(standings.lacking),
    }
    return json.dumps(content, separators=(",", ":"), ensure_ascii=False, allow_nan=False).encode()


def decode(data: bytes) -> Standings:
    """The standings of a results file. Raises ValueError for a format this program does not know."""
    content = json.loads(data)
    if content["format"] not in (1, FORMAT):
        raise ValueError(f"results of format {content['format']}; this program knows {FORMAT}")
    return Standings(
        answers=tuple(_read_answer(row) for row in _rows(content["answers"])),
        books=tuple(_read_book(row) for row in _rows(content["books"])),
        unmeasured=tuple(
            Unmeasured(_read_subject(row["subject"]), row["reason"]) for row in _rows(content["unmeasured"])
        ),
        uncovered=tuple(_read_subject(subject) for subject in content["uncovered"]),
        lacking=tuple(content["lacking"]),
    )


def _columns(rows: Sequence[Mapping[str, Any]]) -> dict[str, list[Any]]:
    return {name: [row[name] for row in rows] for name in (rows[0] if rows else {})}


def _rows(columns: Mapping[str, Sequence[Any]]) -> list[dict[str, Any]]:
    return [dict(zip(columns, row, strict=True)) for row in zip(*columns.values(), strict=True)]


def _answer(answer: Answer) -> dict[str, Any]:
    return {
        "rule": answer.rule,
        "subject": _subject(answer.subject),
        "measure": answer.measure,
        "standing": answer.standing.value,
        "value": answer.value,
        "unit": answer.unit.value,
        "currency": answer.currency,
        "near": answer.near,
        "limit": answer.limit,
        "limit_below": answer.limit_below,
        "side": answer.side.value,
        "distance": answer.distance,
        "utilisation": answer.utilisation,
        "low": answer.low,
        "high": answer.high,
        "unbounded": answer.unbounded,
        "n": answer.n,
        "reason": answer.reason,
        "marks": [[mark.kind.value, mark.note] for mark in answer.marks],
        "how": _how(answer.how),
    }


def _read_answer(row: Mapping[str, Any]) -> Answer:
    return Answer(
        rule=row["rule"],
        subject=_read_subject(row["subject"]),
        measure=row["measure"],
        standing=Standing(row["standing"]),
        value=row["value"],
        unit=Unit(row["unit"]),
        currency=row["currency"],
        near=row["near"],
        limit=row["limit"],
        limit_below=row["limit_below"],
        side=Side(row["side"]),
        distance=row["distance"],
        utilisation=row["utilisation"],
        low=row["low"],
        high=row["high"],
        unbounded=row.get("unbounded"),
        n=row["n"],
        reason=row["reason"],
        marks=tuple(Mark(MarkKind(kind), note) for kind, note in row["marks"]),
        how=_read_how(row["how"]),
    )


def _book(figures: BookFigures) -> dict[str, Any]:
    return {
        "subject": _subject(figures.subject),
        "currency": figures.currency,
        "positions": figures.positions,
        "gross": figures.gross,
        "net": figures.net,
        "nav": figures.nav,
        "nav_on": str(figures.nav_on) if figures.nav_on else None,
        "value_at_risk": figures.value_at_risk,
        "expected_shortfall": figures.expected_shortfall,
        "pnl": figures.pnl,
        "n": figures.n,
        "how": _how(figures.how),
        "reasons": list(figures.reasons),
    }


def _read_book(row: Mapping[str, Any]) -> BookFigures:
    return BookFigures(
        subject=_read_subject(row["subject"]),
        currency=row["currency"],
        positions=row["positions"],
        gross=row["gross"],
        net=row["net"],
        nav=row["nav"],
        nav_on=date.fromisoformat(row["nav_on"]) if row["nav_on"] else None,
        value_at_risk=row["value_at_risk"],
        expected_shortfall=row["expected_shortfall"],
        pnl=row["pnl"],
        n=row["n"],
        how=_read_how(row["how"]),
        reasons=tuple(row["reasons"]),
    )


def _subject(subject: Subject) -> list[str | None]:
    return [subject.key, subject.kind.value, subject.book]


def _read_subject(parts: Sequence[Any]) -> Subject:
    return Subject(parts[0], SubjectKind(parts[1]), parts[2])


def _how(how: How) -> list[Any]:
    confidence = None if how.confidence is None else str(how.confidence)
    return [how.method, confidence, how.horizon_days, how.window, how.of, how.detail]


def _read_how(parts: Sequence[Any]) -> How:
    method, confidence, horizon_days, window, of, *detail = parts
    return How(method, None if confidence is None else Decimal(confidence), horizon_days, window, of, *detail)
