"""Rate of batches and streams of small conversions with full receipts; what kills and hostile files cost.

Run: python benchmarks/speed/pipelines.py [--files 10000] [--lines 5000] [--kills 50] [--hostile 200]

Fourth-order coefficients become states. Batches run from the shell with one and with two worker processes; the largest
memory of the run and its workers is read from the operating system every half second and shown at a tenth of the way
and at the end. Processor seconds stand beside wall seconds: on a busy machine, only they mean much. ``--kills`` ends
runs (and, every other time, a worker) by SIGKILL at random moments and compares the results with an undisturbed run;
``--hostile`` puts so many files that nobody can read among five times as many good ones.
"""

from __future__ import annotations

import argparse
import json
import os
import resource
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from realize.files import dumps, read
from realize.files.record import model_to_record
from realize.models import TransferFunction, mark

JOB = """realize = 1
inputs = "plants/*.json"
output = "made"
second-opinion = false
[[steps]]
verb = "convert"
to = "state-space"
output = "{name}.json"
"""


def plant(seed: int) -> TransferFunction:
    """Return a plant of order four with two pairs, or a pair and two real poles, and up to three zeros."""
    rng = np.random.default_rng(seed)
    w, damping = 10.0 ** rng.uniform(-1, 3, 2), rng.uniform(0.02, 1.4, 2)
    d = np.polymul([1.0, 2 * damping[0] * w[0], w[0] ** 2], [1.0, 2 * damping[1] * w[1], w[1] ** 2])
    return TransferFunction(numerator=rng.standard_normal(1 + seed % 4) * w.max(), denominator=d)


def prepare(folder: Path, count: int) -> None:
    """Write plants and the job file."""
    (folder / "plants").mkdir()
    for k in range(count):
        (folder / "plants" / f"{k:06d}.json").write_text(dumps(plant(k)))
    (folder / "jobs.toml").write_text(JOB)


def start(folder: Path, *options: str) -> subprocess.Popen[bytes]:
    """Start a run from the shell."""
    command = [sys.executable, "-m", "realize", "run", "jobs.toml", *options]
    return subprocess.Popen(command, cwd=folder, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)


def family(pid: int) -> list[int]:
    """Return a process and its children."""
    try:
        return [pid, *map(int, Path(f"/proc/{pid}/task/{pid}/children").read_text().split())]
    except OSError:
        return [pid]


def memory(pid: int) -> float:
    """Return the resident memory of a process and its children, MiB."""
    total = 0
    for one in family(pid):
        try:
            total += int(Path(f"/proc/{one}/statm").read_text().split()[1]) * resource.getpagesize()
        except (OSError, IndexError, ValueError):
            continue
    return total / 2**20


def lines_in(path: Path) -> int:
    """Return the number of lines of a file, 0 where there is none."""
    return path.read_bytes().count(b"\n") if path.exists() else 0


def children_seconds() -> float:
    """Return the processor seconds of all children that have ended."""
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    return used.ru_utime + used.ru_stime


