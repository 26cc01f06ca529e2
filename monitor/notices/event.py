"""A notice as an event: CloudEvents 1.0, structured JSON."""

from __future__ import annotations

import json
from typing import Any
from urllib.parse import quote

from monitor.notices.delivery import Envelope

CONTENT_TYPE = "application/cloudevents+json"
LARGEST_BODY = 20_000  # Standard Webhooks 1.0.0 asks receivers to take this much, and no more


def cloud_event(envelope: Envelope) -> dict[str, Any]:
    """The event with everything in it. Its id is the notice's: the same over all tries."""
    return {
        "specversion": "1.0",
        "id": envelope.id,
        "source": f"/duskcheck/{quote(envelope.site, safe='')}",
        "type": f"duskcheck.notice.{envelope.topic}",
        "time": envelope.queued_at.isoformat(timespec="seconds").replace("+00:00", "Z"),
        "subject": envelope.key,
        "datacontenttype": "application/json",
        "data": {
            "topic": envelope.topic,
            "title": envelope.title,
            "text": envelope.text,
            **envelope.data,
        },
    }


def as_bytes(event: dict[str, Any]) -> bytes:
    return json.dumps(event, ensure_ascii=False, allow_nan=False, separators=(",", ":")).encode()


def fitting(event: dict[str, Any], largest: int = LARGEST_BODY) -> bytes:
    """The event in fewer than `largest` bytes. What had to go is named under data.left_out; the text goes last."""
    body = as_bytes(event)
    data: dict[str, Any] = dict(event["data"])
    left_out: list[str] = []
    bulky = sorted(
        (key for key, value in data.items() if isinstance(value, list | dict) and key != "record"),
        key=lambda key: len(as_bytes({key: data[key]})),
        reverse=True,
    )
    for key in bulky:
        if len(body) < largest:
            break
        del data[key]
        left_out.append(key)
        body = as_bytes({**event, "data": {**data, "left_out": _statement(left_out)}})
    text = str(data["text"])
    while len(body) >= largest and text:
        text = text[: len(text) - max(1, len(body) - largest)]
        data["text"] = f"{text}\n[cut here]\n"
        body = as_bytes({**event, "data": {**data, "left_out": _statement([*left_out, "the rest of text"])}})
    return body


def _statement(left_out: list[str]) -> str:
    return f"{', '.join(left_out)}: too long for one request; the ledger and the page hold all of it"
