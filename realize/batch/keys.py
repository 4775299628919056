"""Digests that say whether a result is still the one that the job asks for."""

from __future__ import annotations

import hashlib
import json
import os
import re
import stat
from collections.abc import Iterator
from functools import cache
from pathlib import Path
from typing import Any

from realize._version import __version__
from realize.batch.jobs import Job
from realize.errors import InputError
from realize.files.sources import reason

#: Largest input that is held as bytes; a larger one is read twice, bytes.
HELD = 64 << 20
_NAMED = re.compile(rb'"file"\s*:\s*("(?:\\.|[^"\\])*")')


class Vanished(InputError):
    """An input that was there when the job began."""


def opened(path: str) -> Any:
    """Return the open stream of a regular file; raises InputError (`Vanished` where it is gone)."""
    try:
        descriptor = os.open(path, os.O_RDONLY | os.O_NONBLOCK | os.O_CLOEXEC)
    except FileNotFoundError:
        raise Vanished("the file has vanished", "a file that stays until the job is done", file=path) from None
    except (OSError, ValueError) as error:
        raise InputError(f"cannot be opened ({reason(error)})", "a file that can be read", file=path) from None
    if not stat.S_ISREG(os.fstat(descriptor).st_mode):
        os.close(descriptor)
        raise InputError("no regular file", "a file", file=path)
    return os.fdopen(descriptor, "rb")


def take_input(path: str) -> tuple[str, bytes | None]:
    """Return the digest of an input and its bytes (None where they are too many to hold)."""
    with opened(path) as stream:
        try:
            if os.fstat(stream.fileno()).st_size > HELD:
                return "sha256:" + hashlib.file_digest(stream, "sha256").hexdigest(), None
            data = stream.read()
        except OSError as error:
            raise InputError(f"cannot be read ({reason(error)})", "a file that can be read", file=path) from None
    return digest_of(data, os.path.dirname(path)), data


def digest_of(data: bytes, folder: str) -> str:
    """Return the digest of an input's bytes, and of the matrix files that it names."""
    whole = hashlib.sha256(data)
    if b'"file"' in data:
        for name in _named(data):
            whole.update(b"\0" + name.encode("utf-8", "surrogatepass") + b"\0")
            try:
                with opened(str(Path(folder) / name)) as stream:
                    whole.update(hashlib.file_digest(stream, "sha256").digest())
            except (InputError, OSError, ValueError):
                whole.update(b"absent")
    return "sha256:" + whole.hexdigest()


def _named(data: bytes) -> Iterator[str]:
    for match in _NAMED.finditer(data):
        try:
            yield json.loads(match[1])
        except ValueError:
            continue


@cache
def digest_of_file(path: str) -> str:
    """Return the digest of a file that a step needs; it is taken to stay as it is while a run goes on."""
    return take_input(path)[0]


def chain(job: Job, input_digest: str) -> list[str]:
    """Return the key of every step for an input: a digest of input, steps so far, options and version."""
    keys = []
    key = f"realize {__version__}, job 1\n{input_digest}\n{job.second_opinion_every}"
    for step in job.steps:
        text = json.dumps(step.plain(), sort_keys=True) + "".join(digest_of_file(path) for path in step.files)
        key = hashlib.sha256(f"{key}\n{text}".encode()).hexdigest()
        keys.append(key)
    return keys
