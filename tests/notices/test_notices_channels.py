"""Each channel against a real server or folder on this machine."""

from __future__ import annotations

import base64
import email
import email.policy
import json
import socket
import ssl
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from email.message import EmailMessage
from pathlib import Path
from typing import Any

import pytest
from aiosmtpd.controller import Controller
from aiosmtpd.smtp import SMTP, AuthResult
from pytest_httpserver import HTTPServer
from werkzeug import Request, Response

from monitor.notices import email as email_channel
from monitor.notices import folder, webhook
from monitor.notices.delivery import Envelope, Final, Retry, Surroundings
from monitor.notices.settings import EmailChannel, FolderChannel, WebhookChannel

NOW = datetime(2026, 3, 4, 19, 20, tzinfo=UTC)
CERTIFICATE = Path(__file__).with_name("loopback.pem")
# The example of the Standard Webhooks 1.0.0 libraries, from memory; its signature was worked out by the Python library
# standardwebhooks 1.1.0.
EXAMPLE_SECRET = "whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw"
EXAMPLE_SIGNATURE = "v1,g0hM9SsE+OTPJTGt/tmIKtSyZlE3uFJELVlNIOLJ1OE="


def envelope(**changes: Any) -> Envelope:
    given = {
        "id": "0123456789abcdef01234567",
        "topic": "excess_opened",
        "key": "x-0007",
        "title": "OVER: nq-var of north-quay, EUR 1,312,400 against EUR 1,250,000 (2026-03-04) – é",
        "text": "OVER: value at risk of north-quay is too high – é.\n" + "ab" * 32 + "\n",
        "html": "<p>OVER</p>",
        "data": {"site": "Saltmere Trust", "business_date": "2026-03-04", "record": {"seq": 1234, "hash": "ab" * 32}},
        "queued_at": datetime(2026, 3, 4, 19, 15, 2, tzinfo=UTC),
        "name": "M. Osei",
        "address": "m.osei@saltmere.example",
    }
    return Envelope(**{**given, **changes})


def around(folder: Path = Path(), **environment: str) -> Surroundings:
    return Surroundings(folder, environment)


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port: int = probe.getsockname()[1]
        return port


# --- folder


def test_the_folder_gets_a_message_and_an_event(tmp_path: Path) -> None:
    channel = FolderChannel(id="tray", kind="folder", path="tray")

    receipt = folder.deliver(channel, envelope(address=None), NOW, around(tmp_path))

    stem = "2026-03-04_excess_opened_0123456789abcdef01234567"
    assert sorted(p.name for p in (tmp_path / "tray").iterdir()) == [f"{stem}.eml", f"{stem}.json"]
    assert receipt.text == f"tray/{stem}.eml"
    message = email.message_from_bytes((tmp_path / "tray" / f"{stem}.eml").read_bytes(), policy=email.policy.default)
    assert message["Subject"] == envelope().title
    assert message.get_body(("plain",)).get_content() == envelope().text
    event = json.loads((tmp_path / "tray" / f"{stem}.json").read_text())
    assert (event["specversion"], event["id"], event["time"]) == ("1.0", envelope().id, "2026-03-04T19:15:02Z")
    assert event["data"]["record"]["seq"] == 1234


def test_a_repeat_leaves_the_same_files(tmp_path: Path) -> None:
    channel = FolderChannel(id="tray", kind="folder", path=str(tmp_path))
    folder.deliver(channel, envelope(), NOW, around())
    before = {path.name: path.read_bytes() for path in tmp_path.iterdir()}

    folder.deliver(channel, envelope(), NOW, around())

    assert {path.name: path.read_bytes() for path in tmp_path.iterdir()} == before


def test_a_folder_that_cannot_be_written_is_tried_again(tmp_path: Path) -> None:
    (tmp_path / "tray").write_text("a file where the folder should be")
    channel = FolderChannel(id="tray", kind="folder", path="tray")

    with pytest.raises(Retry, match="File exists"):
        folder.deliver(channel, envelope(), NOW, around(tmp_path))


# --- e-mail


