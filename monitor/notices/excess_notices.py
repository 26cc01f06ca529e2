"""What is told of excesses: one notice for each, or one for the rule when too many subjects of it moved at once."""

from __future__ import annotations

from collections.abc import Iterable
from itertools import groupby
from typing import Any

from monitor.excesses.register import Excess
from monitor.notices import figures
from monitor.notices.excess_words import answer_data, doubts, excess_data, figure_facts, past_limit, worst_of
from monitor.notices.message import Notice, Topic, one_line
from monitor.notices.news import EveningNews, evening_data, record, when
from monitor.notices.story import LISTED, Section, Story, Tone, render, table
from monitor.words import CuredBy, Standing
from monitor.world import Answer

DIGEST_ABOVE = 20

_CURED_BY = {
    CuredBy.FIGURE: "its figure is back within the limit",
    CuredBy.END_OF_RULE: "its rule is no longer in force; the figure itself may still be as high",
    CuredBy.END_OF_SUBJECT: "its subject is no longer held",
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


def _tell(news: EveningNews, rule: str) -> tuple[str, ...]:
    """The rule's groups; those of the nightly note for a rule that names none or is no longer there."""
    found = news.rules.get(rule)
    return found.tell if found and found.tell else (news.nightly,)


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


def _notice(news: EveningNews, topic: Topic, key: str, rule: str, title: str, story: Story, data: Any) -> Notice:
    text, html = render(story)
    found = news.rules.get(rule)
    about = {
        "id": rule,
        "title": found.title if found else None,
        "because": found.because if found else None,
        "owner": found.owner if found else None,
    }
    return Notice(
        topic, key, one_line(title), _tell(news, rule), text, html, {**evening_data(news), "rule": about, **data}
    )


def _opened(news: EveningNews, excess: Excess, answer: Answer) -> Notice:
    day = news.alive.get(excess)
    age = f"day {day}" if day is not None else f"already {excess.state.value}"
    value = figures.value_of(answer)
    headline = (
        f"OVER: {figures.measure_name(answer.measure)} of {excess.subject.name} is {value}, {past_limit(answer)}"
        + (f" (utilisation {figures.utilisation(answer.utilisation)})." if answer.utilisation is not None else ".")
    )
    story = Story(
        Tone.OVER,
        headline,
        (
            f"The excess opened with this evening's check and stands at {age}. It stays open, and in every nightly "
            "note, until the figure is within its limit again.",
        ),
        (
            Section("The figure", (("Subject", excess.subject.name), *figure_facts(answer))),
            *doubts(answer),
            Section("The rule", _rule_facts(news, excess.rule)),
            Section(
                "The evening",
                (*when(news), ("Excess", excess.id), ("Opened on", figures.day(excess.opened_on)), ("Age", age)),
            ),
        ),
        record(news.seq, news.hash, news.page),
    )
    title = (
        f"OVER: {excess.rule} of {excess.subject.name}, {value} against {figures.limit_of(answer)} "
        f"({figures.day(news.recipe.date)})"
    )
    data = {"excess": excess_data(excess, day), "standing": answer_data(answer)}
    return _notice(news, Topic.EXCESS_OPENED, excess.id, excess.rule, title, story, data)


def _opened_digest(news: EveningNews, rule: str, pairs: list[tuple[Excess, Answer]]) -> Notice:
    worst = sorted(pairs, key=lambda pair: pair[0].worst_distance, reverse=True)
    found = news.rules.get(rule)
    named = f"{rule} ({found.title})" if found else rule
    number = figures.count(len(pairs), "subject")
    excess, answer = worst[0]
    story = Story(
        Tone.OVER,
        f"OVER: {number} of rule {named} went over on one evening; the worst, {excess.subject.name}, "
        f"is {figures.value_of(answer)}, {past_limit(answer)}.",
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
                            figures.value_of(a),
                            figures.limit_of(a),
                            figures.utilisation(a.utilisation),
                            figures.figure(a.distance, a.unit, a.currency, a.measure) if a.distance else "",
                        )
                        for e, a in worst
                    ],
                ),
            ),
            Section("How the worst figure was made", figure_facts(answer)),
            Section("The rule", _rule_facts(news, rule)),
            Section("The evening", when(news)),
        ),
        record(news.seq, news.hash, news.page),
    )
    data = {
        "change": "opened",
        "number": len(pairs),
        "worst": [{"excess": e.id, "standing": answer_data(a)} for e, a in worst[:LISTED]],
    }
    title = f"OVER: {rule}, {number} at once ({figures.day(news.recipe.date)})"
    return _notice(news, Topic.RULE_DIGEST, f"{rule}:opened", rule, title, story, data)


