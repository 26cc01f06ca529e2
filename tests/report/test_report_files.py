"""Pages as files, and the list of evenings."""

from __future__ import annotations

import re
from dataclasses import replace
from datetime import date
from pathlib import Path

import pytest
from reading import read
from report_scene import evening

from monitor.report import pages
from monitor.report.draw import draw, draw_index
from monitor.report.page import Listed
from monitor.report.pages import page_name, write, write_index
from monitor.words import Outcome, WrongUse

COUNTS = {"over": 1, "near": 2, "within": 1036, "unmeasured": 0}


def test_the_name_says_date_round_and_edition() -> None:
    assert page_name(date(2026, 3, 12), "europe", 2) == "2026-03-12_europe_2.html"


@pytest.mark.parametrize("round_id", ["../up", "a/b", "", "a b", ".hidden", "a\x00", "é", "a%2f"])
def test_a_round_that_no_file_can_bear_is_refused(round_id: str) -> None:
    with pytest.raises(WrongUse, match="give it an id of letters"):
        page_name(date(2026, 3, 12), round_id, 1)


def test_a_page_is_written_whole_and_again_the_same(tmp_path: Path) -> None:
    folder = tmp_path / "not" / "there"
    path = write(folder, evening())
    assert path == folder / "2026-03-12_europe_1.html"
    assert path.read_bytes() == draw(evening())
    write(folder, evening())
    assert [found.name for found in folder.iterdir()] == [path.name]
    assert path.stat().st_mode & 0o777 == 0o644


def test_a_page_that_cannot_be_written_leaves_the_old_one(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = write(tmp_path, evening())
    old = path.read_bytes()

    def full(_: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(pages.os, "fsync", full)
    with pytest.raises(OSError, match="No space"):
        write(tmp_path, replace(evening(), site="Another"))
    assert path.read_bytes() == old
    assert list(tmp_path.iterdir()) == [path]


def test_the_list_has_every_evening_newest_first_with_its_outcome(tmp_path: Path) -> None:
    rows = [
        Listed(date(2026, 2, 27), "europe", 1, Outcome.WITHIN, COUNTS, "2026-02-27_europe_1.html"),
        Listed(date(2026, 3, 12), "asia", 1, Outcome.INCOMPLETE, COUNTS, "2026-03-12_asia_1.html"),
        Listed(date(2026, 3, 12), "europe", 1, Outcome.OVER, COUNTS, "2026-03-12_europe_1.html", newest=False),
        Listed(date(2026, 3, 12), "europe", 2, Outcome.NEAR, {"near": 1}, None),
    ]
    path = write_index(tmp_path, "Salt<mere> & Co", rows)
    assert path.name == "index.html"
    assert path.read_bytes() == draw_index("Salt<mere> & Co", reversed(rows))
    reading = read(path.read_bytes())
    words = re.findall(r"Incomplete|Over|Near|Within", reading.text[reading.text.index("2026-03") :])
    assert words == ["Near", "Over", "Incomplete", "Within"]
    assert "edition 1, replaced" in reading.text and "1,036" in reading.text
    assert "Salt<mere> & Co" in reading.text
    assert [link for link in reading.loads if link.endswith(".html")] == [
        "2026-03-12_europe_1.html",
        "2026-03-12_asia_1.html",
        "2026-02-27_europe_1.html",
    ]
    assert "duskcheck report --date 2026-03-12" in reading.text
    assert len(reading.all("h1")) == 1 and not reading.all("script")
    assert all(head.get("scope") for head in reading.all("th"))


def test_an_empty_list_says_so() -> None:
    assert "No evening has been checked yet." in read(draw_index("Saltmere Trust", [])).text
