"""What is told of excesses: one notice for each, or one for the rule when too many subjects of it moved at once."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Mapping
from itertools import groupby
from typing import Any

from monitor.excesses.register import Excess
from monitor.notices import figures
from monitor.notices.excess_words import (
    answer_data,
    doubts,
    excess_data,
    figure_facts,
    last_over,
    past_limit,
    worst_of,
)
from monitor.notices.message import Notice, Topic, one_line
from monitor.notices.news import EveningNews, evening_data, record, when
from monitor.notices.story import LISTED, Section, Story, Tone, render, table
from monitor.words import CuredBy, Standing
from monitor.world import Answer, Rule

DIGEST_ABOVE = 20

_CURED_BY = {
    CuredBy.FIGURE: "its figure is back within the limit",
    CuredBy.END_OF_RULE: "its rule is no longer in force; the figure itself may still be as high",
    CuredBy.END_OF_SUBJECT: "its subject is no longer held, or its rule no longer asks about it",
}


def opened_notices(news: EveningNews) -> list[Notice]:
    notices: list[Notice] = []
    for rule, pairs in _by_rule(news.opened):
        if len(pairs) > DIGEST_ABOVE:
            notices.append(_opened_digest(news, rule, pairs))
        else:
            notices += [_opened(news, excess, answer) for excess, answer in pairs]
    return notices


def cured_notices(news: EveningNews) -> list[Notice]:
    notices: list[Notice] = []
    for rule, pairs in _by_rule(news.cured):
        if len(pairs) > DIGEST_ABOVE:
            notices.append(_cured_digest(news, rule, pairs))
        else:
            notices += [_cured(news, excess, answer) for excess, answer in pairs]
    return notices


def voided_notices(news: EveningNews) -> list[Notice]:
    notices: list[Notice] = []
    for rule, pairs in _by_rule([(excess, None) for excess in news.voided]):
        if len(pairs) > DIGEST_ABOVE:
            notices.append(_voided_digest(news, rule, [excess for excess, _ in pairs]))
        else:
            notices += [_voided(news, excess) for excess, _ in pairs]
    return notices


def _by_rule(pairs: Iterable[tuple[Excess, Any]]) -> list[tuple[str, list[tuple[Excess, Any]]]]:
    ordered = sorted(pairs, key=lambda pair: (pair[0].rule, pair[0].subject.key, pair[0].side))
    return [(rule, list(found)) for rule, found in groupby(ordered, key=lambda pair: pair[0].rule)]


def _tell(news: EveningNews, rule: str, told: Iterable[str] = ()) -> tuple[str, ...]:
    """The rule's groups (those of the nightly note where it names none or is no longer there) and whoever was told."""
    found = news.rules.get(rule)
    return tuple(dict.fromkeys([*(found.tell if found and found.tell else (news.nightly,)), *told]))


def _rule_facts(news: EveningNews, rule: str) -> tuple[tuple[str, str], ...]:
    found = news.rules.get(rule)
    if found is None:
        return (("Rule", f"{rule} (no longer in force)"),)
    return (
        ("Rule", rule),
        ("Its title", found.title),
        *((("Its class", found.kind),) if found.kind else ()),
        *((("Because", found.because),) if found.because else ()),
        *((("Owner", found.owner),) if found.owner else ()),
    )


def _notice(
    news: EveningNews,
    topic: Topic,
    key: str,
    rule: str,
    title: str,
    story: Story,
    data: Any,
    told: Iterable[str] = (),
) -> Notice:
    text, html = render(story)
    found = news.rules.get(rule)
    about = {
        "id": rule,
        "title": found.title if found else None,
        "because": found.because if found else None,
        "owner": found.owner if found else None,
    }
    return Notice(
        topic, key, one_line(title), _tell(news, rule, told), text, html, {**evening_data(news), "rule": about, **data}
    )


def _opened(news: EveningNews, excess: Excess, answer: Answer | None) -> Notice:
    day = news.alive.get(excess)
    age = f"business day {day}" if day is not None else f"already {excess.state.value}"
    value, limit = last_over(excess, answer, news.rules)
    story = Story(
        Tone.OVER,
        _over(news, excess, answer),
        (
            f"{_how_it_opened(news, excess)} It stands at {age}. It stays open, and in every nightly note, until the "
            "figure is within its limit again.",
        ),
        (
            *_figure(excess, answer, news.rules),
            Section("The rule", _rule_facts(news, excess.rule)),
            Section(
                "The evening",
                (*when(news), ("Excess", excess.id), ("Opened on", figures.day(excess.opened_on)), ("Age", age)),
            ),
        ),
        record(news.seq, news.hash, news.page),
    )
    title = f"OVER: {excess.rule} of {excess.subject.name}, {value} against {limit} ({figures.day(excess.last_on)})"
    data = {"excess": excess_data(excess, day), "standing": answer_data(answer) if answer is not None else None}
    return _notice(news, Topic.EXCESS_OPENED, excess.id, excess.rule, title, story, data)


