"""Where bytes come from: a file, a pipe or standard input, with a limit on how much is taken."""

from __future__ import annotations

import io
import os
import select
import stat
import sys
import time
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from realize.errors import InputError, Refused

#: How much of the content the formats are recognised by.
HEAD = 1 << 16
#: Largest JSON file or table, bytes.
TEXT_LIMIT = 512 << 20
#: Largest archive that is read from a pipe, bytes.
PIPE_LIMIT = 2 << 30
#: How long a named pipe may stay without anyone writing to it, seconds.
PIPE_PATIENCE = 3.0


@dataclass
class Source:
    """An open input: its name for messages, its folder (None for a stream), its first bytes.

    ``stream`` stands behind the first bytes unless it is ``seekable``.
    """

    name: str
    folder: Path | None
    stream: BinaryIO
    seekable: bool
    head: bytes = b""
    suffix: str = ""
    size: int | None = None

    def everything(self, limit: int = TEXT_LIMIT) -> bytes:
        """Return the whole content; raises InputError when it is larger than ``limit`` bytes."""
        if self.size is not None and self.size > limit:
            raise too_large(limit)
        if self.seekable:
            self.stream.seek(0)
            data = take(self.stream, limit + 1)
        else:
            data = self.head + take(self.stream, limit + 1 - len(self.head))
        if len(data) > limit:
            raise too_large(limit)
        return data

    def random_access(self) -> BinaryIO:
        """Return a stream that can be positioned, at its start."""
        if self.seekable:
            self.stream.seek(0)
            return self.stream
        return io.BytesIO(self.everything(PIPE_LIMIT))


def too_large(limit: int) -> InputError:
    """Return the error for a text that is too large."""
    return InputError(
        f"more than {limit >> 20} MiB", f"at most {limit >> 20} MiB; write a model of that size as an .npz file"
    )


def take(stream: BinaryIO, size: int) -> bytes:
    """Return up to ``size`` bytes, reading until they are there or the stream ends."""
    parts: list[bytes] = []
    left = size
    while left > 0:
        part = stream.read(min(left, 1 << 24))
        if not part:
            break
        parts.append(part)
        left -= len(part)
    return parts[0] if len(parts) == 1 else b"".join(parts)


class PipeReader(io.RawIOBase):
    """Reads a named pipe without waiting for ever for somebody to write to it."""

    def __init__(self, descriptor: int) -> None:
        self.descriptor = descriptor
        self.started = False

    def readable(self) -> bool:
        return True

    def readinto(self, buffer: object) -> int:
        view = memoryview(buffer)  # type: ignore[arg-type]
        deadline = time.monotonic() + PIPE_PATIENCE
        while True:
            try:
                data = os.read(self.descriptor, min(len(view), 1 << 20))
            except BlockingIOError:  # somebody has it open for writing: wait as long as that takes
                self.started = True
                select.select([self.descriptor], [], [])
                continue
            if data or self.started or time.monotonic() > deadline:
                self.started = True
                view[: len(data)] = data
                return len(data)
            time.sleep(0.02)

    def close(self) -> None:
        if not self.closed:
            os.close(self.descriptor)
        super().close()


def reason(error: OSError | ValueError) -> str:
    """Return the operating system's words for what went wrong."""
    text = getattr(error, "strerror", None) or str(error)
    return text[:1].lower() + text[1:]


def open_source(path: str | os.PathLike[str]) -> Source:
    """Open a path, or ``-`` for standard input; the caller closes ``stream``.

    Raises InputError where that is impossible: a missing file, a directory, no permission.
    """
    name = os.fspath(path)
    if name == "-":
        stream = getattr(sys.stdin, "buffer", None)
        if stream is None:
            raise InputError("a standard input without bytes", "a stream of bytes", file="standard input")
        return Source("standard input", None, stream, False, take(stream, HEAD))
    where = Path(name)
    try:
        descriptor = os.open(name, os.O_RDONLY | os.O_NONBLOCK | os.O_CLOEXEC)
    except FileNotFoundError:
        raise InputError("no such file", "a file that exists", file=name) from None
    except (OSError, ValueError) as error:
        raise InputError(f"cannot be opened ({reason(error)})", "a file that can be read", file=name) from None
    mode = os.fstat(descriptor)
    if stat.S_ISDIR(mode.st_mode):
        os.close(descriptor)
        raise InputError("a directory", "a file", file=name)
    regular = stat.S_ISREG(mode.st_mode)
    stream = os.fdopen(descriptor, "rb") if regular else io.BufferedReader(PipeReader(descriptor))
    source = Source(
        name, where.parent, stream, regular, suffix=where.suffix.lower(), size=mode.st_size if regular else None
    )
    try:
        source.head = take(stream, HEAD)
    except OSError as error:
        stream.close()
        raise InputError(f"cannot be read ({reason(error)})", "a file that can be read", file=name) from None
    return source


def available_memory() -> int | None:
    """Return the memory that can be had without swapping, bytes; None where the system does not say."""
    try:
        with open("/proc/meminfo", encoding="ascii") as lines:
            for line in lines:
                if line.startswith("MemAvailable:"):
                    return int(line.split()[1]) * 1024
    except (OSError, ValueError, IndexError):
        pass
    return None


#: Bytes that are not worth a look at what is free.
LITTLE = 16 << 20


def require_memory(size: int, what: str) -> None:
    """Raise Refused when ``size`` bytes cannot be had; little is always there."""
    if size < LITTLE:
        return
    available = available_memory()
    if available is not None and size > available:
        raise Refused(
            f"{what} needs about {size / 2**30:.1f} GiB, and {available / 2**30:.1f} GiB of memory are free: "
            "use a smaller model, sparse matrices, or a larger machine"
        )
