"""The real command with the clock standing at a given moment, and killed or starved of disk where a test wants it.

evening_driver.py AT ARGUMENTS...   one command
evening_driver.py                   many: a job as JSON a line on stdin, its exit code on stdout; each runs in a fork of
                                    this process, which has loaded what takes long to load
"""

from __future__ import annotations

import builtins
import io
import json
import os
import resource
import signal
import sqlite3
import sys
import tempfile
import traceback
from collections.abc import Callable
from contextlib import redirect_stdout, suppress
from pathlib import Path
from typing import Any

import time_machine
from evening_scene import FIRST, evening_of, leave_files, write_site

WRITES = ("BEGIN", "COMMIT", "CREATE", "INSERT", "UPDATE", "DELETE", "DROP")


def main(at: str, arguments: list[str]) -> None:
    from monitor.cli import main as duskcheck

    sys.argv = ["duskcheck", *arguments]
    with time_machine.travel(at, tick=True):
        duskcheck()


def serve() -> None:
    load()
    for line in sys.stdin:
        child = os.fork()
        if child == 0:
            in_child(**json.loads(line))
        _, status = os.waitpid(child, 0)
        print(os.waitstatus_to_exitcode(status), flush=True)


def load() -> None:
    """Check an evening here once, so that what takes long to load, to compile and to draw is ready in the forks."""
    with tempfile.TemporaryDirectory() as folder, redirect_stdout(io.StringIO()):
        site = write_site(Path(folder) / "site")
        leave_files(site, FIRST, big=True)
        for command in (["check"], ["report"], ["excess", "list"], ["ledger", "verify"], ["backtest"]):
            with suppress(SystemExit):
                main(evening_of(FIRST), [*command, "--site", str(site)])


def in_child(at: str, arguments: list[str], stdout: str, stderr: str, kill: int, bytes_at_most: int) -> None:
    """Run one command, the two streams going into files. kill: before which step, 0 for none."""
    code: Any = 70
    try:
        for number, path in ((1, stdout), (2, stderr)):
            os.dup2(os.open(path, os.O_WRONLY | os.O_CREAT | os.O_TRUNC), number)
        if bytes_at_most:
            signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
            resource.setrlimit(resource.RLIMIT_FSIZE, (bytes_at_most, bytes_at_most))
        if kill:
            kill_before(kill)
        main(at, arguments)
    except SystemExit as ended:
        code = ended.code
    except BaseException:
        traceback.print_exc()
    finally:
        sys.stdout.flush()
        sys.stderr.flush()
        os._exit(code if isinstance(code, int) else 70)


def kill_before(number: int) -> None:
    """Make this process kill itself before its nth step: a file opened for writing, synced or renamed, a folder made,
    an SQL statement that writes."""
    left = number

    def counted(real: Callable[..., Any], counts: Callable[..., bool] = lambda *_, **__: True) -> Callable[..., Any]:
        def step(*given: Any, **named: Any) -> Any:
            nonlocal left
            if counts(*given, **named):
                left -= 1
                if left == 0:
                    os.kill(os.getpid(), signal.SIGKILL)
            return real(*given, **named)

        return step

    def for_writing(_file: object, mode: str = "r", *_: Any, **__: Any) -> bool:
        return mode[0] in "wax"

    def writes(_connection: object, statement: str, *_: Any) -> bool:
        return statement.lstrip().upper().startswith(WRITES)

    class Counted(sqlite3.Connection):
        execute = counted(sqlite3.Connection.execute, writes)
        executescript = counted(sqlite3.Connection.executescript)

    real_connect = sqlite3.connect
    sqlite3.connect = lambda *given, **named: real_connect(*given, **named, factory=Counted)
    builtins.open = counted(builtins.open, for_writing)
    io.open = builtins.open
    for name in ("fsync", "replace", "mkdir"):
        setattr(os, name, counted(getattr(os, name)))


if __name__ == "__main__":
    if sys.argv[1:]:
        main(sys.argv[1], sys.argv[2:])
    else:
        serve()
