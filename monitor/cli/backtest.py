"""duskcheck backtest: how the loss model has done."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from datetime import date
from decimal import Decimal
from pathlib import Path
from typing import Any

import click
from rich.console import Console
from rich.progress import track
from rich.table import Table

from monitor.backtest import Backtest, Question, Record
from monitor.backtest import backtest as run_backtest
from monitor.cli.options import Day, json_option, print_json, site_option
from monitor.limits.defaults import Defaults
from monitor.limits.judgement import REJECTED_AT, Tested
from monitor.limits.parameters import TAIL_METHODS, tail_measure
from monitor.limits.wording import method_words
from monitor.notices.figures import count
from monitor.site import open_site
from monitor.state import open_state
from monitor.words import WrongUse

FIRM = "firm"
DAYS_SHOWN = 12
CAUTION = (
    "A good record is no promise: value at risk is not the worst case, few exceptions prove little, and none of this "
    "replaces the approved models and licensed people that local rules require."
)


@click.command()
@site_option
@click.option(
    "--book", "books", multiple=True, help=f"A book's id, or `{FIRM}`; all of them when left out. Repeatable."
)
@click.option("--positions", is_flag=True, help="Each position too.")
@click.option("--todays-positions", is_flag=True, help="The newest positions over the whole history of prices.")
@click.option(
    "--method",
    "methods",
    multiple=True,
    type=click.Choice(TAIL_METHODS),
    help="A method with the site's defaults instead of those behind the figures. Repeatable.",
)
@click.option("--window", type=click.IntRange(2, 10_000), help="Sessions, with --method; else the site's default.")
@click.option("--confidence", help="Such as 0.99, with --method; else the site's default.")
@click.option("--from", "first", type=Day(), help="The first date of the outcomes.")
@click.option("--to", "last", type=Day(), help="The last date of the outcomes.")
@json_option
def backtest(
    site_file: Path,
    books: tuple[str, ...],
    positions: bool,
    todays_positions: bool,
    methods: tuple[str, ...],
    window: int | None,
    confidence: str | None,
    first: date | None,
    last: date | None,
    as_json: bool,
) -> None:
    """How the loss model has done: each evening's forecast held against the next session's profit or loss.

    Without --method each subject is tested under the methods behind its figures: the site's default, the rules on its
    value at risk, the challenger that the site file names, and what the evenings recorded at the time. One-day
    forecasts throughout, on the positions held then. Reads the record and writes nothing.
    """
    if not methods and (window is not None or confidence is not None):
        raise click.UsageError("--window and --confidence go with --method")
    if first is not None and last is not None and first > last:
        raise click.UsageError(f"--from {first} lies after --to {last}")
    site = open_site(site_file)
    _check_books(books, site.settings.book_ids())
    calls = [tail_measure(_defaults(site.settings.defaults, window, confidence), method) for method in methods]
    question = Question(tuple(calls) or None, books or None, positions, todays_positions, first, last)
    with open_state(site) as state:
        made = run_backtest(state, question, _silent if as_json else _bar)
    if as_json:
        print_json(_document(site.settings.site, made))
    else:
        _print(made)


def _check_books(books: Sequence[str], known: Sequence[str]) -> None:
    for book in books:
        if book not in (*known, FIRM):
            raise WrongUse(f"found the book {book!r}; expected one of {', '.join((*known, FIRM))}")


def _defaults(defaults: Defaults, window: int | None, confidence: str | None) -> Defaults:
    given: dict[str, Any] = {"window": window, "confidence": confidence}
    if confidence is not None:
        try:
            given["confidence"] = Decimal(confidence)
        except ArithmeticError:
            raise WrongUse(f"found the confidence {confidence!r}; expected a number such as 0.99") from None
        if not Decimal("0.5") <= given["confidence"] < 1:
            raise WrongUse(f"found the confidence {confidence}; expected one from 0.5 to below 1, such as 0.99")
    return defaults.model_copy(update={key: value for key, value in given.items() if value is not None})


def _silent(things: Sequence[Any], _text: str) -> Iterable[Any]:
    return things


def _bar(things: Sequence[Any], text: str) -> Iterable[Any]:
    """With a progress bar for a person who waits."""
    console = Console(stderr=True)
    return track(things, description=text, console=console, transient=True) if console.is_terminal else things


def _print(made: Backtest) -> None:
    console = Console(highlight=False, markup=False, emoji=False)
    if not made.records:
        console.print("There is no evening with a next session in that span: nothing to hold a forecast against.")
        return
    on = "the positions of each evening" if made.positions_on is None else f"the positions of {made.positions_on}"
    console.print(
        f"One-day forecasts on {on}, against the next session. p: of the test named; below 5 % it rejects (*)."
    )
    console.print(_table(made.records))
    for record in made.records:
        for line in _remarks(record):
            console.print(line)
    for subject, sentence in made.sentences.items():
        console.print(f"{subject.name}, newest window: {sentence}")
    console.print(CAUTION)


def _table(records: Sequence[Record]) -> Table:
    table = Table(box=None, pad_edge=False)
    for heading in ("subject", "method"):
        table.add_column(heading, overflow="fold")
    for heading in ("days", "exceptions", "expected", "zone", "coverage", "independence", "both", "shortfall", "whole"):
        table.add_column(heading, justify="right" if heading != "zone" else "left")
    shown = None
    for record in records:
        own = record.judgement
        table.add_row(
            record.subject.name if record.subject != shown else "",
            _method(record),
            str(own.days),
            str(own.exceptions),
            f"{own.expected:.1f}",
            own.zone if own.days else "",
            *(_p(test) for test in (own.coverage, own.independence, own.conditional_coverage)),
            _p(Tested(own.shortfall.statistic, own.shortfall.p_value)),
            _p(own.distribution),
        )
        shown = record.subject
    return table


def _method(record: Record) -> str:
    return f"{method_words(record.asked.call.parameters)} ({', '.join(record.asked.reasons)})"


def _p(test: Tested) -> str:
    if test.p_value is None:
        return "-"
    return f"{test.p_value:.3f}{'*' if test.rejects else ' '}"


def _remarks(record: Record) -> list[str]:
    """What a reader must know beyond the table: which days, what is missing, whose P&L."""
    own = record.judgement
    name = f"{record.subject.name}, {_method(record)}"
    lines = []
    if own.exception_days:
        lines.append(f"{name}: exceptions on {_listed(own.exception_days)}")
    if own.missing_days:
        what = count(len(own.missing_days), "day")
        lines.append(f"{name}: {what} without forecast or P&L: {_listed(own.missing_days)}")
    if own.carried:
        lines.append(f"{name}: {count(own.carried, 'day')} whose P&L rests in part on older prices or rates")
    if own.exceptions_of["actual"] is not None:
        both = f"{own.exceptions_of['hypothetical']} by hypothetical and {own.exceptions_of['actual']} by actual P&L"
        lines.append(f"{name}: {both}; the count is by {own.counted_from} P&L")
    if not own.days:
        lines.append(f"{name}: no day counts yet: the window is not full, or nothing was measured")
    return lines


def _listed(days: Sequence[date]) -> str:
    more = len(days) - DAYS_SHOWN
    return ", ".join(str(day) for day in days[:DAYS_SHOWN]) + (f" and {more} more" if more > 0 else "")


def _document(site: str, made: Backtest) -> dict[str, Any]:
    sentences = {subject.key: sentence for subject, sentence in made.sentences.items()}
    return {
        "site": site,
        "positions_on": str(made.positions_on) if made.positions_on else None,
        "rejected_below": REJECTED_AT,
        "records": [_record_document(record, sentences.get(record.subject.key)) for record in made.records],
    }


def _record_document(record: Record, sentence: str | None) -> dict[str, Any]:
    own, parameters = record.judgement, record.asked.call.parameters
    t00, t01, t10, t11 = own.transitions
    return {
        "subject": record.subject.key,
        "currency": record.currency,
        "reasons": list(record.asked.reasons),
        "method": parameters["method"],
        "parameters": {key: str(value) if isinstance(value, Decimal) else value for key, value in parameters.items()},
        "first": str(own.first) if own.first else None,
        "last": str(own.last) if own.last else None,
        "days": own.days,
        "exceptions": own.exceptions,
        "expected": own.expected,
        "counted_from": own.counted_from,
        "exceptions_of": own.exceptions_of,
        "exception_days": [str(day) for day in own.exception_days],
        "missing_days": [str(day) for day in own.missing_days],
        "days_on_older_prices": own.carried,
        "zone": own.zone,
        "probability_of_as_many": own.at_least,
        "transitions": {"t00": t00, "t01": t01, "t10": t10, "t11": t11},
        "coverage": _test_document(own.coverage),
        "independence": _test_document(own.independence),
        "conditional_coverage": _test_document(own.conditional_coverage),
        "days_until_first": own.days_until_first,
        "first_failure": _test_document(own.first_failure),
        "shortfall": {
            "z2": own.shortfall.statistic,
            "critical": own.shortfall.critical,
            "p_value": own.shortfall.p_value,
            "degrees_of_freedom": own.shortfall.degrees_of_freedom,
            "reason": own.shortfall.reason,
        },
        "distribution": _test_document(own.distribution),
        "newest_window": sentence,
    }


def _test_document(test: Tested) -> dict[str, Any]:
    return {"statistic": test.statistic, "p_value": test.p_value, "reason": test.reason}
