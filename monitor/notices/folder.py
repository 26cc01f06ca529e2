"""The folder channel: each notice as a message a mail reader opens (.eml) and as an event a program reads (.json)."""

from __future__ import annotations

import json
import os
import re
from datetime import datetime
from pathlib import Path

from monitor.notices.delivery import Envelope, Receipt, Retry, Surroundings
from monitor.notices.event import cloud_event
from monitor.notices.mail_message import mail_message
from monitor.notices.settings import FolderChannel

_SENDER = "duskcheck@duskcheck.invalid"  # RFC 2606: a domain that never is anybody's


def deliver(channel: FolderChannel, envelope: Envelope, now: datetime, around: Surroundings) -> Receipt:  # noqa: ARG001
    """Write both files whole or not at all; a repeat replaces them by the same. Raises Retry when the disk will not."""
    folder = around.folder / channel.path
    day = str(envelope.data.get("business_date") or envelope.queued_at.date().isoformat())
    stem = re.sub(r"[^A-Za-z0-9_.-]", "-", f"{day}_{envelope.topic}_{envelope.id}")
    event = json.dumps(cloud_event(envelope), ensure_ascii=False, allow_nan=False, indent=1) + "\n"
    message = mail_message(envelope, _SENDER)
    # The boundary between the parts is otherwise drawn at random, and a repeat would differ.
    message.set_boundary(f"===={envelope.id}====")
    try:
        folder.mkdir(parents=True, exist_ok=True)
        _write(folder / f"{stem}.eml", message.as_bytes())
        _write(folder / f"{stem}.json", event.encode())
        _sync(folder)
    except OSError as error:
        raise Retry(f"writing to {folder} failed: {error.strerror or error}", unreachable=True) from None
    return Receipt(f"{folder.name}/{stem}.eml")


def _write(path: Path, content: bytes) -> None:
    temporary = path.with_name(f".{path.name}.part")
    with temporary.open("wb") as file:
        file.write(content)
        file.flush()
        os.fsync(file.fileno())
    temporary.replace(path)


def _sync(folder: Path) -> None:
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
