"""JSON text to plain objects, strictly, and back, readably.

Where JSON readers are lenient, marks are left in the result, so that the field that is wrong can be named: `Mark` for
NaN, Infinity and integers without end, `Twice` for an object that has a name twice.
"""

from __future__ import annotations

import json
import re
from collections.abc import Collection
from typing import Any

from realize.errors import InputError
from realize.files.sources import require_memory

_MINUS_ZERO = re.compile(r"-0(?![.\deE])")
#: Longest integer that can be a double, characters.
DOUBLE_DIGITS = 310
#: Longest line of a list that is written on one line, characters.
LINE = 100
#: Most values in one text; the same in an ``.npz`` file takes a fraction of the time and memory.
MAX_VALUES = 5_000_000
MAX_LISTS = 1_000_000


class Mark:
    """Something in a numeric place that this format does not have; ``text`` is what to call it."""

    __slots__ = ("text",)

    def __init__(self, text: str) -> None:
        self.text = text


class Twice(dict[str, Any]):
    """An object in which ``key`` occurs more than once."""

    key = ""


def _object(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    result = dict(pairs)
    if len(result) == len(pairs):
        return result
    marked = Twice(result)
    names = [name for name, _ in pairs]
    marked.key = next(name for k, name in enumerate(names) if name in names[:k])
    return marked


def _integer(text: str) -> Any:
    if len(text) > DOUBLE_DIGITS:
        return Mark(f"an integer of {len(text.lstrip('-'))} digits, beyond the largest double")
    return -0.0 if text == "-0" else int(text)


def _too_deep(data: bytes) -> None:
    """Raise InputError where a text is nothing but opening brackets for longer than any model nests."""
    if re.match(rb"\s*\[{100}", data):
        raise InputError("lists nested too deeply", "at most five levels of lists")


def parse(data: bytes) -> Any:
    """Return the JSON value of UTF-8 text (a byte order mark is skipped).

    Raises InputError with line and column where the text is no JSON; `Mark` and `Twice` stay in the result.
    """
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        raise InputError(
            f"byte 0x{data[error.start]:02x}, which is not UTF-8",
            "UTF-8 text",
            field=f"line {line}, byte {error.start}",
        ) from None
    if not text.strip(" \t\r\n"):
        raise InputError("nothing but blanks" if text else "an empty file", "one JSON object with a model")
    if data.count(b",") > MAX_VALUES:
        raise InputError(
            f"more than {MAX_VALUES:,} values", f"at most {MAX_VALUES:,}; write a model of that size as an .npz file"
        )
    if data.count(b"[") + data.count(b"{") > MAX_LISTS:
        _too_deep(data)
        raise InputError(
            f"more than {MAX_LISTS:,} lists and objects",
            f"at most {MAX_LISTS:,}; write a model of that size as an .npz file",
        )
    # lists of 64 bytes, objects of 250, and 32 bytes for each number beside its place in a list
    require_memory(
        3 * len(data) + 64 * data.count(b"[") + 250 * data.count(b"{") + 40 * data.count(b","), "reading this text"
    )
    # a run of 310 digits covers one of these pieces: an integer that is slow to convert, or beyond what Python converts
    long = any(data[k : k + 150].isdigit() for k in range(0, len(data), 150))
    integers = _integer if long or _MINUS_ZERO.search(text) else None
    try:
        return json.loads(text, object_pairs_hook=_object, parse_constant=Mark, parse_int=integers)
    except json.JSONDecodeError as error:
        near = text[error.pos : error.pos + 20].split("\n")[0]
        after = f" at {near!r}" if near else " at the end of the text"
        what = error.msg[:1].lower() + error.msg[1:]
        if error.msg == "Extra data":
            what = "more text after the end of the value"
        raise InputError(
            f"not JSON: {what}{after}", "one JSON object", field=f"line {error.lineno}, column {error.colno}"
        ) from None
    except RecursionError:
        raise InputError("lists or objects nested too deeply", "at most five levels of lists") from None


_ENCODER = json.JSONEncoder(ensure_ascii=False, allow_nan=False)


def one_line(value: Any) -> str:
    """Return a plain value as JSON on one line."""
    return _ENCODER.encode(value)


def write(record: dict[str, Any], matrices: Collection[str] = ()) -> str:
    """Return an object as JSON: a line for each field, for each row of ``matrices``, for each entry of a long list."""
    fields = []
    for name, value in record.items():
        if isinstance(value, list) and len(value) > 1 and isinstance(value[0], (list, dict)):
            rows = [one_line(row) for row in value]
            text = "[" + ", ".join(rows) + "]"
            if len(text) > LINE or name in matrices:
                text = "[\n    " + ",\n    ".join(rows) + "\n  ]"
        else:
            text = one_line(value)
        fields.append(f"  {one_line(name)}: {text}")
    return "{\n" + ",\n".join(fields) + "\n}\n"
