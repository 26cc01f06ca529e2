"""The two set-up commands on a machine that is not fit for them, and what the README says."""

from __future__ import annotations

import re
import subprocess
from pathlib import Path

import pytest

from monitor.limits.rules import read_rules
from monitor.site import read_site

PROJECT = Path(__file__).parents[1]
README = (PROJECT / "README.md").read_text()
# A python3 that answers the questions of the set-up script as an unfit one would.
STAND_INS = {
    "old": (
        'case "$*" in *version_info*) exit 1;; -V) echo Python 3.9.2;; esac',
        "duskcheck needs Python 3.11 or newer",
    ),
    "without venv": ('case "$*" in *ensurepip*) exit 1;; esac', "apt-get install python3-venv"),
}


@pytest.mark.parametrize("script", ["demo.sh", "test.sh"])
@pytest.mark.parametrize("fault", STAND_INS)
def test_an_unfit_python_gets_one_clear_line(tmp_path: Path, script: str, fault: str):
    answers, expected = STAND_INS[fault]
    python = tmp_path / "python3"
    python.write_text(f"#!/bin/sh\n{answers}\nexit 0\n")
    python.chmod(0o755)

    ended = subprocess.run(
        ["sh", str(PROJECT / "deploy" / script)],
        env={"PATH": f"{tmp_path}:/usr/bin:/bin", "HOME": str(tmp_path)},
        capture_output=True,
        text=True,
        check=False,
    )

    assert ended.returncode == 2
    assert len(ended.stderr.splitlines()) == 1 and expected in ended.stderr
    assert ended.stdout == ""


def test_no_python_at_all_gets_one_clear_line(tmp_path: Path):
    ended = subprocess.run(
        ["/bin/sh", str(PROJECT / "deploy" / "demo.sh")],
        env={"PATH": "/usr/bin:/bin", "PYTHON": "python-that-is-not-there"},
        capture_output=True,
        text=True,
        check=False,
    )

    assert ended.returncode == 2
    assert len(ended.stderr.splitlines()) == 1 and "there is no python-that-is-not-there here" in ended.stderr


def blocks(start: str) -> list[str]:
    """The indented blocks of the README that begin with a word."""
    found = re.findall(r"(?:^    .*\n|^\n(?=    ))+", README, re.MULTILINE)
    texts = ["\n".join(line.removeprefix("    ") for line in block.strip("\n").splitlines()) + "\n" for block in found]
    return [text for text in texts if text.startswith(start)]


def test_the_site_and_the_rules_of_the_readme_can_be_used():
    [site] = blocks("site:")
    [people_and_channels] = blocks("people:")
    [rules] = blocks("rules:")

    settings = read_site("site.yaml", site.encode())
    read_site("site.yaml", (site[: site.index("channels:")] + people_and_channels).encode())

    assert [rule.id for rule in read_rules([("rules.yaml", rules.encode())], settings.rule_context())] == [
        "main-var",
        "main-cash",
    ]


def test_the_readme_states_the_job_in_one_paragraph_and_names_the_set_up_commands():
    first = README.split("\n\n")[1]

    assert "\n" not in first and first.endswith(".")
    assert "sh deploy/demo.sh" in README and "sh deploy/test.sh" in README
