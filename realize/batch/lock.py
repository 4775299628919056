"""One run at a time in an output folder."""

from __future__ import annotations

import contextlib
import fcntl
import json
import os
import socket
import time
from types import TracebackType
from typing import Any

from realize.errors import InputError, Refused
from realize.files.sources import reason

NAME = ".realize-run.lock"
#: Age without a sign of life after which the lock of another machine counts as left behind, seconds.
PATIENCE = 300.0


class Lock:
    """The lock of an output folder: held by the operating system for this process, with owner and age for people.

    A lock whose process has ended is taken over, and `words` says so. A lock that a process of another machine shows
    signs of life on is respected, also where the file system does not hand locks from machine to machine.

    Raises
    ------
    Refused
        When another run holds it.
    InputError
        When it cannot be made.
    """

    def __init__(self, folder: str) -> None:
        self.folder, self.words = folder, ""
        self._told = 0.0
        path = os.path.join(folder, NAME)
        while True:
            try:
                self._descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_NOFOLLOW | os.O_CLOEXEC, 0o666)
            except OSError as error:
                raise InputError(f"no lock can be made ({reason(error)})", "a folder to write to", file=path) from None
            try:
                self._take()
                if self._is_there(path):
                    return
            except BaseException:
                os.close(self._descriptor)
                raise
            os.close(self._descriptor)  # its owner ended, and removed it, between our opening and our locking

    def _is_there(self, path: str) -> bool:
        """True where the file that is locked is still the one of that name."""
        try:
            found = os.stat(path, follow_symlinks=False)
        except FileNotFoundError:
            return False
        mine = os.fstat(self._descriptor)
        return (found.st_dev, found.st_ino) == (mine.st_dev, mine.st_ino)

    def _take(self) -> None:
        owner, age = self._owner()
        try:
            fcntl.flock(self._descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
            held = False
        except BlockingIOError:
            held = True
        except OSError:  # a file system without locks: the sign of life decides
            held = bool(owner) and age < PATIENCE
        here = socket.gethostname()
        elsewhere = bool(owner) and owner.get("host") != here and age < PATIENCE
        who = f"process {owner.get('pid', '?')} on {owner.get('host', '?')}" if owner else "another process"
        if held or elsewhere:
            raise Refused(
                f"{self.folder}: {who} is at work here, its last sign of life {age:.0f} s ago; wait for it, "
                "stop it, or give this job another output folder"
            )
        if owner:
            self.words = f"took over the lock of {who}, which left {age:.0f} s ago without closing it"
        self._write({"host": here, "pid": os.getpid(), "since": time.strftime("%Y-%m-%dT%H:%M:%S%z")})

    def _owner(self) -> tuple[dict[str, Any], float]:
        age = max(time.time() - os.fstat(self._descriptor).st_mtime, 0.0)
        try:
            owner = json.loads(os.pread(self._descriptor, 4096, 0))
        except ValueError:
            owner = {}
        return (owner if isinstance(owner, dict) else {}), age

    def _write(self, record: dict[str, Any]) -> None:
        os.ftruncate(self._descriptor, 0)
        if record:
            os.pwrite(self._descriptor, json.dumps(record).encode() + b"\n", 0)
        self._told = time.monotonic()

    def alive(self) -> None:
        """Leave a sign of life, at most every few seconds."""
        if time.monotonic() - self._told > 10:
            self._told = time.monotonic()
            with contextlib.suppress(OSError):
                os.utime(self._descriptor)

    def __enter__(self) -> Lock:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        with contextlib.suppress(OSError):
            self._write({})
            os.unlink(os.path.join(self.folder, NAME))
        os.close(self._descriptor)