def _over(news: EveningNews, excess: Excess, answer: Answer | None) -> str:
    rule = news.rules.get(excess.rule)
    what = f"{figures.measure_name(rule.measure.name) if rule else excess.rule} of {excess.subject.name}"
    if answer is None:
        value, limit = last_over(excess, answer, news.rules)
        return f"OVER: {what} was {value} against its limit of {limit} on {figures.day(excess.last_on)}."
    used = f" (utilisation {figures.utilisation(answer.utilisation)})" if answer.utilisation is not None else ""
    return f"OVER: {what} is {figures.value_of(answer)}, {past_limit(answer)}{used}."


def _how_it_opened(news: EveningNews, excess: Excess) -> str:
    opened, checked = figures.day(excess.opened_on), figures.day(news.recipe.date)
    if excess.id in news.on_record:
        return f"The excess opened on {opened} and was told as cured; the check of {checked} takes that cure back."
    if excess.opened_on == news.recipe.date:
        return "The excess opened with this evening's check."
    return f"The excess opened on {opened}. It came to light only when the evening of {checked} was checked."


def _figure(excess: Excess, answer: Answer | None, rules: Mapping[str, Rule]) -> tuple[Section, ...]:
    """Tonight's figure; where another evening's decided, what the register holds of it."""
    subject = ("Subject", excess.subject.name)
    if answer is not None:
        return (Section("The figure", (subject, *figure_facts(answer))), *doubts(answer))
    value, limit = last_over(excess, None, rules)
    last = f"{value} on {figures.day(excess.last_on)}"
    return (
        Section("The figure", (subject, ("Last over", last), ("Limit", limit), ("Worst", worst_of(excess, rules)))),
    )


def _opened_digest(news: EveningNews, rule: str, pairs: list[tuple[Excess, Answer | None]]) -> Notice:
    worst = sorted(pairs, key=lambda pair: pair[0].worst_distance, reverse=True)
    found = news.rules.get(rule)
    named = f"{rule} ({found.title})" if found else rule
    number = figures.count(len(pairs), "subject")
    excess, answer = worst[0]
    value, limit = last_over(excess, answer, news.rules)
    story = Story(
        Tone.OVER,
        f"OVER: {number} of rule {named} went over at once; the worst, {excess.subject.name}, is {value} against its "
        f"limit of {limit}.",
        (
            "So many at once often have one cause: a move of the whole market, a wrong file or a changed rule. "
            "Look for that before looking at each. Every one of them is an excess of its own in the ledger.",
        ),
        (
            Section(
                f"The worst {min(LISTED, len(pairs))} of {len(pairs)}",
                table=table(
                    ("subject", "value", "limit", "utilisation", "past by"),
                    [
                        (
                            e.subject.name,
                            *last_over(e, a, news.rules),
                            figures.utilisation(a.utilisation) if a else "",
                            figures.figure(a.distance, a.unit, a.currency, a.measure) if a and a.distance else "",
                        )
                        for e, a in worst
                    ],
                ),
            ),
            *((Section("How the worst figure was made", figure_facts(answer)),) if answer else ()),
            Section("The rule", _rule_facts(news, rule)),
            Section("The evening", when(news)),
        ),
        record(news.seq, news.hash, news.page),
    )
    data = {
        "change": "opened",
        "number": len(pairs),
        "worst": [{"excess": e.id, "standing": answer_data(a) if a else None} for e, a in worst[:LISTED]],
    }
    title = f"OVER: {rule}, {number} at once ({figures.day(news.recipe.date)})"
    return _notice(news, Topic.RULE_DIGEST, f"{rule}:opened", rule, title, story, data)


def _cured(news: EveningNews, excess: Excess, answer: Answer | None) -> Notice:
    why = _CURED_BY[excess.cured_by] if excess.cured_by else "its figure is back within the limit"
    cured_on = figures.day(excess.cured_on)
    still = " It is still near." if answer is not None and answer.standing is Standing.NEAR else ""
    checked = figures.day(news.recipe.date)
    known = excess.id in news.on_record
    unheard = "" if known else f" Both came to light only when the evening of {checked} was checked."
    story = Story(
        Tone.CALM,
        f"CURED: {excess.rule} of {excess.subject.name}, because {why}; {_figure_at_cure(news, excess, answer)}.",
        (
            f"The excess opened on {figures.day(excess.opened_on)} and was cured on {cured_on}; "
            f"its worst was {worst_of(excess, news.rules)}.{unheard}{still}{_over_since(news, excess)}",
        ),
        (
            *(_figure(excess, answer, news.rules) if answer is not None else ()),
            Section("The rule", _rule_facts(news, excess.rule)),
            Section(
                "The evening",
                (
                    *when(news),
                    ("Excess", excess.id),
                    ("Opened on", figures.day(excess.opened_on)),
                    ("Cured on", cured_on),
                    ("Worst", worst_of(excess, news.rules)),
                ),
            ),
        ),
        record(news.seq, news.hash, news.page),
    )
    data = {"excess": excess_data(excess), "standing": answer_data(answer) if answer is not None else None}
    title = f"CURED: {excess.rule} of {excess.subject.name} ({cured_on})"
    return _notice(news, Topic.EXCESS_CURED, excess.id, excess.rule, title, story, data)


