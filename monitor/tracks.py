"""Forecasts made again, evening by evening or session by session, beside what the next session brought.

Everything rests on what is known today, under the rules and settings in force today: one recipe an evening with the
positions of then, or one with the newest positions over the whole past.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import date
from typing import Any

import numpy as np

from monitor.feed.build import build, calendars_of
from monitor.feed.known import Known
from monitor.limits.judgement import Forecasts, forecast, quick_forecast
from monitor.limits.subjects import FIRM, members_of
from monitor.limits.trials import Outcome, Series, observe, outcomes, series
from monitor.limits.valuation import Valuation
from monitor.state import State
from monitor.words import FileKind, Recipe, Subject, SubjectKind, WrongUse
from monitor.world import Floats, MeasureCall, Terms, World

AT_ONCE = 512  # forecasts made together
LOOK_BACK = 10  # sessions of any calendar before the first outcome: a holiday of one must not lose its evening before
NOT_TRIED = (np.nan, np.nan, np.nan, 0.0)  # a row of `Track.made`
UNKNOWN = Outcome(None, None, carried=False)
DEFAULT, CHALLENGER, NAMED = "default", "challenger", "asked for"
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


@dataclass
class Track:
    """Forecasts and outcomes of one subject, in time order, as they come in.

    days: of outcomes, also some before those that the question asks about. pnl: NaN where not known. carried: whether
    it rests in part on an older price or rate. made: by method, a row a day: value at risk, shortfall and transform,
    NaN where there is none, and whether the method was asked at all. lacks: by method and day, why it then had no
    figure. reasons: by day, why outcome or forecast is not known. lack: why there is no forecast at
    all. recent: its newest scenarios.
    """

    subject: Subject
    currency: str
    asked: tuple[Asked, ...]
    days: list[date] = field(default_factory=list)
    pnl: list[float] = field(default_factory=list)
    carried: list[bool] = field(default_factory=list)
    made: dict[str, list[Floats]] = field(default_factory=dict)
    lacks: dict[str, dict[date, str]] = field(default_factory=dict)
    reasons: dict[date, str] = field(default_factory=dict)
    lack: str | None = None
    recent: Floats = field(default_factory=lambda: np.empty(0))

    def enter(self, day: date, pnl: float | None, carried: bool, reason: str | None) -> None:
        self.days.append(day)
        self.pnl.append(np.nan if pnl is None else pnl)
        self.carried.append(carried)
        if reason:
            self.reasons[day] = reason


@dataclass(frozen=True)
class Trial:
    """One subject on one evening, which waits for its next session.

    scenarios: as many as are known, oldest first. reasons: by window, why there is no forecast. names: for draws.
    """

    track: Track
    calendar: str
    scenarios: Floats
    reasons: Mapping[int, str | None]
    names: tuple[str, ...]

    @property
    def reason(self) -> str | None:
        """That of the longest window without a forecast."""
        return next((own for _, own in sorted(self.reasons.items(), reverse=True) if own), None)

    def possible(self, window: int) -> bool:
        return len(self.scenarios) >= window and self.reasons[window] is None


class Worlds:
    """The worlds of past evenings, as known today, under the rules and settings in force today."""

    def __init__(self, state: State, rules: str, question: Question) -> None:
        self._state, self._rules = state, rules
        self.terms = state.terms(rules)
        self.windows = _windows(self.terms, question)
        self._head = state.ledger.head().seq
        self.known = Known(state.index(), self._head, date.max)
        self.days = self._days()

    @property
    def newest(self) -> date:
        return self.days[-1]

    def on(self, day: date, sessions: int | None = None) -> World:
        """The world of an evening, with windows as long as the question needs, or of so many sessions."""
        recipe = Recipe(day, list(self.terms.rounds)[-1], day, day, day, self._rules, self._head)
        longest = sessions or max(self.windows)
        sources = self._state.sources(day)
        return build(
            recipe, replace(sources, terms=lambda rules: replace(sources.terms(rules), longest_window=longest))
        )

    def sessions_known(self) -> int:
        """How many sessions of any calendar there are since the first close that is known."""
        files = [*self.known.files(FileKind.HISTORY), *self.known.files(FileKind.PRICES)[:1]]
        first = min((panel.days[0] for file in files if (panel := self._state.history.panel(file)).days), default=None)
        if first is None:
            raise WrongUse("found no accepted prices; put the price files into the drop and check an evening")
        since = date.fromordinal(first)
        calendars = [self._state.history.sessions(name, until=self.newest) for name in calendars_of(self.terms.firm)]
        return max(1, *(own.count(since, self.newest) for own in calendars))

    def evenings(self, question: Question) -> list[date]:
        """Those that bring the outcomes asked for, and enough before them for every forecast of these."""
        until = [day for day in self.days if question.last is None or day <= question.last]
        before = [day for day in until if question.first is not None and day < question.first]
        return until[max(len(before) - LOOK_BACK, 0) :]

    def _days(self) -> list[date]:
        """The dates from the first positions to the newest on which any calendar has a session."""
        given = [file.day for file in self.known.files(FileKind.POSITIONS) if file.day is not None]
        first, last = (given[0], given[-1]) if given else (date.max, date.min)
        calendars = [self._state.history.sessions(name, until=last) for name in calendars_of(self.terms.firm)]
        span = map(date.fromordinal, range(first.toordinal(), last.toordinal() + 1))
        days = [day for day in span if any(own.open_on(day) for own in calendars)]
        if not days:
            raise WrongUse("found no accepted positions; put the positions files into the drop and check an evening")
        return days


def make_tracks(worlds: Worlds, question: Question, progress: Progress) -> list[Track]:
    """The tracks of all subjects that the question wants. progress: shows how far long work has come."""
    if question.todays_positions:
        return _with_todays_positions(worlds, question, progress)
    return _with_positions_then(worlds, question, progress)


def together(calls: Iterable[tuple[MeasureCall, str]]) -> tuple[Asked, ...]:
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


def _windows(terms: Terms, question: Question) -> tuple[int, ...]:
    calls = question.methods or (
        terms.default_tail,
        *(rule.measure for rule in terms.rules if rule.measure.name == "value_at_risk"),
        *([terms.record.challenger] if terms.record.challenger else []),
    )
    return tuple(sorted({int(call.parameters["window"]) for call in calls}))


def _methods(world: World, today: date, question: Question) -> Callable[[Subject], tuple[Asked, ...]]:
    """The methods of each subject of a world, by the rules in force today.

    The challenger was named in the site file, before its record was known.
    """
    if question.methods is not None:
        named = together((call, NAMED) for call in question.methods)
        return lambda _subject: named
    terms = world.terms
    of_rules: dict[str, list[tuple[MeasureCall, str]]] = {}
    for rule in terms.rules:
        if rule.measure.name == "value_at_risk" and rule.in_force(today):
            for subject in members_of(rule, world).subjects:
                of_rules.setdefault(subject.key, []).append((rule.measure, f"rule {rule.id}"))
    default = [(terms.default_tail, DEFAULT)]
    beside = [(terms.record.challenger, CHALLENGER)] if terms.record.challenger else []
    return lambda subject: together([*default, *of_rules.get(subject.key, []), *beside])


def _with_positions_then(worlds: Worlds, question: Question, progress: Progress) -> list[Track]:
    """Evening by evening: what each subject's positions of then forecast, and what they made on its next session."""
    tracks: dict[str, Track] = {}
    waiting: dict[str, Trial] = {}
    ready: list[tuple[Trial, date, float]] = []
    for day in progress(worlds.evenings(question), "Evenings"):
        world = worlds.on(day)
        valuation = Valuation(world)
        open_today = {name for name, own in world.windows.items() if own.sessions[-1] == np.datetime64(day)}
        came = outcomes(valuation, question.positions)
        for key in [key for key, trial in waiting.items() if trial.calendar in open_today]:
            trial = waiting.pop(key)
            outcome = came.get(key, UNKNOWN)
            trial.track.enter(day, outcome.pnl, outcome.carried, trial.reason or outcome.reason)
            ready.append((trial, day, trial.track.pnl[-1]))
            not_known = _why_not_known(trial.track.subject, world)
            if not_known:
                waiting[key] = replace(trial, reasons=dict.fromkeys(worlds.windows, not_known))
        for trial in _trials(valuation, open_today, tracks, worlds, question):
            waiting[trial.track.subject.key] = trial
        if len(ready) >= AT_ONCE:
            _forecast(ready)
            ready.clear()
    _forecast(ready)
    return list(tracks.values())


