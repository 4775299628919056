"""Job files: inputs, steps and limits, checked against the schema before anything runs."""

from __future__ import annotations

import difflib
import os
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from realize.batch.naming import check_pattern
from realize.batch.toml_lines import line_of, lines_of
from realize.batch.values import value_of
from realize.errors import InputError, UsageError
from realize.schema import RECEIPT_OPTIONS, VERBS, Option, Verb

#: Version of the format of job files.
JOB_VERSION = 1
FAILURES = ("stop", "set-aside", "keep")
#: Largest job file, bytes.
JOB_LIMIT = 4 << 20
DEFAULT_OUTPUT = "{folder}/{name}.json"

#: Fields of a job file, what each takes and says; options of verbs that make a receipt stand beside them.
JOB_FIELDS: dict[str, tuple[str, str]] = {
    "realize": ("integer", f"version of the format of job files; this is version {JOB_VERSION}"),
    "inputs": ("patterns", "files to work on: names with * ? [] and **, relative to the job file"),
    "exclude": ("patterns", "files to leave out of them"),
    "output": ("text", "folder for results and records, relative to the job file"),
    "on-failure": ("failure", "what happens when a file goes bad: stop, set-aside (unless said), or keep"),
    "processes": ("integer", "worker processes; one a core unless given"),
    "time-limit": ("seconds", "longest time for a file, seconds; 600 unless given"),
    "memory-limit": ("memory", "most memory for a file beside what an idle worker has, such as 2GiB"),
    "second-opinion-every": ("integer", "ask for a second opinion for one file in so many"),
    "limits": ("limits", "table of limits of claims, for every step"),
    "steps": ("steps", "array of tables, one a step, in order"),
}
#: Fields of a step beside the options of its verb.
STEP_FIELDS: dict[str, tuple[str, str]] = {
    "verb": ("text", "verb of the step"),
    "output": ("pattern", "name of the result in the output folder, with {name} and the like filled in"),
    "limits": ("limits", "table of limits of claims of this step, over those of the job"),
}
#: Options of the shell that job files have otherwise, or not at all.
NOT_HERE = ("json", "log", "limit", "explain", "history", "lines")


@dataclass(frozen=True)
class Step:
    """One step: verb, options by keyword as the Python function takes them, limits, and where its result goes."""

    verb: str
    options: dict[str, Any]
    limits: dict[str, float]
    output: str | None
    strict: bool
    second_opinion: bool | None
    line: int

    @property
    def makes_model(self) -> bool:
        """True where the step hands on another model."""
        return VERBS[self.verb].makes_model

    @property
    def files(self) -> list[str]:
        """Paths of the files that the options name, such as a controller."""
        names = [option.keyword for option in VERBS[self.verb].options if option.takes == "path"]
        return [self.options[name] for name in names if name in self.options]

    def plain(self) -> dict[str, Any]:
        """Return all that decides the result, ready for JSON; without the line."""
        names = ("verb", "options", "limits", "output", "strict", "second_opinion")
        return {name: getattr(self, name) for name in names}


@dataclass(frozen=True)
class Job:
    """A whole job: where it stands, what it takes, what it does."""

    name: str
    folder: Path
    inputs: tuple[str, ...]
    exclude: tuple[str, ...]
    output: Path
    steps: tuple[Step, ...]
    on_failure: str = "set-aside"
    processes: int | None = None
    time_limit: float = 600.0
    memory_limit: int | None = None
    second_opinion_every: int | None = None
    allow_outside: bool = False
    lines: Mapping[Any, int] = field(default_factory=dict)
    file: str = ""

    def wrong(self, found: str, expected: str, *path: str | int) -> InputError:
        """Return the error for something in the job file, with its line."""
        return wrong(self.file, dict(self.lines), found, expected, *path)


def wrong(file: str, lines: dict[Any, int], found: str, expected: str, *path: str | int) -> InputError:
    """Return an error that names file, line and key."""
    place = "".join(f"[{p}]" if isinstance(p, int) else f".{p}" for p in path).lstrip(".")
    line = f"line {line_of(lines, path)}" if lines else ""
    return InputError(found, expected, field=": ".join(part for part in (line, place) if part), file=file)


def verbs_of_jobs() -> tuple[str, ...]:
    """Return the verbs that a job file may use: those that take one model or data set, and those that look at some."""
    return tuple(
        name
        for name, verb in VERBS.items()
        if verb.arguments in (("MODEL",), ("DATA...",), ("MODEL...",), ("A", "B...")) and name != "run"
    )


