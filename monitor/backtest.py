"""How the loss model has done: what each evening forecast, held against what the next session brought.

The forecasts of methods are made again, evening by evening, from what is known today: one recipe a day, each with that
day's positions. Beside them stands what the evenings themselves recorded, before the outcome was known.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import date
from itertools import pairwise
from typing import Any

import numpy as np

from monitor import evenings, results
from monitor.feed.build import build, calendars_of
from monitor.feed.holdings import actual_pnl
from monitor.feed.known import Known
from monitor.limits.judgement import (
    Forecasts,
    Judgement,
    Trials,
    describe,
    forecast,
    judge,
    quick_forecast,
)
from monitor.limits.subjects import FIRM, members_of
from monitor.limits.trials import Outcome, Series, observe, outcomes, series
from monitor.limits.valuation import Valuation
from monitor.state import State
from monitor.words import FileKind, Recipe, Subject, SubjectKind, WrongUse
from monitor.world import ActualPnl, BookFigures, Floats, MeasureCall, Terms, World

AT_ONCE = 512  # forecasts made together
LOOK_BACK = 10  # sessions of any calendar before the first outcome: a holiday of one must not lose its evening before
DEFAULT, CHALLENGER, RECORDED, NAMED = "default", "challenger", "recorded", "asked for"
Progress = Callable[[Sequence[Any], str], Iterable[Any]]


@dataclass(frozen=True)
class Question:
    """What a backtest is to tell.

    methods: for every subject; None for those that stand behind its figures: the site's default, the rules on its VaR
    and the challenger. books: ids, the firm by `firm`; None for all. first, last: dates of outcomes; None for all.
    """

    methods: tuple[MeasureCall, ...] | None = None
    books: tuple[str, ...] | None = None
    positions: bool = False
    todays_positions: bool = False
    first: date | None = None
    last: date | None = None

    def wants(self, subject: Subject) -> bool:
        return self.books is None or (subject.book or FIRM.key) in self.books

    def within(self, day: date) -> bool:
        return (self.first or day) <= day <= (self.last or day)


@dataclass(frozen=True)
class Asked:
    """A method with everything it is told, and why it is looked at. name: the same for the same method."""

    name: str
    call: MeasureCall
    reasons: tuple[str, ...]

    @property
    def window(self) -> int:
        return int(self.call.parameters["window"])


@dataclass(frozen=True)
class Record:
    """One method for one subject. currency: of its money."""

    subject: Subject
    currency: str
    asked: Asked
    judgement: Judgement


@dataclass(frozen=True)
class Backtest:
    """sentences: by subject, what its newest window looks like. positions_on: None for each day's own positions."""

    records: tuple[Record, ...]
    sentences: Mapping[Subject, str]
    positions_on: date | None


@dataclass
class Track:
    """Forecasts and outcomes of one subject, in time order, as they come in.

    made: by method, a row a day: value at risk, shortfall and transform, NaN where there is none. recent: its newest
    scenarios.
    """

    subject: Subject
    currency: str
    asked: tuple[Asked, ...]
    days: list[date] = field(default_factory=list)
    pnl: list[float] = field(default_factory=list)
    carried: int = 0
    made: dict[str, list[Floats]] = field(default_factory=dict)
    recent: Floats = field(default_factory=lambda: np.empty(0))


@dataclass(frozen=True)
class Trial:
    """One subject on one evening.

    scenarios: as many as are known, oldest first. reasons: by window, why there is no forecast. names: for draws.
    """

    track: Track
    calendar: str
    scenarios: Floats
    reasons: Mapping[int, str | None]
    names: tuple[str, ...]

    def possible(self, window: int) -> bool:
        return len(self.scenarios) >= window and self.reasons[window] is None


def backtest(state: State, question: Question, progress: Progress) -> Backtest:
    """The records of every subject that the question wants. progress: shows how far long work has come.

    Raises WrongUse when nothing was checked yet, or when no positions are known.
    """
    adopted = state.last_adopted()
    if adopted is None:
        raise WrongUse("found a site that was never checked; run `duskcheck check` first: it takes in the drop")
    worlds = Worlds(state, adopted[0], question)
    newest = worlds.on(worlds.days[-1])
    asked = _methods(newest, question)
    if question.todays_positions:
        tracks = _with_todays_positions(worlds, asked, question, progress)
    else:
        tracks = _with_positions_then(worlds, asked, question, progress)
    own = actual_pnl(worlds.known, state.history, date.min, worlds.days[-1])
    records = [record for track in tracks for record in _judged(track, own, worlds.terms)]
    if question.methods is None and not question.todays_positions:
        records += _recorded(state, worlds.terms, question, own)
    order = {track.subject: at for at, track in enumerate(tracks)}
    records.sort(key=lambda record: order.get(record.subject, len(order)))
    return Backtest(tuple(records), _sentences(tracks), worlds.days[-1] if question.todays_positions else None)


