"""`--lines`: one model a line in, one model a line out; a line that goes bad gives one error record."""

from __future__ import annotations

import contextlib
import inspect
import json
import sys
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from typing import Any, BinaryIO

from realize import steps
from realize.batch.trial import small_plant
from realize.commands.common import Context, load, say, write_log
from realize.errors import InputError, RealizeError, Refused, UsageError
from realize.files import json_text, replacing
from realize.files.record import model_from_record, model_to_record
from realize.files.sources import TEXT_LIMIT, open_source, too_large
from realize.schema import EXIT_STATUSES, VERBS, finite, options_of, receipt_to_record
from realize.steps import Conversion
from realize.steps.second_opinion import one_worker

#: Verbs that take one model or data set.
SINGLE = (("MODEL",), ("DATA...",))
#: Options that go with whole files.
NOT_HERE = ("explain", "columns", "rate")


def execute(context: Context, options: dict[str, Any]) -> int:
    """Do the verb with every line of the input."""
    verb = VERBS[context.verb]
    if verb.arguments not in SINGLE:
        raise UsageError(f"--lines goes with verbs that take one model, not with {verb.name}")
    for name in NOT_HERE:
        if options.get(name):
            raise UsageError(f"--lines and --{name} do not go together")
    path = options.pop(verb.arguments[0].rstrip(".").lower())
    if isinstance(path, tuple):
        if len(path) > 1:
            raise UsageError("--lines takes one file of lines, or - for standard input")
        path = path[0]
    function = getattr(steps, verb.name)
    taken = inspect.signature(function).parameters
    for option in options_of(verb):
        if option.takes == "path" and options.get(option.keyword) is not None and option.keyword in taken:
            options[option.keyword] = load(options[option.keyword])
    given = {name: value for name, value in options.items() if name in taken and value is not None}
    if context.verb == "convert" and "to" not in given:
        raise UsageError("convert needs --to KIND")

    def step(model: Any) -> Conversion:
        made = function(model, limits=context.limits, second_opinion=opinion, **given)
        assert isinstance(made, Conversion)
        return made

    opinion: bool | None = False

    try:
        step(small_plant(context.verb, given))
    except UsageError:  # options that contradict each other, whatever the lines are
        raise
    except (RealizeError, ArithmeticError):
        pass  # what this plant cannot have, another one may
    opinion = context.second_opinion
    with ExitStack() as stack:
        source = open_source(path) if path != "-" else None
        lines = sys.stdin.buffer if source is None else source.random_access()
        if source is not None:
            stack.callback(source.stream.close)
        models, records = _outputs(context, stack)
        stack.enter_context(one_worker())
        name = "standard input" if source is None else path
        return _serve(context, step, _lines(lines), name, models, records)


def _outputs(context: Context, stack: ExitStack) -> tuple[BinaryIO | None, BinaryIO | None]:
    """Return where models go and where receipts go."""
    out = sys.stdout.buffer
    if context.output in (None, "-"):
        return (None, out) if context.json else (out, None)
    return stack.enter_context(replacing(context.output)), out if context.json else None  # type: ignore[arg-type]


def _lines(stream: BinaryIO) -> Iterator[bytes | None]:
    """Yield the lines of a stream; None for one that is too long to hold."""
    while line := stream.readline(TEXT_LIMIT + 1):
        if len(line) <= TEXT_LIMIT:
            yield line
            continue
        while not line.endswith(b"\n") and (line := stream.readline(1 << 24)):
            pass
        yield None


def _serve(
    context: Context,
    step: Callable[[Any], Conversion],
    lines: Iterator[bytes | None],
    name: str,
    models: BinaryIO | None,
    records: BinaryIO | None,
) -> int:
    count = bad = over = 0
    for number, line in enumerate(lines, 1):
        if line is not None and not line.strip():
            continue
        count += 1
        try:
            if line is None:
                raise too_large(TEXT_LIMIT)
            made = step(model_from_record(json_text.parse(line)))
            failed = bool(made.receipt.failed) or (context.strict and bool(made.receipt.open))
            over += failed
            if failed and context.strict:
                made.require(strict=True)
            wanted = records is not None or context.log is not None
            receipt = receipt_to_record(made.receipt) if wanted else {}
            text = model_to_record(made.model)
        except InputError as error:
            bad += 1
            text = receipt = _error(number, error.inside(file=name), error.exit_status)
        except RealizeError as error:
            bad += error.exit_status != 4
            text = receipt = _error(number, error, error.exit_status)
        except (MemoryError, RecursionError):
            bad += 1
            text = receipt = _error(number, Refused("not enough memory for this model"), 5)
        except Exception as error:  # a bug with one line must not end the rest
            bad += 1
            words = f"internal fault (a bug): {type(error).__name__}: {error}"
            text = receipt = _error(number, RealizeError(words), 1)
        write_log(context, receipt)
        for stream, record in ((models, text), (records, receipt)):
            if stream is not None:
                stream.write(_one_line(record))
                if stream is sys.stdout.buffer:
                    stream.flush()
    if bad or over:
        say(f"realize: of {count:,} lines {bad:,} could not be done, and {over:,} are over a limit")
        return 4
    return 0


def _one_line(record: dict[str, Any]) -> bytes:
    with contextlib.suppress(ValueError):
        return json.dumps(record, allow_nan=False).encode("ascii") + b"\n"
    return json.dumps(finite(record), allow_nan=False).encode("ascii") + b"\n"


def _error(number: int, error: RealizeError, status: int) -> dict[str, Any]:
    record: dict[str, Any] = {
        "line": number,
        "status": status,
        "meaning": EXIT_STATUSES[status],
        "message": str(error),
    }
    if isinstance(error, InputError):
        record |= {"file": error.file, "field": error.field, "found": error.found, "expected": error.expected}
    return {"error": record}
