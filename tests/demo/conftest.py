"""The demo, run once for all tests of this folder."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
import zipfile

import pytest
from demo_place import PROJECT, Demo


@pytest.fixture(scope="session")
def demo(tmp_path_factory: pytest.TempPathFactory) -> Demo:
    """The demo run once for all tests, from a wheel built of this checkout and unpacked elsewhere."""
    place = tmp_path_factory.mktemp("wheel")
    for part in ("monitor", "demo_feed"):  # built from a copy, for building leaves folders behind
        shutil.copytree(PROJECT / part, place / "source" / part, ignore=shutil.ignore_patterns("__pycache__"))
    for part in ("pyproject.toml", "README.md"):
        shutil.copy(PROJECT / part, place / "source" / part)
    source = str(place / "source")
    build = [sys.executable, "-m", "pip", "wheel", "--quiet", "--no-deps", "--wheel-dir", str(place), source]
    subprocess.run(build, check=True, capture_output=True, text=True)
    [wheel] = place.glob("*.whl")
    installed = place / "installed"
    with zipfile.ZipFile(wheel) as packed:
        packed.extractall(installed)
    folder = place / "saltmere"
    # An isolated interpreter would not see the libraries; the checkout itself is kept out by the working directory.
    code = f"import sys; sys.path.insert(0, {str(installed)!r}); from monitor.cli import main; main()"
    ended = subprocess.run(
        [sys.executable, "-c", code, "demo", str(folder)],
        capture_output=True,
        text=True,
        cwd=place,
        env=os.environ | {"NO_COLOR": "1", "COLUMNS": "120"},
        check=False,
    )
    assert ended.returncode == 0, ended.stderr
    return Demo(folder, folder / "site.yaml", ended.stdout)
