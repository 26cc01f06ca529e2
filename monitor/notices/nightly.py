"""The nightly note, which goes out whatever the evening came to, and the notice that an evening is incomplete."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

from monitor.excesses.register import Excess
from monitor.facts import FileRefused
from monitor.notices import figures
from monitor.notices.excess_words import EXCESS_COLUMNS, answer_data, excess_data, excess_row, past_limit
from monitor.notices.message import Notice, Topic, one_line
from monitor.notices.news import EveningNews, evening_data, record, when
from monitor.notices.story import LISTED, Section, Story, Tone, render, table
from monitor.words import ExcessState, FileKind, Outcome, Standing
from monitor.world import Answer, BookFigures, Standings

_NAMED_OF_A_CAUSE = 8
_FINDINGS_OF_A_FILE = 5
NOT_WITHIN = (
    "What is named below was not measured, or was measured without a file that was refused. Do not read it as "
    "within. When the data is put right, deliver it and check the evening again; a new edition replaces this."
)
NO_LIMIT_RESTS_ON_IT = (
    "What a book says it made was refused. The evening is complete, for no limit rests on it; the backtest does. "
    "When the file is put right, deliver it again."
)


def nightly_note(news: EveningNews) -> Notice:
    standings, date = news.standings, figures.day(news.recipe.date)
    counts = standings.counts()
    story = Story(
        {Outcome.OVER: Tone.OVER, Outcome.INCOMPLETE: Tone.DOUBT}.get(standings.outcome, Tone.CALM),
        f"{_verdict(news)}: {news.site}, evening of {date}, round {news.recipe.round}{_worst(news)}.",
        (*_older(news), _checked(news), *_compared(counts, news.before)),
        (
            *_of_standing(news, Standing.OVER),
            *_of_standing(news, Standing.NEAR),
            *_changes(news),
            *_alive(news),
            *cause_sections(news),
            *_doubts(standings.answers),
            *_uncovered(standings),
            *_books(standings.books),
            Section("The evening", when(news)),
        ),
        record(news.seq, news.hash, news.page),
    )
    text, html = render(story)
    return Notice(
        Topic.NIGHTLY_NOTE,
        "nightly",
        one_line(f"{news.site} {date} ({news.recipe.round}): {_short(news)}"),
        (news.nightly,),
        text,
        html,
        _nightly_data(news),
    )


def incomplete_notice(news: EveningNews) -> list[Notice]:
    """One notice for an evening that could not be completed, each cause once; none when nothing is amiss."""
    sections = cause_sections(news)
    if not sections:
        return []
    standings, date = news.standings, figures.day(news.recipe.date)
    what = _amiss(news)
    harmless = len(sections) == 1 and bool(news.refused) and all(own.file is FileKind.PNL for own in news.refused)
    word = "FILE REFUSED" if harmless else "INCOMPLETE"
    story = Story(
        Tone.DOUBT,
        f"{word}: {news.site}, evening of {date}, round {news.recipe.round}: {what}.",
        (NO_LIMIT_RESTS_ON_IT if harmless else NOT_WITHIN,),
        (*sections, Section("The evening", when(news))),
        record(news.seq, news.hash, news.page),
    )
    text, html = render(story)
    title = one_line(f"{word}: {news.site} {date} ({news.recipe.round}), {what}")
    data = {
        **evening_data(news),
        "lacking": list(standings.lacking),
        "unmeasured": [{"reason": why, "subjects": names} for why, names in unmeasured_by_reason(standings).items()],
        "refused": [{"file": f.name, "reasons": f.reasons, "findings": _findings(f)} for f in news.refused],
    }
    return [Notice(Topic.INCOMPLETE, "incomplete", title, (news.nightly,), text, html, data)]


def unmeasured_by_reason(standings: Standings) -> dict[str, list[str]]:
    """Reason -> what it kept from being measured: positions and books, and rules for a subject."""
    causes: dict[str, list[str]] = {}
    for item in standings.unmeasured:
        causes.setdefault(item.reason, []).append(item.subject.name)
    for answer in standings.answers:
        if answer.standing is Standing.UNMEASURED:
            causes.setdefault(answer.reason or "no reason given", []).append(f"{answer.rule} of {answer.subject.name}")
    return {reason: list(dict.fromkeys(names)) for reason, names in causes.items()}


def worst_first(answers: Iterable[Answer]) -> list[Answer]:
    """By utilisation, highest first; those that have none come after, by rule and subject."""
    return sorted(
        answers,
        key=lambda a: (a.utilisation is None, -(a.utilisation or 0.0), a.rule, a.subject.key),
    )


def cause_sections(news: EveningNews) -> tuple[Section, ...]:
    standings = news.standings
    sections = []
    if standings.lacking:
        sections.append(Section("Lacking", lines=standings.lacking))
    if news.refused:
        sections.append(Section("Files refused", lines=tuple(_refused_lines(news.refused))))
    if causes := unmeasured_by_reason(standings):
        sections.append(Section("Not measured", lines=tuple(_cause(why, names) for why, names in causes.items())))
    return tuple(sections)


def _cause(reason: str, names: list[str]) -> str:
    named = ", ".join(names[:_NAMED_OF_A_CAUSE])
    more = f" and {len(names) - _NAMED_OF_A_CAUSE:,} more" if len(names) > _NAMED_OF_A_CAUSE else ""
    return f"{reason}: {named}{more}"


def _refused_lines(refused: Iterable[FileRefused]) -> Iterable[str]:
    for file in refused:
        yield f"{file.name}: refused as a whole for {figures.count(file.reasons, 'reason')}; nothing of it was used"
        yield from _findings(file)


def _findings(file: FileRefused) -> list[str]:
    lines = [str(finding) for finding in file.findings[:_FINDINGS_OF_A_FILE]]
    left = file.reasons - len(lines)
    return [*lines, f"{file.name}: {figures.count(left, 'further reason')}"] if left > 0 else lines


def _amiss(news: EveningNews) -> str:
    causes = unmeasured_by_reason(news.standings)
    unmeasured = sum(len(names) for names in causes.values())
    lacking = len(news.standings.lacking)
    parts = [
        f"{figures.count(lacking, 'item')} lacking" if lacking else "",
        figures.count(len(news.refused), "file") + " refused" if news.refused else "",
        f"{unmeasured:,} not measured ({figures.count(len(causes), 'cause')})" if causes else "",
    ]
    return ", ".join(part for part in parts if part)


def _verdict(news: EveningNews) -> str:
    counts = news.standings.counts()
    over, near = counts[Standing.OVER], counts[Standing.NEAR]
    if news.standings.outcome is Outcome.INCOMPLETE:
        return f"INCOMPLETE, and {over:,} OVER" if over else "INCOMPLETE"
    if not news.standings.answers:
        return "NOTHING CHECKED"
    if over:
        return f"{over:,} OVER"
    return f"NOTHING OVER, {near:,} near" if near else "ALL WITHIN"


def _worst(news: EveningNews) -> str:
    over = worst_first(a for a in news.standings.answers if a.standing is Standing.OVER)
    if not over:
        return ""
    first = "; " if len(over) == 1 else "; the worst is "
    return f"{first}{over[0].rule} of {over[0].subject.name}, {past_limit(over[0])}"


def _short(news: EveningNews) -> str:
    counts = news.standings.counts()
    parts = [
        f"{counts[standing]:,} {standing.value}" for standing in (Standing.OVER, Standing.NEAR) if counts[standing]
    ]
    amiss = _amiss(news)
    quiet = f"all {counts[Standing.WITHIN]:,} within" if news.standings.answers else "nothing checked"
    return ", ".join([*parts, *([amiss] if amiss else [])]) or quiet


def _checked(news: EveningNews) -> str:
    """What was checked, so that quiet is never mistaken for well."""
    standings = news.standings
    counts = standings.counts()
    rules = {answer.rule for answer in standings.answers}
    books = [found.subject.name for found in standings.books if found.subject.book is not None]
    firm = ", and the firm as a whole" if len(books) < len(standings.books) else ""
    said = ", ".join(f"{counts[standing]:,} {standing.value}" for standing in reversed(Standing) if counts[standing])
    positions = sum(found.positions for found in standings.books if found.subject.book is not None)
    of_what = f" on {figures.count(positions, 'position')} in {', '.join(books)}{firm}" if books else ""
    if not standings.answers:
        return f"No rule in force gave a standing{of_what}: nothing was held against a limit this evening."
    return (
        f"Checked: {figures.count(len(standings.answers), 'standing')} of {figures.count(len(rules), 'rule')}"
        f"{of_what}. Found: {said}."
    )


def _older(news: EveningNews) -> tuple[str, ...]:
    if news.recipe.date == news.aged_on:
        return ()
    newest = figures.day(news.aged_on)
    return (
        f"This is an older evening: the newest on record is that of {newest}. Open excesses are as they are by now.",
    )


def _compared(counts: Mapping[str, int], before: Mapping[str, int] | None) -> tuple[str, ...]:
    if before is None:
        return ("There is no evening before to compare with.",)
    moved = [
        f"{standing.value} {before.get(standing.value, 0):,} to {counts[standing.value]:,}"
        for standing in reversed(Standing)
        if before.get(standing.value, 0) != counts[standing.value]
    ]
    return ("Since the evening before: " + ("; ".join(moved) if moved else "the same counts") + ".",)


def _of_standing(news: EveningNews, standing: Standing) -> tuple[Section, ...]:
    answers = worst_first(a for a in news.standings.answers if a.standing is standing)
    if not answers:
        return ()
    ages = {(e.rule, e.subject.key, e.side): (e, day) for e, day in news.alive.items()}
    tonight = {excess.id for excess, _ in news.opened} - news.on_record
    rows = []
    for answer in answers:
        excess, day = ages.get((answer.rule, answer.subject.key, answer.side), (None, None))
        rows.append(
            (
                f"{answer.rule} of {answer.subject.name}",
                figures.value_of(answer),
                figures.limit_of(answer),
                figures.utilisation(answer.utilisation),
                _age(excess, day, tonight) if excess is not None else "",
                figures.how_made(answer.how, answer.n),
            )
        )
    heading = f"{'Over' if standing is Standing.OVER else 'Near'} their limit ({len(answers):,})"
    columns = ("rule and subject", "value", "limit", "utilisation", "excess", "made by")
    return (Section(heading, table=table(columns, rows)),)


def _age(excess: Excess, day: int | None, opened_tonight: set[str]) -> str:
    new = "new, " if excess.id in opened_tonight else ""
    return f"{new}day {day}" + (", waived" if excess.state is ExcessState.WAIVED else "")


def _changes(news: EveningNews) -> tuple[Section, ...]:
    cured = [f"cured: {e.rule} of {e.subject.name}, opened on {figures.day(e.opened_on)}" for e, _ in news.cured]
    void = [f"void: {e.rule} of {e.subject.name}, opened on {figures.day(e.opened_on)}" for e in news.voided]
    again = [
        f"open again: {e.rule} of {e.subject.name}, opened on {figures.day(e.opened_on)}; its cure is taken back"
        for e, _ in news.opened
        if e.id in news.on_record
    ]
    lines = [*again, *cured, *void]
    if not lines:
        return ()
    heading = "Excesses ended" if not again else "Excesses ended or open again"
    return (Section(heading, table=table(("excess",), [(line,) for line in lines])),)


def _alive(news: EveningNews) -> tuple[Section, ...]:
    if not news.alive:
        return (Section("Excesses open", lines=("none",)),)
    oldest = sorted(news.alive.items(), key=lambda pair: (-pair[1], pair[0].rule, pair[0].subject.key))
    rows = [excess_row(excess, day, news.rules) for excess, day in oldest]
    counted = "" if news.aged_on == news.recipe.date else f", days counted to {figures.day(news.aged_on)}"
    return (Section(f"Excesses open ({len(rows):,}), oldest first{counted}", table=table(EXCESS_COLUMNS, rows)),)


def _doubts(answers: Iterable[Answer]) -> tuple[Section, ...]:
    doubts: dict[str, int] = {}
    for answer in answers:
        for mark in answer.marks:
            note = f"{mark.kind.value}: {mark.note}"
            doubts[note] = doubts.get(note, 0) + 1
    if not doubts:
        return ()
    rows = [(f"{note} ({figures.count(number, 'standing')})",) for note, number in doubts.items()]
    return (Section("Doubts about figures", table=table(("doubt",), rows)),)


def _uncovered(standings: Standings) -> tuple[Section, ...]:
    if not standings.uncovered:
        return ()
    rows = [(f"{subject.kind.value} {subject.name}",) for subject in standings.uncovered]
    return (Section(f"Covered by no rule ({len(rows):,})", table=table(("subject",), rows)),)


def _books(books: tuple[BookFigures, ...]) -> tuple[Section, ...]:
    if not books:
        return ()
    rows = [
        (
            found.subject.name,
            _amount(found.value_at_risk, found.currency),
            _amount(found.expected_shortfall, found.currency),
            _amount(found.pnl, found.currency),
            figures.how_made(found.how, found.n),
            "; ".join(found.reasons),
        )
        for found in books
    ]
    columns = ("book", "VaR of the next session", "ES", "hypothetical P&L of this session", "made by", "reasons")
    return (Section("Books", table=table(columns, rows, listed=len(rows))),)


def _amount(value: float | None, currency: str) -> str:
    return "none" if value is None else figures.amount(value, currency)


def _nightly_data(news: EveningNews) -> dict[str, Any]:
    standings = news.standings

    def listed(standing: Standing) -> list[dict[str, Any]]:
        found = worst_first(a for a in standings.answers if a.standing is standing)
        return [answer_data(answer) for answer in found[:LISTED]]

    return {
        **evening_data(news),
        "outcome": standings.outcome.value,
        "counts": standings.counts(),
        "before": dict(news.before) if news.before is not None else None,
        "over": listed(Standing.OVER),
        "near": listed(Standing.NEAR),
        "excesses": [excess_data(excess, day) for excess, day in list(news.alive.items())[:LISTED]],
        "excesses_open": len(news.alive),
        "lacking": list(standings.lacking),
        "unmeasured": [{"reason": why, "number": len(names)} for why, names in unmeasured_by_reason(standings).items()],
        "refused": [file.name for file in news.refused],
        "uncovered": len(standings.uncovered),
    }
