"""Who a notice goes to: each person by each mail channel of the groups, and each other channel once."""

from __future__ import annotations

from collections.abc import Iterable

from monitor.notices.settings import EmailChannel, Group, NoticeSettings


def receivers(tell: Iterable[str], settings: NoticeSettings) -> list[tuple[str, str | None]]:
    """(channel, person) in the groups' order, each once. The person is None where the channel is the receiver.

    A group that is no longer in the site file (an old excess may name one) counts as the group of the nightly note,
    for nobody told would be worse than somebody else told.
    """
    known = {group.id for group in settings.groups}
    named = [settings.group(name if name in known else settings.nightly_note) for name in tell]
    return list(dict.fromkeys(pair for group in named for pair in _of_group(group, settings)))


def _of_group(group: Group, settings: NoticeSettings) -> Iterable[tuple[str, str | None]]:
    for channel in group.channels:
        if isinstance(settings.channel(channel), EmailChannel):
            yield from ((channel, person) for person in group.people if settings.person(person).address)
        else:
            yield channel, None
