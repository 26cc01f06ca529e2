"""Settings and rules are adopted by themselves: archived by hash, recorded, and a change told."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Sequence
from datetime import datetime

import monitor
from monitor.facts import Hand, NamedFile, RulesAdopted, SettingsAdopted, SiteOpened
from monitor.feed.build import calendars_of
from monitor.ledger.chain import Transaction
from monitor.limits.rules import read_rules
from monitor.limits.wording import differences
from monitor.notices.compose import compose_terms
from monitor.reading.plain import read_yaml
from monitor.state import State
from monitor.world import Rule


def adopt(state: State, now: datetime, hand: Hand) -> str:
    """Take the site file and the rule files as they lie there into force; returns the hash that recipes name them by.

    Nothing is recorded when they are what was adopted last. Raises WrongUse when they are wrong or name a calendar that
    is not known; then nothing is recorded either.
    """
    site = state.site
    settings_hash = _hash(site.data)
    files = tuple(NamedFile(name, _hash(data)) for name, data in site.rule_files)
    signed = {"settings": settings_hash, "rules": [[file.name, file.sha256] for file in files]}
    terms = json.dumps(signed, separators=(",", ":")).encode()
    terms_hash = _hash(terms)
    last = state.last_adopted()
    if last is not None and last[0] == terms_hash:
        return terms_hash
    rules = read_rules(site.rule_files, site.settings.rule_context())
    for calendar in calendars_of(site.settings.firm()):
        state.history.sessions(calendar, until=now.date())
    state.archive.put_many([site.data, *(data for _, data in site.rule_files), terms])
    old_terms, old_settings = last or (None, None)
    with state.ledger.transaction(now) as transaction:
        if last is None:
            program = f"duskcheck {monitor.__version__}"
            transaction.append(SiteOpened(site.settings.site, site.settings.base_currency, program, hand))
        if old_settings != settings_hash:
            changes = _setting_changes(state.archive.get(old_settings), site.data) if old_settings else ()
            _record(state, transaction, SettingsAdopted(settings_hash, old_settings, changes, hand), rules)
        changes = tuple(differences(state.terms(old_terms).rules, rules)) if old_terms else ()
        _record(state, transaction, RulesAdopted(terms_hash, old_terms, settings_hash, files, changes, hand), rules)
    return terms_hash


def _hash(data: bytes) -> str:
    return hashlib.sha256(data).hexdigest()


def _record(
    state: State, transaction: Transaction, fact: SettingsAdopted | RulesAdopted, rules: Sequence[Rule]
) -> None:
    """Record an adoption, and queue a notice of what it changed."""
    entry = transaction.append(fact)
    if not fact.changes:
        return
    settings = state.site.settings
    titles = {rule.id: rule.title for rule in rules}
    notices = compose_terms(settings.site, fact, titles, settings.notices.nightly_note, entry.seq, entry.hash)
    state.queue(transaction, notices, (entry.seq, entry.hash))


def _setting_changes(old: bytes, new: bytes) -> tuple[str, ...]:
    """Which top-level keys of the site file differ."""
    before, after = (dict(read_yaml("site.yaml", data).data) for data in (old, new))
    changes = [f"{key}: added" for key in after if key not in before]
    changes += [f"{key}: removed" for key in before if key not in after]
    changes += [f"{key}: changed" for key in after if key in before and after[key] != before[key]]
    return tuple(sorted(changes)) or ("only comments or layout",)
