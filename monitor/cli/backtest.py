"""duskcheck backtest: how the loss model has done."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from datetime import date
from decimal import Decimal
from pathlib import Path
from string import ascii_lowercase
from typing import Any

import click
from pydantic_core import PydanticCustomError
from rich.console import Console
from rich.padding import Padding
from rich.progress import track
from rich.table import Table

from monitor.backtest import Backtest, Record
from monitor.backtest import backtest as run_backtest
from monitor.cli.options import Day, json_option, print_json, site_option
from monitor.limits.defaults import Defaults
from monitor.limits.judgement import REJECTED_AT, Tested
from monitor.limits.parameters import TAIL_METHODS, tail_parameters
from monitor.limits.wording import method_words
from monitor.notices.figures import count
from monitor.reading.fields import probability
from monitor.reading.values import percent_of
from monitor.site import open_site
from monitor.state import open_state
from monitor.tracks import Question
from monitor.words import Subject, WrongUse
from monitor.world import MeasureCall

FIRM = "firm"
DAYS_SHOWN = 12
LEGEND = (
    "over: exceptions, which are losses larger than value at risk, and days without forecast or P&L where the site "
    "counts them; due: as many as a right forecast has on average. recorded: as the evenings told it at the time; "
    "challenger: named in the site file beforehand. zone: the Basel Committee's traffic light, for any number of days, "
    "of which few prove little. Then p-values, * where a test rejects at 5 %: coverage "
    "(Kupiec 1995), order (do exceptions come in clusters: Christoffersen 1998), both together, shortfall (Acerbi and "
    "Szekely 2014, Z2), spread (the whole distribution, by Kolmogorov and Smirnov; indicative only: it "
    "rejects too seldom). -: not to be had, such as without exceptions, or of figures alone."
)
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
    forecasts throughout, on the positions held then. Records nothing.
    """
    if not methods and (window is not None or confidence is not None):
        raise click.UsageError("--window and --confidence go with --method, such as --method historical --window 250")
    if first is not None and last is not None and first > last:
        raise click.UsageError(f"--from {first} lies after --to {last}")
    site = open_site(site_file)
    _check_books(books, site.settings.book_ids())
    defaults = _defaults(site.settings.defaults, window, confidence)
    calls = [_call(defaults, method) for method in methods]
    question = Question(tuple(calls) or None, books or None, positions, todays_positions, first, last)
    with open_state(site) as state:
        made = run_backtest(state, question, _silent if as_json else _bar)
    if as_json:
        print_json(_document(site.settings.site, made))
    else:
        _print(site.settings.site, made)


def _check_books(books: Sequence[str], known: Sequence[str]) -> None:
    for book in books:
        if book not in (*known, FIRM):
            raise WrongUse(f"found the book {book!r}; expected one of {', '.join((*known, FIRM))}")


def _defaults(defaults: Defaults, window: int | None, confidence: str | None) -> Defaults:
    given: dict[str, Any] = {"window": window, "confidence": None}
    if confidence is not None:
        try:
            given["confidence"] = probability("0.5")(percent_of(confidence) or Decimal(confidence))
        except (ArithmeticError, PydanticCustomError):
            expected = "one from 0.5 to below 1, such as 0.99 or 99 %"
            raise WrongUse(f"found the confidence {confidence!r}; expected {expected}") from None
    return defaults.model_copy(update={key: value for key, value in given.items() if value is not None})


def _call(defaults: Defaults, method: str) -> MeasureCall:
    parameters = tail_parameters(method)
    filled = parameters.filled(defaults)
    for _, found, expected in parameters.contradictions(filled):
        raise WrongUse(f"found {found}; expected {expected}")
    return MeasureCall(parameters.name, filled)


def _silent(things: Sequence[Any], _text: str) -> Iterable[Any]:
    return things


def _bar(things: Sequence[Any], text: str) -> Iterable[Any]:
    """With a progress bar for a person who waits."""
    console = Console(stderr=True)
    return track(things, description=text, console=console, transient=True) if console.is_terminal else things


