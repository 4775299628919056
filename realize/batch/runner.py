"""Run a job: what is done already stays, the rest is handed to workers, every answer is recorded as it comes."""

from __future__ import annotations

import contextlib
import os
import time
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from realize.batch import keys, writing
from realize.batch.inputs import Item, list_inputs
from realize.batch.jobs import Job, read_job
from realize.batch.lock import Lock
from realize.batch.pool import Pool, Reply, Task, set_aside
from realize.batch.record import RecordFile, Records, stands
from realize.batch.summary import Summary
from realize.errors import InputError, UsageError
from realize.files.sources import available_memory, reason

Event = dict[str, Any]
Tell = Callable[[Event], None]


def run(
    job: str | os.PathLike[str] | Mapping[str, Any] | Job,
    *,
    processes: int | None = None,
    cluster: str | None = None,
    retry: bool = False,
    allow_outside: bool = False,
    on_event: Tell | None = None,
) -> Summary:
    """Do the steps of a job with every file, leaving alone what an earlier run has done.

    Parameters
    ----------
    job : path, mapping or Job
        A job file, or the same fields as a mapping (paths then relative to the current folder).
    processes : int, optional
        Worker processes; the job's own number, or one a core.
    cluster : str, optional
        Address of a dask scheduler whose workers do the work instead.
    retry : bool
        Try again what was set aside before.
    allow_outside : bool
        Whether inputs and the output folder may lie outside the job file's folder.
    on_event : callable, optional
        Called with dictionaries: ``started``, ``file``, ``progress``, ``finished``.

    Returns
    -------
    Summary
        Its ``status`` is 0, 4 when a file was set aside or a claim failed, 5 when the run could not go on (``stopped``
        says why; the next run goes on from there), and 130 when it was interrupted.

    Raises
    ------
    InputError
        For a job file that is wrong, before anything runs.
    Refused
        When another run is at work in the output folder.
    """
    wanted = job if isinstance(job, Job) else read_job(job, allow_outside=allow_outside)
    if processes is not None and processes < 1:
        raise UsageError(f"{processes} processes; at least one is needed")
    return _Run(wanted, processes, cluster, retry, on_event or (lambda event: None)).run()


