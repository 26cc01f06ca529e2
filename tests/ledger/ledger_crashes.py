"""The program, killed with SIGKILL: run as a script, so that it can fork in a process without threads.

python ledger_crashes.py every_step | half_written | without_end FOLDER
"""

from __future__ import annotations

import json
import os
import signal
import sqlite3
import sys
from collections.abc import Callable
from datetime import timedelta
from pathlib import Path

from ledger_samples import NOON

from monitor.facts import FileAccepted
from monitor.ledger.archive import Archive
from monitor.ledger.chain import Ledger
from monitor.words import FileKind

ROUNDS = 2


def run_evening(folder: Path, report: Callable[[int], object]) -> None:
    """Transactions of two entries each, every entry naming a blob; goes on from what is there."""
    archive = Archive(folder / "archive")
    with Ledger.open(folder / "ledger.sqlite", create=True) as ledger:
        while (done := ledger.head().seq) < 2 * ROUNDS:
            write_two(ledger, archive, done)
            report(done + 2)


def write_two(ledger: Ledger, archive: Archive, done: int) -> None:
    hashes = archive.put_many([f"{done} {part}".encode() for part in "ab"])
    with ledger.transaction(NOON + timedelta(minutes=done)) as transaction:
        for sha in hashes:
            transaction.append(FileAccepted("f", FileKind.NAV, "drop", None, sha, 3, 1, None, None))


def every_step(folder: Path) -> None:
    """Evenings in folders 1, 2, ..., each killed before that step; prints for each the signal and the last report."""
    step = 0
    ended = signal.SIGKILL
    while ended:
        step += 1
        (folder / str(step)).mkdir()
        ended, reported = in_a_child(lambda report, at=step: (kill_before(at), run_evening(folder / str(at), report)))
        print(json.dumps([step, ended, reported]))


def half_written(folder: Path) -> None:
    """Killed with the transaction half in the file: a tiny cache makes SQLite write pages before the commit."""
    run_evening(folder, lambda _: None)
    with Ledger.open(folder / "ledger.sqlite") as ledger:
        ledger._connection.execute("PRAGMA cache_size = 1")
        with ledger.transaction(NOON + timedelta(days=1)) as transaction:
            for number in range(200):
                name = f"{number:0>2000}"
                transaction.append(FileAccepted(name, FileKind.NAV, "drop", None, "0" * 64, 3, 1, None, None))
            os.kill(os.getpid(), signal.SIGKILL)


def without_end(folder: Path) -> None:
    """Writes until it is killed from outside, printing after each transaction the number of its last entry."""
    archive = Archive(folder / "archive")
    with Ledger.open(folder / "ledger.sqlite", create=True) as ledger:
        while True:
            done = ledger.head().seq
            write_two(ledger, archive, done)
            print(done + 2, flush=True)


def in_a_child(task: Callable[[Callable[[int], object]], object]) -> tuple[int, int]:
    """Run a task in a fork. Gives how it ended (0, or the signal) and the last number that it reported."""
    sys.stdout.flush()
    reading, writing = os.pipe()
    child = os.fork()
    if child == 0:
        try:
            task(lambda number: os.write(writing, bytes([number])))
        except BaseException:
            os._exit(70)
        os._exit(0)
    os.close(writing)
    with os.fdopen(reading, "rb") as pipe:
        reports = pipe.read()
    _, status = os.waitpid(child, 0)
    if os.WIFEXITED(status) and os.WEXITSTATUS(status):
        raise SystemExit("the evening failed by itself")
    return (os.WTERMSIG(status) if os.WIFSIGNALED(status) else 0), max(reports, default=0)


def kill_before(number: int) -> None:
    """Make this process kill itself before its nth step: a file opened, synced or renamed, an SQL statement."""
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


if __name__ == "__main__":
    {"every_step": every_step, "half_written": half_written, "without_end": without_end}[sys.argv[1]](Path(sys.argv[2]))
