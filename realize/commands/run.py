"""The command `run`."""

from __future__ import annotations

import json
import sys
import time
from typing import Any

from realize.commands.common import Context, say, write_log
from realize.schema import finite


def execute(
    context: Context, jobs: str, processes: int | None, cluster: str | None, retry: bool, allow_outside: bool
) -> int:
    """Run a job file, showing how far it is."""
    from realize.batch import run
    from realize.reports.batch import summary_table

    watch = _Watch(context.json)
    made = run(jobs, processes=processes, cluster=cluster, retry=retry, allow_outside=allow_outside, on_event=watch.see)
    watch.end()
    write_log(context, {"step": "run", **made.record()})
    if not context.json:
        print(summary_table(made.record()))
    if made.stopped and made.status != 130:
        say(f"realize: stopped: {_plain(made.stopped)}")
    if made.status == 130:
        say("realize: interrupted; nothing was half-written, and the next run goes on from here")
    return made.status


def _plain(text: str) -> str:
    return "".join(c if c.isprintable() else c.encode("unicode_escape", "replace").decode() for c in text)


class _Watch:
    """Shows events: JSON lines on standard output, one changing line on a terminal, plain lines otherwise."""

    def __init__(self, as_json: bool) -> None:
        self.as_json, self.terminal = as_json, sys.stderr.isatty()
        self.last = time.monotonic() if not self.terminal else 0.0
        self.shown = False
        self.wait = 1.0

    def see(self, event: dict[str, Any]) -> None:
        """Show one event."""
        kind = event["event"]
        if kind == "progress":
            now = time.monotonic()
            if now - self.last < (0.2 if self.terminal and not self.as_json else self.wait):
                return
            self.last = now
            if not self.terminal:
                self.wait = min(self.wait * 2, 30.0)  # a log of a night has a readable length
        if self.as_json:
            sys.stdout.write(json.dumps(finite(event)) + "\n")
            sys.stdout.flush()
        elif kind == "started":
            for note in event["notes"]:
                say(f"realize: {note}")
            earlier = f", {event['earlier']:,} of them done before" if event["earlier"] else ""
            say(f"{event['files']:,} files{earlier}; results in {_plain(event['output'])}")
        elif kind == "file" and event["status"] != "done":
            self._clear()
            say(f"{event['status']}: {_plain(event['file'])}: {_plain(event['reason'])}")
        elif kind == "progress":
            left = "" if event["left"] is None else f", about {_duration(event['left'])} left"
            aside = f", {event['set_aside']:,} set aside" if event["set_aside"] else ""
            text = f"{event['finished']:,} of {event['files']:,}, {event['rate']:.3g} a second{left}{aside}"
            if self.terminal:
                sys.stderr.write(f"\r\x1b[K{text}")
                sys.stderr.flush()
                self.shown = True
            else:
                say(text)

    def _clear(self) -> None:
        if self.shown:
            sys.stderr.write("\r\x1b[K")
            self.shown = False

    def end(self) -> None:
        """Leave the terminal's line clean."""
        self._clear()


def _duration(seconds: float) -> str:
    if seconds < 90:
        return f"{seconds:.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"
