"""The outbox from queue to receipt, on a real ledger, archive, index and servers."""

from __future__ import annotations

import json
import socket
from collections.abc import Callable, Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
from notices_scene import EVENING, HASH, make_answer, make_excess
from pytest_httpserver import HTTPServer

from monitor.facts import NoticeFailed, NoticeQueued, NoticeSent
from monitor.ledger.archive import Archive
from monitor.ledger.chain import Ledger
from monitor.ledger.index import Index
from monitor.notices.compose import compose
from monitor.notices.delivery import Surroundings
from monitor.notices.message import Notice, Topic
from monitor.notices.news import EveningNews
from monitor.notices.outbox import OUTBOX, WAITS, Result, drain, queue, waiting
from monitor.notices.settings import (
    Channel,
    EmailChannel,
    FolderChannel,
    Group,
    NoticeSettings,
    Person,
    WebhookChannel,
)
from monitor.words import CuredBy, ExcessState

NOW = datetime(2026, 3, 4, 19, 15, tzinfo=UTC)
OSEI = Person(id="m.osei", name="M. Osei", address="m.osei@saltmere.example")
BOARD = Person(id="board", name="The board", address="board@saltmere.example")
SILENT = Person(id="silent", name="No Address")
TRAY = FolderChannel(id="tray", kind="folder", path="tray")
MAIL = EmailChannel(id="mail", kind="email", host="127.0.0.1", port=1, sender="dusk@saltmere.example", tls="none")
HOOK = WebhookChannel(id="hook", kind="webhook", url="http://127.0.0.1:1/", timeout_seconds=2)
Make = Callable[..., EveningNews]


def settings(*channels: Channel, people: tuple[Person, ...] = (OSEI, BOARD, SILENT)) -> NoticeSettings:
    ids = tuple(channel.id for channel in channels)
    desk = Group("risk-desk", ("m.osei", "silent"), ids)
    board = Group("board", ("board", "m.osei"), ids)
    return NoticeSettings(people, channels, (desk, board), "risk-desk")


def notice(topic: Topic = Topic.NIGHTLY_NOTE, key: str = "nightly", tell: tuple[str, ...] = ("risk-desk",)) -> Notice:
    data = {"site": "Saltmere Trust", "business_date": "2026-03-04", "record": {"seq": 1, "hash": HASH}}
    return Notice(topic, key, f"{topic} {key}", tell, "text\n", "<p>html</p>", data)


