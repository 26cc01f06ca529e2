"""Broken, missing and absent input, and wrong use: the exit codes of the design and one clear message each."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import pytest
from evening_scene import (
    EVENINGS,
    FIRST,
    RULES,
    SECOND,
    Commands,
    Ended,
    account,
    documents,
    evening_of,
    leave,
    leave_files,
    write_site,
)

from monitor import evenings
from monitor.site import open_site
from monitor.state import open_state
from monitor.words import DuskcheckError

NOW = evening_of(SECOND)
KINDS = ("prices", "positions", "nav")


@pytest.mark.parametrize(
    ("kind", "text", "lacks"),
    [
        ("prices", b"instrument,close\nQUAY,abc\nTIDE,10\n", "'abc'"),
        ("prices", b"\xff\xfe\x00", "UTF-8"),
        ("prices", b"", "prices_2026-03-10.csv"),
        ("positions", b"garbage", "positions_2026-03-10.csv"),
        ("positions", b"book,instrument,quantity\nother,QUAY,1\n", "other"),
        ("nav", b"book,nav\nharbour,\n", "nav_2026-03-10.csv"),
    ],
)
def test_a_broken_file_makes_the_evening_incomplete_and_names_the_place(
    duskcheck: Commands, site: Path, kind: str, text: bytes, lacks: str
):
    leave_files(site, SECOND)
    leave(site, f"{kind}_{SECOND}.csv", "").write_bytes(text)

    ended = duskcheck(NOW, "check", "--site", site, "--json")

    assert ended.code == 4
    assert ended.stderr.startswith(f"duskcheck: refused: {kind}_{SECOND}.csv") and lacks in ended.stderr
    (evening,) = documents(ended)
    assert evening["outcome"] == "incomplete"
    assert any(f"{kind}_{SECOND}.csv" in cause and lacks in cause for cause in evening["lacking"])
    assert any("INCOMPLETE" in title for _, _, _, title, _ in account(site)["notices"])


def test_every_reason_of_a_refused_file_is_said_once(duskcheck: Commands, site: Path):
    leave_files(site, SECOND)
    leave(site, f"prices_{SECOND}.csv", "instrument,close\nQUAY,abc\nTIDE,x\n")
    leave(site, f"price_{SECOND}.csv", "instrument,close\n")

    first = duskcheck(NOW, "check", "--site", site)
    again = duskcheck(NOW, "check", "--site", site)

    said = [line.removeprefix("duskcheck: refused: ").split(": ")[0] for line in first.stderr.splitlines()]
    assert sorted(said) == [f"price_{SECOND}.csv", f"prices_{SECOND}.csv:2:6", f"prices_{SECOND}.csv:3:6"]
    assert "(the first of 2 reasons)" in " ".join(first.stdout.split())
    assert again.stderr == ""


@pytest.mark.parametrize("kind", ["prices", "positions"])
def test_a_missing_file_makes_the_evening_incomplete(duskcheck: Commands, site: Path, kind: str):
    leave_files(site, SECOND, kinds=[other for other in KINDS if other != kind])

    ended = duskcheck(NOW, "check", "--site", site)

    assert (ended.code, ended.stderr) == (4, "")
    assert "no accepted file" in " ".join(ended.stdout.split()) or "no accepted price file" in ended.stdout


def test_an_absent_book_is_missing_and_not_flat(duskcheck: Commands, site: Path):
    leave_files(site, SECOND, kinds=("prices", "nav"))
    leave(site, f"positions_{SECOND}.csv", "book,instrument,quantity\n")

    ended = duskcheck(NOW, "check", "--site", site, "--json")

    assert ended.code == 4
    (evening,) = documents(ended)
    assert {row["standing"] for row in evening["standings"]} == {"unmeasured"}


def test_nothing_at_all_for_two_evenings_is_still_an_evening(duskcheck: Commands, site: Path):
    ended = duskcheck(evening_of(EVENINGS[3]), "check", "--site", site, "--json")

    assert (ended.code, ended.stderr) == (4, "")
    assert documents(ended)[0]["outcome"] == "incomplete"


def break_site(site: Path) -> None:
    site.write_text(site.read_text() + "nonsense: [1,\n")


def break_rules(site: Path) -> None:
    (site.parent / "rules" / "limits.yaml").write_text(RULES.replace("limit: 15000", "limit: many"))


def name_an_unknown_calendar(site: Path) -> None:
    site.write_text(site.read_text().replace("XDUB", "XXXX"))


def remove_rules(site: Path) -> None:
    shutil.rmtree(site.parent / "rules")


def remove_drop(site: Path) -> None:
    shutil.rmtree(site.parent / "drop")


def put_a_file_in_place_of_the_drop(site: Path) -> None:
    remove_drop(site)
    (site.parent / "drop").touch()


@pytest.mark.parametrize(
    ("harm", "said"),
    [
        (break_site, "site.yaml:"),
        (Path.unlink, "site.yaml: found No such file"),
        (break_rules, "rules/limits.yaml:8:12"),
        (remove_rules, "expected the folder of rule files"),
        (name_an_unknown_calendar, "found the calendar 'XXXX'"),
        (remove_drop, "the drop"),
        (put_a_file_in_place_of_the_drop, "cannot be read: Not a directory"),
    ],
    ids=lambda value: getattr(value, "__name__", ""),
)
def test_a_site_that_is_wrong_is_refused_and_nothing_is_recorded(duskcheck: Commands, site: Path, harm, said: str):
    before = account(site)
    whole = site.read_bytes()
    harm(site)

    ended = duskcheck(NOW, "check", "--site", site, "--json")

    assert (ended.code, ended.stdout) == (2, "")
    assert said in ended.stderr
    assert_clear(ended)
    site.write_bytes(whole)
    (site.parent / "rules").mkdir(exist_ok=True)
    (site.parent / "rules" / "limits.yaml").write_text(RULES)
    assert account(site)["entries"] == before["entries"]


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["--round", "nosuch"], "found the round 'nosuch'; expected one of all"),
        (["--round", "nosuch", "--date", SECOND], "found the round 'nosuch'"),
        (["--date", "2026-03-08"], "no session"),  # a Sunday
        (["--date", EVENINGS[2]], "which is still to come"),
        (["--from", FIRST, "--to", "2031-01-01"], "which is still to come"),
        (["--date", "2026-13-01"], "expected a date such as"),
        (["--from", FIRST], "--from and --to together"),
        (["--from", SECOND, "--to", FIRST], "lies after"),
    ],
)
def test_wrong_use_of_check_exits_with_2(duskcheck: Commands, site: Path, arguments: list[str], said: str):
    ended = duskcheck(NOW, "check", "--site", site, "--json", *arguments)

    assert (ended.code, ended.stdout) == (2, "")
    assert said in ended.stderr
    assert_clear(ended)


@pytest.mark.parametrize(
    ("arguments", "said"),
    [(["--from", "9999"], "found --from 9999; expected the number of an entry"), (["--kind", "evening"], "--kind")],
)
def test_wrong_use_of_ledger_show_exits_with_2(duskcheck: Commands, site: Path, arguments: list[str], said: str):
    ended = duskcheck(NOW, "ledger", "show", "--site", site, *arguments)

    assert (ended.code, ended.stdout) == (2, "")
    assert said in ended.stderr


def test_an_evening_incomplete_by_its_books_alone_says_why(duskcheck: Commands, site: Path):
    site.write_text(site.read_text().replace("window: 30", "window: 400"))
    leave_files(site, SECOND)

    ended = duskcheck(NOW, "check", "--site", site)

    text = " ".join(ended.stdout.split())
    assert ended.code == 4
    assert "positions or books not measured." in text
    assert "not measured: harbour/QUAY: QUAY has" in text and "of the 400 returns of the window" in text


@pytest.mark.parametrize("command", [["ledger", "show"], ["report"], ["excess", "list"]])
def test_without_a_ledger_commands_that_read_it_fail_and_make_none(
    duskcheck: Commands, tmp_path: Path, command: list[str]
):
    site = write_site(tmp_path / "new")

    for as_json in ([], ["--json"]):
        ended = duskcheck(NOW, *command, "--site", site, *as_json)

        assert (ended.code, ended.stdout) == (1, "")
        assert "there is no ledger" in ended.stderr and "made by the first check" in ended.stderr
        assert_clear(ended)
    assert not (tmp_path / "new" / "state").exists()


def test_verifying_a_ledger_that_is_not_there_finds_the_record_damaged(duskcheck: Commands, tmp_path: Path):
    site = write_site(tmp_path / "new")

    ended = duskcheck(NOW, "ledger", "verify", "--site", site, "--json")

    assert (ended.code, ended.stderr) == (5, "")
    assert json.loads(ended.stdout)["sound"] is False


def test_a_check_does_not_begin_a_new_record_where_the_old_one_was_lost(duskcheck: Commands, site: Path):
    (site.parent / "state" / "ledger.sqlite").unlink()

    ended = duskcheck(NOW, "check", "--site", site)

    assert ended.code == 5
    assert "is missing, but the archive beside it is there" in ended.stderr
    assert not (site.parent / "state" / "ledger.sqlite").exists()


@pytest.mark.parametrize("file", ["index.sqlite", "history.sqlite"])
@pytest.mark.parametrize("harm", ["gone", "cut", "garbled"])
def test_a_lost_or_broken_cache_changes_no_answer(duskcheck: Commands, site: Path, copy, file: str, harm: str):
    leave_files(site, SECOND, big=True)
    sound = copy(site)
    expected = duskcheck(NOW, "check", "--site", sound)
    record = account(sound)
    path = site.parent / "state" / file
    data = path.read_bytes()
    if harm == "gone":
        path.unlink()
    else:
        harmed = {"cut": data[: len(data) // 2], "garbled": data[:4096] + bytes(len(data) - 4096)}
        path.write_bytes(harmed[harm])

    ended = duskcheck(NOW, "check", "--site", site)
    if ended.code == 1:  # a break that shows only half-way; the file is made anew
        assert "has been thrown away" in ended.stderr
        assert_clear(ended)
        ended = duskcheck(NOW, "check", "--site", site)

    assert (ended.code, ended.stderr) == (expected.code, "")
    assert account(site) == record


def test_an_index_that_breaks_while_it_is_asked_is_thrown_away_and_named(duskcheck: Commands, site: Path):
    leave_files(site, SECOND)
    assert duskcheck(NOW, "check", "--site", site).code == 0
    record = account(site)
    path = site.parent / "state" / "index.sqlite"

    with pytest.raises(DuskcheckError, match=r"index\.sqlite was broken"), open_state(open_site(site)) as state:
        index = state.index()
        path.write_bytes(b"\xff" * path.stat().st_size)
        evenings.all_editions(index)

    assert not path.exists()
    assert duskcheck(NOW, "check", "--site", site).code == 0
    assert account(site) == record


@pytest.mark.parametrize("blocked", ["pages", "heads"])
def test_pages_and_heads_that_cannot_be_written_keep_nobody_from_being_told(
    duskcheck: Commands, site: Path, blocked: str
):
    site.write_text(site.read_text() + "heads: witness/heads\n")
    if blocked == "pages":
        (site.parent / "witness").mkdir()
        shutil.rmtree(site.parent / "pages")
        (site.parent / "pages").touch()
    leave_files(site, SECOND, big=True)

    ended = duskcheck(NOW, "check", "--site", site)

    assert ended.code == 1
    assert f"writing the {blocked}" in ended.stderr
    assert_clear(ended)
    assert {state for *_, state in account(site)["notices"]} == {"sent"}


def test_heads_are_witnessed_once_even_where_a_run_could_not(duskcheck: Commands, site: Path):
    site.write_text(site.read_text() + "heads: witness/heads\n")
    leave_files(site, SECOND)
    assert duskcheck(NOW, "check", "--site", site).code == 1
    (site.parent / "witness").mkdir()

    for _ in range(3):
        assert duskcheck(NOW, "check", "--site", site).code == 0

    lines = (site.parent / "witness" / "heads").read_text().splitlines()
    (evening,) = documents(duskcheck(NOW, "check", "--site", site, "--json"))
    assert lines.count(f"{evening['seq']} {evening['head']}") == 1
    assert len(lines) == len(set(lines))
    assert duskcheck(NOW, "ledger", "verify", "--site", site, "--head", lines[-1]).code == 0


def test_a_notice_that_no_channel_took_is_said_and_goes_out_with_the_next_check(duskcheck: Commands, site: Path):
    shutil.rmtree(site.parent / "tray")
    (site.parent / "tray").touch()
    leave_files(site, SECOND)

    ended = duskcheck(NOW, "check", "--site", site)

    assert ended.code == 0
    assert "1 notice not taken by the channel tray" in ended.stderr
    assert len(ended.stderr.splitlines()) == 1
    (site.parent / "tray").unlink()
    later = duskcheck(evening_of(SECOND, "19:10"), "check", "--site", site)
    assert (later.code, later.stderr) == (0, "")
    assert {state for *_, state in account(site)["notices"]} == {"sent"}


def test_names_in_files_are_shown_as_they_are(duskcheck: Commands, site: Path):
    leave_files(site, SECOND)
    leave(site, f"prices_{SECOND}.csv", "instrument,close\nQUAY,[/red]\nTIDE,10\n")

    ended = duskcheck(NOW, "check", "--site", site)

    assert ended.code == 4
    assert "'[/red]'" in ended.stdout


def test_the_page_and_the_hash_stand_on_one_line_each(duskcheck: Commands, site: Path):
    ended = duskcheck(NOW, "check", "--date", FIRST, "--site", site)

    page, recorded = ended.stdout.splitlines()[-2:]
    assert Path(page.removeprefix("page: ")).is_file()
    assert len(recorded.rpartition("hash ")[2]) == 64


def assert_clear(ended: Ended) -> None:
    assert "Traceback" not in ended.stderr and "defect" not in ended.stderr, ended.stderr
