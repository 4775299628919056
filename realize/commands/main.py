"""Run the command line: statuses, messages, signals."""

from __future__ import annotations

import json
import os
import sys
import traceback

import click

from realize.commands.build import build_app
from realize.errors import InputError, RealizeError
from realize.schema import EXIT_STATUSES, VERBS


def run(arguments: list[str]) -> int:
    """Run one command and return its exit status; messages go to standard error.

    Parameters
    ----------
    arguments : list of str
        Without the program's name.
    """
    try:
        return _run(arguments)
    except KeyboardInterrupt:
        _say("interrupted; nothing was half-written")
        return 130
    except BrokenPipeError:
        # whoever read our output has gone: point standard output elsewhere so that the interpreter's flush is silent
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 141
    finally:
        _flush()


def _flush() -> None:
    try:
        sys.stdout.flush()
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _run(arguments: list[str]) -> int:
    as_json = "--json" in arguments
    try:
        status = build_app(arguments).main(args=arguments, prog_name="realize", standalone_mode=False)
        return status if isinstance(status, int) else 0
    except click.exceptions.Exit as done:
        return int(done.exit_code)
    except click.exceptions.Abort:
        raise KeyboardInterrupt from None
    except click.ClickException as error:
        verb = next((a for a in arguments if a in VERBS), "")
        _report(error.format_message(), 2, as_json)
        _say(f"see: realize {verb + ' ' if verb else ''}--help")
        return 2
    except RealizeError as error:
        _report(_one_line(str(error)), error.exit_status, as_json, error)
        return error.exit_status
    except (MemoryError, RecursionError) as error:
        _report(
            f"refused: not enough {'memory' if isinstance(error, MemoryError) else 'stack'} for this model", 5, as_json
        )
        return 5
    except (KeyboardInterrupt, BrokenPipeError):
        raise
    except SystemExit:
        if "_REALIZE_COMPLETE" in os.environ:  # click's own way of having answered a shell that completes
            return 0
        raise BrokenPipeError from None  # and of ending when whoever read standard output has gone
    except Exception as error:  # the last line of defence: whatever is left is a bug, and is said to be one
        traceback.print_exc()
        _report(f"internal fault (a bug): {type(error).__name__}: {error}", 1, as_json)
        return 1


def _one_line(text: str) -> str:
    """Return text with control characters (of names in files, or of files) written out."""
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in text)


def _say(text: str) -> None:
    sys.stderr.write(f"realize: {text}\n")


def _report(text: str, status: int, as_json: bool, error: RealizeError | None = None) -> None:
    _say(text)
    if as_json:
        record = {"status": status, "meaning": EXIT_STATUSES[status], "message": text}
        if isinstance(error, InputError):
            record |= {"file": error.file, "field": error.field, "found": error.found, "expected": error.expected}
        sys.stdout.write(json.dumps({"error": record}) + "\n")
