"""The outbox: notices wait in it, as ledger entries, until a channel took them.

A notice is queued in the transaction of what it tells of, so that neither is without the other. It is sent afterwards
and the result recorded right after the sending; a crash in between sends it again, with the same id.
"""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Iterable
from dataclasses import asdict, dataclass
from datetime import UTC, datetime, timedelta
from functools import partial
from typing import Any

from monitor.facts import Entry, NoticeFailed, NoticeQueued, NoticeSent
from monitor.ledger.archive import Archive
from monitor.ledger.chain import Ledger
from monitor.ledger.index import Projection
from monitor.notices import email, folder, webhook
from monitor.notices.delivery import Envelope, Final, Receipt, Retry, Surroundings
from monitor.notices.message import Notice, Topic, notice_id
from monitor.notices.receivers import receivers
from monitor.notices.settings import Channel, EmailChannel, FolderChannel, NoticeSettings
from monitor.words import Damaged

# How long to wait after each try that did not succeed, about 3 days in all; after the last the notice is given up.
WAITS = tuple(timedelta(seconds=seconds) for seconds in (5, 5 * 60, 30 * 60, 2 * 3600, 5 * 3600, *(10 * 3600,) * 7))
_TABLES = """
CREATE TABLE outbox (
    id TEXT PRIMARY KEY, seq INTEGER NOT NULL, at TEXT NOT NULL, channel TEXT NOT NULL, person TEXT,
    topic TEXT NOT NULL, title TEXT NOT NULL, content TEXT NOT NULL, place INTEGER NOT NULL,
    after_seq INTEGER NOT NULL, after_hash TEXT NOT NULL,
    attempts INTEGER NOT NULL, next_try TEXT, state TEXT NOT NULL, said TEXT NOT NULL
) STRICT;
CREATE INDEX outbox_state ON outbox (state, next_try);
CREATE INDEX outbox_topic ON outbox (topic, channel);
"""
_COLUMNS = (
    "id, seq, at, channel, person, topic, title, content, place, after_seq, after_hash, attempts, next_try, state, said"
)


@dataclass(frozen=True)
class Waiting:
    """A row of the outbox. state: pending, sent or failed. at, next_try: UTC text. said: the last receipt or reason."""

    id: str
    seq: int
    at: str
    channel: str
    person: str | None
    topic: str
    title: str
    content: str
    place: int
    after_seq: int
    after_hash: str
    attempts: int
    next_try: str | None
    state: str
    said: str


@dataclass(frozen=True)
class Result:
    """What became of one try. `said` is the receipt, or the reason; `final`: there will be no further try.

    next_try: UTC text, None when there is none.
    """

    notice: Waiting
    sent: bool
    final: bool
    said: str
    next_try: str | None = None


def queue(
    notices: Iterable[Notice], settings: NoticeSettings, archive: Archive, after: tuple[int, str]
) -> list[NoticeQueued]:
    """The entries to append for notices about the entry `after` (its seq and hash); their content goes to the archive.

    One entry for each notice and receiver.
    """
    notices = list(notices)
    if not notices:
        return []
    seq, entry_hash = after
    batch = json.dumps([asdict(notice) for notice in notices], ensure_ascii=False, allow_nan=False, indent=1)
    content = archive.put(batch.encode())
    return [
        NoticeQueued(
            id=notice_id(str(notice.data["site"]), entry_hash, notice.topic, notice.key, channel, person),
            topic=notice.topic.value,
            title=notice.title,
            channel=channel,
            person=person,
            content=content,
            place=place,
            after_seq=seq,
            after_hash=entry_hash,
        )
        for place, notice in enumerate(notices)
        for channel, person in receivers(notice.tell, settings)
    ]


def waiting(connection: sqlite3.Connection, state: str | None = None) -> list[Waiting]:
    """The rows of the outbox in the order they were queued, of one state or of all."""
    rows = connection.execute(
        f"SELECT {_COLUMNS} FROM outbox WHERE ? IS NULL OR state = ? ORDER BY seq", (state, state)
    )
    return [Waiting(*row) for row in rows]


def drain(
    ledger: Ledger,
    connection: sqlite3.Connection,
    archive: Archive,
    settings: NoticeSettings,
    around: Surroundings,
    now: datetime,
) -> list[Result]:
    """Try every notice that is pending and due, oldest first, folders before servers; record each result at once.

    connection: the index, caught up. Once a channel cannot be reached its other notices are left for the next drain.
    """
    channels = {channel.id: channel for channel in settings.channels}
    contents = _Contents(archive)
    results: list[Result] = []
    unreachable: set[str] = set()
    for row in sorted(_due(connection, now), key=lambda row: not isinstance(channels.get(row.channel), FolderChannel)):
        if row.channel in unreachable:
            continue
        attempt = row.attempts + 1
        try:
            envelope = _envelope(connection, row, contents, settings)
            receipt = _deliver(channels.get(row.channel), envelope, now, around)
        except Final as error:
            result = Result(row, sent=False, final=True, said=str(error))
        except Retry as error:
            if error.unreachable:
                unreachable.add(row.channel)
            final = attempt > len(WAITS)
            wait = max(WAITS[min(attempt, len(WAITS)) - 1], error.after)
            result = Result(
                row, sent=False, final=final, said=str(error), next_try=None if final else _text(now + wait)
            )
        else:
            result = Result(row, sent=True, final=True, said=receipt.text)
        fact = (
            NoticeSent(row.id, attempt, result.said)
            if result.sent
            else NoticeFailed(row.id, attempt, result.said, result.final, result.next_try)
        )
        with ledger.transaction(now) as transaction:
            transaction.append(fact)
        results.append(result)
    return results