class Worlds:
    """The worlds of past evenings, as known today, under the rules and settings in force today."""

    def __init__(self, state: State, rules: str, question: Question) -> None:
        self._state, self._rules = state, rules
        self.terms = state.terms(rules)
        self.windows = _windows(self.terms, question)
        self._head = state.ledger.head().seq
        self.known = Known(state.index(), self._head, date.max)
        positions = [file.day for file in self.known.files(FileKind.POSITIONS) if file.day is not None]
        if not positions:
            raise WrongUse("found no accepted positions; put the positions files into the drop and check an evening")
        self.days = self._sessions(positions[0], positions[-1], question)

    def on(self, day: date, sessions: int | None = None) -> World:
        """The world of an evening, with windows as long as the question needs, or of so many sessions."""
        recipe = Recipe(day, list(self.terms.rounds)[-1], day, day, day, self._rules, self._head)
        longest = sessions or max(self.windows)
        sources = self._state.sources(day)
        return build(
            recipe, replace(sources, terms=lambda rules: replace(sources.terms(rules), longest_window=longest))
        )

    def sessions_known(self, day: date) -> int:
        """How many sessions of any calendar there are since the first close that is known."""
        files = [*self.known.files(FileKind.HISTORY), *self.known.files(FileKind.PRICES)[:1]]
        first = min((panel.days[0] for file in files if (panel := self._state.history.panel(file)).days), default=None)
        if first is None:
            raise WrongUse("found no accepted prices; put the price files into the drop and check an evening")
        since = date.fromordinal(first)
        calendars = [self._state.history.sessions(name, until=day) for name in calendars_of(self.terms.firm)]
        return max(1, *(own.count(since, day) for own in calendars))

    def _sessions(self, first: date, last: date, question: Question) -> list[date]:
        """The dates on which any calendar has a session: those of the question, and the evening before them."""
        calendars = [self._state.history.sessions(name, until=last) for name in calendars_of(self.terms.firm)]
        span = (date.fromordinal(ordinal) for ordinal in range(first.toordinal(), last.toordinal() + 1))
        days = [day for day in span if any(own.open_on(day) for own in calendars)]
        until = [day for day in days if question.last is None or day <= question.last]
        before = [day for day in until if question.first is not None and day < question.first]
        if not until:
            raise WrongUse(f"found no positions on or before {question.last}; expected a date from {first} on")
        return until if question.todays_positions else until[max(len(before) - LOOK_BACK, 0) :]


def _windows(terms: Terms, question: Question) -> tuple[int, ...]:
    calls = question.methods or (
        terms.default_tail,
        *(rule.measure for rule in terms.rules if rule.measure.name == "value_at_risk"),
        *([terms.record.challenger] if terms.record.challenger else []),
    )
    return tuple(sorted({int(call.parameters["window"]) for call in calls}))


def _methods(world: World, question: Question) -> Callable[[Subject], tuple[Asked, ...]]:
    """The methods of each subject. The challenger was named in the site file, before its record was known."""
    if question.methods is not None:
        named = _together((call, NAMED) for call in question.methods)
        return lambda _subject: named
    terms = world.terms
    of_rules: dict[str, list[tuple[MeasureCall, str]]] = {}
    for rule in terms.rules:
        if rule.measure.name == "value_at_risk" and rule.in_force(world.recipe.date):
            for subject in members_of(rule, world).subjects:
                of_rules.setdefault(subject.key, []).append((rule.measure, f"rule {rule.id}"))
    default = [(terms.default_tail, DEFAULT)]
    beside = [(terms.record.challenger, CHALLENGER)] if terms.record.challenger else []
    return lambda subject: _together([*default, *of_rules.get(subject.key, []), *beside])


def _together(calls: Iterable[tuple[MeasureCall, str]]) -> tuple[Asked, ...]:
    """Each method once, for one day: that is what a session can be held against."""
    found: dict[str, Asked] = {}
    for call, reason in calls:
        parameters = dict(call.parameters) | {"horizon_days": 1}
        if "horizon" in parameters:
            parameters["horizon"] = "square_root"
        name = repr(sorted(parameters.items()))
        reasons = found[name].reasons if name in found else ()
        found[name] = Asked(name, MeasureCall(call.name, parameters), (*reasons, reason))
    return tuple(found.values())


