"""Make ledger.sqlite and head.txt: every kind of fact at version 1, at fixed times.

    PYTHONPATH=. .venv/bin/python tests/ledger/golden/make_golden.py

Run once, before the first release; from then on both files are frozen, for they prove that a ledger written by the
first version can always be read. A later kind or version gets a golden file of its own beside this one.
"""

from __future__ import annotations

from datetime import UTC, date, datetime
from pathlib import Path

from monitor.facts import (
    FACTS,
    BookLine,
    DaemonStarted,
    DaemonStopped,
    EveningChecked,
    EveningMissed,
    ExcessChanged,
    ExcessCured,
    ExcessOpened,
    ExcessVoided,
    Fact,
    FileAccepted,
    FileRefused,
    Hand,
    NamedFile,
    NoticeFailed,
    NoticeQueued,
    NoticeSent,
    RulesAdopted,
    SettingsAdopted,
    SiteOpened,
    UsedFile,
)
from monitor.ledger.chain import Ledger
from monitor.words import CuredBy, ExcessState, FileKind, Finding, Outcome, Recipe, Side, Subject, SubjectKind, Unit

FOLDER = Path(__file__).parent
HAND = Hand("mosei", "quay-1")
FIRM = Subject("firm", SubjectKind.FIRM, None)
BOOK = Subject("book:north-quay", SubjectKind.BOOK, "north-quay")
POSITION = Subject("position:north-quay/KELP", SubjectKind.POSITION, "north-quay")
GROUP = Subject("group:issuer=Kelp & Søn", SubjectKind.GROUP, None)


def sha(digit: str) -> str:
    return digit * 64


OPENING: tuple[Fact, ...] = (
    SiteOpened(site="Saltmere Trust", base_currency="EUR", program="0.1.0", hand=HAND),
    SettingsAdopted(settings=sha("a"), was=None, changes=(), hand=HAND),
    SettingsAdopted(
        settings=sha("b"),
        was=sha("a"),
        changes=("nightly_note: was 'board', is 'risk-desk'", "days_a_year: 250 -> 252"),
        hand=HAND,
    ),
    RulesAdopted(
        rules=sha("c"),
        was=None,
        settings=sha("b"),
        files=(NamedFile("board.yaml", sha("d")), NamedFile("desk.yaml", sha("e"))),
        changes=(),
        hand=HAND,
    ),
    DaemonStarted("0.1.0", 4711, HAND),
)

EVENING: tuple[Fact, ...] = (
    FileAccepted(
        name="prices_2026-12-01.csv",
        file=FileKind.PRICES,
        source="drop",
        day=date(2026, 12, 1),
        sha256=sha("1"),
        size=2048,
        rows=41,
        first=date(2026, 12, 1),
        last=date(2026, 12, 1),
    ),
    FileAccepted(
        name="history.csv",
        file=FileKind.HISTORY,
        source="drop",
        day=None,
        sha256=sha("2"),
        size=4_000_000,
        rows=51_000,
        first=date(2021, 11, 30),
        last=date(2026, 11, 30),
    ),
    FileAccepted(
        name="instruments.csv",
        file=FileKind.INSTRUMENTS,
        source="drop",
        day=None,
        sha256=sha("3"),
        size=900,
        rows=0,
        first=None,
        last=None,
    ),
    FileRefused(
        name="fx_2026-12-01.csv",
        file=FileKind.FX,
        source="drop",
        day=date(2026, 12, 1),
        sha256=sha("4"),
        size=17,
        reasons=2,
        findings=(
            Finding(
                file="fx_2026-12-01.csv",
                line=2,
                column=2,
                found="'1,08'",
                expected="a number with a decimal point",
                remedy="Write 1.08",
            ),
            Finding(
                file="fx_2026-12-01.csv",
                line=3,
                column=None,
                found='"EUR/\u0007USD" \\ 😀',
                expected="a pair such as EURUSD",
            ),
        ),
    ),
    FileRefused(
        name="stray.bin",
        file=None,
        source="drop",
        day=None,
        sha256=None,
        size=0,
        reasons=1,
        findings=(Finding(file="stray.bin", line=None, column=None, found="no pattern", expected="a known name"),),
    ),
    EveningChecked(
        recipe=Recipe(
            date=date(2026, 12, 1),
            round="europe",
            positions_on=date(2026, 12, 1),
            prices_on=date(2026, 12, 1),
            window_to=date(2026, 12, 1),
            rules=sha("c"),
            known=10,
        ),
        edition=1,
        inputs=sha("5"),
        files=(
            UsedFile(file=FileKind.PRICES, source="drop", day=date(2026, 12, 1), sha256=sha("1")),
            UsedFile(file=FileKind.HISTORY, source="drop", day=None, sha256=sha("2")),
        ),
        settings=sha("b"),
        rules=(sha("d"), sha("e")),
        sessions=sha("6"),
        versions={"duskcheck": "0.1.0", "numpy": "2.4.6", "Å-lib": "1"},
        completes=True,
        outcome=Outcome.OVER,
        counts={"within": 9, "near": 1, "over": 2, "unmeasured": 0},
        books=(
            BookLine(subject="book:north-quay", currency="EUR", value_at_risk=1250000.0000000002, pnl=-81234.5),
            BookLine(subject="firm", currency="EUR", value_at_risk=-1.0, pnl=None),
        ),
        results=sha("7"),
        told=True,
    ),
    ExcessOpened(
        excess="x-1",
        rule="nq-var",
        subject=BOOK,
        day=date(2026, 12, 1),
        side=Side.ABOVE,
        value=1250000.0000000002,
        level=1250000.0,
        distance=2.3283064365386963e-10,
        unit=Unit.AMOUNT,
        currency="EUR",
        owner="m.osei",
    ),
    ExcessOpened(
        excess="x-2",
        rule="single-name",
        subject=GROUP,
        day=date(2026, 12, 1),
        side=Side.BELOW,
        value=-0.1,
        level=1e-07,
        distance=0.30000000000000004,
        unit=Unit.OF_NAV,
        currency=None,
        owner=None,
    ),
    ExcessOpened(
        excess="x-3",
        rule="gross",
        subject=FIRM,
        day=date(2026, 12, 1),
        side=Side.ABOVE,
        value=1e20,
        level=1e21,
        distance=5e-324,
        unit=Unit.NUMBER,
        currency=None,
        owner=None,
    ),
    NoticeQueued(
        id="n-1",
        topic="excess.opened",
        title="North Quay is over its limit: VaR € 1,250,000",
        channel="mail",
        person="m.osei",
        content=sha("8"),
        place=0,
        after_seq=11,
        after_hash=sha("9"),
    ),
    NoticeQueued(
        id="n-2",
        topic="nightly",
        title="Nightly note",
        channel="tray",
        person=None,
        content=sha("8"),
        place=1,
        after_seq=11,
        after_hash=sha("9"),
    ),
)

