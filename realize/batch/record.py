"""The records of a run: one JSON line a file and step, appended as they come, and read again to go on."""

from __future__ import annotations

import contextlib
import errno
import hashlib
import json
import os
import time
from typing import Any

from realize.batch import writing
from realize.files.sources import reason

Records = dict[str, list[dict[str, Any]]]

#: Reasons that may be gone the next time; a file set aside for another one stays so until something changes.
PASSING = ("time", "memory", "killed", "vanished", "fault")


class RecordFile:
    """The file of records of a job in its output folder.

    Lines are appended whole; what a killed run left of a last line is cut off when the file is read.
    """

    def __init__(self, root: str, job: str) -> None:
        self.root, self.name = root, f"{job}.records.jsonl"
        self.path = os.path.join(root, self.name)
        self._descriptor: int | None = None
        self._synchronised = time.monotonic()

    def read(self) -> Records:
        """Return the lines of earlier runs by file, in order; lines that are none are left out."""
        data = writing.content(self.root, self.name) or b""
        found: Records = {}
        for line in data.split(b"\n")[:-1]:
            try:
                record = json.loads(line)
                steps = found.setdefault(record["file"], [])
                if record["step"] == 1:
                    steps.clear()
                steps.append(record)
            except (ValueError, KeyError, TypeError):
                continue
        return found

    def start(self, keep: Records) -> None:
        """Begin with the lines that still hold, and append from here on."""
        lines = [json.dumps(record).encode("ascii") + b"\n" for steps in keep.values() for record in steps]
        writing.put(self.root, self.name, b"".join(lines), durable=True)
        flags = os.O_WRONLY | os.O_APPEND | os.O_NOFOLLOW | os.O_CLOEXEC
        self._descriptor = os.open(self.path, flags)

    def append(self, records: list[dict[str, Any]]) -> None:
        """Add the lines of one file, all in one write; raises `writing.Exhausted` where the disk is full."""
        assert self._descriptor is not None
        data = b"".join(json.dumps(record).encode("ascii") + b"\n" for record in records)
        end = os.fstat(self._descriptor).st_size
        try:
            if os.write(self._descriptor, data) != len(data):
                raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
            if time.monotonic() - self._synchronised > 5:
                self._synchronised = time.monotonic()
                os.fsync(self._descriptor)
        except OSError as error:
            with contextlib.suppress(OSError):
                os.ftruncate(self._descriptor, end)
            raise writing.Exhausted(f"{self.path}: cannot be written ({reason(error)})") from None

    def close(self) -> None:
        """Let the lines reach the disk."""
        if self._descriptor is not None:
            with contextlib.suppress(OSError):
                os.fsync(self._descriptor)
            os.close(self._descriptor)
            self._descriptor = None


def stands(records: list[dict[str, Any]], key: str, on_failure: str, root: str, *, retry: bool) -> bool:
    """Return whether the records of a file are those that the job would make now, outputs included.

    Parameters
    ----------
    key : str
        Key of the last step for the input as it is now.
    retry : bool
        Whether what was set aside is to be tried again.
    """
    last = records[-1]
    if last["status"] == "set-aside":
        if retry or last.get("why") in PASSING or last.get("on_failure") != on_failure or on_failure == "stop":
            return False
    elif last.get("key") != key:
        return False
    if any(record["status"] == "kept" for record in records) and on_failure != "keep":
        return False
    for record in records:
        if "output" in record:
            data = writing.content(root, record["output"])
            if data is None or hashlib.sha256(data).hexdigest() != record.get("sha256"):
                return False
    return True
