"""One installation: its site file, read by the rooms whose settings it holds, and where its parts lie."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date
from pathlib import Path
from typing import TypeVar

from monitor.daemon.settings import Round, one_round, read_rounds
from monitor.feed.settings import read_books, read_patterns
from monitor.limits.context import RuleContext
from monitor.limits.defaults import Defaults
from monitor.limits.parameters import RANGE_METHODS, default_tail
from monitor.limits.record import read_record
from monitor.notices.settings import NoticeSettings, read_notices
from monitor.reading.document import Document
from monitor.reading.fields import Calendar, Currency, FilePath, Line, Zone
from monitor.reading.plain import read_yaml
from monitor.reading.shapes import Shape
from monitor.words import FileKind, Finding, WrongUse
from monitor.world import Book, Firm, RecordTerms, Rule, Terms

LATER_KEYS = {
    "proxies": "proxies of instruments",
    "waivers": "the limits of waivers",
    "stresses": "stress scenarios",
    "manifests": "control totals",
    "withhold": "withheld prices",
    "tolerance": "tolerance of bad rows",
    "references": "reference portfolios",
    "backup": "backups",
    "retention": "pruning of the archive",
}
ShapeT = TypeVar("ShapeT", bound=Shape)
ANY_DAY = date(2026, 1, 15)  # rounds are put in the order of a day; the zones move too little to change it
RULE_SUFFIXES = (".yaml", ".yml")
REMEDY = "Name it with --site; `duskcheck demo` sets up one to look at"


class Paths(Shape):
    """Folders as written: beside the site file unless absolute."""

    drop: FilePath = "drop"
    state: FilePath = "state"
    rules: FilePath = "rules"
    pages: FilePath = "pages"


class SiteShape(Shape):
    """The keys of the site file. Those of type object are read by the room that owns them."""

    site: Line
    base_currency: Currency
    calendar: Calendar | None = None
    time_zone: Zone = "UTC"
    paths: object = None
    books: object
    rounds: object = None
    people: object = None
    channels: object
    tell: object = None
    files: object = None
    defaults: object = None
    backtest: object = None
    nightly_note: object = None
    heads: FilePath | None = None


@dataclass(frozen=True)
class SiteSettings:
    """What a site file says, its defaults filled in.

    calendar, time_zone: the firm's. patterns: of the files in the drop, by kind. heads: a file outside the state that
    is a witness of the ledger's newest entries, as written.
    """

    site: str
    base_currency: str
    calendar: str
    time_zone: str
    paths: Paths
    books: tuple[Book, ...]
    rounds: tuple[Round, ...]
    notices: NoticeSettings
    patterns: Mapping[FileKind, str]
    defaults: Defaults
    record: RecordTerms
    heads: str | None

    def firm(self) -> Firm:
        return Firm(self.site, self.base_currency, self.calendar, self.books)

    def book_ids(self) -> tuple[str, ...]:
        return tuple(book.id for book in self.books)

    def terms(self, rules: tuple[Rule, ...]) -> Terms:
        """These settings and the rules read with them, as a world carries them."""
        tail = default_tail(self.defaults)
        windows = [call.parameters.get("window", 0) for call in (tail, *(rule.measure for rule in rules))]
        rounds = sorted(self.rounds, key=lambda each: each.moment(ANY_DAY, each.at))
        return Terms(
            firm=self.firm(),
            rounds={each.id: each.books for each in rounds},
            rules=rules,
            longest_window=max(windows),
            days_a_year=self.defaults.days_a_year,
            nav_age=self.defaults.nav_age,
            default_tail=tail,
            record=self.record,
            needs_ranges=any(rule.measure.parameters.get("method") in RANGE_METHODS for rule in rules),
        )

    def rule_context(self) -> RuleContext:
        """What rules may name of this site, and what they may leave out."""
        return RuleContext(
            books=self.book_ids(),
            people=tuple(person.id for person in self.notices.people),
            groups=tuple(group.id for group in self.notices.groups),
            told_by_default=self.notices.nightly_note,
            defaults=self.defaults,
        )


@dataclass(frozen=True)
class Site:
    """A site file on disk, `data` its bytes. rule_files: the name, beside the site file, and the bytes of each."""

    settings: SiteSettings
    file: Path
    data: bytes
    rule_files: tuple[tuple[str, bytes], ...]

    def beside(self, path: str) -> Path:
        """A path of the site file as it stands on this machine."""
        return self.file.parent / path

    @property
    def drop(self) -> Path:
        return self.beside(self.settings.paths.drop)

    @property
    def state(self) -> Path:
        return self.beside(self.settings.paths.state)

    @property
    def pages(self) -> Path:
        return self.beside(self.settings.paths.pages)

    @property
    def heads(self) -> Path | None:
        return self.beside(self.settings.heads) if self.settings.heads else None


def read_site(name: str, data: bytes) -> SiteSettings:
    """The settings in a site file's bytes. `name` is what findings call the file. Raises WrongUse with every finding.

    Depends on the bytes alone, so that an archived site file reads as it did.
    """
    document = read_yaml(name, data)
    shape = document.shape((), SiteShape, LATER_KEYS)
    if not isinstance(document.data, dict):
        raise WrongUse(findings=document.report())
    paths = _section(document, "paths", Paths)
    defaults = _section(document, "defaults", Defaults)
    books = read_books(document) if document.has(("books",)) else []
    book_ids = document.ids(("books",))
    rounds = read_rounds(document, book_ids)
    notices = read_notices(document)
    patterns = read_patterns(document)
    record = read_record(document, defaults)
    _check_folders(document, paths)
    if document.findings or shape is None:
        raise WrongUse(findings=document.report())
    made = tuple(book.book(shape.base_currency, shape.calendar) for book in books)
    return SiteSettings(
        site=shape.site,
        base_currency=shape.base_currency,
        calendar=shape.calendar or made[0].calendar,
        time_zone=shape.time_zone,
        paths=paths,
        books=made,
        rounds=tuple(each.round(book_ids, shape.time_zone) for each in rounds)
        or (one_round(book_ids, shape.time_zone),),
        notices=notices,
        patterns=patterns,
        defaults=defaults,
        record=record,
        heads=shape.heads,
    )


def open_site(path: Path) -> Site:
    """The site whose file is at `path`, with its rule files. Raises WrongUse when something is wrong or not there."""
    file = path.absolute()
    try:
        data = file.read_bytes()
    except OSError as error:
        reason = error.strerror or str(error)
        finding = Finding(str(path), None, None, reason, "a site file", REMEDY)
        raise WrongUse(findings=(finding,)) from None
    settings = read_site(str(path), data)
    return Site(settings, file, data, _rule_files(file.parent, settings.paths.rules))


def _rule_files(folder: Path, rules: str) -> tuple[tuple[str, bytes], ...]:
    """Every rule file in the rules folder, by name."""
    try:
        files = sorted(file for file in (folder / rules).iterdir() if file.suffix in RULE_SUFFIXES)
        found = tuple((f"{rules}/{file.name}", file.read_bytes()) for file in files if not file.name.startswith("."))
    except OSError as error:
        reason, place = error.strerror or str(error), Path(error.filename or rules)
        if place.suffix in RULE_SUFFIXES:
            finding = Finding(f"{rules}/{place.name}", None, None, reason, "a rule file that can be read")
        else:
            finding = Finding(rules, None, None, reason, "the folder of rule files")
        raise WrongUse(findings=(finding,)) from None
    if not found:
        expected = "at least one rule file (*.yaml)"
        raise WrongUse(findings=(Finding(rules, None, None, "no rule file", expected),))
    return found


def _section(document: Document, key: str, model: type[ShapeT]) -> ShapeT:
    """The mapping under a key of the site file, or the model's defaults."""
    made = document.shape((key,), model) if document.has((key,)) else None
    return made or model()


def _check_folders(document: Document, paths: Paths) -> None:
    """What the program writes must not lie where it reads, nor two kinds of output in one place."""
    seen: dict[Path, str] = {}
    for key, written in paths:
        folder = Path(written)
        if folder in seen and document.sound_below(("paths",)):
            path = ("paths", key) if document.has(("paths", key)) else ("paths", seen[folder])
            document.refuse(path, "four different folders", f"{written!r} for both {seen[folder]} and {key}")
        seen.setdefault(folder, key)