def _why_not_known(subject: Subject, world: World) -> str | None:
    """Why it is not known whether a position, held on the evening before, is held tonight; None where it is known."""
    return world.holdings.missing.get(subject.book or "") if subject.kind is SubjectKind.POSITION else None


def _trials(
    valuation: Valuation, open_today: Collection[str], tracks: dict[str, Track], worlds: Worlds, question: Question
) -> Iterator[Trial]:
    """Each wanted subject that has a session tonight; one that is seen for the first time begins a track."""
    world = valuation.world
    methods = None
    for part in observe(valuation, worlds.windows, question.positions):
        for at, subject in enumerate(part.subjects) if part.calendar in open_today else ():
            if not question.wants(subject):
                continue
            if subject.key not in tracks:
                methods = methods or _methods(world, worlds.newest, question)
                tracks[subject.key] = Track(subject, part.currency, methods(subject))
            track = tracks[subject.key]
            track.recent = part.pnl[at, part.pnl.shape[1] - int(part.sessions[at]) :]
            yield Trial(
                track=track,
                calendar=part.calendar,
                scenarios=track.recent,
                reasons={window: own[at] for window, own in part.reasons.items()},
                names=(world.terms.firm.site, str(world.recipe.date), subject.key),
            )


def _forecast(ready: Iterable[tuple[Trial, date, float]]) -> None:
    """Write what was forecast of trials, in time order with their outcomes, into the tracks: a method at a time."""
    methods: dict[str, tuple[Asked, list[tuple[Trial, date, float]]]] = {}
    for trial, day, pnl in ready:
        for own in trial.track.asked:
            methods.setdefault(own.name, (own, []))[1].append((trial, day, pnl))
    for name, (own, trials) in methods.items():
        made = np.tile(NOT_TRIED, (len(trials), 1))
        able = [at for at, (trial, _, _) in enumerate(trials) if trial.possible(own.window)]
        if able:
            rows = np.array([trials[at][0].scenarios[-own.window :] for at in able])
            came = np.array([trials[at][2] for at in able])
            found = forecast(own.call, rows, came, [trials[at][0].names for at in able])
            made[able] = _columns(found)
            for at, reason in found.why.items():
                trial, day, _ = trials[able[at]]
                trial.track.lacks.setdefault(name, {})[day] = reason
        for (trial, _, _), row in zip(trials, made, strict=True):
            trial.track.made.setdefault(name, []).append(row)


