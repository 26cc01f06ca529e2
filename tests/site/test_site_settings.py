"""The site file: what the smallest one means, what a full one means, and how it lies on disk."""

from __future__ import annotations

from datetime import date, time
from decimal import Decimal
from pathlib import Path

import pytest

from monitor.feed.names import DEFAULT_PATTERNS
from monitor.notices.settings import EmailChannel, Secret, WebhookChannel
from monitor.site import open_site, read_site
from monitor.words import FileKind, WrongUse
from monitor.world import Book, Firm

SMALLEST = """\
site: Saltmere Trust
base_currency: EUR
books:
  - {id: north-quay, calendar: XDUB}
channels:
  - {id: tray, kind: folder, path: tray}
"""
# The site file of the design, section 4.
FULL = """\
site: Saltmere Trust
base_currency: EUR
calendar: XDUB                 # the firm's: its sessions and the ageing of firm-wide excesses
time_zone: Europe/Dublin
paths: {drop: drop, state: state, rules: rules, pages: pages}     # beside the site file unless absolute
books:
  - {id: north-quay, name: North Quay, currency: EUR, calendar: XDUB}
  - {id: far-east, name: Far East, currency: JPY, calendar: XTKS}
rounds:
  - {id: europe, books: [north-quay], at: "19:15", files_due_by: "19:00", give_up_at: "22:00"}
  - {id: asia, books: [far-east], time_zone: Asia/Tokyo, at: "18:00", files_due_by: "17:30", give_up_at: "20:00"}
people:
  - {id: m.osei, name: M. Osei, roles: [risk_officer], login: mosei, address: m.osei@saltmere.example}
  - {id: board, name: The board, roles: [board], address: board@saltmere.example}
channels:
  - {id: tray, kind: folder, path: tray}
  - {id: mail, kind: email, host: 127.0.0.1, port: 2525, sender: duskcheck@saltmere.example, tls: none}
  - {id: hook, kind: webhook, url: "http://127.0.0.1:8080/notices", secret: {env: DUSKCHECK_HOOK_SECRET}}
tell: {risk-desk: {people: [m.osei], channels: [mail, hook, tray]}, board: {people: [board], channels: [mail]}}
files: {prices: {pattern: "prices_{date}.csv"}}                   # patterns, sources and mappings, where they differ
defaults: {window: 500, confidence: 0.99, decay: 0.94, days_a_year: 252}
nightly_note: risk-desk
"""
RULE = "rules:\n  - {id: r, measure: {name: gross}, limit: 5, unit: amount}\n"


def read(text: str) -> object:
    return read_site("site.yaml", text.encode())


def test_smallest_site_gets_every_default() -> None:
    settings = read_site("site.yaml", SMALLEST.encode())

    book = Book("north-quay", "north-quay", "EUR", "XDUB")
    assert settings.firm() == Firm("Saltmere Trust", "EUR", "XDUB", (book,))
    assert settings.time_zone == "UTC"
    assert dict(settings.paths) == {"drop": "drop", "state": "state", "rules": "rules", "pages": "pages"}
    assert settings.patterns == DEFAULT_PATTERNS
    assert settings.heads is None
    [only] = settings.rounds
    assert (only.id, only.books, only.time_zone) == ("all", ("north-quay",), "UTC")
    assert (only.files_due_by, only.at, only.give_up_at) == (time(19, 15), time(19, 15), time(22, 15))
    assert dict(settings.defaults) == {
        "window": 500,
        "confidence": Decimal("0.99"),
        "decay": 0.94,
        "days_a_year": 252,
        "nav_age": 2,
    }
    assert settings.notices.nightly_note == "everyone"
    assert settings.notices.group("everyone").channels == ("tray",)


def test_full_site_says_what_it_says() -> None:
    settings = read_site("site.yaml", FULL.encode())

    assert [book.currency for book in settings.books] == ["EUR", "JPY"]
    assert [each.time_zone for each in settings.rounds] == ["Europe/Dublin", "Asia/Tokyo"]
    assert settings.rounds[1].files_due_by == time(17, 30)
    mail = settings.notices.channel("mail")
    assert isinstance(mail, EmailChannel)
    assert (mail.port_used, mail.tls, mail.user) == (2525, "none", None)
    hook = settings.notices.channel("hook")
    assert isinstance(hook, WebhookChannel)
    assert hook.secret == Secret("env", "DUSKCHECK_HOOK_SECRET")
    assert settings.notices.group("board").people == ("board",)
    assert settings.notices.person("m.osei").login == "mosei"
    assert settings.notices.nightly_note == "risk-desk"


