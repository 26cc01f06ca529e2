"""One process at a time: a lock on a file, which the operating system gives back however its holder ends."""

from __future__ import annotations

import fcntl
import os
import socket
import time
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path

from monitor.ledger.disk import disk_errors, make_folder
from monitor.words import Busy

PAUSE_SECONDS = 0.05


@contextmanager
def lock(path: Path, wait_seconds: float = 0, what: str = "this site") -> Iterator[None]:
    """Hold the lock file `path`, waiting for it so long. Raises Busy, saying who holds `what` and since when.

    The file stays when the lock is given back: removing it would let two processes hold "the" lock. A child made by
    fork would keep the lock, one started as a new program does not. The lock is local to one host.
    """
    with disk_errors(f"opening the lock file {path}"):
        make_folder(path.parent)
        descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
    try:
        _take(descriptor, wait_seconds, what)
        with disk_errors(f"writing the lock file {path}"):
            os.ftruncate(descriptor, 0)
            os.pwrite(descriptor, f"process {os.getpid()} on {socket.gethostname()}".encode(), 0)
        yield
    finally:
        os.close(descriptor)


def _take(descriptor: int, wait_seconds: float, what: str) -> None:
    give_up = time.monotonic() + wait_seconds
    while True:
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            if time.monotonic() >= give_up:
                raise Busy(f"{what} is in use by {_holder(descriptor)}. Wait until it ends, then try again") from None
            time.sleep(PAUSE_SECONDS)
        else:
            return


def _holder(descriptor: int) -> str:
    who = os.pread(descriptor, 200, 0).decode(errors="replace") or "another process"
    since = datetime.fromtimestamp(os.fstat(descriptor).st_mtime, UTC)
    return f"{who} since {since:%Y-%m-%d %H:%M:%S} UTC"