def _columns(made: Forecasts) -> Floats:
    places = np.full(len(made.value_at_risk), np.nan) if made.transform is None else made.transform
    return np.stack([made.value_at_risk, made.expected_shortfall, places, made.tried], axis=1)


def _with_todays_positions(worlds: Worlds, question: Question, progress: Progress) -> list[Track]:
    """What the newest positions would have forecast on each session of the past, and made on the next."""
    world = worlds.on(worlds.newest, worlds.sessions_known())
    asked = _methods(world, worlds.newest, question)
    tracks = []
    for part in series(Valuation(world), worlds.windows, question.positions):
        sessions = [own.item() for own in world.windows[part.calendar].sessions[1:]]
        wanted = [at for at, subject in enumerate(part.subjects) if question.wants(subject)]
        methods: dict[str, tuple[Asked, list[int]]] = {}
        for at in wanted:
            for own in asked(part.subjects[at]):
                methods.setdefault(own.name, (own, []))[1].append(at)
        lacks: dict[int, dict[str, dict[date, str]]] = {at: {} for at in wanted}
        made = {
            name: dict(zip(rows, _over_all(own, part, rows, worlds.terms, sessions, lacks, progress), strict=True))
            for name, (own, rows) in methods.items()
        }
        tracks += [
            Track(
                subject=part.subjects[at],
                currency=part.currency,
                asked=asked(part.subjects[at]),
                days=sessions[1:],
                pnl=part.pnl[at, 1:].tolist(),
                carried=part.carried[at, 1:].tolist(),
                made={own.name: list(made[own.name][at][:-1]) for own in asked(part.subjects[at])},
                lacks=lacks[at],
                lack=part.reasons[at],
                recent=part.pnl[at, len(sessions) - int(part.sessions[at]) :],
            )
            for at in wanted
        ]
    return tracks


def _over_all(
    own: Asked,
    part: Series,
    rows: Sequence[int],
    terms: Terms,
    sessions: Sequence[date],
    lacks: Mapping[int, dict[str, dict[date, str]]],
    progress: Progress,
) -> Iterator[Floats]:
    """For each of some subjects the forecasts made on every session, (sessions, 4), as in `Track.made`.

    lacks: by subject, to be filled as `Track.lacks`.
    """
    pnl = part.pnl[list(rows)]
    window, known = own.window, part.fit[own.window]
    quick = quick_forecast(own.call, pnl)
    text = f"{own.call.parameters['method']}, {window} sessions"
    for place, at in enumerate(progress(rows, text) if len(rows) > 1 else rows):
        made = np.tile(NOT_TRIED, (pnl.shape[1], 1))
        ends = np.flatnonzero(known[at, :-1])
        blocks = [ends[start : start + AT_ONCE] for start in range(0, len(ends), AT_ONCE)]
        for block in progress(blocks, text) if len(rows) == 1 and quick is None else blocks:
            windows = np.lib.stride_tricks.sliding_window_view(pnl[place], window)[block - window + 1]
            came = pnl[place, block + 1]
            if quick is None:
                names = [(terms.firm.site, str(sessions[end]), part.subjects[at].key) for end in block.tolist()]
                found = forecast(own.call, windows, came, names)
            else:
                found = quick.of(place, block, windows, came)
            made[block] = _columns(found)
            days = {sessions[int(block[row]) + 1]: reason for row, reason in found.why.items()}
            lacks[at].setdefault(own.name, {}).update(days)
        yield made
