"""Reads a page as a browser would, well enough to ask it questions."""

from __future__ import annotations

from dataclasses import dataclass, field
from html.parser import HTMLParser

VOID = {"meta", "link", "img", "source", "br", "hr", "input"}
LOADS = {"href", "src", "srcset", "action", "data", "poster", "xlink:href"}


@dataclass
class Reading(HTMLParser):
    """tags: (name, attributes) in order. texts: (name of the innermost element, text)."""

    tags: list[tuple[str, dict[str, str | None]]] = field(default_factory=list)
    texts: list[tuple[str, str]] = field(default_factory=list)
    open: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        super().__init__(convert_charrefs=True)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        assert self.open and self.open.pop() == tag, f"</{tag}> closes nothing"

    def handle_data(self, data: str) -> None:
        self.texts.append((self.open[-1] if self.open else "", data))

    def all(self, tag: str) -> list[dict[str, str | None]]:
        return [attributes for name, attributes in self.tags if name == tag]

    @property
    def text(self) -> str:
        return " ".join(" ".join(data for tag, data in self.texts if tag not in ("style", "title")).split())

    @property
    def loads(self) -> list[str]:
        """Every address that the page names."""
        return [value or "" for _, attributes in self.tags for name, value in attributes.items() if name in LOADS]


def read(page: bytes) -> Reading:
    reading = Reading()
    reading.feed(page.decode("utf-8"))
    reading.close()
    assert not reading.open, f"never closed: {reading.open}"
    return reading
