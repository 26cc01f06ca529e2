"""The daemon as a process of its own, on the real clock, with a mail server and a web server that are real too."""

from __future__ import annotations

import email
import email.policy
import json
import signal
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from datetime import UTC, date, datetime, timedelta
from email.message import EmailMessage
from functools import cache
from pathlib import Path
from typing import Any

import pytest
from aiosmtpd.controller import Controller
from evening_scene import RULES, TRAY, account, environment, leave_files, write_site
from pytest_httpserver import HTTPServer
from werkzeug import Request, Response

from monitor.site import open_site
from monitor.state import open_state

DUE_NOW = '- {id: all, at: "00:00", give_up_at: "23:59"}'
DEADLINE = 60


@cache
def sessions() -> list[date]:
    """The sessions of Dublin's exchange up to today."""
    import exchange_calendars

    today = datetime.now(UTC).date()
    first = (today - timedelta(days=120)).isoformat()
    known = exchange_calendars.get_calendar("XDUB").sessions_in_range(first, today.isoformat())
    return [session.date() for session in known]


class Mailbox:
    """An aiosmtpd handler that keeps what it takes."""

    def __init__(self) -> None:
        self.taken: list[EmailMessage] = []

    async def handle_DATA(self, _server: Any, _session: Any, envelope: Any) -> str:  # noqa: N802
        self.taken.append(email.message_from_bytes(envelope.content, policy=email.policy.default))  # type: ignore[arg-type]
        return "250 OK"


@pytest.fixture
def mailbox() -> Iterator[tuple[Mailbox, int]]:
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port = free.getsockname()[1]
    box = Mailbox()
    controller = Controller(box, hostname="127.0.0.1", port=port)
    controller.start()
    yield box, port
    controller.stop()


class Daemon:
    """`duskcheck daemon` of a site; what it logs is read when it has ended."""

    def __init__(self, site: Path) -> None:
        self.site = site
        self._log = (site.parent / "daemon.log").open("a+")
        self.process = subprocess.Popen(command("daemon", "--site", site), stderr=self._log, env=environment())

    def end(self, number: int) -> int:
        self.process.send_signal(number)
        return self.process.wait(timeout=DEADLINE)

    def log(self) -> list[dict[str, Any]]:
        return [json.loads(line) for line in Path(self._log.name).read_text().splitlines()]

    def close(self) -> None:
        if self.process.poll() is None:
            self.process.kill()
            self.process.wait(timeout=DEADLINE)
        self._log.close()


def command(*arguments: str | Path) -> list[str]:
    return [sys.executable, "-c", "from monitor.cli import main; main()", *map(str, arguments)]


def run(*arguments: str | Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        command(*arguments), capture_output=True, text=True, env=environment(), check=False, timeout=120
    )


def wait_until(come: Callable[[], bool], what: str) -> None:
    deadline = time.monotonic() + DEADLINE
    while not come():
        assert time.monotonic() < deadline, f"not within {DEADLINE} s: {what}"
        time.sleep(0.02)


@pytest.fixture
def make_site(tmp_path: Path) -> Callable[..., Path]:
    """A site whose newest evening is due now, over its limit, with all its files."""

    def make(*channels: str) -> Path:
        site = write_site(tmp_path / "site", sessions()[:-1], channels=(TRAY, *channels), rounds=DUE_NOW)
        leave_files(site, sessions()[-1], big=True)
        return site

    return make


@pytest.fixture
def daemons() -> Iterator[Callable[[Path], Daemon]]:
    started: list[Daemon] = []

    def start(site: Path) -> Daemon:
        started.append(Daemon(site))
        return started[-1]

    yield start
    for daemon in started:
        daemon.close()


def sent(site: Path) -> list[str]:
    """The topics of the notices sent so far; none before there is a record."""
    if not (site.parent / "state" / "index.sqlite").exists():
        return []
    return [topic for topic, _, _, _, state in account(site)["notices"] if state == "sent"]


def kinds(site: Path) -> list[str]:
    with open_state(open_site(site)) as state:
        return [entry.fact.KIND for entry in state.ledger.entries()]


