"""The demo firm as a newcomer gets it, and the command in a process of its own."""

from __future__ import annotations

import os
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

PROJECT = Path(__file__).parents[2]


def run_duskcheck(*arguments: str | Path, **more: str) -> subprocess.CompletedProcess[str]:
    """The command in a process of its own."""
    command = [sys.executable, "-c", "from monitor.cli import main; main()", *map(str, arguments)]
    environment = os.environ | {"NO_COLOR": "1", "COLUMNS": "200"} | more
    return subprocess.run(command, capture_output=True, text=True, env=environment, check=False, timeout=200)


@dataclass(frozen=True)
class Demo:
    """The demo firm after its year. said: what the command printed."""

    folder: Path
    site: Path
    said: str
