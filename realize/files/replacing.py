"""Writing files whole or not at all."""

from __future__ import annotations

import contextlib
import os
import secrets
import stat
from collections.abc import Iterator
from typing import BinaryIO

from realize.errors import InputError
from realize.files.sources import reason


@contextlib.contextmanager
def replacing(path: str | os.PathLike[str]) -> Iterator[BinaryIO]:
    """Give a stream whose content takes the place of ``path`` when the block ends, and of nothing when it fails.

    The bytes go to a temporary file in the same folder, which is synchronised and renamed; any exception removes it.
    An existing file keeps its permission bits, a symbolic link stays one, and a device or pipe is written to directly.

    Raises InputError when the folder is missing, nothing may be written there, or the path is a directory.
    """
    name = os.fspath(path)
    try:
        target = os.path.realpath(name)
        state = os.stat(target) if os.path.exists(target) else None
    except (OSError, ValueError) as error:
        raise InputError(f"cannot be written ({reason(error)})", "a path that can be written", file=name) from None
    folder = os.path.dirname(target)
    if (state is not None and stat.S_ISDIR(state.st_mode)) or name.endswith("/"):
        raise InputError("a directory", "the name of a file to write", file=name)
    if state is not None and not stat.S_ISREG(state.st_mode):
        with _words(name), open(target, "wb") as stream:
            yield stream
        return
    if not os.path.isdir(folder):
        raise InputError(f"the folder {os.path.dirname(name)!r} does not exist", "a folder that exists", file=name)
    if state is not None and not os.access(target, os.W_OK):
        raise InputError("a file that may not be written", "another name, or permission to write", file=name)
    temporary = os.path.join(folder, f".realize-{secrets.token_hex(8)}.part")
    flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC
    with _words(name):
        descriptor = os.open(temporary, flags, 0o666)
    try:
        with _words(name):
            with os.fdopen(descriptor, "wb") as stream:
                if state is not None:
                    os.fchmod(descriptor, stat.S_IMODE(state.st_mode))
                yield stream
                stream.flush()
                os.fsync(descriptor)
            os.replace(temporary, target)
    except BaseException:
        with contextlib.suppress(OSError):
            os.unlink(temporary)
        raise
    _synchronise(folder)


@contextlib.contextmanager
def _words(name: str) -> Iterator[None]:
    """Turn an error of the operating system into one that names the file."""
    try:
        yield
    except BrokenPipeError:
        raise
    except OSError as error:
        raise InputError(f"cannot be written ({reason(error)})", "a path that can be written", file=name) from None


def _synchronise(folder: str) -> None:
    """Make the new name itself durable, where the file system can."""
    with contextlib.suppress(OSError):
        descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
        try:
            os.fsync(descriptor)
        finally:
            os.close(descriptor)


def replace_file(path: str | os.PathLike[str], data: bytes) -> None:
    """Write ``data`` to ``path``, whole or not at all; see `replacing`."""
    with replacing(path) as stream:
        stream.write(data)
