"""kill -9 at any step loses nothing that was reported, and the next run goes on by itself.

The child is a fork that runs the real program; before the nth of its steps (each file opened, synced or renamed, each
SQL statement) it kills itself. What it reported it wrote to a pipe, which outlives it.
"""

from __future__ import annotations

import os
import signal
import sqlite3
from collections.abc import Callable
from datetime import timedelta
from pathlib import Path

from ledger_samples import NOON

from monitor.facts import FileAccepted
from monitor.ledger.archive import Archive
from monitor.ledger.chain import Ledger
from monitor.ledger.verify import verify
from monitor.words import FileKind

ROUNDS = 2


def run_evening(folder: Path, report: Callable[[int], None]) -> None:
    """Two transactions of two entries each, every entry naming a blob; goes on from what is there."""
    archive = Archive(folder / "archive")
    with Ledger.open(folder / "ledger.sqlite", create=True) as ledger:
        while (done := ledger.head().seq) < 2 * ROUNDS:
            hashes = archive.put_many([f"{done} {part}".encode() for part in "ab"])
            with ledger.transaction(NOON + timedelta(minutes=done)) as transaction:
                for sha in hashes:
                    transaction.append(FileAccepted("f", FileKind.NAV, "drop", None, sha, 3, 1, None, None))
            report(done + 2)


def in_a_child(task: Callable[[Callable[[int], None]], None]) -> tuple[int, int]:
    """Run a task in a forked child. Gives how it ended (0, or the signal) and the last number it reported."""
    reading, writing = os.pipe()
    child = os.fork()
    if child == 0:
        try:
            os.close(reading)
            task(lambda number: os.write(writing, bytes([number])) and None)
        except BaseException:
            os._exit(70)
        os._exit(0)
    os.close(writing)
    with os.fdopen(reading, "rb") as pipe:
        reports = pipe.read()
    _, status = os.waitpid(child, 0)
    assert not os.WIFEXITED(status) or os.WEXITSTATUS(status) == 0
    return (os.WTERMSIG(status) if os.WIFSIGNALED(status) else 0), max(reports, default=0)


def kill_before_step(number: int) -> None:
    """Make this process kill itself before its nth step."""
    left = number

    def counted(real: Callable[..., object]) -> Callable[..., object]:
        def step(*given: object, **named: object) -> object:
            nonlocal left
            left -= 1
            if left == 0:
                os.kill(os.getpid(), signal.SIGKILL)
            return real(*given, **named)

        return step

    class Counted(sqlite3.Connection):
        execute = counted(sqlite3.Connection.execute)

    real_connect = sqlite3.connect
    sqlite3.connect = lambda *given, **named: real_connect(*given, **named, factory=Counted)
    os.fsync = counted(os.fsync)
    for name in ("mkdir", "open", "replace"):
        setattr(Path, name, counted(getattr(Path, name)))


def check_state(folder: Path, reported: int) -> int:
    """Everything reported is there and sound, and every transaction whole. Gives the number of entries."""
    report = verify(folder / "ledger.sqlite", Archive(folder / "archive"))
    assert report.problems == ()
    assert report.entries >= reported
    assert report.entries % 2 == 0
    return report.entries


def test_killed_before_every_step(tmp_path):
    steps, found = 0, set()
    while True:
        steps += 1
        folder = tmp_path / str(steps)
        folder.mkdir()

        def killed(report: Callable[[int], None], folder: Path = folder, at: int = steps) -> None:
            kill_before_step(at)
            run_evening(folder, report)

        ended, reported = in_a_child(killed)
        if reported:
            found.add(check_state(folder, reported) - reported)
        run_evening(folder, lambda _: None)
        assert check_state(folder, 2 * ROUNDS) == 2 * ROUNDS
        if ended == 0:
            break
        assert ended == signal.SIGKILL

    assert steps > 50
    assert found == {0}  # between two steps of ours nothing is durable that was not reported


def test_killed_with_the_transaction_half_in_the_file(tmp_path):
    """A tiny cache makes SQLite write pages of the open transaction, so that only its journal can undo them."""
    run_evening(tmp_path, lambda _: None)

    def killed(_: Callable[[int], None]) -> None:
        with Ledger.open(tmp_path / "ledger.sqlite") as ledger:
            ledger._connection.execute("PRAGMA cache_size = 1")
            with ledger.transaction(NOON + timedelta(days=1)) as transaction:
                for number in range(200):
                    name = f"{number:0>2000}"
                    transaction.append(FileAccepted(name, FileKind.NAV, "drop", None, "0" * 64, 3, 1, None, None))
                os.kill(os.getpid(), signal.SIGKILL)

    ended, _ = in_a_child(killed)

    assert ended == signal.SIGKILL
    assert (tmp_path / "ledger.sqlite-journal").stat().st_size > 0
    assert check_state(tmp_path, 2 * ROUNDS) == 2 * ROUNDS
    assert not (tmp_path / "ledger.sqlite-journal").exists()


def test_killed_from_outside_while_it_writes_without_end(tmp_path):
    """Wherever inside SQLite's commit the signal meets it."""
    for reports in range(1, 13):
        reading, writing = os.pipe()
        child = os.fork()
        if child == 0:
            try:
                os.close(reading)
                archive = Archive(tmp_path / "archive")
                with Ledger.open(tmp_path / "ledger.sqlite", create=True) as ledger:
                    while True:
                        seq = ledger.head().seq
                        sha = archive.put(str(seq).encode())
                        with ledger.transaction(NOON) as transaction:
                            for _ in range(2):
                                transaction.append(FileAccepted("f", FileKind.NAV, "d", None, sha, 3, 1, None, None))
                        os.write(writing, (seq + 2).to_bytes(4))
            finally:
                os._exit(70)
        os.close(writing)
        with os.fdopen(reading, "rb", buffering=0) as pipe:
            for _ in range(reports):
                reported = int.from_bytes(pipe.read(4))
            os.kill(child, signal.SIGKILL)
            os.waitpid(child, 0)
            while more := pipe.read(4):
                reported = int.from_bytes(more)

        check_state(tmp_path, reported)
