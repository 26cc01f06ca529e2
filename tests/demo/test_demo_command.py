"""`duskcheck demo`, from a wheel installed elsewhere, and what can be done with its site afterwards."""

from __future__ import annotations

import json
import re
import shutil
from pathlib import Path

import pytest
from demo_place import Demo, run_duskcheck

from demo_feed import story


def test_the_demo_says_what_happened_and_where_to_look(demo: Demo):
    assert "260 evenings checked" in demo.said
    assert "Replayed from the archive: 260 of 260 evenings, exactly as recorded." in demo.said
    for event in story.EVENTS:
        assert str(event.date) in demo.said
    for place in ("tray", "pages/index.html", "excess list", "ledger verify"):
        assert place in demo.said


def test_the_pages_and_notices_are_where_it_says(demo: Demo):
    [page] = re.findall(r"the last evening's page +(\S+)", demo.said)

    assert Path(page).read_text().startswith("<!DOCTYPE html>")
    assert len(list((demo.folder / "tray").glob("*nightly_note*.eml"))) == 260


def test_its_ledger_is_sound(demo: Demo):
    ended = run_duskcheck("ledger", "verify", "--site", demo.site, "--json")

    assert ended.returncode == 0, ended.stdout
    assert json.loads(ended.stdout)["sound"]


@pytest.fixture
def copy(demo: Demo, tmp_path: Path) -> Path:
    shutil.copytree(demo.folder, tmp_path / "saltmere")
    return tmp_path / "saltmere"


def test_a_check_again_records_nothing_and_ends_the_same(copy: Path):
    site = copy / "site.yaml"
    before = json.loads(run_duskcheck("ledger", "verify", "--site", site, "--json").stdout)

    first = run_duskcheck("check", "--site", site, "--from", "2026-01-26", "--to", "2026-02-02", "--json")
    (copy / "state" / "index.sqlite").unlink()
    (copy / "state" / "history.sqlite").unlink()
    second = run_duskcheck("check", "--site", site, "--from", "2026-01-26", "--to", "2026-02-02", "--json")

    after = json.loads(run_duskcheck("ledger", "verify", "--site", site, "--json").stdout)
    assert first.returncode == second.returncode == 3, first.stderr
    assert first.stdout == second.stdout
    assert (before["seq"], before["head"]) == (after["seq"], after["head"])


def test_pages_of_older_evenings_are_drawn_on_demand(copy: Path):
    ended = run_duskcheck("report", "--site", copy / "site.yaml", "--date", "2025-06-16")

    assert ended.returncode == 0, ended.stderr
    assert "2025-06-16" in Path(ended.stdout.split()[0]).read_text()


def test_every_rule_in_one_sentence(demo: Demo):
    ended = run_duskcheck("rules", "show", "--site", demo.site, "--json")

    rules = json.loads(ended.stdout)
    assert ended.returncode == 0
    assert len(rules) > 10 and all(rule["sentence"].endswith(".") for rule in rules)