def _figure_at_cure(news: EveningNews, excess: Excess, answer: Answer | None) -> str:
    cured_on = figures.day(excess.cured_on)
    if answer is not None and answer.value is not None:
        told = f"{figures.value_of(answer)}, {past_limit(answer)}"
        return f"it is now {told}" if news.recipe.date == news.aged_on else f"on {cured_on} it was {told}"
    if excess.cured_value is None:
        return "there is no figure of it any more"
    rule = news.rules.get(excess.rule)
    measure = rule.measure.name if rule else ""
    return f"on {cured_on} it was {figures.figure(excess.cured_value, excess.unit, excess.currency, measure)}"


def _over_since(news: EveningNews, cured: Excess) -> str:
    """That it is over again by now, where an older evening was checked."""
    for excess, day in news.alive.items():
        if (excess.rule, excess.subject) == (cured.rule, cured.subject):
            return f" It is over again since {figures.day(excess.opened_on)}: excess {excess.id}, day {day}."
    return ""


def _cured_digest(news: EveningNews, rule: str, pairs: list[tuple[Excess, Answer | None]]) -> Notice:
    number = figures.count(len(pairs), "excess", "excesses")
    worst = sorted(pairs, key=lambda pair: pair[0].worst_distance, reverse=True)
    story = Story(
        Tone.CALM,
        f"CURED: {number} of rule {rule} were cured on one evening.",
        ("So many at once often have one cause; make sure that it is not a wrong file.",),
        (
            Section(
                f"The {min(LISTED, len(pairs))} that had been worst, of {len(pairs)}",
                table=table(
                    ("subject", "now", "opened on", "worst"),
                    [
                        (
                            e.subject.name,
                            figures.value_of(a) if a is not None else "no figure",
                            figures.day(e.opened_on),
                            worst_of(e, news.rules),
                        )
                        for e, a in worst
                    ],
                ),
            ),
            Section("The rule", _rule_facts(news, rule)),
            Section("The evening", when(news)),
        ),
        record(news.seq, news.hash, news.page),
    )
    data = {
        "change": "cured",
        "number": len(pairs),
        "worst": [excess_data(e) for e, _ in worst[:LISTED]],
    }
    title = f"CURED: {rule}, {number} at once ({figures.day(news.recipe.date)})"
    return _notice(news, Topic.RULE_DIGEST, f"{rule}:cured", rule, title, story, data)


def _voided(news: EveningNews, excess: Excess) -> Notice:
    opened, reason = figures.day(excess.opened_on), excess.void_reason or ""
    story = Story(
        Tone.DOUBT,
        f"CORRECTION: the excess {excess.id} of {excess.rule}, {excess.subject.name}, opened on {opened}, is void: "
        f"{reason}.",
        ("You are told because you were told of the excess. Nothing was erased: both stand in the ledger.",),
        (
            Section("The rule", _rule_facts(news, excess.rule)),
            Section(
                "The evening",
                (
                    *when(news),
                    ("Excess", excess.id),
                    ("Had opened on", opened),
                    ("Had been at worst", worst_of(excess, news.rules)),
                    ("Void because", reason),
                ),
            ),
        ),
        record(news.seq, news.hash, news.page),
    )
    title = f"CORRECTION: {excess.rule} of {excess.subject.name}, the excess opened on {opened} is void"
    data = {"excess": excess_data(excess)}
    told = news.told[excess.id]
    return _notice(news, Topic.EXCESS_VOIDED, excess.id, excess.rule, title, story, data, told)


def _voided_digest(news: EveningNews, rule: str, excesses: list[Excess]) -> Notice:
    number = figures.count(len(excesses), "excess", "excesses")
    story = Story(
        Tone.DOUBT,
        f"CORRECTION: {number} of rule {rule} are void.",
        ("You are told because you were told of them. Nothing was erased: both stand in the ledger.",),
        (
            *void_section(excesses, news.rules),
            Section("The rule", _rule_facts(news, rule)),
            Section("The evening", when(news)),
        ),
        record(news.seq, news.hash, news.page),
    )
    data = {"change": "voided", "number": len(excesses), "worst": [excess_data(e) for e in excesses[:LISTED]]}
    title = f"CORRECTION: {rule}, {number} void ({figures.day(news.recipe.date)})"
    told = [group for excess in excesses for group in news.told[excess.id]]
    return _notice(news, Topic.RULE_DIGEST, f"{rule}:voided", rule, title, story, data, told)


def void_section(voided: Collection[Excess], rules: Mapping[str, Rule]) -> tuple[Section, ...]:
    """The excesses that a correction showed to be none of their own, worst first."""
    if not voided:
        return ()
    rows = [
        (
            f"{e.rule} of {e.subject.name}",
            figures.day(e.opened_on),
            worst_of(e, rules),
            e.void_reason or "",
        )
        for e in sorted(voided, key=lambda e: e.worst_distance, reverse=True)
    ]
    columns = ("rule and subject", "had opened on", "had been at worst", "void because")
    return (Section(f"Excesses void after a correction ({len(rows):,})", table=table(columns, rows)),)
