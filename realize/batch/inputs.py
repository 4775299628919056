"""The inputs of a job: patterns to files, and the names of their outputs."""

from __future__ import annotations

import fnmatch
import glob
import os
from dataclasses import dataclass

from realize.batch.jobs import Job
from realize.batch.naming import fill


@dataclass(frozen=True, slots=True)
class Item:
    """One input: its name as seen from the job file, its path, and the name of each step's output ('' for none)."""

    name: str
    path: str
    outputs: tuple[str, ...]
    refused: str = ""


def list_inputs(job: Job) -> list[Item]:
    """Return the inputs in order of their names.

    Raises InputError for a pattern that no file matches, or two inputs whose outputs would have the same name.
    """
    base = os.path.realpath(job.folder)
    output = os.path.realpath(job.output)
    found: dict[str, str] = {}
    for k, pattern in enumerate(job.inputs):
        matches = [
            name
            for name in glob.glob(pattern, root_dir=job.folder, recursive=True)
            if not _below(os.path.join(base, name), output) and not os.path.isdir(os.path.join(base, name))
        ]
        matches = [name for name in matches if not any(fnmatch.fnmatchcase(name, p) for p in job.exclude)]
        if not matches:
            raise job.wrong(f"no file matches {pattern!r}", "a pattern that files match", "inputs", k)
        for name in matches:
            found[os.path.normpath(name)] = os.path.normpath(os.path.join(job.folder, name))
    taken: dict[str, str] = {}
    return [_item(job, name, path, base, taken) for name, path in sorted(found.items())]


def _below(path: str, folder: str) -> bool:
    return path == folder or path.startswith(folder + "/")


def _item(job: Job, name: str, path: str, base: str, taken: dict[str, str]) -> Item:
    outputs = []
    for number, step in enumerate(job.steps, 1):
        if step.output is None:
            outputs.append("")
            continue
        try:
            output = fill(step.output, name, step.verb, number)
        except ValueError as error:
            raise job.wrong(f"{step.output!r} for {name!r}: {error}", "another pattern", "steps", number - 1) from None
        first = output.partition("/")[0]
        if first == "set-aside" or output in (f"{job.name}.records.jsonl", f"{job.name}.summary.json"):
            raise job.wrong(f"{output!r} for {name!r}", "a name that the run does not need itself", "steps", number - 1)
        if output in taken:
            raise job.wrong(
                f"{taken[output]!r} and {name!r} would both be written to {output!r}",
                "a pattern that tells them apart, with {folder}, {name}, {suffix}, {step} or {number}",
                "steps",
                number - 1,
            )
        taken[output] = name
        outputs.append(output)
    refused = ""
    if not job.allow_outside and not _below(os.path.realpath(path), base):
        refused = "a link that leads out of the job file's folder; --allow-outside allows it"
    elif not os.path.isfile(path):
        refused = "no regular file"
    return Item(name, path, tuple(outputs), refused)
