"""One process that has the program loaded, for all tests of the room, and a site after its first evening."""

from __future__ import annotations

import shutil
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from evening_scene import FIRST, Commands, evening_of, leave_files, write_site


@pytest.fixture(scope="session")
def duskcheck(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Commands]:
    commands = Commands(tmp_path_factory.mktemp("streams"))
    yield commands
    commands.close()


@pytest.fixture(scope="session")
def first_evening(duskcheck: Commands, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The folder of a site whose first evening was checked. Copy it before use."""
    folder = tmp_path_factory.mktemp("scene") / "site"
    site = write_site(folder)
    leave_files(site, FIRST)
    ended = duskcheck(evening_of(FIRST), "check", "--site", site)
    assert (ended.code, ended.stderr) == (0, "")
    return folder


@pytest.fixture
def site(first_evening: Path, tmp_path: Path) -> Path:
    """The site file of a fresh copy of that site."""
    return Path(shutil.copytree(first_evening, tmp_path / "site")) / "site.yaml"


@pytest.fixture
def copy(tmp_path: Path) -> Callable[[Path], Path]:
    """Copies a site's folder to a fresh place, in place of the copy before; gives its site file."""

    def make(site: Path) -> Path:
        shutil.rmtree(tmp_path / "copy", ignore_errors=True)
        return Path(shutil.copytree(site.parent, tmp_path / "copy")) / "site.yaml"

    return make
