"""Values of a job file: TOML's own types where they fit, and the text of the command line."""

from __future__ import annotations

import math
import re
from typing import Any

from realize.schema import CLAIMS
from realize.schema.values import PARSERS

_SIZES = {"": 1, "KiB": 1 << 10, "MiB": 1 << 20, "GiB": 1 << 30, "kB": 10**3, "MB": 10**6, "GB": 10**9}


def value_of(takes: str, value: Any, choices: tuple[str, ...] = ()) -> Any:
    """Return what a field or option holds; raises ValueError with words.

    Parameters
    ----------
    takes : str
        As in `realize.schema.Option`, or one of the fields of a job file: ``patterns``, ``failure``, ``seconds``,
        ``memory``, ``limits``.
    """
    if takes in ("flag", "switch"):
        if not isinstance(value, bool):
            raise ValueError(f"{value!r} is neither true nor false")
        return value
    if takes == "choice":
        if value not in choices:
            raise ValueError(f"no {value!r}; there are: {', '.join(choices)}")
        return value
    if takes == "patterns":
        given = [value] if isinstance(value, str) else value
        if not isinstance(given, list) or not all(isinstance(entry, str) and entry for entry in given):
            raise ValueError(f"{value!r} is no list of names")
        return tuple(given)
    if takes == "failure":
        if value not in ("stop", "set-aside", "keep"):
            raise ValueError(f"no {value!r}; there are: stop, set-aside, keep")
        return value
    if takes == "limits":
        return _limits(value)
    if takes == "memory":
        return _memory(value)
    if takes == "columns" and isinstance(value, list):
        value = ",".join(str(entry) for entry in value)
    if takes == "band" and isinstance(value, list) and len(value) == 2:
        value = ",".join(str(entry) for entry in value)
    if takes in ("roots", "matrix") and isinstance(value, list):
        return _numbers(takes, value)
    if isinstance(value, bool) or not isinstance(value, (str, int, float)):
        raise ValueError(f"{value!r} is neither a text nor a number")
    if takes in ("text", "path") and not isinstance(value, str):
        raise ValueError(f"{value!r} is no text")
    if takes == "seconds":
        found = PARSERS["time"](str(value))
        if not found > 0:
            raise ValueError(f"{value!r} is not a time greater than zero")
        return found
    parse = PARSERS.get(takes)
    if parse is None:
        raise ValueError("this option is for the command line alone")
    return parse(repr(value) if isinstance(value, float) else str(value))


def _numbers(takes: str, value: list[Any]) -> Any:
    """Return roots, numbers or [re, im], or the rows of a matrix."""

    def plain(entry: Any) -> bool:
        return isinstance(entry, (int, float)) and not isinstance(entry, bool) and math.isfinite(entry)

    if takes == "roots":
        pairs = [[entry, 0] if plain(entry) else entry for entry in value]
        if not all(isinstance(pair, list) and len(pair) == 2 and all(map(plain, pair)) for pair in pairs):
            raise ValueError(f"{value!r} is no list of numbers or pairs [real, imaginary]")
        return [[float(part) for part in pair] for pair in pairs]
    rows = [value] if all(map(plain, value)) else value
    if not all(isinstance(row, list) and row and all(map(plain, row)) for row in rows) or len(set(map(len, rows))) != 1:
        raise ValueError(f"{value!r} is no list of rows of numbers, all of one length")
    return [[float(entry) for entry in row] for row in rows]


def _limits(value: Any) -> dict[str, float]:
    if not isinstance(value, dict):
        raise ValueError(f"{value!r} is no table of claims and numbers")
    for name, number in value.items():
        if name not in CLAIMS:
            raise ValueError(f"no claim {name!r}; there are: {', '.join(CLAIMS)}")
        if isinstance(number, bool) or not isinstance(number, (int, float)) or not math.isfinite(number):
            raise ValueError(f"the limit {number!r} of {name} is no finite number")
    return {name: float(number) for name, number in value.items()}


def _memory(value: Any) -> int:
    match = re.fullmatch(r"\s*(\d+(?:\.\d+)?)\s*([kKMG]?i?B?)\s*", str(value))
    unit = _SIZES.get(match[2]) if match else None
    if match is None or unit is None or isinstance(value, bool):
        raise ValueError(f"{value!r} is no amount of memory; write 512MiB or 2GiB")
    size = int(float(match[1]) * unit)
    if size < 1 << 20:
        raise ValueError(f"{value!r} is less than a file can do with; 64MiB is a small limit")
    return size
