"""kill -9 at any step loses nothing that was reported, and the next run goes on by itself."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
from pathlib import Path

import pytest
from ledger_crashes import ROUNDS, run_evening
from ledger_samples import environment

from monitor.ledger.archive import Archive
from monitor.ledger.verify import verify


def start(how: str, folder: Path) -> subprocess.Popen[bytes]:
    script = Path(__file__).with_name("ledger_crashes.py")
    return subprocess.Popen([sys.executable, script, how, folder], stdout=subprocess.PIPE, env=environment())


def check_state(folder: Path, reported: int) -> int:
    """Everything reported is there and sound, and every transaction whole. Gives the number of entries."""
    report = verify(folder / "ledger.sqlite", Archive(folder / "archive"))
    assert report.problems == ()
    assert report.entries >= reported
    assert report.entries % 2 == 0
    return report.entries


def test_killed_before_every_step(tmp_path):
    with start("every_step", tmp_path) as process:
        ends = [json.loads(line) for line in process.stdout]
    assert process.returncode == 0

    for step, ended, reported in ends:
        folder = tmp_path / str(step)
        assert ended == (0 if step == len(ends) else signal.SIGKILL)
        if reported:
            assert check_state(folder, reported) == reported
        run_evening(folder, lambda _: None)
        assert check_state(folder, 2 * ROUNDS) == 2 * ROUNDS

    assert len(ends) > 50
    assert {reported for _, _, reported in ends} == {0, 2, 4}


def test_killed_with_the_transaction_half_in_the_file(tmp_path):
    """Only SQLite's journal can undo it then, also when the verifier is the first to come."""
    with start("half_written", tmp_path) as process:
        pass
    assert process.returncode == -signal.SIGKILL
    assert (tmp_path / "ledger.sqlite-journal").stat().st_size > 0

    assert check_state(tmp_path, 2 * ROUNDS) == 2 * ROUNDS
    assert not (tmp_path / "ledger.sqlite-journal").exists()


@pytest.mark.parametrize("reports", range(1, 9))
def test_killed_from_outside_wherever_in_its_commit_it_is(tmp_path, reports):
    with start("without_end", tmp_path) as process:
        told = [process.stdout.readline() for _ in range(reports)]
        process.kill()
        told += process.stdout.read().splitlines(keepends=True)

    whole = [int(line) for line in told if line.endswith(b"\n")]
    assert len(whole) >= reports
    check_state(tmp_path, whole[-1])
