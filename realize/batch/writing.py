"""Writing inside one folder: whole files or none, no symbolic link followed, leftovers recognisable."""

from __future__ import annotations

import contextlib
import errno
import os
import secrets
from collections.abc import Iterable, Iterator

from realize.errors import InputError
from realize.files.sources import reason

#: Start of the names of temporary files; what a killed run left is swept by the next one.
PREFIX = ".realize-run-"
_FOLDER = os.O_RDONLY | os.O_DIRECTORY | os.O_NOFOLLOW | os.O_CLOEXEC
#: Errors of the operating system that concern the whole run, not one file.
EXHAUSTED = {errno.ENOSPC, errno.EDQUOT, errno.EROFS, errno.EIO, errno.EMFILE, errno.ENFILE}


class Exhausted(Exception):
    """The place for results is full, or has gone: nothing can go on until somebody helps."""


@contextlib.contextmanager
def folder_of(root: str, relative: str, *, make: bool = True) -> Iterator[tuple[int, str]]:
    """Give a descriptor of the folder that a relative path lies in, and the last name; links are not followed.

    Raises InputError where a part of the path is a symbolic link or no folder.
    """
    *folders, last = relative.split("/")
    descriptor = os.open(root, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
    try:
        for folder in folders:
            if make:
                with contextlib.suppress(FileExistsError):
                    os.mkdir(folder, dir_fd=descriptor)
            try:
                inner = os.open(folder, _FOLDER, dir_fd=descriptor)
            except OSError as error:
                if error.errno in (errno.ELOOP, errno.ENOTDIR):
                    raise InputError(
                        f"{folder!r} is a symbolic link or no folder",
                        "a folder; links are not followed for writing",
                        file=relative,
                    ) from None
                raise
            os.close(descriptor)
            descriptor = inner
        yield descriptor, last
    finally:
        os.close(descriptor)


def put(root: str, relative: str, data: bytes, *, durable: bool = False) -> None:
    """Write a file below ``root``, complete or not at all, in place of whatever has the name.

    Parameters
    ----------
    durable : bool
        Wait until the data are on the disk.

    Raises
    ------
    InputError
        Where the name is a folder, or a part of the path is a symbolic link.
    Exhausted
        Where the disk is full or the folder has gone.
    """
    try:
        with folder_of(root, relative) as (folder, name):
            temporary = f"{PREFIX}{secrets.token_hex(8)}.part"
            flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_NOFOLLOW | os.O_CLOEXEC
            descriptor = os.open(temporary, flags, 0o666, dir_fd=folder)
            try:
                try:
                    view = memoryview(data)
                    while view:
                        view = view[os.write(descriptor, view) :]
                    if durable:
                        os.fsync(descriptor)
                finally:
                    os.close(descriptor)
                os.replace(temporary, name, src_dir_fd=folder, dst_dir_fd=folder)
            except BaseException:
                with contextlib.suppress(OSError):
                    os.unlink(temporary, dir_fd=folder)
                raise
    except OSError as error:
        if error.errno in EXHAUSTED or not os.path.isdir(root):
            raise Exhausted(f"{os.path.join(root, relative)}: cannot be written ({reason(error)})") from None
        raise InputError(f"cannot be written ({reason(error)})", "a path that can be written", file=relative) from None


def remove(root: str, relative: str) -> None:
    """Remove a file below ``root`` if it is there."""
    with contextlib.suppress(OSError, InputError), folder_of(root, relative, make=False) as (folder, name):
        os.unlink(name, dir_fd=folder)


def content(root: str, relative: str) -> bytes | None:
    """Return the bytes of a file below ``root``; None where there is none, or only a link."""
    try:
        with folder_of(root, relative, make=False) as (folder, name):
            flags = os.O_RDONLY | os.O_NOFOLLOW | os.O_NONBLOCK | os.O_CLOEXEC
            with os.fdopen(os.open(name, flags, dir_fd=folder), "rb") as stream:
                return stream.read()
    except (OSError, InputError):
        return None


def sweep(root: str, relatives: Iterable[str]) -> int:
    """Remove the temporary files that a killed run left in the folders of these outputs; returns how many."""
    swept = 0
    for folder in {relative.rpartition("/")[0] for relative in relatives} | {""}:
        try:
            with folder_of(root, f"{folder}/x".lstrip("/"), make=False) as (descriptor, _):
                for name in os.listdir(descriptor):
                    if name.startswith(PREFIX) and name.endswith(".part"):
                        os.unlink(name, dir_fd=descriptor)
                        swept += 1
        except (OSError, InputError):
            continue
    return swept
