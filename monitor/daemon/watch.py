"""One look of the daemon: take in what has settled, check the evenings that are due, tell, and wait for the rest."""

from __future__ import annotations

import logging
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from datetime import date, datetime, timedelta
from pathlib import Path

from monitor import evenings
from monitor.adoption import adopt
from monitor.daemon.schedule import due_since, moment, newest_due
from monitor.daemon.settings import Round
from monitor.evening import Checked, check_evening, lacks_something, take_in
from monitor.facts import EveningMissed, FileAccepted
from monitor.feed import intake
from monitor.notices import outbox
from monitor.notices.compose import compose_missed, compose_trouble
from monitor.notices.message import Notice
from monitor.run import Due, finish, hand, is_recent, open_for_checking, send, sessions_of
from monitor.site import Site, open_site
from monitor.state import State
from monitor.words import DuskcheckError, WrongUse

LOG = logging.getLogger("duskcheck")
SETTLING = timedelta(seconds=10)  # a file untouched for so long, or between two looks, is no longer being written


@dataclass
class Watch:
    """What the daemon remembers between two looks; everything else it asks the ledger.

    stopping: asked between two evenings, so that the step in hand is the last one.
    """

    site_file: Path
    site: Site
    stopping: Callable[[], bool]
    seen: set[intake.Lying] = field(default_factory=set)
    troubles: set[tuple[date, str]] = field(default_factory=set)

    def look(self, now: datetime) -> None:
        """Do all that is due. A failure is logged and told, once a day and cause, and never ends the daemon."""
        try:
            self._reread()
            with open_for_checking(self.site) as state:
                self._work(state, now)
        except DuskcheckError as error:
            LOG.error("%s", error)
            self._tell_trouble("looking for due evenings", str(error), now)
        except Exception as error:
            LOG.exception("a defect of the program")
            self._tell_trouble("looking for due evenings", f"a defect of the program ({type(error).__name__})", now)

    def _reread(self) -> None:
        """Settings and rules as they lie there now; while they are wrong, those read before stay in force."""
        try:
            self.site = open_site(self.site_file)
        except WrongUse as error:
            LOG.error("the site or its rules are wrong, and those read before stay in force: %s", error)
            raise

    def _work(self, state: State, now: datetime) -> None:
        terms = adopt(state, now, hand())
        taken = take_in(state, now, self._settled(now))
        for fact in taken:
            LOG.info("%s %s", fact.KIND, fact.name)
        fresh = {fact.day for fact in taken if isinstance(fact, FileAccepted)}
        last: Checked | None = None
        for round_, day in self._due(state, terms, fresh, now):
            if self.stopping():
                break
            last = self._check(state, terms, round_, day, now) or last
        finish(state, terms, last if last and last.new else None, now)

    def _settled(self, now: datetime) -> list[intake.Lying]:
        """The files that nobody is writing any more."""
        lying = intake.look(self.site.drop)
        untouched_since = (now - SETTLING).timestamp() * 1e9
        settled = [file for file in lying if file in self.seen or file.changed <= untouched_since]
        self.seen = set(lying)
        return settled

    def _due(self, state: State, terms: str, fresh: Iterable[date | None], now: datetime) -> list[tuple[Round, date]]:
        """The evenings not yet checked whose time has come, and the newest one again where a file of it just came."""
        signed, index = state.terms(terms), state.index()
        sessions = sessions_of(state, terms, now.date() + timedelta(days=1))
        found: list[tuple[Round, date]] = []
        for each in self.site.settings.rounds:
            last = evenings.last_day(index, each.id)
            if last is None:
                found += [(each, day) for _, day in newest_due([each], signed, sessions, now)]
                continue
            found += [(each, last)] if last in fresh else []
            found += [(each, day) for day in due_since(each, signed, sessions, last, now)]
        return sorted(found, key=lambda due: moment(due[0], due[1], due[0].at))

    def _check(self, state: State, terms: str, round_: Round, day: date, now: datetime) -> Checked | None:
        """Check one evening, or wait for its files until it is given up."""
        given_up = now >= moment(round_, day, round_.give_up_at)
        try:
            lacking = lacks_something(state, terms, day, round_.id)
            if lacking and not given_up:
                LOG.info("the evening of %s, round %s, waits: %s", day, round_.id, "; ".join(lacking))
                return None
            checked = check_evening(
                state, terms, day, round_.id, now, is_recent(state, terms, Due(day, round_.id), now)
            )
        except DuskcheckError as error:
            if not given_up:
                raise
            LOG.error("the evening of %s, round %s, is given up: %s", day, round_.id, error)
            self._record_missed(state, EveningMissed(day, round_.id, str(error)), now)
            return None
        LOG.info("the evening of %s, round %s: %s", day, round_.id, checked.evening.outcome)
        return checked

    def _record_missed(self, state: State, fact: EveningMissed, now: datetime) -> None:
        settings = state.site.settings
        with state.ledger.transaction(now) as transaction:
            entry = transaction.append(fact)
            notices = compose_missed(settings.site, fact, settings.notices.nightly_note, entry.seq, entry.hash)
            for queued in outbox.queue(notices, settings.notices, state.archive, (entry.seq, entry.hash)):
                transaction.append(queued)

    def _tell_trouble(self, what: str, reason: str, now: datetime) -> None:
        if (now.date(), reason) in self.troubles:
            return
        try:
            with open_for_checking(self.site) as state:
                settings, head = self.site.settings, state.ledger.head()
                notices: list[Notice] = compose_trouble(
                    settings.site, what, reason, now.date(), settings.notices.nightly_note, head.seq, head.hash
                )
                with state.ledger.transaction(now) as transaction:
                    for queued in outbox.queue(notices, settings.notices, state.archive, (head.seq, head.hash)):
                        transaction.append(queued)
                send(state, now)
            self.troubles.add((now.date(), reason))
        except DuskcheckError as error:
            LOG.error("the trouble could not be told: %s", error)
