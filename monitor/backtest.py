"""How the loss model has done: what each evening forecast, held against what the next session brought.

Beside the forecasts made again, method by method, stands what the evenings themselves recorded before the outcome was
known.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from datetime import date
from itertools import pairwise

import numpy as np

from monitor import evenings, results
from monitor.feed.holdings import actual_pnl
from monitor.limits.judgement import HYPOTHETICAL, Forecasts, Judgement, Trials, describe, judge
from monitor.limits.subjects import FIRM, book_subject
from monitor.state import State
from monitor.tracks import Asked, Progress, Question, Track, Worlds, make_tracks, together
from monitor.words import Subject, SubjectKind, WrongUse
from monitor.world import ActualPnl, BookFigures, How, MeasureCall, Terms

RECORDED = "recorded"
OwnPnl = Mapping[tuple[str, date], ActualPnl]


@dataclass(frozen=True)
class Record:
    """One method for one subject. currency: of its money. reasons: why days are missing, or why none counts."""

    subject: Subject
    currency: str
    asked: Asked
    judgement: Judgement
    reasons: tuple[str, ...]


@dataclass(frozen=True)
class Backtest:
    """sentences: by subject, what its newest window looks like. positions_on: None for each day's own positions."""

    records: tuple[Record, ...]
    sentences: Mapping[Subject, str]
    positions_on: date | None


def backtest(state: State, question: Question, progress: Progress) -> Backtest:
    """The records of every subject that the question wants. progress: shows how far long work has come.

    The books' own P&L is of the positions of then, so that it says nothing of today's. Raises WrongUse when nothing was
    checked yet, or when no positions are known.
    """
    adopted = state.last_adopted()
    if adopted is None:
        raise WrongUse("found a site that was never checked; run `duskcheck check` first: it takes in the drop")
    worlds = Worlds(state, adopted[0], question)
    terms = worlds.terms
    tracks = make_tracks(worlds, question, progress)
    own: OwnPnl = {}
    if question.todays_positions:
        terms = replace(terms, record=replace(terms.record, pnl=HYPOTHETICAL))
    else:
        own = actual_pnl(worlds.known, state.history, date.min, worlds.newest)
    order = {track.subject: at for at, track in enumerate(tracks)}
    if question.methods is None and not question.todays_positions:
        tracks += _recorded(state, terms, question)
    records = [record for track in tracks for record in _judged(track, question, own, terms)]
    records.sort(key=lambda record: order.get(record.subject, len(order)))
    told = {record.subject for record in records}
    sentences = _sentences(track for track in tracks if track.subject in told)
    return Backtest(tuple(records), sentences, worlds.newest if question.todays_positions else None)


def _judged(track: Track, question: Question, own: OwnPnl, terms: Terms) -> Iterator[Record]:
    """The record of each method; none for a subject without a session in the span asked for."""
    asked = np.array([question.within(day) for day in track.days], dtype=np.bool_)
    actual = np.array([_own_pnl(track.subject, day, own) for day in track.days])
    for method in track.asked if asked.any() else ():
        value_at_risk, shortfall, places, tried = np.array(track.made[method.name]).T
        known = places if np.isfinite(places).any() else None
        forecasts = Forecasts(value_at_risk, shortfall, known, tried > 0)
        trials = Trials(tuple(track.days), forecasts, np.array(track.pnl), actual, np.array(track.carried), asked)
        judgement = judge(trials, method.call, terms.record, terms.firm.site)
        lacks = track.lacks.get(method.name, {})
        why = {day: track.reasons.get(day) or lacks.get(day) for day in judgement.missing_days}
        missing = [reason or f"no P&L of {day} is known" for day, reason in why.items()]
        reasons = [track.lack] if track.lack else missing
        yield Record(track.subject, track.currency, method, judgement, tuple(dict.fromkeys(reasons)))


def _own_pnl(subject: Subject, day: date, own: OwnPnl) -> float:
    """What a book says it made, before fees and commissions (MAR32.5 leaves them out); NaN where it does not say."""
    found = own.get((subject.book, day)) if subject.kind is SubjectKind.BOOK and subject.book else None
    return np.nan if found is None else found.actual + (found.fees or 0.0)


def _recorded(state: State, terms: Terms, question: Question) -> list[Track]:
    """What the evenings forecast as they were recorded, of the books of today; one track for each way it was measured.

    Of a session the newest edition counts that was recorded before the next session was first checked.
    """
    calendars = {book_subject(book.id): book.calendar for book in terms.firm.books} | {FIRM: terms.firm.calendar}
    told: dict[Subject, dict[date, list[tuple[int, BookFigures]]]] = {}
    for evening in evenings.all_editions(state.index()):
        for figures in results.decode(state.archive.get(evening.results)).books:
            if figures.subject in calendars and question.wants(figures.subject):
                told.setdefault(figures.subject, {}).setdefault(evening.recipe.date, []).append((evening.seq, figures))
    tracks = []
    for subject, editions in told.items():
        first, last = min(editions), max(editions)
        known = state.history.sessions(calendars[subject], until=last).up_to(last)
        sessions = [day.item() for day in known[known >= np.datetime64(first)]]
        tracks += _recorded_of(subject, editions, sessions, terms)
    return tracks


def _recorded_of(
    subject: Subject,
    editions: Mapping[date, list[tuple[int, BookFigures]]],
    sessions: Iterable[date],
    terms: Terms,
) -> list[Track]:
    """A session that was not checked, or only after the next one, has no forecast; one not checked has no outcome."""
    tracks: dict[tuple[str, How], Track] = {}
    track = None
    for before, day in pairwise(sessions):
        outcomes = editions.get(day, [])
        in_time = [own for seq, own in editions.get(before, []) if not outcomes or seq < outcomes[0][0]]
        told = in_time[-1] if in_time else None
        if told is not None:
            track = tracks.setdefault(
                (told.currency, told.how), Track(subject, told.currency, (_as_recorded(told.how, terms),))
            )
        if track is not None:
            outcome = outcomes[-1][1] if outcomes else None
            pnl = outcome.pnl if outcome else None
            track.enter(day, pnl, carried=False, reason=_why_missing(before, day, told, outcome))
            figures = (told.value_at_risk, told.expected_shortfall) if told else (None, None)
            row = np.array([np.nan if value is None else value for value in (*figures, None, 1.0)])
            track.made.setdefault(track.asked[0].name, []).append(row)
    return list(tracks.values())


def _as_recorded(how: How, terms: Terms) -> Asked:
    """The default measure as it was told then."""
    then = {"method": how.method, "confidence": how.confidence, "window": how.window, "horizon_days": how.horizon_days}
    default = terms.default_tail
    return together([(MeasureCall(default.name, dict(default.parameters) | then), RECORDED)])[0]


def _why_missing(before: date, day: date, told: BookFigures | None, outcome: BookFigures | None) -> str | None:
    """Why an evening gave no forecast for the next, or the next no outcome."""
    if outcome is None:
        return f"{day} was not checked"
    if told is None:
        return f"{before} was not checked before {day} was"
    without = [own for own, value in ((told, told.value_at_risk), (outcome, outcome.pnl)) if value is None]
    return next((reason for own in without for reason in own.reasons), None)


def _sentences(tracks: Iterable[Track]) -> dict[Subject, str]:
    """On the newest window of each subject, as far as it is full."""
    found = {}
    for track in tracks:
        window = max(own.window for own in track.asked)
        if len(track.recent) >= window:
            found[track.subject] = describe(track.recent[np.newaxis, -window:])[0]
    return found
