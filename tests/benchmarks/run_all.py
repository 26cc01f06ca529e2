"""All benchmarks of the risk engine, one after another, and the table of their ratios.

    .venv/bin/python tests/benchmarks/run_all.py

One thread for numpy. Takes some minutes. Each benchmark tells in its own docstring what it compares with what; each
compares the figures of fast and slow before it times them, and one that fails ends the run.
"""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

from bench_common import MARK

SCRIPTS = ("tails", "student", "garch", "rolling", "components", "monte_carlo")

if __name__ == "__main__":
    for name in SCRIPTS:
        script = Path(__file__).with_name(f"bench_{name}.py")
        done = subprocess.run(
            [sys.executable, str(script)],
            env={**os.environ, "OMP_NUM_THREADS": "1"},
            stdout=subprocess.PIPE,
            text=True,
            check=True,
        )
        for line in done.stdout.splitlines():
            if line.startswith(MARK):
                print(line.removeprefix(MARK), flush=True)
