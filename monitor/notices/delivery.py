"""What every channel shares: what is handed to it, what it answers, and a limit to how long it may take."""

from __future__ import annotations

import threading
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any, TypeVar

from monitor.notices.settings import Secret
from monitor.words import WrongUse

Result = TypeVar("Result")


@dataclass(frozen=True)
class Envelope:
    """One notice for one receiver. queued_at: with a zone. name, address: of the person, None where there is none.

    first: the id of the notice, to the same receiver, that opened the excess this one speaks of; None for others.
    """

    id: str
    topic: str
    key: str
    title: str
    text: str
    html: str
    data: dict[str, Any]
    queued_at: datetime
    name: str | None = None
    address: str | None = None
    first: str | None = None

    @property
    def site(self) -> str:
        return str(self.data["site"])


@dataclass(frozen=True)
class Surroundings:
    """Where channels find what the site file only names: `folder` is that of the site file."""

    folder: Path
    environment: Mapping[str, str]


@dataclass(frozen=True)
class Receipt:
    """What a channel said when it took a notice."""

    text: str


class Retry(Exception):
    """Not taken now; a later try may succeed. `unreachable`: nothing else need be tried on this channel just now.

    after: how long the receiver asked to be left alone.
    """

    def __init__(self, reason: str, unreachable: bool = False, after: timedelta = timedelta(0)) -> None:
        super().__init__(reason)
        self.unreachable = unreachable
        self.after = after


class Final(Exception):
    """Refused for good: the same notice would be refused again."""


def plain_text(value: str | Secret, around: Surroundings) -> str:
    """A setting itself, read now when it is a secret: it is never kept, shown or recorded. Raises Retry without it."""
    if isinstance(value, str):
        return value
    try:
        return value.read(around.folder, around.environment)
    except WrongUse as error:
        raise Retry(str(error), unreachable=True) from None


def within(seconds: float, action: Callable[[], Result]) -> Result:
    """What `action` gives or raises; Retry when it is not done in time.

    A socket's timeout counts from byte to byte and finding a host's address has none at all, so that a server that
    drips could hold the caller for hours. The thread left behind ends with its sockets' own timeouts; should the
    server take the notice after all, the next try has the same id.
    """
    results: list[Result] = []
    errors: list[BaseException] = []

    def run() -> None:
        try:
            results.append(action())
        except BaseException as error:  # raised again in the caller's thread
            errors.append(error)

    thread = threading.Thread(target=run, daemon=True)
    thread.start()
    thread.join(seconds)
    if thread.is_alive():
        raise Retry(f"no answer within {seconds:g} s", unreachable=True)
    if errors:
        raise errors[0]
    return results[0]
