"""All steps with one file: read, do, judge, write, and one record a step."""

from __future__ import annotations

import base64
import hashlib
import inspect
import json
import os
import tempfile
import time
from functools import cache
from pathlib import Path
from typing import Any

from realize import steps as verbs
from realize.batch import keys, writing
from realize.batch.jobs import Job, Step
from realize.errors import InputError, RealizeError, Refused
from realize.schema import receipt_to_record
from realize.steps import Conversion

#: Folder, in the output folder, of what was made although a claim failed.
ASIDE = "set-aside"


@cache
def _takes(verb: str) -> frozenset[str]:
    return frozenset(inspect.signature(getattr(verbs, verb)).parameters)


@cache
def _loaded(path: str) -> Any:
    from realize.files import read

    return read(path)


def apply(step: Step, model: Any, options: dict[str, Any], second_opinion: bool | None) -> Conversion:
    """Return the result of a step that makes a model."""
    files = step.files
    given = {
        name: _loaded(value) if value in files else value
        for name, value in options.items()
        if name in _takes(step.verb)
    }
    made = getattr(verbs, step.verb)(model, **given, limits=step.limits or None, second_opinion=second_opinion)
    assert isinstance(made, Conversion)
    return made


class Performer:
    """Does the steps of one job, file by file.

    Parameters
    ----------
    job : Job
    root : str or None
        Output folder to write to; None: hand the bytes of outputs back in the reply.
    """

    def __init__(self, job: Job, root: str | None) -> None:
        self.job, self.root = job, root
        self.columns = next((s.options["columns"] for s in job.steps if "columns" in s.options), None)
        self.rate = next((s.options["rate"] for s in job.steps if "rate" in s.options), None)

    def perform(self, task: dict[str, Any]) -> dict[str, Any]:
        """Return the reply for a task (``index``, ``item``, ``path``, ``outputs``, ``data``).

        The reply has ``records``; ``stop`` with words where the whole run cannot go on; ``outputs`` as pairs of name
        and base64 where there is no folder to write to.
        """
        done = _File(self, task)
        try:
            done.all()
        except writing.Exhausted as error:
            return {"index": task["index"], "records": [], "stop": str(error)}
        except keys.Vanished as error:
            if not os.path.isdir(os.path.dirname(task["path"])):
                words = f"{error.file}: the folder of the inputs has vanished"
                return {"index": task["index"], "records": [], "stop": words}
            done.bad("vanished", error)
        except RealizeError as error:
            short = isinstance(error.__context__, MemoryError)
            done.bad("memory" if short else "refused" if isinstance(error, Refused) else "input", error)
        except MemoryError:
            done.bad("memory", "it needs more memory than the limit for a file")
        except RecursionError:
            done.bad("memory", "it needs more stack than there is")
        except Exception as error:  # a bug with one file must not end a night's work
            done.bad("fault", f"internal fault (a bug): {type(error).__name__}: {error}")
        try:
            return done.reply()
        except writing.Exhausted as error:
            return {"index": task["index"], "records": [], "stop": str(error)}


