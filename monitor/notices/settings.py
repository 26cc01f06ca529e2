"""What the site file says of people, channels and who is told what."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Literal
from urllib.parse import urlsplit

from pydantic import ConfigDict, PlainValidator

from monitor.reading.document import Document
from monitor.reading.document import Path as Place
from monitor.reading.fields import Address, FilePath, Id, Line, Word, identifier, one_line, one_of, whole
from monitor.reading.shapes import Shape, unfit
from monitor.reading.values import BY_REFERENCE, HUSHED
from monitor.words import WrongUse

EVERYONE = "everyone"
LOOPBACK = ("localhost", "127.0.0.1", "::1")
PORTS = {"none": 25, "starttls": 587, "implicit": 465}
Tls = Literal["none", "starttls", "implicit"]


@dataclass(frozen=True)
class Secret:
    """Where a secret is kept: the name of a variable of the environment, or the path of a file."""

    kept_in: Literal["env", "file"]
    name: str

    def read(self, folder: Path, environment: Mapping[str, str]) -> str:
        """The secret itself. `folder` is that of the site file. Raises WrongUse, without the secret in its text."""
        if self.kept_in == "env":
            value = environment.get(self.name, "")
        else:
            try:
                value = (folder / self.name).read_text(encoding="utf-8").strip()
            except (OSError, UnicodeDecodeError) as error:
                reason = getattr(error, "strerror", None) or "not UTF-8"
                raise WrongUse(f"the secret in the file {self.name} cannot be read: {reason}") from None
        if not value:
            where = "variable" if self.kept_in == "env" else "file"
            raise WrongUse(f"the secret in the {where} {self.name} is not set")
        return value


def secret(value: object) -> Secret:
    if isinstance(value, dict) and len(value) == 1:
        kept_in, name = next(iter(value.items()))
        if kept_in in ("env", "file"):
            return Secret(kept_in, one_line(name))
    if isinstance(value, dict):
        raise unfit(BY_REFERENCE)
    raise unfit(BY_REFERENCE, HUSHED, "Settings are archived; keep the secret outside of them")


def text_or_secret(value: object) -> str | Secret:
    return secret(value) if isinstance(value, dict) else one_line(value)


def web_address(value: object) -> str | Secret:
    """An http or https URL; one that may hold a token only by reference."""
    url = text_or_secret(value)
    if isinstance(url, Secret):
        return url
    try:
        parts = urlsplit(url)
        usable = parts.scheme in ("http", "https") and bool(parts.hostname) and parts.port != 0
    except ValueError:
        usable = False
    if not usable or any(character.isspace() for character in url):
        raise unfit("a URL such as https://host.example/path", "a text that is no URL")
    if parts.username is not None or parts.password is not None or parts.query or parts.fragment:
        expected = f"a URL of host and path alone, or {BY_REFERENCE}"
        raise unfit(expected, "a URL with a user, a query or a fragment", "What stands there is often a token")
    return url


_Seconds = Annotated[int, PlainValidator(whole(1, 600))]
_SecretField = Annotated[Secret, PlainValidator(secret)]


class Person(Shape):
    id: Id
    name: Line
    roles: tuple[Word, ...] = ()
    login: Line | None = None
    address: Address | None = None


class FolderChannel(Shape):
    """Writes notices as files into `path`, beside the site file unless absolute."""

    id: Id
    kind: Literal["folder"]
    path: FilePath


class EmailChannel(Shape):
    """SMTP. `tls` implicit: from the first byte; starttls: the server must offer it. `ca_bundle`: extra authorities."""

    id: Id
    kind: Literal["email"]
    host: Line
    port: Annotated[int, PlainValidator(whole(1, 65535))] | None = None
    sender: Address
    tls: Annotated[Tls, PlainValidator(one_of(PORTS))] = "starttls"
    user: Annotated[str | Secret, PlainValidator(text_or_secret)] | None = None
    password: _SecretField | None = None
    timeout_seconds: _Seconds = 30

    @property
    def port_used(self) -> int:
        return self.port or PORTS[self.tls]


class WebhookChannel(Shape):
    """An HTTP POST. `secret` signs the body."""

    id: Id
    kind: Literal["webhook"]
    url: Annotated[str | Secret, PlainValidator(web_address)]
    secret: _SecretField | None = None
    timeout_seconds: _Seconds = 15


Channel = FolderChannel | EmailChannel | WebhookChannel
CHANNELS: Mapping[str, type[Channel]] = {"folder": FolderChannel, "email": EmailChannel, "webhook": WebhookChannel}


class _KindOnly(Shape):
    model_config = ConfigDict(extra="ignore")
    kind: Annotated[str, PlainValidator(one_of(CHANNELS))]


class GroupShape(Shape):
    people: tuple[Id, ...] = ()
    channels: tuple[Id, ...]


@dataclass(frozen=True)
class Group:
    """Who is told together, and through what. Ids of people and channels."""

    id: str
    people: tuple[str, ...]
    channels: tuple[str, ...]


@dataclass(frozen=True)
class NoticeSettings:
    """`nightly_note`: the group that hears of every evening, and of every rule that names nobody else."""

    people: tuple[Person, ...]
    channels: tuple[Channel, ...]
    groups: tuple[Group, ...]
    nightly_note: str

    def group(self, name: str) -> Group:
        return next(group for group in self.groups if group.id == name)

    def person(self, name: str) -> Person:
        return next(person for person in self.people if person.id == name)

    def channel(self, name: str) -> Channel:
        return next(channel for channel in self.channels if channel.id == name)


def read_notices(document: Document) -> NoticeSettings:
    """`people`, `channels`, `tell` and `nightly_note`. A problem is a finding; with one, the settings lack parts."""
    people = _people(document)
    channels = _channels(document)
    if document.has(("tell",)):
        groups = _groups(document, people, channels)
    else:
        everyone = Group(EVERYONE, tuple(person.id for person in people), tuple(channel.id for channel in channels))
        _check_reached(document, (), everyone, people, channels)
        groups = (everyone,)
    return NoticeSettings(people, channels, groups, _nightly_note(document, groups))


def _people(document: Document) -> tuple[Person, ...]:
    if not document.has(("people",)):
        return ()
    made = [document.shape(path, Person) for path in document.items(("people",))]
    document.refuse_doubled_ids(("people",))
    return tuple(person for person in made if person)


def _channels(document: Document) -> tuple[Channel, ...]:
    made: list[Channel] = []
    for path in document.items(("channels",)) if document.has(("channels",)) else ():
        kind = document.shape(path, _KindOnly)
        channel = document.shape(path, CHANNELS[kind.kind]) if kind else None
        if isinstance(channel, EmailChannel):
            _check_login(document, path, channel)
        if channel:
            made.append(channel)
    document.refuse_doubled_ids(("channels",))
    return tuple(made)


def _check_login(document: Document, path: Place, channel: EmailChannel) -> None:
    if not document.sound((*path, "user"), (*path, "password"), (*path, "tls"), (*path, "host")):
        return
    if (channel.user is None) is not (channel.password is None):
        given = "user" if channel.user else "password"
        document.refuse((*path, given), "`user` and `password` together, or neither", f"only `{given}`", at_key=True)
    elif channel.password and channel.tls == "none" and channel.host not in LOOPBACK:
        document.refuse((*path, "password"), "tls: starttls or tls: implicit", "a password that would travel in clear")


def _groups(document: Document, people: Sequence[Person], channels: Sequence[Channel]) -> tuple[Group, ...]:
    made: list[Group] = []
    written = document.mapping(("tell",))
    if not written and document.sound(("tell",)):
        document.refuse(("tell",), "at least one group", remedy="Leave the key out to tell everyone")
    for name in written:
        path = ("tell", name)
        document.accepts(path, identifier, at_key=True)
        shape = document.shape(path, GroupShape)
        if shape is None:
            continue
        if not shape.channels and document.sound((*path, "channels")):
            document.refuse((*path, "channels"), "at least one channel")
        document.refuse_unknown((*path, "people"), document.ids(("people",)), "people")
        document.refuse_unknown((*path, "channels"), document.ids(("channels",)), "channels")
        made.append(Group(name, shape.people, shape.channels))
        _check_reached(document, path, made[-1], people, channels)
    return tuple(made)


def _check_reached(
    document: Document, path: Place, group: Group, people: Sequence[Person], channels: Sequence[Channel]
) -> None:
    """E-mail needs an address, and so does a person whom nothing but e-mail would reach."""
    if not document.sound_below((*path, "people"), (*path, "channels"), ("people",), ("channels",)):
        return
    kinds = {channel.id: channel.kind for channel in channels}
    addresses = {person.id: person.address for person in people}
    mails = [place for place, channel in enumerate(group.channels) if kinds[channel] == "email"]
    without = [place for place, person in enumerate(group.people) if not addresses[person]]
    if mails and len(without) == len(group.people):
        found = f"the e-mail channel {group.channels[mails[0]]}, told to nobody who has an address"
        document.refuse((*path, "channels", mails[0]), "a person with an address beside it", found)
    elif mails and len(mails) == len(group.channels):
        for place in without:
            found = f"{group.people[place]}, who has no address and is told by e-mail alone"
            document.refuse((*path, "people", place), "an address, or another channel", found)


def _nightly_note(document: Document, groups: Sequence[Group]) -> str:
    """The group named, or the first; one that does not exist is a finding."""
    names = [group.id for group in groups]
    if not document.has(("nightly_note",)):
        return names[0] if names else EVERYONE
    name = document.at(("nightly_note",))
    if isinstance(name, str) and name in names:
        return name
    if document.sound_below(("tell",)):
        near = (name, names) if isinstance(name, str) else None
        document.refuse(("nightly_note",), "one of the groups: " + ", ".join(names), near=near)
    return EVERYONE
