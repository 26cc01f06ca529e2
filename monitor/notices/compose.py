"""Which notices an evening makes, and the notices that are not about one evening's standings."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import date
from typing import Any

from monitor.facts import EveningMissed, RulesAdopted, SettingsAdopted
from monitor.notices import figures
from monitor.notices.excess_notices import cured_notices, opened_notices, void_section, voided_notices
from monitor.notices.excess_words import EXCESS_COLUMNS, excess_data, excess_row
from monitor.notices.message import Notice, Topic, one_line
from monitor.notices.news import EveningNews, PastEvening, SummaryNews, record
from monitor.notices.nightly import incomplete_notice, nightly_note
from monitor.notices.story import Section, Story, Tone, render, table
from monitor.words import Outcome, Standing


def compose(news: EveningNews) -> list[Notice]:
    """All notices of one evening, worst first. The nightly note is always among them."""
    return [
        *opened_notices(news),
        *incomplete_notice(news),
        *voided_notices(news),
        *cured_notices(news),
        nightly_note(news),
    ]


def compose_summary(news: SummaryNews) -> list[Notice]:
    """One notice for evenings that were checked long after their date, in place of their own alarms."""
    first, last = news.evenings[0].day, news.evenings[-1].day
    checked = figures.count(len(news.evenings), "evening")
    span = figures.day(first) if first == last else f"{figures.day(first)} to {figures.day(last)}"
    by_outcome = {outcome: sum(e.outcome is outcome for e in news.evenings) for outcome in Outcome}
    said = ", ".join(f"{number:,} {outcome.value}" for outcome, number in by_outcome.items() if number)
    still = figures.count(len(news.alive), "excess", "excesses")
    oldest = sorted(news.alive.items(), key=lambda pair: (-pair[1], pair[0].rule, pair[0].subject.key))
    not_quiet = [e for e in news.evenings if e.outcome in (Outcome.OVER, Outcome.INCOMPLETE)]
    story = Story(
        Tone.OVER if news.alive else Tone.CALM,
        f"CHECKED LATE: {news.site}, {checked} of {span}; {still} still open.",
        (
            f"These evenings were checked days after their date (a first start, or a long outage), so they are told in "
            f"this one summary and not one by one. Outcomes: {said}.",
        ),
        (
            Section(
                f"Excesses open ({len(oldest):,}), oldest first, days counted to {figures.day(news.aged_on)}",
                lines=() if oldest else ("none",),
                table=table(EXCESS_COLUMNS, [excess_row(e, d, news.rules) for e, d in oldest]) if oldest else None,
            ),
            Section("What happened", (("Excesses opened", f"{len(news.opened):,}"), ("Cured", f"{len(news.cured):,}"))),
            *void_section(news.voided, news.rules),
            *(
                (
                    Section(
                        f"Evenings over or incomplete ({len(not_quiet):,}), newest first",
                        table=table(
                            ("evening", "outcome", "over", "near", "unmeasured", "reasons"),
                            [_evening_row(evening) for evening in reversed(not_quiet)],
                        ),
                    ),
                )
                if not_quiet
                else ()
            ),
        ),
        record(news.seq, news.hash, news.page),
    )
    text, html = render(story)
    told = [rule.tell for e in (*news.alive, *news.voided) if (rule := news.rules.get(e.rule)) is not None]
    told += [news.told[excess.id] for excess in news.voided]
    tell = tuple(dict.fromkeys((news.nightly, *(name for names in told for name in names))))
    data = {
        "site": news.site,
        "from": first.isoformat(),
        "business_date": last.isoformat(),
        "evenings": len(news.evenings),
        "outcomes": {outcome.value: number for outcome, number in by_outcome.items()},
        "opened": len(news.opened),
        "cured": len(news.cured),
        "voided": [excess_data(excess) for excess in news.voided],
        "excesses_open": len(news.alive),
        "excesses": [excess_data(excess, day) for excess, day in oldest],
        "page": news.page,
        "record": {"seq": news.seq, "hash": news.hash},
    }
    title = one_line(f"CHECKED LATE: {news.site}, {checked} of {span}, {still} open")
    return [Notice(Topic.SUMMARY, "summary", title, tell, text, html, data)]


def compose_terms(
    site: str,
    adopted: SettingsAdopted | RulesAdopted,
    known_rules: Mapping[str, str],
    nightly: str,
    seq: int,
    entry_hash: str,
) -> list[Notice]:
    """That settings or rules changed, and how. known_rules: title by id of the rules now in force."""
    what = "rules" if isinstance(adopted, RulesAdopted) else "settings"
    first = adopted.was is None
    hash_now = adopted.rules if isinstance(adopted, RulesAdopted) else adopted.settings
    number = figures.count(len(adopted.changes), "change")
    headline = (
        f"FIRST {what.upper()}: {site} checks by them from now on."
        if first
        else f"{what.upper()} CHANGED: {site}, {number}, found when {adopted.hand.login} on {adopted.hand.host} ran it."
    )
    in_force = tuple((name, title) for name, title in known_rules.items()) if what == "rules" else ()
    story = Story(
        Tone.DOUBT,
        headline,
        (
            "Make sure that this is what was decided and, for limits, signed. It counts from the next evening checked; "
            "what was recorded before stays as it was.",
        ),
        (
            Section("What changed", lines=adopted.changes or ("the first of them",)),
            *((Section("Rules in force", table=table(("rule", "title"), list(in_force))),) if in_force else ()),
            Section(
                "By whom",
                (("Login", adopted.hand.login), ("Host", adopted.hand.host), ("Before", adopted.was or "none")),
            ),
            Section("Now", (("Hash", hash_now),)),
        ),
        record(seq, entry_hash, None),
    )
    text, html = render(story)
    title = one_line(f"{what.capitalize()} {'adopted' if first else 'changed'}: {site}, {number}")
    data = {
        "site": site,
        "terms": what,
        "was": adopted.was,
        "now": hash_now,
        "changes": list(adopted.changes),
        "login": adopted.hand.login,
        "host": adopted.hand.host,
        "record": {"seq": seq, "hash": entry_hash},
    }
    return [Notice(Topic.TERMS_CHANGED, f"{what}:{hash_now}", title, (nightly,), text, html, data)]


def compose_missed(site: str, missed: EveningMissed, nightly: str, seq: int, entry_hash: str) -> list[Notice]:
    """That an evening was due and could not be checked at all."""
    date_ = figures.day(missed.day)
    story = Story(
        Tone.OVER,
        f"NOT CHECKED: {site}, evening of {date_}, round {missed.round}: {missed.reason}.",
        (
            "No limit was held against anything this evening. Open excesses stay open and their days go on counting. "
            "Once the cause is put right the evening can still be checked, and will then be told.",
        ),
        (Section("The evening", (("Business date", date_), ("Round", missed.round), ("Reason", missed.reason))),),
        record(seq, entry_hash, None),
    )
    text, html = render(story)
    data = {
        "site": site,
        "business_date": missed.day.isoformat(),
        "round": missed.round,
        "reason": missed.reason,
        "record": {"seq": seq, "hash": entry_hash},
    }
    title = one_line(f"NOT CHECKED: {site} {date_} ({missed.round})")
    key = f"{missed.day.isoformat()}/{missed.round}"
    return [Notice(Topic.EVENING_MISSED, key, title, (nightly,), text, html, data)]


def compose_trouble(
    site: str, what: str, reason: str, on: date, nightly: str, seq: int, entry_hash: str
) -> list[Notice]:
    """That the program itself failed at `what` on a day. seq, entry_hash: the newest entry when it did."""
    story = Story(
        Tone.OVER,
        one_line(f"TROUBLE: duskcheck of {site} failed on {figures.day(on)} at {what}: {reason}."),
        ("Until this is mended evenings may go unchecked. Do not take quiet for well.",),
        (Section("What is known", (("Failed at", what), ("Reason", reason), ("Day", figures.day(on)))),),
        record(seq, entry_hash, None),
    )
    text, html = render(story)
    data: dict[str, Any] = {
        "site": site,
        "business_date": on.isoformat(),
        "what": what,
        "reason": reason,
        "record": {"seq": seq, "hash": entry_hash},
    }
    title = one_line(f"TROUBLE: duskcheck of {site}, {what} ({figures.day(on)})")
    return [Notice(Topic.TROUBLE, f"{on.isoformat()}:{what}", title, (nightly,), text, html, data)]


def _evening_row(evening: PastEvening) -> tuple[str, ...]:
    return (
        f"{figures.day(evening.day)} ({evening.round})",
        evening.outcome.value,
        *(f"{evening.counts.get(standing.value, 0):,}" for standing in (Standing.OVER, Standing.NEAR)),
        f"{evening.counts.get(Standing.UNMEASURED.value, 0):,}",
        "; ".join(evening.reasons),
    )
