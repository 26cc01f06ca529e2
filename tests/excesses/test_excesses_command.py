"""`excess list` and `excess show` in a process of their own agree with the notices, and can be read on any screen."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from datetime import date
from pathlib import Path
from typing import Any

import pytest
from excess_site import Small, copied

MON, TUE, WED, THU = (date(2026, 4, number) for number in range(20, 24))


def duskcheck(small: Small, *arguments: str, columns: int = 80) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-c", "from monitor.cli import main; main()", *arguments, "--site", str(small.file)]
    environment = os.environ | {"NO_COLOR": "1", "COLUMNS": str(columns)}
    return subprocess.run(command, capture_output=True, text=True, env=environment, check=False, timeout=60)


def listed(small: Small, *options: str) -> list[dict[str, Any]]:
    ended = duskcheck(small, "excess", "list", "--json", *options)
    assert ended.returncode == 0, ended.stderr
    found: list[dict[str, Any]] = json.loads(ended.stdout)
    return found


@pytest.fixture(scope="module")
def week(template: Small, tmp_path_factory: pytest.TempPathFactory) -> Small:
    """Three excesses of Quay open on Monday, are cured on Wednesday and open again on Thursday; East's stay open."""
    small = copied(template, tmp_path_factory.mktemp("week") / "site")
    for on, kelp in ((MON, 120), (TUE, 130), (WED, 60), (THU, 140)):
        small.quay(on, kelp, 20000)
        small.check(on)
    return small


@pytest.fixture
def again(week: Small, tmp_path: Path) -> Small:
    shutil.copytree(week.folder, tmp_path / "site")
    return Small(tmp_path / "site")


def test_the_list_and_the_nightly_note_agree_on_the_alive_and_their_days(again: Small) -> None:
    again.quay(MON, 60, 20000)
    again.check(MON)  # a new edition of an old evening: its note counts days to Thursday too

    note, found = again.notices("nightly_note")[-1], listed(again)
    assert note["business_date"] == str(MON)
    assert {own["excess"]: own["day"] for own in found} == {own["id"]: own["day"] for own in note["excesses"]}
    assert note["excesses_open"] == len(found) == 5


def test_the_list_can_be_narrowed(week: Small) -> None:
    everything = listed(week, "--state", "all")
    cured = listed(week, "--owner", "risk", "--state", "cured")
    nothing = duskcheck(week, "excess", "list", "--state", "void")

    assert [own["state"] for own in everything].count("open") == 5
    assert len(everything) == 8
    assert {own["rule"] for own in listed(week, "--book", "east")} == {"east-gross"}
    assert {own["rule"] for own in cured} == {"quay-gross"}
    assert nothing.stdout == "no excess is void\n"


def test_nothing_is_cut_off_on_a_narrow_screen(week: Small) -> None:
    said = duskcheck(week, "excess", "list", "--state", "all", columns=80).stdout

    assert "…" not in said
    assert max(map(len, said.splitlines())) <= 80
    for whole in (str(MON), str(THU), "quay-gross", "east-gross", "open, day", "cured on", "risk"):
        assert whole in said
    assert "counted to 2026-04-23" in " ".join(said.split())


def test_the_story_of_an_excess_reads_from_its_opening_to_its_end(week: Small) -> None:
    said = duskcheck(week, "excess", "show", "e1", columns=200).stdout.splitlines()

    assert said[0] == "e1: quay-gross (Gross exposure of Quay) of quay: cured on 2026-04-22"
    assert said[1] == "  owner risk, worst EUR 130.00 on 2026-04-21"
    assert [line.partition("  (entry")[0] for line in said[2:]] == [
        "  2026-04-20  opened at EUR 120.00, limit EUR 100",
        "  2026-04-21  still over: EUR 130.00, limit EUR 100",
        "  2026-04-22  cured: within its limit, at EUR 60.00",
    ]


def test_the_story_of_a_corrected_excess_says_what_was_corrected(again: Small) -> None:
    again.quay(WED, 110, 20000)
    again.check(WED)

    first = duskcheck(again, "excess", "show", "e1", columns=200).stdout
    [second] = [own.id for own in again.register().values() if own.void_reason and own.rule == "quay-gross"]
    void = duskcheck(again, "excess", "show", second, columns=200).stdout

    assert "of quay: open, day 4 (business days up to 2026-04-23)" in first
    assert "2026-04-22  corrected: opened on 2026-04-20, last over on 2026-04-23 at EUR 140.00, limit EUR 100" in first
    assert "void: the check of 2026-04-22 shows that it was over before too: it is a part of e1" in void


def test_an_unknown_excess_is_named_with_those_there_are(week: Small) -> None:
    ended = duskcheck(week, "excess", "show", "e99")

    assert ended.returncode == 2
    assert "found the excess 'e99'; expected one of e1 to e8" in ended.stderr
