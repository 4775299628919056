"""The same work on the workers of a dask cluster: inputs go there as bytes, outputs come back as bytes.

A cluster's worker drives a watched process of its own, so that time and memory limits hold there as well. Results are
written by the run alone; what a lost worker had is done again elsewhere.
"""

from __future__ import annotations

import atexit
import base64
import contextlib
import json
import threading
from collections.abc import Iterator
from typing import Any

from realize.batch import keys
from realize.batch.jobs import Job
from realize.batch.pool import Pool, Reply, Task, set_aside
from realize.batch.worker import job_from_record, job_to_record
from realize.errors import InputError, Refused

#: Files in one message.
CHUNK = 8
#: Messages under way for each thread of the cluster.
AHEAD = 2

_pools: dict[tuple[int, str], Pool] = {}


def perform_there(text: str, tasks: list[Task]) -> list[Reply]:
    """Do tasks on a worker of the cluster, in a child process that stays from one message to the next.

    Parameters
    ----------
    text : str
        The job as JSON; JSON rather than objects, so that versions that differ say so instead of misreading.
    """
    key = (threading.get_ident(), text)
    pool = _pools.get(key)
    if pool is None:
        for old in [k for k in _pools if k[0] == key[0]]:
            _pools.pop(old).__exit__()
        record = json.loads(text)
        job = job_from_record(record)
        pool = _pools[key] = Pool(job, 1, None, job.memory_limit, tied=False)
        if len(_pools) == 1:
            atexit.register(_close)
    return [answer[1] for answer in pool.work(iter(tasks)) if answer is not None]


def _close() -> None:
    while _pools:
        _pools.popitem()[1].__exit__()


@contextlib.contextmanager
def cluster_workers(job: Job, address: str) -> Iterator[Any]:
    """Give a function like `Pool.work` that uses the cluster of a scheduler.

    Raises
    ------
    Refused
        When dask.distributed is not installed, or nobody answers at the address.
    """
    try:
        from distributed import Client
    except ImportError:
        raise Refused(
            "--cluster needs dask.distributed, which is not installed; install realize[cluster], or leave --cluster out"
        ) from None
    try:
        client = Client(address, timeout=20, set_as_default=False)
    except (OSError, ValueError, TimeoutError) as error:
        raise Refused(f"no scheduler answers at {address!r} ({error}); start one, or leave --cluster out") from None
    try:
        if not client.scheduler_info(n_workers=-1)["workers"]:
            raise Refused(f"the scheduler at {address!r} has no workers; start some, or leave --cluster out")
        yield lambda tasks: _work(client, job, tasks)
    finally:
        with contextlib.suppress(Exception):
            client.close(timeout=5)


def _work(client: Any, job: Job, tasks: Iterator[Task]) -> Iterator[tuple[Task, Reply] | None]:
    from distributed import wait

    text = json.dumps(job_to_record(job))
    flying: dict[Any, list[Task]] = {}
    more = True
    while True:
        threads = sum(entry["nthreads"] for entry in client.scheduler_info(n_workers=-1)["workers"].values())
        while more and len(flying) < AHEAD * max(threads, 1):
            chunk: list[Task] = []
            while len(chunk) < CHUNK:
                task = next(tasks, None)
                if task is None:
                    more = False
                    break
                try:
                    _, data = keys.take_input(task["path"])
                except InputError as error:
                    why = "vanished" if isinstance(error, keys.Vanished) else "input"
                    yield task, set_aside(job, task, why, str(error), 0.0)
                    continue
                chunk.append(task if data is None else {**task, "data": base64.b64encode(data).decode("ascii")})
            if chunk:
                flying[client.submit(perform_there, text, chunk, pure=False, retries=1)] = chunk
        if not flying:
            if more:
                continue
            return
        try:
            with client.as_current():
                done = wait(list(flying), timeout=1, return_when="FIRST_COMPLETED").done
        except TimeoutError:
            if client.status != "running":
                raise RuntimeError("the scheduler of the cluster has gone") from None
            yield None
            continue
        for future in done:
            yield from _answers(job, future, flying.pop(future))


def _answers(job: Job, future: Any, chunk: list[Task]) -> Iterator[tuple[Task, Reply]]:
    if future.status == "cancelled":
        raise RuntimeError("the cluster cancelled the work; is the scheduler still there?")
    error = future.exception() if future.status == "error" else None
    if error is not None:
        for task in chunk:
            yield task, set_aside(job, task, "killed", f"the cluster could not do it: {error}", 0.0)
        return
    by_index = {reply["index"]: reply for reply in future.result()}
    for task in chunk:
        yield task, by_index[task["index"]]
