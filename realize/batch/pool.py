"""Worker processes that are watched: one that hangs or dies is replaced, and the file it had is known."""

from __future__ import annotations

import contextlib
import json
import os
import selectors
import signal
import subprocess
import sys
import time
from collections import deque
from collections.abc import Iterator
from typing import Any

from realize.batch.jobs import Job
from realize.batch.worker import THREADS, job_to_record

Task = dict[str, Any]
Reply = dict[str, Any]

#: Tasks that wait in a worker, so that it never waits for the next one.
DEPTH = 4
#: How often a file is tried whose worker died.
TRIES = 2
#: How long a worker may take to start, seconds.
START = 300.0
#: How many workers in a row may die before they are ready.
STILLBORN = 3


class Worker:
    """One child process and what it was given."""

    def __init__(self, job: Job, root: str | None, memory: int | None, *, tied: bool) -> None:
        self.child = subprocess.Popen(
            [sys.executable, "-m", "realize.batch.worker"],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
            env={**os.environ, **dict.fromkeys(THREADS, "1")},
        )
        self.pending: deque[Task] = deque()
        self.ready = False
        self.since = time.monotonic()
        self._rest = b""
        start = {"job": job_to_record(job), "root": root, "memory": memory, "parent": os.getpid() if tied else 0}
        self.send(start)

    def send(self, record: dict[str, Any]) -> None:
        """Send one line; a worker that has died is noticed when its replies end."""
        assert self.child.stdin is not None
        with contextlib.suppress(BrokenPipeError):
            self.child.stdin.write(json.dumps(record).encode("ascii") + b"\n")
            self.child.stdin.flush()

    def give(self, task: Task) -> None:
        """Hand over a task."""
        if not self.pending:
            self.since = time.monotonic()
        self.pending.append(task)
        self.send({name: value for name, value in task.items() if name != "tries"})

    def replies(self) -> list[Reply] | None:
        """Return the replies that have come; None where the worker has ended."""
        assert self.child.stdout is not None
        data = os.read(self.child.stdout.fileno(), 1 << 20)
        if not data:
            return None
        *lines, self._rest = (self._rest + data).split(b"\n")
        self.since = time.monotonic()
        return [json.loads(line) for line in lines]

    def end(self, *, kill: bool = True) -> str:
        """End the process; returns how it ended, in words."""
        if kill:
            self.child.kill()
        for stream in (self.child.stdin, self.child.stdout):
            with contextlib.suppress(OSError):
                if stream is not None:
                    stream.close()
        code = self.child.wait()
        if code < 0:
            with contextlib.suppress(ValueError):
                return f"signal {signal.Signals(-code).name}"
        return f"exit status {code}"


def set_aside(job: Job, task: Task, why: str, reason: str, seconds: float) -> Reply:
    """Return the reply for a file that its worker could not answer for."""
    record = {
        "file": task["item"],
        "step": 1,
        "verb": job.steps[0].verb,
        "status": "set-aside",
        "why": why,
        "reason": reason,
        "on_failure": job.on_failure,
        "key": "",
        "input": "",
        "seconds": round(seconds, 6),
    }
    return {"index": task["index"], "records": [record]}


class Pool:
    """Worker processes on this machine.

    Parameters
    ----------
    job : Job
    processes : int
    root : str or None
        Output folder that the workers write to; None: outputs come back in the replies.
    memory : int or None
        Bytes that a file may need beside what an idle worker has.
    tied : bool
        Workers end with this process, however it ends.
    """

    def __init__(self, job: Job, processes: int, root: str | None, memory: int | None, *, tied: bool = True) -> None:
        self.job, self.root, self.memory, self.tied = job, root, memory, tied
        self.depth = DEPTH if root is not None else 1
        self._selector = selectors.DefaultSelector()
        self.workers: list[Worker] = []
        self._stillborn = 0
        self._count = processes

    def __enter__(self) -> Pool:
        return self

    def __exit__(self, *_: object) -> None:
        for worker in self.workers:
            worker.end()
        self.workers.clear()
        self._selector.close()

    def _start(self) -> None:
        worker = Worker(self.job, self.root, self.memory, tied=self.tied)
        self.workers.append(worker)
        self._selector.register(worker.child.stdout, selectors.EVENT_READ, worker)  # type: ignore[arg-type]

    def _stop(self, worker: Worker) -> str:
        self._selector.unregister(worker.child.stdout)  # type: ignore[arg-type]
        self.workers.remove(worker)
        return worker.end()

    def work(self, tasks: Iterator[Task]) -> Iterator[tuple[Task, Reply] | None]:
        """Yield tasks with their replies as they come, and None now and then when nothing comes.

        Raises
        ------
        RuntimeError
            With words, when no worker gets as far as taking work.
        """
        again: deque[Task] = deque()
        more = True
        while True:
            while more or again or any(worker.pending for worker in self.workers):
                if len(self.workers) < self._count and (more or again):
                    self._start()
                    continue
                break
            for worker in sorted(self.workers, key=lambda worker: len(worker.pending)):
                while len(worker.pending) < self.depth and (more or again):
                    # a file that its worker died over goes alone, so that no other is blamed
                    if again:
                        if worker.pending:
                            break
                        worker.give(again.popleft())
                        break
                    if worker.pending and worker.pending[0].get("tries"):
                        break
                    task = next(tasks, None)
                    if task is None:
                        more = False
                        break
                    worker.give(task)
            if not more and not again and not any(worker.pending for worker in self.workers):
                return
            yield from self._listen(again)

    def _listen(self, again: deque[Task]) -> Iterator[tuple[Task, Reply] | None]:
        came = False
        for event, _ in self._selector.select(0.25):
            worker: Worker = event.data
            replies = worker.replies()
            if replies is None:
                words = self._stop(worker)
                yield from self._died(worker, words, again)
                continue
            for reply in replies:
                came = True
                if "ready" in reply:
                    worker.ready, self._stillborn = True, 0
                    continue
                yield worker.pending.popleft(), reply
        for worker in list(self.workers):
            limit = self.job.time_limit if worker.ready else START
            seconds = time.monotonic() - worker.since
            if seconds > limit and (worker.pending or not worker.ready):
                self._stop(worker)
                if not worker.ready:
                    yield from self._died(worker, f"nothing for {START:g} s", again)
                    continue
                task = worker.pending.popleft()
                again.extend(worker.pending)
                reason = f"it took longer than the time limit of {self.job.time_limit:g} s for a file"
                yield task, set_aside(self.job, task, "time", reason, seconds)
        if not came:
            yield None

    def _died(self, worker: Worker, words: str, again: deque[Task]) -> Iterator[tuple[Task, Reply]]:
        if not worker.ready:
            self._stillborn += 1
            again.extend(worker.pending)
            if self._stillborn >= STILLBORN:
                raise RuntimeError(f"{STILLBORN} worker processes in a row ended before they could work: {words}")
            return
        if not worker.pending:
            return
        task = worker.pending.popleft()
        again.extend(worker.pending)
        task = {**task, "tries": task.get("tries", 0) + 1}
        if task["tries"] < TRIES:
            again.append(task)
        else:
            reason = f"the worker process ended while it had this file, {TRIES} times: {words}"
            yield task, set_aside(self.job, task, "killed", reason, time.monotonic() - worker.since)