class _File:
    """The work on one file, and what came of it so far."""

    def __init__(self, performer: Performer, task: dict[str, Any]) -> None:
        self.job, self.root = performer.job, performer.root
        self.reading: dict[str, Any] = {
            "columns": performer.columns,
            "rate": performer.rate,
            "allow_outside": self.job.allow_outside,
        }
        self.task = task
        self.records: list[dict[str, Any]] = []
        self.outputs: list[tuple[str, bytes]] = []
        self.keys: list[str] = []
        self.number, self.started = 0, time.perf_counter()
        self.digest = ""
        self.failed = False

    def all(self) -> None:
        """Do every step; raises what goes wrong."""
        from realize.files import read
        from realize.files.access import read_bytes

        path = self.task["path"]
        data: bytes | None
        if "data" in self.task:
            data = base64.b64decode(self.task["data"])
            self.digest = keys.digest_of(data, os.path.dirname(path))
        else:
            self.digest, data = keys.take_input(path)
        self.keys = keys.chain(self.job, self.digest)
        if data is None:
            source = read(path, **self.reading, columns_for_tables=True)
        else:
            source = read_bytes(data, path, folder=os.path.dirname(path), **self.reading)
        every = self.job.second_opinion_every
        chosen = every is None or int(self.digest[-12:], 16) % every == 0
        model: Any = source
        for number, step in enumerate(self.job.steps):
            self.number = number
            if step.makes_model:
                made = apply(step, model, step.options, step.second_opinion if chosen else False)
                if not self.model_made(step, made):
                    return
                model = made.model
            else:
                self.looked(step, source, model)
            self.started = time.perf_counter()

    def model_made(self, step: Step, made: Conversion) -> bool:
        """Keep a result and its record; returns whether to go on."""
        receipt = made.receipt
        failed = [claim.name for claim in receipt.failed]
        undecided = [claim.name for claim in receipt.open] if step.strict else []
        words = "; ".join(
            part
            for part in (
                f"over the limit: {', '.join(failed)}" if failed else "",
                f"not decided: {', '.join(undecided)}" if undecided else "",
            )
            if part
        )
        full = receipt_to_record(receipt)
        record = {name: full[name] for name in ("method", "source", "result", "claims", "fragility", "second_opinion")}
        if step.output is not None:
            record |= self.keep(_bytes_of(made.model, step.output))
        keeping = self.job.on_failure == "keep"
        status = "done" if not words else "kept" if keeping else "set-aside"
        self.add(status, record, **({"reason": words, "why": "claim"} if words else {}))
        self.failed = self.failed or (bool(words) and not keeping)
        return not self.failed

    def looked(self, step: Step, source: Any, model: Any) -> None:
        """Do a step that makes no model: inspect, compare, report."""
        record: dict[str, Any] = {}
        band = {"band": step.options["band"]} if "band" in step.options else {}
        if step.verb == "report":
            from realize.reports import draw

            entries = [("source", source)] + ([] if model is source else [("result", model)])
            with tempfile.TemporaryDirectory(prefix=writing.PREFIX) as folder:
                picture = os.path.join(folder, "picture" + os.path.splitext(step.output or "")[1])
                draw(entries, picture, **band)
                record |= self.keep(Path(picture).read_bytes())
            record["report"] = record["output"]
        else:
            if step.verb == "compare":
                made = verbs.compare(source, model, names=["source", "result"], **step.options)
                record["claims"] = [v for v in made.values() if isinstance(v, dict) and "basis" in v]
            else:
                made = verbs.inspect(model)
            if step.output is not None:
                record |= self.keep((json.dumps(made, indent=1) + "\n").encode())
        self.add("done", record)

    def keep(self, data: bytes) -> dict[str, Any]:
        """Keep an output until all steps are done; returns what the record says of it."""
        name = self.task["outputs"][self.number]
        self.outputs.append((name, data))
        return {"output": name, "bytes": len(data), "sha256": hashlib.sha256(data).hexdigest()}

    def add(self, status: str, record: dict[str, Any], **more: Any) -> None:
        step = self.job.steps[self.number]
        head = {"file": self.task["item"], "step": self.number + 1, "verb": step.verb, "status": status, **more}
        if status != "done":
            head["on_failure"] = self.job.on_failure
        key = self.keys[self.number] if self.keys else ""
        seconds = round(time.perf_counter() - self.started, 6)
        self.records.append({**head, "key": key, "input": self.digest, **record, "seconds": seconds})

    def bad(self, why: str, error: Exception | str) -> None:
        """Record why the file cannot go on."""
        more: dict[str, Any] = {"reason": str(error), "why": why}
        if isinstance(error, InputError) and error.field:
            more["field"] = error.field
        self.failed = True
        self.add("set-aside", {}, **more)

    def reply(self) -> dict[str, Any]:
        """Write the outputs, where there is a folder, and return the reply."""
        reply: dict[str, Any] = {"index": self.task["index"], "records": self.records}
        if self.failed:
            for record in self.records:
                if "output" in record:
                    record["output"] = f"{ASIDE}/{record['output']}"
        names = [f"{ASIDE}/{name}" if self.failed else name for name, _ in self.outputs]
        if self.root is None:
            pairs = zip(names, self.outputs, strict=True)
            reply["outputs"] = [[name, base64.b64encode(data).decode("ascii")] for name, (_, data) in pairs]
            return reply
        stale = {name for name in self.task["outputs"] if name} if self.failed else set()
        try:
            for name, (_, data) in zip(names, self.outputs, strict=True):
                writing.put(self.root, name, data)
        except InputError as error:
            self.outputs, self.records = [], []
            self.bad("input", error)
            reply["records"] = self.records
        for name in stale:
            writing.remove(self.root, name)
        return reply


def _bytes_of(model: Any, name: str) -> bytes:
    import io

    from realize.files import format_for_writing

    row = format_for_writing(name, model.kind)
    assert row.write is not None
    stream = io.BytesIO()
    row.write(model, stream)
    return stream.getvalue()