AFTER: tuple[Fact, ...] = (
    NoticeFailed(
        id="n-1",
        attempt=1,
        reason="the server refused: 451 4.7.1 try later",
        final=False,
        next_try="2026-03-12T20:20:02.500Z",
    ),
    NoticeFailed(id="n-1", attempt=2, reason="no such mailbox", final=True, next_try=None),
    NoticeSent("n-2", 1, "tray/2026-12-01-n-2.eml"),
    EveningMissed(date(2026, 12, 2), "asia", "no positions came before 20:00"),
    ExcessChanged(
        excess="x-1",
        day=date(2026, 12, 2),
        state=ExcessState.OPEN,
        side=Side.ABOVE,
        unit=Unit.AMOUNT,
        currency="EUR",
        owner="m.osei",
        opened_on=date(2026, 12, 1),
        opened_value=1250000.0000000002,
        last_on=date(2026, 12, 2),
        last_value=1300000.5,
        level=1250000.0,
        worst_on=date(2026, 12, 2),
        worst_value=1300000.5,
        worst_distance=50000.5,
        reason="over on another evening",
    ),
    ExcessChanged(
        excess="x-2",
        day=date(2026, 12, 2),
        state=ExcessState.WAIVED,
        side=Side.BELOW,
        unit=Unit.RATIO,
        currency=None,
        owner=None,
        opened_on=date(2026, 12, 1),
        opened_value=-0.1,
        last_on=date(2026, 12, 1),
        last_value=1.0,
        level=1.0,
        worst_on=date(2026, 12, 1),
        worst_value=1.0,
        worst_distance=0.0,
        reason="waived",
    ),
    ExcessCured(excess="x-1", day=date(2026, 12, 3), by=CuredBy.FIGURE, value=1249999.0),
    ExcessCured(excess="x-3", day=date(2026, 12, 3), by=CuredBy.END_OF_RULE, value=None),
    ExcessVoided("x-2", date(2026, 12, 3), "a corrected price file shows that it was never over"),
    ExcessOpened(
        excess="x-4",
        rule="leverage",
        subject=POSITION,
        day=date(2026, 12, 3),
        side=Side.ABOVE,
        value=2.0,
        level=1.5,
        distance=0.5,
        unit=Unit.RATIO,
        currency=None,
        owner="m.osei",
    ),
    DaemonStopped("asked to stop", 4711),
)


def make(path: Path) -> str:
    """Make the ledger anew and give its head as text: the number and the hash of its newest entry."""
    path.unlink(missing_ok=True)
    with Ledger.open(path, create=True) as ledger:
        for at, batch in (
            (datetime(2026, 12, 1, 19, 0, 0, 0, UTC), OPENING),
            (datetime(2026, 12, 1, 19, 15, 0, 123999, UTC), EVENING),
            (datetime(2026, 12, 1, 19, 14, 58, 0, UTC), ()),  # the clock went back: a ClockOdd by itself
            (datetime(2026, 12, 3, 19, 15, 7, 5000, UTC), AFTER),
        ):
            with ledger.transaction(at) as transaction:
                for fact in batch:
                    transaction.append(fact)
        held = {entry.fact.KIND for entry in ledger.entries()}
        absent = sorted(FACTS.keys() - held)
        if absent:
            raise SystemExit(f"add facts of these kinds to {Path(__file__).name}: {', '.join(absent)}")
        head = ledger.head()
    return f"{head.seq} {head.hash}\n"


if __name__ == "__main__":
    new = FOLDER / "ledger.new"
    text = make(new)
    new.replace(FOLDER / "ledger.sqlite")
    (FOLDER / "head.txt").write_text(text, encoding="ascii")
    print(text, end="")