def batch(count: int, processes: int) -> float:
    """Time one batch; returns files a wall second."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        prepare(folder, count)
        before, began = children_seconds(), time.perf_counter()
        run = start(folder, "--processes", str(processes))
        early = late = 0.0
        while run.poll() is None:
            now = memory(run.pid)
            if lines_in(folder / "made" / "jobs.records.jsonl") >= count // 10 and not early:
                early = now
            late = now if now > 0.5 * late else late
            time.sleep(0.5)
        wall = time.perf_counter() - began
        # workers are ended by their parent and count as its children, which end before it does
        used = children_seconds() - before
        summary = json.loads((folder / "made" / "jobs.summary.json").read_text())
        assert summary["done"] == count, summary
        print(
            f"{count:7,d} files  {processes} processes  {wall:7.1f} s wall  {used:7.1f} s processor  "
            f"{count / wall:6.0f} a second  memory {early:.0f} -> {late:.0f} MiB"
        )
        return count / wall


def stream(count: int) -> None:
    """Time one stream."""
    with tempfile.TemporaryDirectory() as name:
        source = Path(name) / "in.jsonl"
        with open(source, "w") as out:
            for k in range(count):
                out.write(json.dumps(model_to_record(plant(k))) + "\n")
        command = [sys.executable, "-m", "realize", "convert", "--lines", "-", "--to", "state-space", "-o", "-"]
        before, began = children_seconds(), time.perf_counter()
        with open(source, "rb") as data, open(Path(name) / "out.jsonl", "wb") as out:
            subprocess.run([*command, "--no-second-opinion"], stdin=data, stdout=out, check=True)
        wall, used = time.perf_counter() - began, children_seconds() - before
        assert lines_in(Path(name) / "out.jsonl") == count
        print(
            f"{count:7,d} lines  1 process    {wall:7.1f} s wall  {used:7.1f} s processor  {count / wall:6.0f} a second"
            f"  ({count / used:.0f} a processor second)"
        )


def results(folder: Path) -> dict[str, str]:
    """Return the digests of all results."""
    return {path.name: mark(read(path)).digest for path in sorted((folder / "made").glob("[0-9]*.json"))}


def kills(times: int, count: int) -> None:
    """Kill runs and workers at random moments, go on, and compare."""
    rng = np.random.default_rng(times)
    with tempfile.TemporaryDirectory() as one, tempfile.TemporaryDirectory() as other:
        for name in (one, other):
            prepare(Path(name), count)
        start(Path(one)).wait()
        folder = Path(other)
        records = folder / "made" / "jobs.records.jsonl"
        for k in range(times):
            run = start(folder)
            goal = count * k // times
            while run.poll() is None and lines_in(records) < goal:
                time.sleep(0.02)
            time.sleep(float(rng.uniform(0, 0.5)))
            workers = family(run.pid)[1:]
            if k % 2 and workers:
                os.kill(int(rng.choice(workers)), signal.SIGKILL)
                time.sleep(float(rng.uniform(0, 0.3)))
            run.kill()
            run.wait()
        start(folder).wait()
        files = [json.loads(line)["file"] for line in records.read_text().splitlines()]
        left = list(folder.rglob(".realize*"))
        same = results(folder) == results(Path(one))
        print(
            f"{times} kills: results equal {same}, {count - len(set(files))} missing, "
            f"{len(files) - len(set(files))} twice, {len(left)} temporary files"
        )
        assert same and len(files) == len(set(files)) == count and not left


def hostile(bad: int) -> None:
    """Put files that nobody can read among five times as many good ones."""
    starts = [
        b"",
        b"{",
        b"[[[[",
        b"\x89PNG\r\n",
        b"PK\x03\x04",
        b'{"realize": 1, "kind": "none"}',
        b"\xff" * 99,
        b"1,2\n",
    ]
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        prepare(folder, 5 * bad)
        for k in range(bad):
            noise = np.random.default_rng(k).bytes(k % 50)
            (folder / "plants" / f"x{k:05d}.json").write_bytes(starts[k % len(starts)] + noise)
        run = start(folder)
        status = run.wait()
        summary = json.loads((folder / "made" / "jobs.summary.json").read_text())
        reasons = sum(bool(entry.get("reason")) for entry in summary["aside"])
        print(f"{bad} hostile files: status {status}, {summary['done']} done, {reasons} set aside with a reason")
        assert (status, summary["done"], reasons) == (4, 5 * bad, bad)


def main() -> None:
    parser = argparse.ArgumentParser()
    for option, usual in (("files", 10000), ("lines", 5000), ("kills", 0), ("hostile", 0)):
        parser.add_argument(f"--{option}", type=int, default=usual)
    given = parser.parse_args()
    print(f"load of the machine: {os.getloadavg()[0]:.1f} on {len(os.sched_getaffinity(0))} cores")
    if given.files:
        one, two = batch(given.files, 1), batch(given.files, 2)
        print(f"two processes are {two / one:.2f} times as fast as one")
    if given.lines:
        stream(given.lines)
    if given.kills:
        kills(given.kills, 8 * given.kills)
    if given.hostile:
        hostile(given.hostile)


if __name__ == "__main__":
    main()