class Mailbox:
    """An aiosmtpd handler that keeps what it takes, or answers with what it is told to."""

    def __init__(self, rcpt: str = "250 OK", data: str = "250 OK") -> None:
        self.rcpt, self.data = rcpt, data
        self.taken: list[EmailMessage] = []
        self.receivers: list[str] = []

    async def handle_RCPT(self, _server: Any, _session: Any, env: Any, address: str, _options: Any) -> str:  # noqa: N802
        if self.rcpt.startswith("250"):
            env.rcpt_tos.append(address)
        return self.rcpt

    async def handle_DATA(self, _server: Any, _session: Any, env: Any) -> str:  # noqa: N802
        if self.data.startswith("250"):
            self.receivers += env.rcpt_tos
            self.taken.append(email.message_from_bytes(env.content, policy=email.policy.default))
        return self.data


@contextmanager
def smtp(mailbox: Mailbox, **options: Any) -> Iterator[int]:
    port = free_port()
    controller = Controller(mailbox, hostname="127.0.0.1", port=port, **options)
    controller.start()
    try:
        yield port
    finally:
        controller.stop()


def mail_channel(port: int, **changes: Any) -> EmailChannel:
    given = {
        "id": "mail",
        "kind": "email",
        "host": "127.0.0.1",
        "port": port,
        "sender": "duskcheck@saltmere.example",
        "tls": "none",
        "timeout_seconds": 5,
    }
    return EmailChannel(**{**given, **changes})


def tls_context() -> ssl.SSLContext:
    context = ssl.create_default_context(ssl.Purpose.CLIENT_AUTH)
    context.load_cert_chain(CERTIFICATE)
    return context


