"""The lock on a file."""

from __future__ import annotations

import os
import signal
from pathlib import Path

import pytest

from monitor.ledger import lock as module
from monitor.ledger.lock import lock
from monitor.words import Busy


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "state" / "evening.lock"


def hold_in_a_child(path: Path) -> int:
    """A process that holds the lock until it is killed."""
    ready, tell = os.pipe()
    child = os.fork()
    if child == 0:
        try:
            with lock(path):
                os.write(tell, b"x")
                signal.pause()
        finally:
            os._exit(1)
    os.close(tell)
    assert os.read(ready, 1) == b"x"
    os.close(ready)
    return child


def end(child: int) -> None:
    os.kill(child, signal.SIGKILL)
    os.waitpid(child, 0)


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


def test_another_process_holds_it_until_it_is_killed(path):
    child = hold_in_a_child(path)
    try:
        with pytest.raises(Busy, match=f"process {child} on "), lock(path):
            pytest.fail("it was taken twice")
    finally:
        end(child)

    with lock(path):
        pass


def test_waiting_takes_it_as_soon_as_it_is_free(path, monkeypatch):
    child = hold_in_a_child(path)
    pauses = []

    def pause(seconds: float) -> None:
        pauses.append(seconds)
        end(child)

    monkeypatch.setattr(module.time, "sleep", pause)

    with lock(path, wait_seconds=60):
        assert len(pauses) == 1


def test_waiting_ends(path, monkeypatch):
    clock = iter([100.0, 101.0, 105.9, 106.0])
    monkeypatch.setattr(module.time, "monotonic", lambda: next(clock))
    monkeypatch.setattr(module.time, "sleep", lambda _: None)

    with lock(path), pytest.raises(Busy), lock(path, wait_seconds=5):
        pytest.fail("it was taken twice")