def test_an_evening_of_the_daemon_reaches_mail_hook_and_folder(
    make_site: Callable[..., Path],
    daemons: Callable[[Path], Daemon],
    mailbox: tuple[Mailbox, int],
    httpserver: HTTPServer,
):
    """The whole life: started, an evening, a second daemon and a check beside it, new rules, stopped."""
    box, port = mailbox
    httpserver.expect_request("/notices", method="POST").respond_with_data("")
    url = httpserver.url_for("/notices")
    site = make_site(
        f"- {{id: mail, kind: email, host: 127.0.0.1, port: {port}, sender: duskcheck@saltmere.example, tls: none}}",
        f'- {{id: hook, kind: webhook, url: "{url}"}}',
    )
    day = str(sessions()[-1])

    daemon = daemons(site)
    wait_until(lambda: len(box.taken) >= 2 and len(httpserver.log) >= 2, "an excess and a nightly note by both ways")
    wait_until(lambda: len(sent(site)) == 6, "all notices recorded as sent")

    subjects = [str(message["Subject"]) for message in box.taken]
    assert len(subjects) == 2
    assert [subject for subject in subjects if subject.startswith("OVER: gross of harbour, EUR ") and day in subject]
    assert f"Saltmere Trust {day} (all): 1 over" in subjects
    for message in box.taken:
        assert message.get_content_type() == "multipart/alternative"
        text, html = message.iter_parts()
        assert (text.get_content_type(), html.get_content_type()) == ("text/plain", "text/html")
        assert "harbour" in text.get_content() and "harbour" in html.get_content()
        assert str(message["To"]) == '"M. Osei" <m.osei@saltmere.example>'
    events = [json.loads(request.get_data()) for request, _ in httpserver.log]
    assert {event["type"] for event in events} == {"duskcheck.notice.excess_opened", "duskcheck.notice.nightly_note"}
    for event, (request, _) in zip(events, httpserver.log, strict=True):
        assert event["specversion"] == "1.0" and event["source"] == "/duskcheck/Saltmere%20Trust"
        assert event["data"]["business_date"] == day
        assert request.headers["webhook-id"] == event["id"]
        assert request.headers["content-type"].startswith("application/cloudevents+json")

    second = run("daemon", "--site", site)
    assert second.returncode == 1
    assert f"the daemon of Saltmere Trust is in use by process {daemon.process.pid} on" in second.stderr

    (site.parent / "rules" / "limits.yaml").write_text(RULES.replace("limit: 15000", "limit: 16000"))
    beside = run("check", "--site", site, "--json")
    assert (beside.returncode, beside.stderr) == (3, "")
    evening = json.loads(beside.stdout)
    assert (evening["business_date"], evening["edition"]) == (day, 2)

    assert daemon.end(signal.SIGTERM) == 0
    recorded = kinds(site)
    assert (recorded[0], recorded[-1]) == ("site.opened", "daemon.stopped")
    assert recorded.count("daemon.started") == recorded.count("daemon.stopped") == 1
    assert recorded.count("rules.adopted") == 2  # stopping does not bring back the rules of the start
    assert account(site)["problems"] == ()
    assert [line["level"] for line in daemon.log() if line["level"] != "info"] == []


def test_a_stop_waits_for_the_step_in_hand_and_a_second_start_tells_nothing_twice(
    make_site: Callable[..., Path], daemons: Callable[[Path], Daemon], httpserver: HTTPServer
):
    asked, answered = threading.Event(), threading.Event()

    def answer(_request: Request) -> Response:
        asked.set()
        assert answered.wait(DEADLINE)
        return Response()

    httpserver.expect_request("/notices").respond_with_handler(answer)
    site = make_site(f'- {{id: hook, kind: webhook, url: "{httpserver.url_for("/notices")}", timeout_seconds: 60}}')
    daemon = daemons(site)
    assert asked.wait(DEADLINE)

    daemon.process.send_signal(signal.SIGTERM)
    time.sleep(0.2)
    assert daemon.process.poll() is None
    answered.set()
    assert daemon.process.wait(timeout=DEADLINE) == 0

    first = account(site)
    assert {state for *_, state in first["notices"]} == {"sent"}
    again = daemons(site)
    wait_until(lambda: kinds(site).count("daemon.started") == 2, "a second start")
    assert again.end(signal.SIGINT) == 0
    after = account(site)
    assert {**after["entries"], "daemon.started": 1, "daemon.stopped": 1} == first["entries"]
    assert len(httpserver.log) == 2


def test_a_daemon_that_was_killed_goes_on_where_it_was(
    make_site: Callable[..., Path], daemons: Callable[[Path], Daemon]
):
    site = make_site()
    killed = daemons(site)
    wait_until(lambda: bool(sent(site)), "a first notice")
    assert killed.end(signal.SIGKILL) == -signal.SIGKILL

    daemon = daemons(site)
    wait_until(lambda: kinds(site).count("daemon.started") == 2, "a second start")
    wait_until(lambda: sorted(set(sent(site))) == ["excess_opened", "nightly_note"], "all notices sent")
    assert daemon.end(signal.SIGTERM) == 0

    record = account(site)
    assert record["problems"] == ()
    assert record["entries"]["evening.checked"] == record["entries"]["excess.opened"] == 1
    assert record["entries"]["notice.queued"] == 2
    assert f"{sessions()[-1]}_all_1.html" in record["pages"]


@pytest.mark.parametrize("harm", ["site", "rules", "no site"])
def test_a_daemon_does_not_start_on_a_wrong_site(make_site: Callable[..., Path], harm: str):
    site = make_site()
    if harm == "site":
        site.write_text(site.read_text() + "nonsense: 1\n")
    elif harm == "rules":
        (site.parent / "rules" / "limits.yaml").write_text("rules: 7\n")
    else:
        site.rename(site.with_suffix(".away"))

    ended = run("daemon", "--site", site)

    assert ended.returncode == 2
    assert "Traceback" not in ended.stderr and ended.stderr.startswith("duskcheck: ")