class Office:
    """A site's state, with what a command does to it."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.ledger = Ledger.open(folder / "state" / "ledger.sqlite", create=True)
        self.index = Index(folder / "state" / "index.sqlite", (OUTBOX,))
        self.archive = Archive(folder / "state" / "archive")

    def queue(
        self, notices: list[Notice], known: NoticeSettings, after: tuple[int, str] = (1, HASH), at: datetime = NOW
    ) -> list[NoticeQueued]:
        facts = queue(notices, known, self.archive, after)
        with self.ledger.transaction(at) as transaction:
            for fact in facts:
                transaction.append(fact)
        return facts

    def drain(self, known: NoticeSettings, now: datetime = NOW) -> list[Result]:
        connection = self.index.caught_up(self.ledger)
        return drain(self.ledger, connection, self.archive, known, Surroundings(self.folder, {}), now)

    def rows(self, state: str | None = None) -> list[Any]:
        return waiting(self.index.caught_up(self.ledger), state)

    def facts(self) -> list[Any]:
        return [entry.fact for entry in self.ledger.entries()]


@pytest.fixture
def office(tmp_path: Path) -> Iterator[Office]:
    office = Office(tmp_path)
    yield office
    office.index.close()
    office.ledger.close()


def test_each_person_gets_mail_and_each_other_channel_one_copy(office: Office) -> None:
    known = settings(TRAY, MAIL, HOOK)

    facts = office.queue([notice(tell=("risk-desk", "board", "risk-desk"))], known)

    assert [(f.channel, f.person) for f in facts] == [
        ("tray", None),
        ("mail", "m.osei"),
        ("hook", None),
        ("mail", "board"),
    ]
    assert len({f.id for f in facts}) == 4
    [stored] = json.loads(office.archive.get(facts[0].content))
    assert (stored["text"], stored["data"]["site"]) == ("text\n", "Saltmere Trust")


def test_a_group_that_is_gone_counts_as_the_nightly_one(office: Office) -> None:
    facts = office.queue([notice(tell=("dissolved",))], settings(TRAY, MAIL))

    assert [(f.channel, f.person) for f in facts] == [("tray", None), ("mail", "m.osei")]


def test_no_notices_queue_nothing(office: Office) -> None:
    assert office.queue([], settings(TRAY)) == []
    assert not (office.folder / "state" / "archive").exists()


def test_a_repeat_has_the_same_id_and_another_evening_another(office: Office) -> None:
    known = settings(TRAY)

    first = office.queue([notice()], known)
    again = office.queue([notice()], known)
    later = office.queue([notice()], known, after=(2, "cd" * 32))

    assert first[0].id == again[0].id != later[0].id
    assert len(office.rows()) == 2


def test_what_is_sent_is_recorded_and_not_sent_again(office: Office) -> None:
    known = settings(TRAY)
    [fact] = office.queue([notice()], known)

    [result] = office.drain(known)

    assert result.sent
    assert office.facts()[-1] == NoticeSent(fact.id, 1, result.said)
    assert [row.state for row in office.rows()] == ["sent"]
    assert office.drain(known, NOW + timedelta(days=1)) == []
    assert len(list((office.folder / "tray").glob("*.eml"))) == 1


def test_a_sent_notice_stays_sent_whatever_comes_after(office: Office) -> None:
    known = settings(TRAY)
    [fact] = office.queue([notice()], known)
    office.drain(known)

    office.queue([notice()], known)
    with office.ledger.transaction(NOW) as transaction:  # another process tried at the same time, and failed
        transaction.append(
            NoticeFailed(fact.id, 1, "the disk is full", final=False, next_try="2026-03-13T00:00:00.000Z")
        )

    assert [row.state for row in office.rows()] == ["sent"]
    assert office.drain(known, NOW + timedelta(days=1)) == []


def test_dead_servers_do_not_keep_the_others_from_sending(office: Office, httpserver: HTTPServer) -> None:
    httpserver.expect_request("/notices").respond_with_data("", status=204)
    with socket.socket() as reserved:
        reserved.bind(("127.0.0.1", 0))  # bound and not listening: connections are refused
        mail = MAIL.model_copy(update={"port": reserved.getsockname()[1]})
        hook = HOOK.model_copy(update={"url": httpserver.url_for("/notices")})
        known = settings(mail, hook, TRAY)
        office.queue([notice(), notice(key="second")], known)

        results = office.drain(known)

    assert [(r.notice.channel, r.sent) for r in results] == [
        ("tray", True),
        ("tray", True),
        ("mail", False),  # once: the second would meet the same
        ("hook", True),
        ("hook", True),
    ]
    assert [(row.channel, row.attempts) for row in office.rows("pending")] == [("mail", 1), ("mail", 0)]


def test_waits_grow_and_the_last_try_is_final(office: Office) -> None:
    (office.folder / "tray").write_text("in the way")
    known = settings(TRAY)
    office.queue([notice()], known)
    now, tried = NOW, []

    while office.rows("pending"):
        assert office.drain(known, now - timedelta(milliseconds=1)) == []
        [result] = office.drain(known, now)
        tried.append(now - NOW)
        now += WAITS[min(len(tried), len(WAITS)) - 1]

    assert [str(t) for t in tried[:6]] == ["0:00:00", "0:00:05", "0:05:05", "0:35:05", "2:35:05", "7:35:05"]
    assert timedelta(days=3) < tried[-1] < timedelta(days=4)
    assert result.final
    failures = [fact for fact in office.facts() if isinstance(fact, NoticeFailed)]
    assert [fact.final for fact in failures] == [False] * len(WAITS) + [True]
    assert [row.state for row in office.rows()] == ["failed"]


def test_a_folder_that_comes_back_gets_what_waited(office: Office) -> None:
    blocker = office.folder / "tray"
    blocker.write_text("in the way")
    known = settings(TRAY)
    office.queue([notice()], known)
    office.drain(known)
    blocker.unlink()

    [result] = office.drain(known, NOW + WAITS[0])

    assert result.sent
    assert office.facts()[-1].attempt == 2


def test_a_channel_taken_out_of_the_site_file_is_not_forgotten(office: Office) -> None:
    office.queue([notice()], settings(MAIL, TRAY))

    results = office.drain(settings(TRAY))

    assert [(r.notice.channel, r.sent, r.final) for r in results] == [("tray", True, True), ("mail", False, False)]


def test_a_text_lost_from_the_archive_stops_only_its_own_notices(office: Office) -> None:
    known = settings(TRAY)
    [lost] = office.queue([notice(key="lost")], known)
    office.queue([notice(key="kept")], known)
    office.archive.path(lost.content).unlink()

    results = office.drain(known)

    assert [(r.notice.title, r.sent) for r in results] == [("nightly_note lost", False), ("nightly_note kept", True)]
    assert "missing" in results[0].said


def test_a_crash_after_sending_sends_the_same_again(office: Office, monkeypatch: pytest.MonkeyPatch) -> None:
    known = settings(TRAY)
    office.queue([notice()], known)
    with monkeypatch.context() as patched:
        patched.setattr(office.ledger, "transaction", _power_cut)
        with pytest.raises(KeyboardInterrupt):
            office.drain(known)
    before = {path.name: path.read_bytes() for path in (office.folder / "tray").iterdir()}

    [result] = office.drain(known)

    assert result.sent
    assert {path.name: path.read_bytes() for path in (office.folder / "tray").iterdir()} == before


def _power_cut(now: datetime) -> Any:
    raise KeyboardInterrupt


def test_the_index_rebuilt_holds_the_same_outbox(office: Office) -> None:
    known = settings(TRAY, MAIL)
    office.queue([notice()], known)
    office.drain(known)
    before = office.rows()
    office.index.close()
    (office.folder / "state" / "index.sqlite").unlink()

    assert office.rows() == before


def test_a_cure_refers_to_the_notice_of_the_opening(office: Office, evening: Make) -> None:
    known = settings(TRAY)
    excess = make_excess()
    other = make_excess(id="x-0008")
    opened = compose(evening(opened=((excess, make_answer()), (other, make_answer())), alive={excess: 1, other: 1}))
    first = office.queue(opened, known)
    cured = make_excess(state=ExcessState.CURED, cured_on=EVENING, cured_by=CuredBy.FIGURE)
    later = office.queue(compose(evening(cured=((cured, None),))), known, (9, "cd" * 32), NOW + timedelta(days=1))

    office.drain(known, NOW + timedelta(days=1))

    opening = next(f.id for f in first if f.topic == Topic.EXCESS_OPENED)
    cure = next(f.id for f in later if f.topic == Topic.EXCESS_CURED)
    [message] = (office.folder / "tray").glob(f"*_{cure}.eml")
    assert f"References: <{opening}@duskcheck.invalid>" in message.read_text()