def _cured(news: EveningNews, excess: Excess, answer: Answer | None) -> Notice:
    why = _CURED_BY[excess.cured_by] if excess.cured_by else "its figure is back within the limit"
    if answer is not None and answer.value is not None:
        now = f"it is now {figures.value_of(answer)}, {past_limit(answer)}"
        still = " It is still near." if answer.standing is Standing.NEAR else ""
    else:
        now, still = "there is no figure of it tonight", ""
    story = Story(
        Tone.CALM,
        f"CURED: {excess.rule} of {excess.subject.name}, because {why}; {now}.",
        (
            f"The excess opened on {figures.day(excess.opened_on)}; "
            f"its worst was {worst_of(excess, news.rules)}.{still}",
        ),
        (
            *(
                (Section("The figure", (("Subject", excess.subject.name), *figure_facts(answer))), *doubts(answer))
                if answer is not None
                else ()
            ),
            Section("The rule", _rule_facts(news, excess.rule)),
            Section(
                "The evening",
                (
                    *when(news),
                    ("Excess", excess.id),
                    ("Opened on", figures.day(excess.opened_on)),
                    ("Cured on", figures.day(excess.cured_on or news.recipe.date)),
                    ("Worst", worst_of(excess, news.rules)),
                ),
            ),
        ),
        record(news.seq, news.hash, news.page),
    )
    data = {"excess": excess_data(excess), "standing": answer_data(answer) if answer is not None else None}
    title = f"CURED: {excess.rule} of {excess.subject.name} ({figures.day(news.recipe.date)})"
    return _notice(news, Topic.EXCESS_CURED, excess.id, excess.rule, title, story, data)


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
    reason = excess.void_reason or "the evening was checked again on better inputs"
    story = Story(
        Tone.DOUBT,
        f"CORRECTION: {excess.rule} of {excess.subject.name} was not over; the excess told on "
        f"{figures.day(excess.opened_on)} is void: {reason}.",
        ("You are told because you were told of the excess. Nothing was erased: both stand in the ledger.",),
        (
            Section("The rule", _rule_facts(news, excess.rule)),
            Section(
                "The evening",
                (
                    *when(news),
                    ("Excess", excess.id),
                    ("Had opened on", figures.day(excess.opened_on)),
                    ("Had been at worst", worst_of(excess, news.rules)),
                    ("Void because", reason),
                ),
            ),
        ),
        record(news.seq, news.hash, news.page),
    )
    title = f"CORRECTION: {excess.rule} of {excess.subject.name} was not over ({figures.day(excess.opened_on)})"
    data = {"excess": excess_data(excess)}
    return _notice(news, Topic.EXCESS_VOIDED, excess.id, excess.rule, title, story, data)


def _voided_digest(news: EveningNews, rule: str, excesses: list[Excess]) -> Notice:
    number = figures.count(len(excesses), "excess", "excesses")
    story = Story(
        Tone.DOUBT,
        f"CORRECTION: {number} of rule {rule} should never have opened and are void.",
        ("You are told because you were told of them. Nothing was erased: both stand in the ledger.",),
        (
            Section(
                f"{min(LISTED, len(excesses))} of {len(excesses)}",
                table=table(
                    ("subject", "had opened on", "had been at worst", "void because"),
                    [
                        (e.subject.name, figures.day(e.opened_on), worst_of(e, news.rules), e.void_reason or "")
                        for e in sorted(excesses, key=lambda e: e.worst_distance, reverse=True)
                    ],
                ),
            ),
            Section("The rule", _rule_facts(news, rule)),
            Section("The evening", when(news)),
        ),
        record(news.seq, news.hash, news.page),
    )
    data = {"change": "voided", "number": len(excesses), "worst": [excess_data(e) for e in excesses[:LISTED]]}
    title = f"CORRECTION: {rule}, {number} void ({figures.day(news.recipe.date)})"
    return _notice(news, Topic.RULE_DIGEST, f"{rule}:voided", rule, title, story, data)
