"""A worker process: tasks as JSON lines on standard input, replies as JSON lines on standard output."""

from __future__ import annotations

import json
import os
import sys
from dataclasses import asdict
from pathlib import Path
from typing import Any

#: Libraries of linear algebra use one thread a worker, so that the workers do not crowd each other out.
THREADS = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS", "NUMEXPR_NUM_THREADS")
_DIE_WITH_PARENT = 1  # PR_SET_PDEATHSIG of Linux's prctl


def job_to_record(job: Any) -> dict[str, Any]:
    """Return a job as plain data for a worker."""
    record = asdict(job)
    for name in ("folder", "output"):
        record[name] = str(record[name])
    return {**record, "lines": {}, "steps": [asdict(step) for step in job.steps]}


def job_from_record(record: dict[str, Any]) -> Any:
    """Return the job of plain data; JSON has lists where options have pairs."""
    from realize.batch.jobs import Job, Step

    steps = []
    for step in record["steps"]:
        options = {
            name: tuple(value) if isinstance(value, list) and name != "columns" else value
            for name, value in step["options"].items()
        }
        steps.append(Step(**{**step, "options": options}))
    fields = {**record, "steps": tuple(steps), "inputs": tuple(record["inputs"]), "exclude": tuple(record["exclude"])}
    return Job(**{**fields, "folder": Path(record["folder"]), "output": Path(record["output"])})


def as_line(record: Any) -> bytes:
    """Return a record as one line of JSON, null in place of what JSON does not have."""
    from realize.schema import finite

    try:
        return json.dumps(record, allow_nan=False).encode("ascii") + b"\n"
    except ValueError:
        return json.dumps(finite(record), allow_nan=False).encode("ascii") + b"\n"


def limit_memory(size: int | None) -> None:
    """Let this process have so many bytes of address space beside what it has."""
    if size is None:
        return
    import resource

    with open("/proc/self/statm", encoding="ascii") as stream:
        used = int(stream.read().split()[0]) * resource.getpagesize()
    _, hard = resource.getrlimit(resource.RLIMIT_AS)
    wanted = used + size
    resource.setrlimit(resource.RLIMIT_AS, (wanted if hard < 0 else min(wanted, hard), hard))


def die_with_parent(parent: int) -> None:
    """End this process when its parent ends, however that ends."""
    import ctypes
    import signal

    try:
        ctypes.CDLL(None).prctl(_DIE_WITH_PARENT, signal.SIGKILL)
    except (OSError, AttributeError):
        return  # end of input ends the process, after the file at hand
    if os.getppid() != parent:
        os._exit(0)


def main() -> None:
    """Serve one parent until it closes our input."""
    import signal

    signal.signal(signal.SIGINT, signal.SIG_IGN)  # the parent decides
    replies = os.fdopen(os.dup(1), "wb", buffering=0)
    os.dup2(2, 1)  # whatever a library prints must not get between the replies
    start = json.loads(sys.stdin.buffer.readline())
    if start["parent"]:
        die_with_parent(start["parent"])
    from realize.batch.perform import Performer
    from realize.steps.second_opinion import one_worker

    performer = Performer(job_from_record(start["job"]), start["root"])
    import realize.files
    import realize.steps.convert  # noqa: F401  before memory is limited

    limit_memory(start["memory"])
    replies.write(b'{"ready": true}\n')
    with one_worker():
        for line in sys.stdin.buffer:
            reply = performer.perform(json.loads(line))
            replies.write(as_line(reply))


if __name__ == "__main__":
    main()
