"""Names of outputs: patterns such as ``{folder}/{name}-small.json``, which can never lead out of the output folder."""

from __future__ import annotations

import re
from pathlib import PurePosixPath

#: What a pattern may hold, and what stands for it.
PLACEHOLDERS = {
    "name": "name of the input without its suffix",
    "suffix": "suffix of the input without the dot",
    "folder": "folder of the input, as seen from the job file",
    "step": "verb of the step",
    "number": "number of the step, from 1",
}
_HOLE = re.compile(r"\{([^{}]*)\}")


def check_pattern(pattern: str) -> None:
    """Raise ValueError with words where a pattern holds something that it may not."""
    for name in _HOLE.findall(pattern):
        if name not in PLACEHOLDERS:
            raise ValueError(f"no {{{name}}} to fill in; there are: {', '.join(f'{{{p}}}' for p in PLACEHOLDERS)}")
    plain = _HOLE.sub("x", pattern)
    if "{" in plain or "}" in plain:
        raise ValueError("a brace without its partner")
    if not plain or plain.endswith("/"):
        raise ValueError("no name of a file")
    _inside(plain)


def _inside(text: str) -> str:
    """Return a relative path in its shortest spelling; raises ValueError where it leads out of its folder."""
    if text.startswith("/"):
        raise ValueError("a path from the root; outputs stay in the output folder")
    if "\0" in text:
        raise ValueError("a zero byte in a name")
    parts = [part for part in text.split("/") if part not in ("", ".")]
    if ".." in parts:
        raise ValueError("a path with .. in it; outputs stay in the output folder")
    if not parts:
        raise ValueError("no name of a file")
    for part in parts:
        if len(part.encode("utf-8", "surrogateescape")) > 255:
            raise ValueError("a name of more than 255 bytes")
    if any(part.startswith(".realize-") for part in parts):
        raise ValueError("names that start with .realize- are taken")
    return "/".join(parts)


def fill(pattern: str, item: str, verb: str, number: int) -> str:
    """Return the output of a step for an input, relative to the output folder.

    Parameters
    ----------
    item : str
        The input, relative to the job file's folder; from elsewhere, only its name counts.
    """
    path = PurePosixPath(item)
    outside = path.is_absolute() or ".." in path.parts
    values = {
        "name": path.stem,
        "suffix": path.suffix.removeprefix("."),
        "folder": "" if outside or str(path.parent) == "." else str(path.parent),
        "step": verb,
        "number": str(number),
    }
    return _inside(_HOLE.sub(lambda match: values[match[1]], pattern).lstrip("/"))