def read_job(job: str | os.PathLike[str] | Mapping[str, Any], *, allow_outside: bool = False) -> Job:
    """Return the job of a TOML file, or of a mapping with the same fields (paths then relative to the current folder).

    Everything is checked before anything runs: names against the schema, values by the parsers of the command line.

    Raises
    ------
    InputError
        Naming the file, the line, the key, what was found and what was expected.
    """
    if isinstance(job, Mapping):
        return _Reader(dict(job), {}, "", Path.cwd(), "job", allow_outside).job()
    path = Path(os.fspath(job))
    try:
        with open(path, "rb") as stream:
            data = stream.read(JOB_LIMIT + 1)
    except (OSError, ValueError) as error:
        words = getattr(error, "strerror", None) or str(error)
        raise InputError(f"cannot be read ({words})", "a job file in TOML", file=str(path)) from None
    if len(data) > JOB_LIMIT:
        raise InputError(f"more than {JOB_LIMIT >> 20} MiB", "a job file in TOML", file=str(path))
    try:
        text = data.decode("utf-8")
        values = tomllib.loads(text)
    except UnicodeDecodeError:
        raise InputError("bytes that are not UTF-8", "a job file in TOML", file=str(path)) from None
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise InputError(f"not TOML: {error}", "a job file in TOML", file=str(path)) from None
    folder = Path(os.path.abspath(path)).parent
    return _Reader(values, lines_of(text), str(path), folder, path.stem, allow_outside).job()


