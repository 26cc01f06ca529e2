"""The daemon's life: one look a minute and at each round's time, in the foreground, until a signal ends it."""

from __future__ import annotations

import logging
import os
import signal
import threading
from datetime import UTC, datetime
from pathlib import Path

import monitor
from monitor.adoption import adopt
from monitor.daemon.log import log_to_stderr
from monitor.daemon.watch import Watch
from monitor.facts import DaemonStarted, DaemonStopped, Fact
from monitor.ledger.lock import lock
from monitor.run import hand, open_for_checking
from monitor.site import open_site
from monitor.state import State, open_state
from monitor.words import Exit

EVERY_SECONDS = 60
LOG = logging.getLogger("duskcheck")


def serve(site_file: Path) -> int:
    """Check evenings on schedule. SIGTERM and SIGINT end it after the step in hand.

    Raises WrongUse when the site or its rules are wrong at the start, and Busy when a daemon of this site runs already.
    """
    from apscheduler.executors.pool import ThreadPoolExecutor
    from apscheduler.schedulers.background import BackgroundScheduler
    from apscheduler.triggers.cron import CronTrigger
    from apscheduler.triggers.interval import IntervalTrigger

    log_to_stderr()
    site = open_site(site_file)
    stop = threading.Event()
    reasons: list[str] = []

    def on_signal(number: int, _frame: object) -> None:
        reasons.append(signal.Signals(number).name)
        stop.set()

    with lock(site.state / "daemon.lock", what=f"the daemon of {site.settings.site}"):
        signal.signal(signal.SIGTERM, on_signal)
        signal.signal(signal.SIGINT, on_signal)
        now = datetime.now(UTC)
        with open_for_checking(site) as state:
            adopt(state, now, hand())
            _record(state, DaemonStarted(f"duskcheck {monitor.__version__}", os.getpid(), hand()), now)
        watch = Watch(site_file, site, stop.is_set)
        # One worker: a look never runs beside another. Late or doubled triggers come to one look.
        scheduler = BackgroundScheduler(
            timezone=UTC,
            executors={"default": ThreadPoolExecutor(1)},
            job_defaults={"misfire_grace_time": None, "coalesce": True, "max_instances": 1},
        )

        def look() -> None:
            if not stop.is_set():
                watch.look(datetime.now(UTC))

        scheduler.add_job(look, IntervalTrigger(seconds=EVERY_SECONDS, timezone=UTC), next_run_time=datetime.now(UTC))
        for each in site.settings.rounds:
            at = each.at
            scheduler.add_job(
                look, CronTrigger(hour=at.hour, minute=at.minute, second=at.second, timezone=each.time_zone)
            )
        scheduler.start()
        LOG.info("started, process %d", os.getpid())
        stop.wait()
        LOG.info("stopping after the step in hand: %s", reasons[0])
        scheduler.shutdown(wait=True)
        # Not what was read at the start is in force now, and a check running beside is no reason to wait.
        with open_state(watch.site) as state:
            _record(state, DaemonStopped(reasons[0], os.getpid()), datetime.now(UTC))
        LOG.info("stopped")
    return Exit.DONE


def _record(state: State, fact: Fact, now: datetime) -> None:
    with state.ledger.transaction(now) as transaction:
        transaction.append(fact)