def _with_positions_then(
    worlds: Worlds, asked: Callable[[Subject], tuple[Asked, ...]], question: Question, progress: Progress
) -> list[Track]:
    """Evening by evening: what each subject's positions of then forecast, and what they made on its next session."""
    tracks: dict[str, Track] = {}
    waiting: dict[str, Trial] = {}
    ready: list[tuple[Trial, date, Outcome | None]] = []
    for day in progress(worlds.days, "Evenings"):
        world = worlds.on(day)
        valuation = Valuation(world)
        came = outcomes(valuation, question.positions)
        open_today = {name for name, own in world.windows.items() if own.sessions[-1] == np.datetime64(day)}
        for key in [key for key, trial in waiting.items() if trial.calendar in open_today]:
            trial = waiting.pop(key)
            if question.within(day):
                ready.append((trial, day, came.get(key)))
        for part in observe(valuation, worlds.windows, question.positions):
            for at, subject in enumerate(part.subjects) if part.calendar in open_today else ():
                if question.wants(subject):
                    track = tracks.setdefault(subject.key, Track(subject, part.currency, asked(subject)))
                    track.recent = part.pnl[at, part.pnl.shape[1] - int(part.sessions[at]) :]
                    reasons = {window: own[at] for window, own in part.reasons.items()}
                    names = (worlds.terms.firm.site, str(day), subject.key)
                    waiting[subject.key] = Trial(track, part.calendar, track.recent, reasons, names)
        if len(ready) >= AT_ONCE:
            _enter(ready)
            ready.clear()
    _enter(ready)
    return list(tracks.values())


def _enter(ready: Sequence[tuple[Trial, date, Outcome | None]]) -> None:
    """Write trials and their outcomes into the tracks, the forecasts of each method worked out together."""
    methods: dict[str, tuple[Asked, list[tuple[Trial, float]]]] = {}
    for trial, day, outcome in ready:
        pnl = np.nan if outcome is None or outcome.pnl is None else outcome.pnl
        trial.track.days.append(day)
        trial.track.pnl.append(pnl)
        trial.track.carried += outcome is not None and outcome.carried
        for own in trial.track.asked:
            methods.setdefault(own.name, (own, []))[1].append((trial, pnl))
    for name, (own, trials) in methods.items():
        made = np.full((len(trials), 3), np.nan)
        able = [at for at, (trial, _) in enumerate(trials) if trial.possible(own.window)]
        if able:
            rows = np.array([trials[at][0].scenarios[-own.window :] for at in able])
            came = np.array([trials[at][1] for at in able])
            made[able] = _columns(forecast(own.call, rows, came, [trials[at][0].names for at in able]))
        for (trial, _), row in zip(trials, made, strict=True):
            trial.track.made.setdefault(name, []).append(row)


def _columns(made: Forecasts) -> Floats:
    places = np.full(len(made.value_at_risk), np.nan) if made.transform is None else made.transform
    return np.stack([made.value_at_risk, made.expected_shortfall, places], axis=1)


def _with_todays_positions(
    worlds: Worlds, asked: Callable[[Subject], tuple[Asked, ...]], question: Question, progress: Progress
) -> list[Track]:
    """What the newest positions would have forecast on each session of the past, and made on the next."""
    day = worlds.days[-1]
    world = worlds.on(day, worlds.sessions_known(day))
    tracks = []
    for part in series(Valuation(world), worlds.windows, question.positions):
        sessions = [own.item() for own in world.windows[part.calendar].sessions[1:]]
        wanted = [at for at, subject in enumerate(part.subjects) if question.wants(subject)]
        kept = [at for at in range(1, len(sessions)) if question.within(sessions[at])]
        methods: dict[str, tuple[Asked, list[int]]] = {}
        for at in wanted:
            for own in asked(part.subjects[at]):
                methods.setdefault(own.name, (own, []))[1].append(at)
        made = {
            name: dict(zip(rows, _over_all(own, part, rows, worlds.terms, sessions, progress), strict=True))
            for name, (own, rows) in methods.items()
        }
        for at in wanted:
            subject = part.subjects[at]
            track = Track(subject, part.currency, asked(subject), recent=part.pnl[at])
            track.days = [sessions[place] for place in kept]
            track.pnl = [float(part.pnl[at, place]) for place in kept]
            track.made = {own.name: [made[own.name][at][place - 1] for place in kept] for own in track.asked}
            tracks.append(track)
    return tracks