class _Reader:
    """Turns the values of one job file into a `Job`."""

    def __init__(
        self, values: dict[str, Any], lines: dict[Any, int], file: str, folder: Path, name: str, allow_outside: bool
    ) -> None:
        self.values, self.lines, self.file = values, lines, file
        self.folder, self.name, self.allow_outside = folder, name, allow_outside
        self.receipt_options = {o.name: o for o in RECEIPT_OPTIONS if o.name not in NOT_HERE}

    def wrong(self, found: str, expected: str, *path: str | int) -> InputError:
        return wrong(self.file, self.lines, found, expected, *path)

    def known(self, given: Mapping[str, Any], names: list[str], *path: str | int) -> None:
        for name in given:
            if name not in names:
                near = difflib.get_close_matches(str(name), names, 1)
                hint = f" (did you mean {near[0]!r}?)" if near else ""
                raise self.wrong(f"no field {name!r} here{hint}", "one of " + ", ".join(names), *path, name)

    def take(self, given: Mapping[str, Any], name: str, takes: str, *path: str | int) -> Any:
        """Return a field's value; None where it is not given."""
        if name not in given:
            return None
        try:
            return value_of(takes, given[name])
        except ValueError as error:
            raise self.wrong(str(error), "another value", *path, name) from None

    def job(self) -> Job:
        v = self.values
        self.known(v, [*JOB_FIELDS, *self.receipt_options])
        if v.get("realize") != JOB_VERSION or isinstance(v["realize"], bool):
            found = f"version {v['realize']!r}" if "realize" in v else "missing"
            raise self.wrong(found, f"realize = {JOB_VERSION}, the version of the format", "realize")
        for name in ("inputs", "output", "steps"):
            if name not in v:
                raise self.wrong(f"{name} is missing", JOB_FIELDS[name][1])
        simple = {
            name: self.take(v, name, takes)
            for name, (takes, _) in JOB_FIELDS.items()
            if takes not in ("steps",) and name != "realize"
        }
        job = Job(
            name=self.name,
            folder=self.folder,
            inputs=self.patterns("inputs", simple["inputs"]),
            exclude=self.patterns("exclude", simple["exclude"] or ()),
            output=self.output(simple["output"]),
            steps=self.steps(simple["limits"] or {}),
            on_failure=simple["on-failure"] or "set-aside",
            processes=simple["processes"],
            time_limit=simple["time-limit"] or 600.0,
            memory_limit=simple["memory-limit"],
            second_opinion_every=simple["second-opinion-every"],
            allow_outside=self.allow_outside,
            lines=self.lines,
            file=self.file,
        )
        for name in ("processes", "second-opinion-every"):
            if simple[name] == 0:
                raise self.wrong("0", "a whole number from 1 on", name)
        return job

    def patterns(self, name: str, given: tuple[str, ...]) -> tuple[str, ...]:
        for k, pattern in enumerate(given):
            outside = pattern.startswith("/") or ".." in pattern.split("/")
            if outside and not self.allow_outside:
                raise self.wrong(
                    f"{pattern!r} leads out of the job file's folder",
                    "a path inside it, or --allow-outside",
                    name,
                    k,
                )
        return given

    def output(self, given: str) -> Path:
        path = Path(os.path.realpath(self.folder / given))
        base = Path(os.path.realpath(self.folder))
        if path == base:
            raise self.wrong("the job file's own folder", "a folder of its own for the results", "output")
        if not path.is_relative_to(base) and not self.allow_outside:
            raise self.wrong(
                f"{given!r} leads out of the job file's folder", "a folder inside it, or --allow-outside", "output"
            )
        return path

    def steps(self, limits: dict[str, float]) -> tuple[Step, ...]:
        given = self.values["steps"]
        if not isinstance(given, list) or not given or not all(isinstance(step, dict) for step in given):
            raise self.wrong("no tables [[steps]]", "at least one table [[steps]] with a verb", "steps")
        steps = [self.step(k, step, limits, k == len(given) - 1) for k, step in enumerate(given)]
        if not any(step.output for step in steps):
            last = max((k for k, step in enumerate(steps) if step.makes_model), default=None)
            if last is not None:
                steps[last] = Step(**{**steps[last].__dict__, "output": DEFAULT_OUTPUT})
        return tuple(steps)

    def step(self, k: int, given: dict[str, Any], limits: dict[str, float], last: bool) -> Step:
        here = ("steps", k)
        name, verbs = given.get("verb"), verbs_of_jobs()
        if name not in verbs:
            found = "verb is missing" if name is None else f"no verb {name!r} for job files"
            near = difflib.get_close_matches(str(name), verbs, 1)
            hint = f" (did you mean {near[0]!r}?)" if near else ""
            raise self.wrong(found + hint, "one of " + ", ".join(verbs), *here, "verb")
        verb = VERBS[name]
        options = {option.name: option for option in verb.options if option.name not in NOT_HERE}
        receipts = self.receipt_options if verb.makes_receipt else {}
        fields = {field: takes for field, (takes, _) in STEP_FIELDS.items()}
        if not verb.makes_receipt:
            fields.pop("limits")
        self.known(given, [*fields, *options, *receipts], *here)
        values = {}
        for option in options.values():
            value = self.option(given, option, *here)
            if value is not None and value is not False:
                values[option.keyword] = value
        output = self.take(given, "output", "text", *here)
        shared = {
            n: self.option(given if n in given else self.values, o, *(here if n in given else ()))
            for n, o in receipts.items()
        }
        step = Step(
            verb=name,
            options=values,
            limits={**limits, **(self.take(given, "limits", "limits", *here) or {})} if verb.makes_receipt else {},
            output=output,
            strict=bool(shared.get("strict")),
            second_opinion=shared.get("second-opinion"),
            line=line_of(self.lines, (*here, "verb")),
        )
        self.check(step, verb, *here)
        return step

    def option(self, given: Mapping[str, Any], option: Option, *path: str | int) -> Any:
        if option.name not in given:
            return None
        try:
            found = value_of(option.takes, given[option.name], option.choices)
            return self.beside(found) if option.takes == "path" else found
        except ValueError as error:
            raise self.wrong(str(error), option.says, *path, option.name) from None

    def beside(self, name: str) -> str:
        """Return the path of a file that a step needs; raises ValueError where it is absent or lies outside."""
        path = os.path.realpath(self.folder / name)
        if not self.allow_outside and not Path(path).is_relative_to(os.path.realpath(self.folder)):
            raise ValueError(f"{name!r} leads out of the job file's folder; --allow-outside allows it")
        if not os.path.isfile(path):
            raise ValueError(f"no file {name!r}")
        return path

    def check(self, step: Step, verb: Verb, *here: str | int) -> None:
        """Check what goes together: the name of the result, and options of a verb with each other."""
        from realize.batch.trial import contradiction

        if step.output is not None:
            try:
                check_pattern(step.output)
                _check_suffix(step)
            except (ValueError, UsageError) as error:
                raise self.wrong(f"{step.output!r}: {error}", STEP_FIELDS["output"][1], *here, "output") from None
        elif step.verb == "report":
            raise self.wrong("output is missing", "a name that ends in .png or .svg", *here)
        words = contradiction(step)
        if words:
            raise self.wrong(words, f"options of {verb.name} that go together", *here, "verb")


def _check_suffix(step: Step) -> None:
    suffix = os.path.splitext(step.output or "")[1].lower()
    if step.verb == "report":
        if suffix not in (".png", ".svg"):
            raise ValueError("a picture is written as .png or .svg")
    elif not step.makes_model:
        if suffix != ".json":
            raise ValueError("a record is written as .json")
    else:
        from realize.files import format_for_writing

        format_for_writing("x" + suffix, str(step.options.get("to", "")))
