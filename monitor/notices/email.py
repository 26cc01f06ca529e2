"""The e-mail channel: one message to one person by SMTP."""

from __future__ import annotations

import smtplib
import ssl
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import datetime
from email.message import EmailMessage

from monitor.notices.delivery import Envelope, Final, Receipt, Retry, Surroundings, plain_text, within
from monitor.notices.mail_message import mail_message
from monitor.notices.settings import EmailChannel

_STEPS = 4  # of a timeout each, before the whole is given up


def deliver(channel: EmailChannel, envelope: Envelope, now: datetime, around: Surroundings) -> Receipt:  # noqa: ARG001
    """Send the notice. Raises Retry where another try may succeed, Final where the server refused it for good."""
    if not envelope.address:
        raise Retry("the site file gives the person no address")
    try:
        message = mail_message(envelope, channel.sender)
    except ValueError:
        raise Final("an address or a header of it cannot be written") from None
    login = None
    if channel.user is not None and channel.password is not None:
        login = plain_text(channel.user, around), plain_text(channel.password, around)
    return within(channel.timeout_seconds * _STEPS, lambda: _send(channel, message, login))


def _send(channel: EmailChannel, message: EmailMessage, login: tuple[str, str] | None) -> Receipt:
    with _faults(), _connection(channel) as server:
        if channel.tls == "starttls":
            server.starttls(context=ssl.create_default_context())
        if login:
            server.login(*login)
        server.send_message(message)
    return Receipt(f"taken by {channel.host}:{channel.port_used}")


def _connection(channel: EmailChannel) -> smtplib.SMTP:
    if channel.tls == "implicit":
        context = ssl.create_default_context()
        return smtplib.SMTP_SSL(channel.host, channel.port_used, timeout=channel.timeout_seconds, context=context)
    return smtplib.SMTP(channel.host, channel.port_used, timeout=channel.timeout_seconds)


@contextmanager
def _faults() -> Iterator[None]:
    """What went wrong, as Retry or Final.

    What the server says about a login is left out, for it may repeat what it was sent.
    """
    try:
        yield
    except smtplib.SMTPAuthenticationError as error:
        raise Retry(f"the server refused the login ({error.smtp_code})", unreachable=True) from None
    except smtplib.SMTPNotSupportedError as error:
        what = f"{str(error).rstrip('.')}; the channel's tls is starttls (the default), implicit or none"
        raise Retry(f"the server cannot do what the site file asks: {what}", unreachable=True) from None
    except smtplib.SMTPRecipientsRefused as error:
        code, text = next(iter(error.recipients.values()))
        raise _refusal("the receiver", code, text) from None
    except smtplib.SMTPConnectError as error:
        raise Retry(f"the server does not take connections ({error.smtp_code})", unreachable=True) from None
    except smtplib.SMTPResponseException as error:
        raise _refusal("the message", error.smtp_code, error.smtp_error) from None
    except smtplib.SMTPServerDisconnected:
        raise Retry("the server closed the connection", unreachable=True) from None
    except smtplib.SMTPException as error:
        raise Retry(f"no talk with the server: {type(error).__name__}", unreachable=True) from None
    except ssl.SSLCertVerificationError as error:
        raise Retry(f"the server's certificate is not trusted: {error.verify_message}", unreachable=True) from None
    except OSError as error:
        raise Retry(f"no connection to the server: {error.strerror or error}", unreachable=True) from None


def _refusal(what: str, code: int, text: bytes | str) -> Retry | Final:
    """SMTP's 4xx means not now, its 5xx never (RFC 5321, section 4.2.1)."""
    said = text.decode("utf-8", "replace") if isinstance(text, bytes) else text
    reason = f"the server refused {what}: {code} {' '.join(said.split())[:200]}"
    return Final(reason) if 500 <= code < 600 else Retry(reason)