@dataclass
class _Run:
    job: Job
    processes: int | None
    cluster: str | None
    retry: bool
    tell: Tell

    def run(self) -> Summary:
        job = self.job
        self.started = time.monotonic()
        keys.digest_of_file.cache_clear()
        items = list_inputs(job)
        root = str(job.output)
        try:
            os.makedirs(root, exist_ok=True)
        except OSError as error:
            raise InputError(f"cannot be made ({reason(error)})", "a folder for the results", file=root) from None
        self.records = RecordFile(root, job.name)
        self.summary = Summary(job=job.file or job.name, output=root, records=self.records.path, files=len(items))
        with Lock(root) as self.lock:
            notes = [self.lock.words] if self.lock.words else []
            writing.sweep(root, self._places(items))
            earlier = self.records.read()
            ahead = {"event": "started", "job": self.summary.job, "files": len(items), "output": root}
            try:
                finished, rest = self._sort(items, earlier)
                self.summary.notes = notes
                self.tell({**ahead, "earlier": len(finished), "notes": notes})
                names = {item.name for item in items}
                self.records.start({n: r for n, r in earlier.items() if n not in names} | finished)
                self._work(rest)
            except writing.Exhausted as error:
                self.summary.stopped = (
                    f"{error}; make room or bring it back, and run the job again: it goes on from here"
                )
            except KeyboardInterrupt:
                self.summary.stopped = "interrupted"
            finally:
                self.records.close()
            return self._finish(root, items)

    def _places(self, items: list[Item]) -> Iterator[str]:
        from realize.batch.perform import ASIDE

        for item in items:
            for output in item.outputs:
                if output:
                    yield output
                    yield f"{ASIDE}/{output}"

    def _sort(self, items: list[Item], earlier: Records) -> tuple[Records, list[Item]]:
        """Return the records that still hold, counted, and the inputs that are left to do."""
        finished: Records = {}
        rest = []
        for item in items:
            self.lock.alive()
            records = earlier.get(item.name)
            if records and not item.refused and self._holds(item, records):
                finished[item.name] = records
                self.summary.add(records, earlier=True)
            else:
                rest.append(item)
        return finished, rest

    def _holds(self, item: Item, records: list[dict[str, Any]]) -> bool:
        job = self.job
        last = records[-1]
        try:
            digest, _ = keys.take_input(item.path)
        except InputError:
            return False
        chain = keys.chain(job, digest)
        if last["status"] == "set-aside":
            # it may have gone bad at any step, which has a key of its own
            number = last["step"] - 1
            same = number < len(chain) and last.get("key") in (chain[number], "") and last.get("input") == digest
            return same and stands(records, chain[number], job.on_failure, str(job.output), retry=self.retry)
        if len(records) != len(chain):
            return False
        outputs = [record.get("output", "") for record in records]
        return outputs == list(item.outputs) and stands(
            records, chain[-1], job.on_failure, str(job.output), retry=self.retry
        )

    def _work(self, rest: list[Item]) -> None:
        """Hand the rest to workers and record every answer."""
        sound = [item for item in rest if not item.refused]
        for item in rest:
            if item.refused:
                task = {"index": -1, "item": item.name}
                self._take(set_aside(self.job, task, "input", item.refused, 0.0), len(rest))
                if self.summary.stopped:
                    return
        if not sound:
            return
        with self._workers(len(sound)) as work:
            try:
                for answer in work(self._tasks(sound)):
                    self.lock.alive()
                    if answer is not None:
                        self._take(answer[1], len(rest))
                    else:
                        self._progress(len(rest))
                    if self.summary.stopped:
                        return
            except RuntimeError as error:
                self.summary.stopped = f"{error}; run the job again when that is mended: it goes on from here"

    def _workers(self, files: int) -> contextlib.AbstractContextManager[Any]:
        job = self.job
        if self.cluster is not None:
            from realize.batch.cluster import cluster_workers

            return cluster_workers(job, self.cluster)
        count = self.processes or job.processes or len(os.sched_getaffinity(0))
        count = max(1, min(count, files))
        memory = job.memory_limit
        free = available_memory()
        if memory is None and free is not None:
            memory = max(int(0.8 * free / count), 256 << 20)
        return _local(Pool(job, count, str(job.output), memory))

    def _tasks(self, items: list[Item]) -> Iterator[Task]:
        for index, item in enumerate(items):
            yield {"index": index, "item": item.name, "path": item.path, "outputs": list(item.outputs)}

    def _take(self, reply: Reply, files: int) -> None:
        if reply.get("stop"):
            raise writing.Exhausted(reply["stop"])
        records = reply["records"]
        import base64

        try:
            for name, text in reply.get("outputs", ()):
                writing.put(str(self.job.output), name, base64.b64decode(text))
        except InputError as error:
            first = records[0]
            records = set_aside(self.job, {"index": 0, "item": first["file"]}, "input", str(error), 0.0)["records"]
        self.records.append(records)
        self.summary.add(records, earlier=False)
        for record in records:
            self.tell({"event": "file", **record})
        last = records[-1]
        if last["status"] == "set-aside" and self.job.on_failure == "stop":
            self.summary.stopped = f"{last['file']}: {last.get('reason', '')}"
        self._progress(files)

    def _progress(self, files: int) -> None:
        counted = self.summary
        finished = counted.done + counted.kept + counted.set_aside
        now = finished - counted.earlier
        seconds = time.monotonic() - self.started
        rate = now / seconds if seconds > 0 else 0.0
        left = (files - now) / rate if rate > 0 else None
        self.tell(
            {
                "event": "progress",
                "finished": finished,
                "files": counted.files,
                "set_aside": counted.set_aside,
                "rate": round(rate, 3),
                "left": None if left is None else round(left, 1),
            }
        )

    def _finish(self, root: str, items: list[Item]) -> Summary:
        made = self.summary
        made.seconds = round(time.monotonic() - self.started, 3)
        made.worst.sort(key=lambda row: (row["step"], row["name"]))
        if made.stopped == "interrupted":
            made.status = 130
        elif made.stopped and self.job.on_failure == "stop" and made.set_aside:
            made.status = 4
        elif made.stopped:
            made.status = 5
        else:
            made.status = 4 if made.set_aside or made.kept else 0
        writing.sweep(root, self._places(items))
        import json

        with contextlib.suppress(writing.Exhausted, InputError):
            text = json.dumps(made.record(), indent=1) + "\n"
            writing.put(root, f"{self.job.name}.summary.json", text.encode("ascii"), durable=True)
        self.tell({"event": "finished", **made.record()})
        return made


@contextlib.contextmanager
def _local(pool: Pool) -> Iterator[Any]:
    with pool:
        yield pool.work


__all__ = ["Event", "run"]
