"""The webhook channel: one JSON POST, signed where the site gives a secret (Standard Webhooks 1.0.0)."""

from __future__ import annotations

import base64
import binascii
import hashlib
import hmac
import re
from datetime import datetime, timedelta

import requests

from monitor.notices.delivery import Envelope, Final, Receipt, Retry, Surroundings, plain_text, within
from monitor.notices.event import CONTENT_TYPE, cloud_event, fitting
from monitor.notices.settings import WebhookChannel

_GONE = 410


def deliver(channel: WebhookChannel, envelope: Envelope, now: datetime, around: Surroundings) -> Receipt:
    """Post the notice. Only an answer 2xx counts as taken; 410 means never again, anything else not now."""
    url = plain_text(channel.url, around)
    body = fitting(cloud_event(envelope))
    headers = {"Content-Type": CONTENT_TYPE, "User-Agent": "duskcheck", "webhook-id": envelope.id}
    headers["webhook-timestamp"] = str(int(now.timestamp()))
    if channel.secret:
        secret = plain_text(channel.secret, around)
        headers["webhook-signature"] = signature(secret, envelope.id, headers["webhook-timestamp"], body)
    status, after = within(channel.timeout_seconds, lambda: _post(url, headers, body, channel.timeout_seconds))
    if 200 <= status < 300:
        return Receipt(f"HTTP {status}")
    if 300 <= status < 400:
        # Following it would turn the POST into a GET, and what it was to tell would be lost.
        raise Retry(f"HTTP {status}: the receiver sends elsewhere, and redirects are not followed; name its own URL")
    if status == _GONE:
        raise Final(f"HTTP {status}: the receiver wants no more notices")
    raise Retry(f"HTTP {status}", after=_patience(after))


def _patience(text: str) -> timedelta:
    """The seconds of a Retry-After header (RFC 9110, section 10.2.3), a day at most; none for a date or nonsense."""
    return min(timedelta(seconds=int(text)), timedelta(days=1)) if re.fullmatch(r"\d{1,9}", text) else timedelta(0)


def signature(secret: str, message_id: str, timestamp: str, body: bytes) -> str:
    """`v1,` and the base64 of HMAC-SHA256 over `id.timestamp.body`; the key is the base64 after `whsec_`."""
    try:
        key = base64.b64decode(secret.removeprefix("whsec_"), validate=True)
    except (binascii.Error, ValueError):
        raise Retry("the secret is not `whsec_` followed by base64", unreachable=True) from None
    signed = b".".join((message_id.encode(), timestamp.encode(), body))
    return "v1," + base64.b64encode(hmac.new(key, signed, hashlib.sha256).digest()).decode()


def _post(url: str, headers: dict[str, str], body: bytes, timeout: float) -> tuple[int, str]:
    """The status of the answer, whose body is not read, and its Retry-After.

    No proxy, no .netrc, no redirect, no second try of its own.
    """
    with requests.Session() as session:
        session.trust_env = False
        try:
            with session.post(
                url, data=body, headers=headers, timeout=timeout, allow_redirects=False, stream=True
            ) as answer:
                return answer.status_code, answer.headers.get("Retry-After", "")
        except requests.RequestException as error:
            # Not the error's own words: they repeat the URL, which may hold a token.
            raise Retry(f"{_KINDS.get(type(error), 'no talk with the receiver')}{_cause(error)}", True) from None


_KINDS: dict[type[requests.RequestException], str] = {
    requests.exceptions.ConnectTimeout: "no connection in time",
    requests.exceptions.ReadTimeout: "no answer in time",
    requests.exceptions.SSLError: "the receiver's certificate is not trusted",
    requests.exceptions.ConnectionError: "no connection to the receiver",
    requests.exceptions.InvalidURL: "the URL is none",
    requests.exceptions.MissingSchema: "the URL is none",
    requests.exceptions.InvalidSchema: "the URL is none",
}


def _cause(error: BaseException) -> str:
    """What the operating system said at the bottom of it, in brackets."""
    seen: BaseException | None = error
    said = ""
    while seen is not None:
        if isinstance(seen, OSError) and seen.errno is not None and seen.strerror:
            said = f" ({seen.strerror})"
        seen = seen.__cause__ or seen.__context__
    return said
