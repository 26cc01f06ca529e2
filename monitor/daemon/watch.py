"""One look of the daemon: take in what has settled, check the evenings that are due, tell, and wait for the rest."""

from __future__ import annotations

import logging
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import date, datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

from monitor import evenings
from monitor.adoption import adopt
from monitor.daemon.schedule import due_since, newest_due
from monitor.daemon.settings import Round
from monitor.evening import Checked, check_evening, take_in, would_lack
from monitor.facts import EveningMissed
from monitor.feed import intake
from monitor.feed.known import accepted_after
from monitor.notices.compose import compose_missed, compose_trouble
from monitor.run import Due, finish, hand, is_recent, open_for_checking, send, sessions_of
from monitor.site import Site, open_site
from monitor.state import State
from monitor.words import Busy, DuskcheckError, Outcome, WrongUse

LOG = logging.getLogger("duskcheck")
SETTLING = timedelta(seconds=10)  # a file untouched for so long is no longer being written
GAPS_SOUGHT = timedelta(days=30)  # how long before the newest evening one that was left out is still made up for


@dataclass
class Watch:
    """What the daemon remembers between two looks; everything else it asks the ledger.

    site: as adopted last. stopping: asked between two evenings, so that the step in hand is the last one.
    seen: since when each file in the drop lies there as it is. late: recorded evenings of which a file came since.
    known: the ledger's sequence up to which files were looked through for that. troubles: told already, by day.
    """

    site_file: Path
    site: Site
    stopping: Callable[[], bool]
    seen: dict[intake.Lying, datetime] = field(default_factory=dict)
    late: set[Due] = field(default_factory=set)
    known: int = 0
    troubles: set[tuple[date, str, str]] = field(default_factory=set)

    def look(self, now: datetime) -> None:
        """Do all that is due. A failure is logged and told, once a day and cause, and never ends the daemon.

        While the site or its rules are wrong, evenings go on by those adopted last.
        """
        self._guarded(self._adopt, "reading the site and its rules", now)
        if not self.stopping():
            self._guarded(self._work, "checking the evenings that are due", now)

    def _guarded(self, step: Callable[[datetime], None], what: str, now: datetime) -> None:
        try:
            step(now)
        except Busy as error:  # another process has the site in hand; the next look tries again
            LOG.warning("%s: %s", what, error)
        except Exception as error:
            reason = _reason(error)
            try:
                with open_for_checking(self.site) as state:
                    self._tell(state, what, reason, now)
                    send(state, now)
            except DuskcheckError as untold:
                LOG.error("the trouble could not be told: %s", untold)

    def _adopt(self, now: datetime) -> None:
        """Take the site and its rules as they lie there into force, once nobody is writing them any more."""
        site = open_site(self.site_file)
        if site != self.site and not _untouched(site, now):
            LOG.info("the site or its rules were changed less than %d s ago", SETTLING.seconds)
            return
        with open_for_checking(site) as state:
            adopt(state, now, hand())
        self.site = site

    def _work(self, now: datetime) -> None:
        with open_for_checking(self.site) as state:
            adopted = state.last_adopted()
            if adopted is None:
                raise DuskcheckError("no settings were adopted: the record was begun anew while the daemon ran")
            terms = adopted[0]
            self._take_in(state, now)
            last: Checked | None = None
            for round_, day in self._due(state, terms, now):
                if self.stopping():
                    break
                last = self._check(state, terms, round_, day, now) or last
            finish(state, terms, last if last and last.new else None, now)

    def _take_in(self, state: State, now: datetime) -> None:
        """Take in what has settled. A drop that cannot be read is told of, and its files are lacking."""
        try:
            lying = intake.look(self.site.drop)
        except WrongUse as error:
            self._tell(state, "reading the drop", _reason(error), now)
            return
        self.seen = {file: self.seen.get(file, now) for file in lying}
        untouched_since = (now - SETTLING).timestamp() * 1e9
        settled = [
            file for file, since in self.seen.items() if file.changed <= untouched_since or since <= now - SETTLING
        ]
        for fact in take_in(state, now, settled):
            LOG.info("%s %s", fact.KIND, fact.name)

    def _due(self, state: State, terms: str, now: datetime) -> list[tuple[Round, date]]:
        """The evenings whose time has come: those not yet checked, and those of which a file came since."""
        signed = state.terms(terms)
        sessions = sessions_of(state, terms, now.date() + timedelta(days=1))
        self._note_late_files(state, terms, now)
        found: set[tuple[Round, date]] = set()
        for each in self.site.settings.rounds:
            done = evenings.days_done(state.index(), each.id)
            if done:
                newest = min(max(done), now.date())
                days = due_since(each, signed, sessions, max(min(done), newest - GAPS_SOUGHT), now)
                found |= {(each, day) for day in days if day not in done}
            else:
                found |= {(each, day) for _, day in newest_due([each], signed, sessions, now)}
            found |= {(each, own.day) for own in self.late if own.round == each.id}
        due = [(each.moment(day, each.at), each, day) for each, day in found]
        return [(each, day) for at, each, day in sorted(due, key=lambda one: one[0]) if at <= now]

    def _note_late_files(self, state: State, terms: str, now: datetime) -> None:
        """Note the evenings of the files that came; of a file without a date, as instruments, the newest if incomplete.

        After a start all files are looked through, for a crash may have come between a file and its evening; but only
        for recent evenings.
        """
        index, started = state.index(), self.known == 0
        for day, seq in accepted_after(index, self.known):
            for each in self.site.settings.rounds:
                own = evenings.latest(index, day, each.id) if day else evenings.newest(index, each.id)
                if own is None or own.recipe.known >= seq or not (day or own.outcome is Outcome.INCOMPLETE):
                    continue
                due = Due(own.recipe.date, each.id)
                if not started or is_recent(state, terms, due, now):
                    self.late.add(due)
        self.known = state.ledger.head().seq

    def _check(self, state: State, terms: str, round_: Round, day: date, now: datetime) -> Checked | None:
        """Check one evening, or wait for its files until it is given up."""
        due = Due(day, round_.id)
        given_up = now >= round_.moment(day, round_.give_up_at)
        try:
            lacking = would_lack(state, terms, day, round_.id)
            if lacking and not given_up:
                LOG.info("the evening of %s, round %s, waits: %s", day, round_.id, "; ".join(lacking))
                return None
            checked = check_evening(state, terms, day, round_.id, now, is_recent(state, terms, due, now))
        except Busy:
            raise
        except Exception as error:
            reason = _reason(error)
            if given_up and due not in self.late:
                self._record_missed(state, EveningMissed(day, round_.id, reason), now)
            else:
                self._tell(state, f"checking the evening of {day}, round {round_.id}", reason, now)
            return None
        self.late.discard(due)
        LOG.info("the evening of %s, round %s: %s", day, round_.id, checked.evening.outcome)
        return checked

    def _record_missed(self, state: State, fact: EveningMissed, now: datetime) -> None:
        LOG.error("the evening of %s, round %s, is given up: %s", fact.day, fact.round, fact.reason)
        settings = state.site.settings
        with state.ledger.transaction(now) as transaction:
            entry = transaction.append(fact)
            notices = compose_missed(settings.site, fact, settings.notices.nightly_note, entry.seq, entry.hash)
            state.queue(transaction, notices, (entry.seq, entry.hash))

    def _tell(self, state: State, what: str, reason: str, now: datetime) -> None:
        """Queue a notice of a trouble, unless it was told today."""
        settings = state.site.settings
        today = now.astimezone(ZoneInfo(settings.time_zone)).date()
        LOG.error("trouble at %s: %s", what, reason)
        if (today, what, reason) in self.troubles:
            return
        head = state.ledger.head()
        notices = compose_trouble(
            settings.site, what, reason, today, settings.notices.nightly_note, head.seq, head.hash
        )
        with state.ledger.transaction(now) as transaction:
            state.queue(transaction, notices, (head.seq, head.hash))
        self.troubles.add((today, what, reason))


def _reason(error: Exception) -> str:
    """What went wrong, in words; the log has the trace of a defect."""
    if isinstance(error, DuskcheckError):
        return str(error)
    LOG.error("a defect of the program", exc_info=error)
    return f"a defect of the program ({type(error).__name__}); its log has more"


def _untouched(site: Site, now: datetime) -> bool:
    """Whether nobody wrote the site file or a rule file lately. A time that lies ahead of the clock says nothing."""
    files = [site.file, *(site.beside(name) for name, _ in site.rule_files)]
    try:
        changed = [file.stat().st_mtime for file in files]
    except OSError:  # taken away since it was read
        return False
    return not any((now - SETTLING).timestamp() < at <= now.timestamp() for at in changed)