def test_terms_hold_the_rounds_in_the_order_of_the_day() -> None:
    later = FULL.replace('at: "18:00"', 'at: "20:00"').replace('give_up_at: "20:00"', 'give_up_at: "21:00"')
    terms = read_site("site.yaml", later.encode()).terms(())

    assert list(terms.rounds) == ["asia", "europe"]  # 20:00 in Tokyo is 11:00 UTC, before 19:15 in Dublin
    assert (terms.longest_window, terms.days_a_year, terms.nav_age) == (500, 252, 2)
    assert terms.default_tail.parameters["confidence"] == Decimal("0.99")


def test_round_is_due_in_its_own_zone() -> None:
    asia = read_site("site.yaml", FULL.encode()).rounds[1]

    assert asia.moment(date(2026, 1, 15), asia.at).isoformat() == "2026-01-15T18:00:00+09:00"


@pytest.mark.parametrize(("at", "give_up"), [("00:10", time(3, 10)), ("20:59", time(23, 59)), ("22:30", time(23, 59))])
def test_giving_up_stays_on_the_same_day(at: str, give_up: time) -> None:
    settings = read_site("site.yaml", (SMALLEST + f'rounds:\n  - {{id: all, at: "{at}"}}\n').encode())

    assert settings.rounds[0].give_up_at == give_up


def test_book_takes_currency_and_calendar_of_the_site() -> None:
    settings = read_site("site.yaml", SMALLEST.replace(", calendar: XDUB", "").encode() + b"calendar: XLON\n")

    assert settings.books == (Book("north-quay", "north-quay", "EUR", "XLON"),)


def test_pattern_of_the_site_outranks_the_default() -> None:
    settings = read_site("site.yaml", (SMALLEST + 'files: {nav: {pattern: "net_{date}.csv"}}\n').encode())

    assert settings.patterns[FileKind.NAV] == "net_{date}.csv"
    assert list(settings.patterns) == list(DEFAULT_PATTERNS)


@pytest.mark.parametrize("written", ["0.99", "99 %", "99%", '"99 %"', "0.990"])
def test_confidence_is_exact_however_it_is_written(written: str) -> None:
    settings = read_site("site.yaml", (SMALLEST + f"defaults: {{confidence: {written}}}\n").encode())

    assert settings.defaults.confidence == Decimal("0.99")


def test_same_bytes_give_the_same_settings() -> None:
    assert read(FULL) == read(FULL)


@pytest.mark.parametrize("port", [("starttls", 587), ("implicit", 465), ("none", 25)])
def test_port_follows_tls(port: tuple[str, int]) -> None:
    text = FULL.replace("port: 2525, ", "").replace("tls: none", f"tls: {port[0]}")
    mail = read_site("site.yaml", text.encode()).notices.channel("mail")

    assert isinstance(mail, EmailChannel)
    assert mail.port_used == port[1]


def test_secret_is_read_where_it_is_kept(tmp_path: Path) -> None:
    (tmp_path / "hook.txt").write_text("whsec_1\n")

    assert Secret("env", "HOOK").read(tmp_path, {"HOOK": "whsec_2"}) == "whsec_2"
    assert Secret("file", "hook.txt").read(tmp_path, {}) == "whsec_1"
    with pytest.raises(WrongUse, match="variable HOOK is not set"):
        Secret("env", "HOOK").read(tmp_path, {})
    with pytest.raises(WrongUse, match=r"gone\.txt cannot be read: No such file"):
        Secret("file", "gone.txt").read(tmp_path, {})


def test_site_opens_with_its_rules_and_folders(tmp_path: Path) -> None:
    (tmp_path / "site.yaml").write_text(SMALLEST + "paths: {state: /var/lib/dusk}\nheads: witness/heads\n")
    (tmp_path / "rules").mkdir()
    for name in ("b.yaml", "a.yml", "notes.txt", ".hidden.yaml"):
        (tmp_path / "rules" / name).write_text(RULE)

    site = open_site(tmp_path / "site.yaml")

    assert site.rule_files == (("rules/a.yml", RULE.encode()), ("rules/b.yaml", RULE.encode()))
    assert site.data == (tmp_path / "site.yaml").read_bytes()
    assert (site.drop, site.pages) == (tmp_path / "drop", tmp_path / "pages")
    assert site.state == Path("/var/lib/dusk")
    assert site.heads == tmp_path / "witness" / "heads"
    assert site.beside("tray") == tmp_path / "tray"


def test_what_is_not_there_is_said(tmp_path: Path) -> None:
    with pytest.raises(WrongUse, match=r"gone\.yaml: found No such file or directory; expected a site file"):
        open_site(tmp_path / "gone.yaml")
    (tmp_path / "site.yaml").write_text(SMALLEST)
    with pytest.raises(WrongUse, match="rules: found No such file or directory; expected the folder of rule files"):
        open_site(tmp_path / "site.yaml")
    (tmp_path / "rules").mkdir()
    with pytest.raises(WrongUse, match="rules: found no rule file; expected at least one"):
        open_site(tmp_path / "site.yaml")
