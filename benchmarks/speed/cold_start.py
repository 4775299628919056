"""Cold start: what a command costs before it does anything, against interpreters that do the least.

Two comparisons, each between processes started in turn so that a busy machine disturbs both alike; medians:

``realize --version``       against ``python -c pass``: at most 80 ms more
``realize convert ...``     against ``python -c "import numpy, scipy.linalg"``: at most twice the time

Usage: ``python benchmarks/speed/cold_start.py [--runs N] [--check]``; with ``--check`` the exit status is 1 when a
limit is not kept.
"""

from __future__ import annotations

import argparse
import os
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

MODEL = '{"realize": 1, "kind": "transfer-function", "numerator": [1, 2], "denominator": [1, 3, 5, 7]}'
#: seconds beyond the bare interpreter, and ratio to the bare libraries
VERSION_LIMIT, CONVERT_LIMIT = 0.080, 2.0


def seconds(command: list[str], cwd: Path) -> float:
    """Return the wall time of one process."""
    environment = {**os.environ, "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    started = time.perf_counter()
    subprocess.run(command, cwd=cwd, env=environment, check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    return time.perf_counter() - started


def alternating(commands: dict[str, list[str]], runs: int, cwd: Path) -> dict[str, float]:
    """Return the median time of each command, the commands run in turn after one warm-up round."""
    times: dict[str, list[float]] = {name: [] for name in commands}
    for turn in range(runs + 1):
        for name, command in commands.items():
            taken = seconds(command, cwd)
            if turn:
                times[name].append(taken)
    return {name: statistics.median(values) for name, values in times.items()}


def main() -> int:
    """Measure, print, and compare with the limits."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--runs", type=int, default=11)
    parser.add_argument("--check", action="store_true")
    options = parser.parse_args()
    script = Path(sys.executable).with_name("realize")
    realize = [str(script)] if script.exists() else [sys.executable, "-m", "realize"]
    commands = {
        "python -c pass": [sys.executable, "-c", "pass"],
        "realize --version": [*realize, "--version"],
        "import numpy, scipy.linalg": [sys.executable, "-c", "import numpy, scipy.linalg"],
        "realize convert": [*realize, "convert", "small.json", "--to", "state-space", "--no-second-opinion"],
    }
    with tempfile.TemporaryDirectory() as folder:
        (Path(folder) / "small.json").write_text(MODEL)
        medians = alternating(commands, options.runs, Path(folder))
    for name, median in medians.items():
        print(f"{name:30s} {1e3 * median:8.1f} ms")
    beyond = medians["realize --version"] - medians["python -c pass"]
    ratio = medians["realize convert"] / medians["import numpy, scipy.linalg"]
    print(f"--version beyond the interpreter {1e3 * beyond:6.1f} ms (limit {1e3 * VERSION_LIMIT:.0f} ms)")
    print(f"convert over the libraries       {ratio:6.2f}    (limit {CONVERT_LIMIT:.1f})")
    return int(options.check and (beyond > VERSION_LIMIT or ratio > CONVERT_LIMIT))


if __name__ == "__main__":
    sys.exit(main())