@pytest.fixture
def trusted(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("SSL_CERT_FILE", str(CERTIFICATE))


def test_an_smtp_server_gets_text_and_html_with_fixed_headers() -> None:
    mailbox = Mailbox()
    with smtp(mailbox) as port:
        receipt = email_channel.deliver(mail_channel(port), envelope(first="fedc"), NOW, around())
        email_channel.deliver(mail_channel(port), envelope(), NOW, around())

    assert receipt.text == f"taken by 127.0.0.1:{port}"
    assert mailbox.receivers == ["m.osei@saltmere.example"] * 2
    first, repeat = mailbox.taken
    assert first["Subject"] == envelope().title
    assert first["Message-ID"] == repeat["Message-ID"] == "<0123456789abcdef01234567@saltmere.example>"
    assert first["References"] == first["In-Reply-To"] == "<fedc@saltmere.example>"
    assert repeat["References"] is None
    assert first["Auto-Submitted"] == "auto-generated"
    assert first["Date"].datetime == envelope().queued_at
    assert first["To"].addresses[0].display_name == "M. Osei"
    assert [part.get_content_type() for part in first.iter_parts()] == ["text/plain", "text/html"]
    assert first.get_body(("plain",)).get_content().replace("\r\n", "\n") == envelope().text


@pytest.mark.parametrize(
    ("mailbox", "error"),
    [
        (Mailbox(rcpt="450 4.2.1 busy"), Retry),
        (Mailbox(rcpt="550 5.1.1 nobody here"), Final),
        (Mailbox(data="451 4.3.0 try later"), Retry),
        (Mailbox(data="554 5.7.1 not wanted"), Final),
    ],
)
def test_4xx_is_tried_again_and_5xx_is_final(mailbox: Mailbox, error: type[Exception]) -> None:
    words = (mailbox.rcpt if not mailbox.rcpt.startswith("250") else mailbox.data)[:9]
    with smtp(mailbox) as port, pytest.raises(error, match=words):
        email_channel.deliver(mail_channel(port), envelope(), NOW, around())


def test_a_server_that_is_not_there_is_unreachable() -> None:
    with pytest.raises(Retry, match="refused") as caught:
        email_channel.deliver(mail_channel(free_port()), envelope(), NOW, around())

    assert caught.value.unreachable


def test_a_server_without_starttls_is_not_spoken_to_in_clear() -> None:
    mailbox = Mailbox()
    with smtp(mailbox) as port, pytest.raises(Retry, match="STARTTLS"):
        email_channel.deliver(mail_channel(port, tls="starttls"), envelope(), NOW, around())

    assert mailbox.taken == []


@pytest.mark.usefixtures("trusted")
def test_starttls_and_implicit_tls_with_a_login() -> None:
    class Guard:
        def __call__(self, _server: Any, _session: Any, _env: Any, _mechanism: str, data: Any) -> AuthResult:
            known = (data.login, data.password) == (b"dusk", b"sesame")
            return AuthResult(success=known, handled=known)

    login = {"user": "dusk", "password": {"env": "DUSK_MAIL"}}
    mailbox = Mailbox()
    with smtp(mailbox, tls_context=tls_context(), require_starttls=True, authenticator=Guard()) as port:
        channel = mail_channel(port, tls="starttls", **login)
        email_channel.deliver(channel, envelope(), NOW, around(DUSK_MAIL="sesame"))
        with pytest.raises(Retry, match="refused the login") as caught:
            email_channel.deliver(channel, envelope(), NOW, around(DUSK_MAIL="open-wide"))
    assert "open-wide" not in str(caught.value)
    with implicit_tls(mailbox) as port:
        email_channel.deliver(mail_channel(port, host="localhost", tls="implicit"), envelope(), NOW, around())

    assert len(mailbox.taken) == 2


@contextmanager
def implicit_tls(mailbox: Mailbox) -> Iterator[int]:
    # Controller's own ssl_context checks itself with an unverified client; the server is the same.
    class Implicit(Controller):
        def _trigger_server(self) -> None:
            unverified = ssl.create_default_context(cafile=str(CERTIFICATE))
            with (
                socket.create_connection((self.hostname, self.port), 5) as plain,
                unverified.wrap_socket(plain, server_hostname="localhost") as sock,
            ):
                sock.recv(1024)

        def factory(self) -> SMTP:
            return SMTP(self.handler)

    port = free_port()
    controller = Implicit(mailbox, hostname="127.0.0.1", port=port, ssl_context=tls_context())
    controller.start()
    try:
        yield port
    finally:
        controller.stop()


def test_a_certificate_nobody_vouches_for_is_refused() -> None:
    mailbox = Mailbox()
    with smtp(mailbox, tls_context=tls_context()) as port, pytest.raises(Retry, match="certificate is not trusted"):
        email_channel.deliver(mail_channel(port, tls="starttls"), envelope(), NOW, around())

    assert mailbox.taken == []


def test_a_missing_password_is_said_by_the_name_of_its_place() -> None:
    channel = mail_channel(1, user="dusk", password={"env": "DUSK_MAIL"})

    with pytest.raises(Retry, match="DUSK_MAIL is not set"):
        email_channel.deliver(channel, envelope(), NOW, around())


def test_a_person_without_an_address_is_not_lost_at_once() -> None:
    with pytest.raises(Retry, match="no address"):
        email_channel.deliver(mail_channel(1), envelope(address=None), NOW, around())


# --- webhook


def hook_channel(url: str | dict[str, str], **changes: Any) -> WebhookChannel:
    return WebhookChannel(**{"id": "hook", "kind": "webhook", "url": url, "timeout_seconds": 5, **changes})


@pytest.fixture
def hook(httpserver: HTTPServer) -> Callable[..., list[Request]]:
    """Answers /notices with a status and headers; gives the list that the requests are put into."""

    def serve(status: int = 204, headers: dict[str, str] | None = None) -> list[Request]:
        seen: list[Request] = []

        def answer(request: Request) -> Response:
            seen.append(request)
            return Response(status=status, headers=headers)

        httpserver.expect_request("/notices").respond_with_handler(answer)
        return seen

    return serve


def test_a_receiver_gets_a_signed_event(httpserver: HTTPServer, hook: Callable[..., list[Request]]) -> None:
    seen = hook(202)
    secret = {"env": "HOOK"}

    receipt = webhook.deliver(
        hook_channel(httpserver.url_for("/notices"), secret=secret), envelope(), NOW, around(HOOK=EXAMPLE_SECRET)
    )

    assert receipt.text == "HTTP 202"
    [request] = seen
    body = request.get_data()
    assert request.method == "POST"
    assert request.headers["Content-Type"] == "application/cloudevents+json"
    assert request.headers["webhook-id"] == json.loads(body)["id"] == envelope().id
    assert request.headers["webhook-timestamp"] == str(int(NOW.timestamp()))
    assert request.headers["webhook-signature"] == webhook.signature(
        EXAMPLE_SECRET, envelope().id, str(int(NOW.timestamp())), body
    )
    event = json.loads(body)
    assert event["type"] == "duskcheck.notice.excess_opened"
    assert event["source"] == "/duskcheck/Saltmere%20Trust"
    assert event["data"]["text"] == envelope().text


def test_without_a_secret_nothing_is_signed(httpserver: HTTPServer, hook: Callable[..., list[Request]]) -> None:
    seen = hook()

    webhook.deliver(hook_channel(httpserver.url_for("/notices")), envelope(), NOW, around())

    assert "webhook-signature" not in seen[0].headers


def test_the_signature_equals_that_of_the_open_specification() -> None:
    made = webhook.signature(EXAMPLE_SECRET, "msg_p5jXN8AQM9LWM0D4loKWxJek", "1614265330", b'{"test": 2432232314}')

    assert made == EXAMPLE_SIGNATURE


@pytest.mark.parametrize(
    ("status", "error"), [(200, None), (299, None), (404, Retry), (410, Final), (429, Retry), (500, Retry)]
)
def test_only_2xx_is_success(
    httpserver: HTTPServer, hook: Callable[..., list[Request]], status: int, error: type[Exception] | None
) -> None:
    hook(status)
    channel = hook_channel(httpserver.url_for("/notices"))

    if error is None:
        webhook.deliver(channel, envelope(), NOW, around())
    else:
        with pytest.raises(error, match=f"HTTP {status}"):
            webhook.deliver(channel, envelope(), NOW, around())


def test_a_redirect_is_not_followed(httpserver: HTTPServer, hook: Callable[..., list[Request]]) -> None:
    seen = hook(302, {"Location": httpserver.url_for("/elsewhere")})
    httpserver.expect_request("/elsewhere").respond_with_data("lost")

    with pytest.raises(Retry, match="redirects are not followed"):
        webhook.deliver(hook_channel(httpserver.url_for("/notices")), envelope(), NOW, around())

    assert len(seen) == len(httpserver.log) == 1


def test_errors_name_neither_the_url_nor_the_secret() -> None:
    channel = hook_channel({"env": "HOOK_URL"}, secret={"env": "HOOK"})
    key = "whsec_" + base64.b64encode(b"s" * 24).decode()
    for url in (f"http://127.0.0.1:{free_port()}/t0ken", "t0ken", "http://[t0ken", "gopher://127.0.0.1/t0ken"):
        with pytest.raises(Retry) as caught:
            webhook.deliver(channel, envelope(), NOW, around(HOOK_URL=url, HOOK=key))
        assert "t0ken" not in str(caught.value)
    with pytest.raises(Retry) as caught:
        webhook.deliver(channel, envelope(), NOW, around(HOOK_URL="http://127.0.0.1/", HOOK="whsec_not*base64"))
    assert "not*base64" not in str(caught.value)


def test_proxies_of_the_environment_are_not_used(
    httpserver: HTTPServer, hook: Callable[..., list[Request]], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("HTTP_PROXY", f"http://127.0.0.1:{free_port()}")
    monkeypatch.setenv("NO_PROXY", "")

    seen = hook()

    webhook.deliver(hook_channel(httpserver.url_for("/notices")), envelope(), NOW, around())

    assert len(seen) == 1


def test_a_receiver_that_drips_is_cut_off() -> None:
    stop = threading.Event()
    with socket.create_server(("127.0.0.1", 0)) as server:

        def drip() -> None:
            connection, _ = server.accept()
            with connection:
                connection.sendall(b"HTTP/1.1 200 OK\r\nX-Slow: ")
                while not stop.wait(0.1):
                    connection.sendall(b"a")

        thread = threading.Thread(target=drip)
        thread.start()
        began = time.monotonic()
        with pytest.raises(Retry, match="no answer within 1 s"):
            webhook.deliver(
                hook_channel(f"http://127.0.0.1:{server.getsockname()[1]}/", timeout_seconds=1),
                envelope(),
                NOW,
                around(),
            )
        assert time.monotonic() - began < 3
        stop.set()
        thread.join()


def test_a_long_notice_is_cut_to_fit_and_says_so(httpserver: HTTPServer, hook: Callable[..., list[Request]]) -> None:
    seen = hook()
    data = {
        **envelope().data,
        "over": [{"rule": f"rule-{i}", "title": "é" * 40} for i in range(400)],
        "outcome": "over",
    }

    webhook.deliver(hook_channel(httpserver.url_for("/notices")), envelope(data=data, text="é" * 30_000), NOW, around())

    body = seen[0].get_data()
    event = json.loads(body)
    assert len(body) < 20_000
    assert event["data"]["left_out"].startswith("over, the rest of text: too long")
    assert event["data"]["text"].endswith("[cut here]\n")
    assert (event["data"]["record"], event["data"]["outcome"]) == (data["record"], "over")