def _deliver(channel: Channel | None, envelope: Envelope, now: datetime, around: Surroundings) -> Receipt:
    if channel is None:
        raise Retry("the site file no longer names this channel")
    if isinstance(channel, FolderChannel):
        return folder.deliver(channel, envelope, now, around)
    if isinstance(channel, EmailChannel):
        return email.deliver(channel, envelope, now, around)
    return webhook.deliver(channel, envelope, now, around)


def _due(connection: sqlite3.Connection, now: datetime) -> list[Waiting]:
    rows = connection.execute(
        f"SELECT {_COLUMNS} FROM outbox WHERE state = 'pending' AND next_try <= ? ORDER BY seq", (_text(now),)
    )
    return [Waiting(*row) for row in rows]


class _Contents:
    """Batches of notices by hash, each read once."""

    def __init__(self, archive: Archive) -> None:
        self._archive = archive
        self._batches: dict[str, list[dict[str, Any]]] = {}

    def notice(self, row: Waiting) -> dict[str, Any]:
        if row.content not in self._batches:
            try:
                self._batches[row.content] = json.loads(self._archive.get(row.content))
            except Damaged as damage:  # of one batch; the others must still go out
                raise Retry(f"its text is lost: {damage}") from None
        return self._batches[row.content][row.place]


def _envelope(connection: sqlite3.Connection, row: Waiting, contents: _Contents, settings: NoticeSettings) -> Envelope:
    notice = contents.notice(row)
    people = {person.id: person for person in settings.people}
    person = people.get(row.person) if row.person else None
    return Envelope(
        id=row.id,
        topic=row.topic,
        key=notice["key"],
        title=row.title,
        text=notice["text"],
        html=notice["html"],
        data=notice["data"],
        queued_at=datetime.fromisoformat(row.at),
        name=person.name if person else None,
        address=person.address if person else None,
        first=_first(connection, row, notice),
    )


def _first(connection: sqlite3.Connection, row: Waiting, notice: dict[str, Any]) -> str | None:
    """The id of the notice that told the same receiver that this excess had opened.

    A notice's id follows from the entry it speaks of, so it is found by asking, for each evening that had any such
    notice, which id it would have.
    """
    if row.topic not in (Topic.EXCESS_CURED, Topic.EXCESS_VOIDED):
        return None
    site = str(notice["data"]["site"])
    opened = connection.execute(
        "SELECT id, after_hash FROM outbox WHERE topic = ? AND channel = ? AND person IS ? AND seq < ? "
        "ORDER BY seq DESC",
        (Topic.EXCESS_OPENED.value, row.channel, row.person, row.seq),
    )
    made = partial(
        notice_id, site, topic=Topic.EXCESS_OPENED, key=notice["key"], channel=row.channel, person=row.person
    )
    return next((found for found, after in opened if found == made(after=after)), None)


def _apply(connection: sqlite3.Connection, entry: Entry) -> None:
    fact = entry.fact
    match fact:
        case NoticeQueued():
            # The same notice queued twice is one notice.
            connection.execute(
                f"INSERT INTO outbox ({_COLUMNS}) VALUES (?,?,?,?,?,?,?,?,?,?,?,0,?,'pending','') "
                "ON CONFLICT DO NOTHING",
                (
                    fact.id,
                    entry.seq,
                    entry.at,
                    fact.channel,
                    fact.person,
                    fact.topic,
                    fact.title,
                    fact.content,
                    fact.place,
                    fact.after_seq,
                    fact.after_hash,
                    entry.at,
                ),
            )
        case NoticeSent():
            _set(connection, fact.id, fact.attempt, None, "sent", fact.receipt)
        case NoticeFailed():
            state = "failed" if fact.final else "pending"
            _set(connection, fact.id, fact.attempt, fact.next_try, state, fact.reason)


def _set(
    connection: sqlite3.Connection, notice: str, attempts: int, next_try: str | None, state: str, said: str
) -> None:
    # One that a channel took stays so, whatever another process, sending it at the same time, met with.
    connection.execute(
        "UPDATE outbox SET attempts = ?, next_try = ?, state = ?, said = ? WHERE id = ? AND state <> 'sent'",
        (attempts, next_try, state, said, notice),
    )


def _text(moment: datetime) -> str:
    return moment.astimezone(UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")


OUTBOX = Projection("outbox", 1, _TABLES, _apply)
