"""The lock on a file."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest
from ledger_samples import environment

from monitor.ledger import lock as module
from monitor.ledger.lock import lock
from monitor.words import Busy


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "state" / "evening.lock"


HOLDER = """
import signal, sys
from pathlib import Path
from monitor.ledger.lock import lock

with lock(Path(sys.argv[1])):
    print("held", flush=True)
    signal.pause()
"""


@pytest.fixture
def holder(path: Path):
    """Another process that holds the lock until it is killed."""
    command = [sys.executable, "-c", HOLDER, path]
    with subprocess.Popen(command, stdout=subprocess.PIPE, env=environment()) as process:
        assert process.stdout.readline() == b"held\n"
        yield process
        process.kill()


def test_the_second_is_told_who_holds_it_and_since_when(path):
    with lock(path):
        when = rf"process {os.getpid()} on \S+ since 20\d\d-\d\d-\d\d \d\d:\d\d:\d\d UTC"
        with (
            pytest.raises(Busy, match=f"the evening of europe is in use by {when}"),
            lock(path, what="the evening of europe"),
        ):
            pytest.fail("it was taken twice")


def test_nothing_is_left_of_a_holder_with_a_longer_name(path):
    path.parent.mkdir()
    path.write_text("process 1234567 on " + "x" * 150, encoding="ascii")

    with lock(path), pytest.raises(Busy) as told, lock(path):
        pytest.fail("it was taken twice")

    assert "xxx" not in str(told.value)


def test_it_can_be_taken_again_after_it_was_given_back_and_the_file_stays(path):
    for _ in range(2):
        with lock(path):
            pass
        assert path.exists()

    with pytest.raises(ZeroDivisionError), lock(path):
        raise ZeroDivisionError
    with lock(path):
        pass


def test_another_process_holds_it_until_it_is_killed(path, holder):
    with pytest.raises(Busy, match=f"process {holder.pid} on "), lock(path):
        pytest.fail("it was taken twice")

    holder.kill()
    holder.wait()

    with lock(path):
        pass


def test_waiting_takes_it_as_soon_as_it_is_free(path, holder, monkeypatch):
    pauses = []

    def pause(seconds: float) -> None:
        pauses.append(seconds)
        holder.kill()
        holder.wait()

    monkeypatch.setattr(module.time, "sleep", pause)

    with lock(path, wait_seconds=60):
        assert len(pauses) == 1


def test_waiting_ends(path, monkeypatch):
    clock = iter([100.0, 101.0, 105.9, 106.0])
    monkeypatch.setattr(module.time, "monotonic", lambda: next(clock))
    monkeypatch.setattr(module.time, "sleep", lambda _: None)

    with lock(path), pytest.raises(Busy), lock(path, wait_seconds=5):
        pytest.fail("it was taken twice")