def _over_all(
    own: Asked, part: Series, rows: Sequence[int], terms: Terms, sessions: Sequence[date], progress: Progress
) -> Iterator[Floats]:
    """For each of some subjects the forecasts made on every session, (sessions, 3): NaN where none can be made."""
    pnl = part.pnl[list(rows)]
    window, known = own.window, part.fit[own.window]
    quick = quick_forecast(own.call, pnl)
    text = f"{own.call.parameters['method']}, {window} sessions"
    for place, at in enumerate(progress(rows, text) if len(rows) > 1 else rows):
        made = np.full((pnl.shape[1], 3), np.nan)
        ends = np.flatnonzero(known[at, :-1])
        blocks = [ends[start : start + AT_ONCE] for start in range(0, len(ends), AT_ONCE)]
        for block in progress(blocks, text) if len(rows) == 1 and quick is None else blocks:
            windows = np.lib.stride_tricks.sliding_window_view(pnl[place], window)[block - window + 1]
            came = pnl[place, block + 1]
            if quick is None:
                names = [(terms.firm.site, str(sessions[end]), part.subjects[at].key) for end in block.tolist()]
                made[block] = _columns(forecast(own.call, windows, came, names))
            else:
                made[block] = _columns(quick.of(place, block, windows, came))
        yield made


def _judged(track: Track, own: Mapping[tuple[str, date], ActualPnl], terms: Terms) -> Iterator[Record]:
    for asked in track.asked:
        columns = np.array(track.made.get(asked.name, [])).reshape(-1, 3)
        yield _record(track.subject, track.currency, asked, _trials(track, columns, own), terms)


def _trials(track: Track, columns: Floats, own: Mapping[tuple[str, date], ActualPnl]) -> Trials:
    places = columns[:, 2]
    known = bool(np.isfinite(places).any())
    forecasts = Forecasts(columns[:, 0], columns[:, 1], places if known else None)
    actual = np.array([_own_pnl(track.subject, day, own) for day in track.days])
    return Trials(tuple(track.days), forecasts, np.array(track.pnl), actual, track.carried)


def _own_pnl(subject: Subject, day: date, own: Mapping[tuple[str, date], ActualPnl]) -> float:
    """What a book says it made, before fees and commissions (MAR32.5 leaves them out); NaN where it does not say."""
    found = own.get((subject.book, day)) if subject.kind is SubjectKind.BOOK and subject.book else None
    return np.nan if found is None else found.actual + (found.fees or 0.0)


def _record(subject: Subject, currency: str, asked: Asked, trials: Trials, terms: Terms) -> Record:
    judgement = judge(trials, asked.call, terms.record, terms.firm.site)
    return Record(subject, currency, asked, judgement)


def _recorded(
    state: State, terms: Terms, question: Question, own: Mapping[tuple[str, date], ActualPnl]
) -> Iterator[Record]:
    """What the evenings forecast as they were recorded: of each the newest edition before the next one was checked."""
    told: dict[Subject, dict[date, list[tuple[int, BookFigures]]]] = {}
    for evening in evenings.all_editions(state.index()):
        for figures in results.decode(state.archive.get(evening.results)).books:
            if question.wants(figures.subject):
                told.setdefault(figures.subject, {}).setdefault(evening.recipe.date, []).append((evening.seq, figures))
    asked = _together([(terms.default_tail, RECORDED)])[0]
    for subject, evenings_of in told.items():
        days = sorted(evenings_of)
        track = Track(subject, evenings_of[days[0]][0][1].currency, (asked,))
        rows = []
        for before, day in pairwise(days):
            if question.within(day):
                first = min(seq for seq, _ in evenings_of[day])
                in_time = [figures for seq, figures in evenings_of[before] if seq < first]
                track.days.append(day)
                track.pnl.append(_number(evenings_of[day][-1][1].pnl))
                rows.append(_told_in_time(in_time))
        yield _record(subject, track.currency, asked, _trials(track, np.array(rows).reshape(-1, 3), own), terms)


def _told_in_time(editions: Sequence[BookFigures]) -> tuple[float, float, float]:
    """Value at risk and shortfall of the newest of some editions, as `Track.made` has them."""
    if not editions:
        return np.nan, np.nan, np.nan
    return _number(editions[-1].value_at_risk), _number(editions[-1].expected_shortfall), np.nan


def _number(value: float | None) -> float:
    return np.nan if value is None else value


def _sentences(tracks: Iterable[Track]) -> dict[Subject, str]:
    """On the newest window of each subject, as far as it is full."""
    found = {}
    for track in tracks:
        window = max(own.window for own in track.asked)
        if len(track.recent) >= window:
            found[track.subject] = describe(track.recent[np.newaxis, -window:])[0]
    return found