def _print(site: str, made: Backtest) -> None:
    console = Console(highlight=False, markup=False, emoji=False)
    if not made.records:
        console.print("There is no evening with a next session in that span: nothing to hold a forecast against.")
        return
    on = "the positions of each evening" if made.positions_on is None else f"the positions of {made.positions_on}"
    console.print(f"{site}: one-day forecasts on {on}, held against the next session.")
    for subject, records in _by_subject(made.records).items():
        console.print(f"\n{subject.name}, in {records[0].currency}")
        letters = {_letter(at): record for at, record in enumerate(records)}
        for letter, record in letters.items():
            reasons = ", ".join(record.asked.reasons)
            names = Table.grid(padding=(0, 2))
            names.add_row(f"  {letter}", f"{method_words(record.asked.call.parameters)} ({reasons})")
            console.print(names)
        console.print(_table(letters))
        for line in _remarks(letters):
            console.print(Padding(line, (0, 0, 0, 2), expand=False))
        if subject in made.sentences:
            console.print(Padding(f"The newest window: {made.sentences[subject]}", (0, 0, 0, 2), expand=False))
    console.print(f"\n{LEGEND}\n{CAUTION}")


def _letter(at: int) -> str:
    """a to z, then a1, b1, ..."""
    round_, place = divmod(at, len(ascii_lowercase))
    return ascii_lowercase[place] + (str(round_) if round_ else "")


def _by_subject(records: Sequence[Record]) -> dict[Subject, list[Record]]:
    found: dict[Subject, list[Record]] = {}
    for record in records:
        found.setdefault(record.subject, []).append(record)
    return found


def _table(letters: Mapping[str, Record]) -> Table:
    table = Table(box=None, pad_edge=False)
    table.add_column("  ", no_wrap=True)
    for heading in ("days", "over", "due"):
        table.add_column(heading, justify="right", no_wrap=True)
    table.add_column("zone", no_wrap=True)
    for heading in ("coverage", "order", "both", "shortfall", "spread"):
        table.add_column(heading, justify="right", no_wrap=True)
    for letter, record in letters.items():
        own = record.judgement
        table.add_row(
            f"  {letter}",
            str(own.days),
            str(own.exceptions),
            f"{own.expected:.1f}",
            own.zone or "-",
            *(_p(test) for test in (own.coverage, own.independence, own.conditional_coverage)),
            _p(Tested(own.shortfall.statistic, own.shortfall.p_value)),
            _p(own.distribution),
        )
    return table


def _p(test: Tested) -> str:
    if test.p_value is None:
        return "- "
    said = "<0.001" if test.p_value < 0.001 else f"{test.p_value:.3f}"
    return f"{said}{'*' if test.rejects else ' '}"


def _remarks(letters: Mapping[str, Record]) -> Iterator[str]:
    """What a reader must know beyond the table: which days, what is missing, whose P&L."""
    judgements = {letter: record.judgement for letter, record in letters.items()}
    missing = {letter: own.missing_days for letter, own in judgements.items()}
    struck = {
        letter: tuple(day for day in own.exception_days if day not in own.missing_days)
        for letter, own in judgements.items()
    }
    if any(struck.values()):
        yield f"Losses larger than value at risk on {_listed(struck)}."
    if any(missing.values()):
        counted = any(set(own.missing_days) & set(own.exception_days) for own in judgements.values())
        yield f"Without forecast or P&L{', counted as exceptions' if counted else ''}: {_listed(missing)}."
    for reason in dict.fromkeys(reason for record in letters.values() for reason in record.reasons):
        yield f"Missing: {reason}."
    carried = max(own.carried for own in judgements.values())
    if carried:
        yield f"{count(carried, 'day')} with a P&L that rests in part on older prices or rates."
    counts: dict[str, list[str]] = {}
    for letter, own in judgements.items():
        if own.days and None not in own.exceptions_of.values():
            both = f"{own.exceptions_of['hypothetical']} by hypothetical, {own.exceptions_of['actual']} by actual P&L"
            counts.setdefault(f"{both}; counted by {own.counted_from} P&L", []).append(letter)
        if not own.days and not letters[letter].reasons:
            counts.setdefault("no day counts yet: the window is not full, or nothing was measured", []).append(letter)
    for text, own_letters in counts.items():
        yield f"{' '.join(own_letters)}: {text}."


def _listed(days: Mapping[str, Sequence[date]]) -> str:
    """The newest dates with the letters of the methods that they belong to."""
    every = sorted({day for own in days.values() for day in own})
    more = len(every) - DAYS_SHOWN
    told = [f"{day} {''.join(letter for letter, own in days.items() if day in own)}" for day in every[-DAYS_SHOWN:]]
    return (f"{more} earlier days, " if more > 0 else "") + ", ".join(told)


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
        "why_missing": list(record.reasons),
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
