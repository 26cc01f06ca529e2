"""Folders that survive a power cut, and the disk's troubles in plain words."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from monitor.words import DuskcheckError


def sync_folder(folder: Path) -> None:
    """Make the names in a folder durable: a file created or renamed in it is lost with the power until then."""
    descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def make_folder(folder: Path) -> None:
    """Create a folder and those above it, durably. Does nothing when it is there."""
    if folder.is_dir():
        return
    make_folder(folder.parent)
    folder.mkdir(exist_ok=True)
    sync_folder(folder.parent)


@contextmanager
def disk_errors(doing: str) -> Iterator[None]:
    """Turn an OSError into a DuskcheckError that says what failed and what to do."""
    try:
        yield
    except OSError as error:
        raise DuskcheckError(
            f"{doing} failed: {error.strerror or error}. Check the disk's free space and permissions, then run the "
            "command again: it goes on from what is recorded"
        ) from error
