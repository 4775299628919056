"""What every verb of the command line shares: reading, writing, records, statuses."""

from __future__ import annotations

import json
import os
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any

from realize.errors import InputError, UsageError
from realize.models import Model
from realize.schema import finite, receipt_to_record
from realize.steps import Conversion


@dataclass(frozen=True)
class Context:
    """The options that every verb shares."""

    verb: str
    json: bool = False
    log: str | None = None
    output: str | None = None
    strict: bool = False
    limits: dict[str, float] = field(default_factory=dict)
    second_opinion: bool | None = None

    def check(self, *, lines: bool = False) -> None:
        """Refuse what cannot work before any work is done."""
        if self.json and self.output == "-":
            raise UsageError("--json and -o - both want standard output; give a file to one of them")
        if not lines and self.verb in ("fit", "convert", "minimal", "reduce") and self.output not in (None, "-"):
            from realize.files import format_for_writing

            format_for_writing(self.output)


def load(path: str, columns: list[str] | None = None, *, rate: float | None = None, several: bool = False) -> Model:
    """Read a model or data file; - is standard input. Among several inputs, columns and rate are for the tables."""
    from realize.files import read

    return read(path, columns=columns, rate=rate, columns_for_tables=several)


def write_log(context: Context, record: dict[str, Any]) -> None:
    """Append the record to the log, as one line."""
    if context.log is None:
        return
    line = (json.dumps(finite(record), allow_nan=False) + "\n").encode()
    try:
        descriptor = os.open(context.log, os.O_WRONLY | os.O_CREAT | os.O_APPEND, 0o666)
        try:
            os.write(descriptor, line)
        finally:
            os.close(descriptor)
    except OSError as error:
        raise InputError(
            f"cannot be written ({error.strerror})", "a file that can be appended to", file=context.log
        ) from None


def print_record(record: dict[str, Any]) -> None:
    """Write a record to standard output."""
    sys.stdout.write(json.dumps(finite(record), indent=1, allow_nan=False) + "\n")


def say(text: str) -> None:
    """Write text for people to standard error."""
    sys.stderr.write(text if text.endswith("\n") else text + "\n")


def deliver(context: Context, conversion: Conversion, *more: str) -> int:
    """Write the model, print record or table, and return the exit status.

    With ``--strict``, nothing is written unless every limited claim holds.
    """
    from realize.files import dumps, write

    record = receipt_to_record(conversion.receipt)
    failed = bool(conversion.receipt.failed) or (context.strict and bool(conversion.receipt.open))
    withheld = failed and context.strict
    write_log(context, record)
    if not withheld:
        if context.output not in (None, "-"):
            write(conversion.model, context.output)
        elif not context.json:
            sys.stdout.write(dumps(conversion.model))
    if context.json:
        print_record(record)
    else:
        from realize.reports.tables import receipt_table

        say(receipt_table(conversion))
        for text in more:
            say(text)
    if failed:
        bad = [claim.name for claim in conversion.receipt.claims if claim.holds is False]
        undecided = [claim.name for claim in conversion.receipt.open] if context.strict else []
        what = "; ".join(
            words
            for words in (
                f"over the limit: {', '.join(bad)}" if bad else "",
                f"not decided: {', '.join(undecided)}" if undecided else "",
            )
            if words
        )
        where = "no output was written" if withheld else "the output was written all the same"
        say(f"realize: {what}; {where}")
        return 4
    return 0


@contextmanager
def showing_proofs(wanted: bool, doing: str = "proving") -> Iterator[None]:
    """Inside, the progress of long proofs and other long work appears on standard error, at most every two seconds."""
    if not wanted:
        yield
        return
    from realize.verification.views import telling

    started = last = time.monotonic()

    def show(text: str) -> None:
        nonlocal last
        now = time.monotonic()
        if now - last >= 2:
            last = now
            say(f"{doing} for {now - started:.0f} s: {text}")

    with telling(show):
        yield
