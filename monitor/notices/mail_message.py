"""A notice as an Internet message: plain text first, HTML beside it."""

from __future__ import annotations

from email.headerregistry import Address, Group
from email.message import EmailMessage
from email.utils import format_datetime

from monitor.notices.delivery import Envelope
from monitor.notices.message import one_line


def mail_message(envelope: Envelope, sender: str) -> EmailMessage:
    """The message from `sender` (an address). Raises ValueError when an address is none.

    Its Message-ID follows from the notice's id, so that a repeat can be folded away. A notice of an excess refers to
    the one that told of its opening, so that mail readers keep them together.
    """
    domain = sender.rpartition("@")[2]
    message = EmailMessage()
    message["Subject"] = one_line(envelope.title)
    message["From"] = Address(one_line(f"duskcheck, {envelope.site}"), addr_spec=sender)
    message["To"] = (
        Address(one_line(envelope.name or ""), addr_spec=envelope.address)
        if envelope.address
        else Group("undisclosed-recipients")
    )
    message["Date"] = format_datetime(envelope.queued_at)
    message["Message-ID"] = f"<{envelope.id}@{domain}>"
    if envelope.first:
        message["In-Reply-To"] = f"<{envelope.first}@{domain}>"
        message["References"] = f"<{envelope.first}@{domain}>"
    message["Auto-Submitted"] = "auto-generated"  # RFC 3834: nobody's absence note answers it
    message.set_content(envelope.text)
    message.add_alternative(envelope.html, subtype="html")
    return message
