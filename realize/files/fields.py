"""One reader for each thing a field can hold (`realize.schema.HOLDS`): JSON value in, argument of the model out."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from realize.errors import InputError
from realize.files import matrix_market, trees
from realize.files.json_text import Twice
from realize.files.sources import TEXT_LIMIT, open_source
from realize.models import Signal
from realize.models.checks import decimal_fraction
from realize.schema import HOLDS

#: Highest power of one pole in a pole-residue model.
MAX_POWER = 1000


@dataclass
class Reading:
    """What is known while one record is read.

    ``decimals`` collects exact decimals by field; ``written`` maps the beginning of a place as the model names it to
    the place as the user wrote it.
    """

    folder: Path | None = None
    allow_outside: bool = False
    decimals: dict[str, trees.Decimals] = field(default_factory=dict)
    written: list[tuple[re.Pattern[str], str]] = field(default_factory=list)

    def table(self, name: str) -> trees.Decimals:
        """Return the table of exact decimals of a field."""
        return self.decimals.setdefault(name, {})

    def renamed(self, prefix: str, name: str) -> None:
        """Note that the model's ``prefix`` is the user's ``name``."""
        self.written.append((re.compile(re.escape(prefix)), name))

    def as_written(self, place: str) -> str:
        """Return a place that the model named, as the user wrote it."""
        for pattern, name in self.written:
            match = pattern.match(place)
            if match:
                return match.expand(name) + place[match.end() :]
        return place


def nearest(word: str, known: tuple[str, ...] | list[str]) -> str:
    """Return ``, did you mean ...?`` or nothing."""
    import difflib

    folded = {name.lower(): name for name in known}
    close = difflib.get_close_matches(word.lower(), list(folded), 1, 0.6)
    return f" (did you mean {folded[close[0]]!r}?)" if close else ""


def as_object(
    value: Any, place: str, known: tuple[str, ...], needed: tuple[str, ...] = (), says: str = ""
) -> dict[str, Any]:
    """Return a JSON object whose names are all known; raises InputError naming one that is not, twice or missing."""
    if not isinstance(value, dict):
        raise InputError(trees.describe(value), says or "an object with " + ", ".join(known), field=place)
    dot = f"{place}." if place else ""
    if isinstance(value, Twice):
        raise InputError("the name is there twice", "each name once", field=dot + value.key)
    for name in value:
        if name not in known:
            raise InputError(
                f"an unknown field{nearest(name, known)}", "one of " + ", ".join(known), field=f"{dot}{name[:60]}"
            )
    for name in needed:
        if name not in value:
            raise InputError("missing", f"an object with {', '.join(needed)}", field=f"{dot}{name}")
    return value


def text(value: Any, place: str) -> str:
    """Return a text that can be written as UTF-8."""
    if not isinstance(value, str):
        raise InputError(trees.describe(value), "a text", field=place)
    try:
        value.encode("utf-8")
    except UnicodeEncodeError:
        raise InputError("half of a surrogate pair", "a text of Unicode characters", field=place) from None
    return value


def signals(value: Any, place: str, reading: Reading) -> tuple[Signal, ...]:
    """Return the signals of ``[{"name": text, "unit": text}, ...]``."""
    if not isinstance(value, list):
        raise InputError(trees.describe(value), f"a list: {HOLDS['signal-list']}", field=place)
    result = []
    for k, entry in enumerate(value):
        at = f"{place}[{k}]"
        given = as_object(entry, at, ("name", "unit"), says='an object {"name": text, "unit": text}')
        result.append(Signal(*(text(given.get(part, ""), f"{at}.{part}") for part in ("name", "unit"))))
    return tuple(result)


def _channels(pairs: bool, holds: str) -> Callable[[Any, str, Reading], Any]:
    def read(value: Any, place: str, reading: Reading) -> Any:
        rows, flat = trees.channels(value, place, HOLDS[holds], reading.table(place), pairs=pairs)
        if flat:
            reading.renamed(f"{place}[0][0]", place)
        return rows

    return read


def _block(rank: int, pairs: bool, holds: str) -> Callable[[Any, str, Reading], Any]:
    def read(value: Any, place: str, reading: Reading) -> Any:
        return trees.block(value, place, rank, HOLDS[holds], reading.table(place), pairs=pairs)

    return read


def _gains(value: Any, place: str, reading: Reading) -> Any:
    if isinstance(value, list):
        return trees.block(value, place, 2, HOLDS["gains"], reading.table(place))
    reading.renamed(f"{place}[0][0]", place)
    return [[trees.real(value, place, (0, 0), reading.table(place))]]


def _powers(value: Any, place: str, reading: Reading) -> Any:
    own: trees.Decimals = {}
    powers = trees.block(value, place, 1, HOLDS["power-list"], own)
    for (k,), decimal in own.items():
        if decimal_fraction(decimal, place).denominator != 1:
            raise InputError(f'"{decimal[:40]}"', "a positive integer", field=f"{place}[{k}]")
    bad = np.flatnonzero((powers < 1) | (powers > MAX_POWER) | (powers != np.rint(powers)))
    if bad.size:
        raise InputError(f"{powers[bad[0]]:g}", f"an integer from 1 to {MAX_POWER}", field=f"{place}[{bad[0]}]")
    return powers.astype(int)


def _direct(value: Any, place: str, reading: Reading) -> Any:
    row = value[0] if isinstance(value, list) and value else None
    if isinstance(row, list) and row and isinstance(row[0], list):
        return trees.block(value, place, 3, HOLDS["direct"], reading.table(place))
    reading.renamed(f"{place}[0]", place)
    return trees.block(value, place, 2, HOLDS["direct"], reading.table(place), index=(0,))[None]


def _sections(value: Any, place: str, reading: Reading) -> Any:
    if not isinstance(value, list):
        raise InputError(trees.describe(value), f"a list: {HOLDS['section-list']}", field=place)
    reading.written.append((re.compile(re.escape(place) + r"\[(\d+)\]\[0\]"), place + r"[\1].numerator"))
    reading.written.append((re.compile(re.escape(place) + r"\[(\d+)\]\[1\]"), place + r"[\1].denominator"))
    parts = ("numerator", "denominator")
    result = []
    for k, entry in enumerate(value):
        at = f"{place}[{k}]"
        given = as_object(entry, at, parts, parts, 'an object {"numerator": [b2, b1, b0], "denominator": [a2, a1, a0]}')
        rows = []
        for side, part in enumerate(parts):
            row = trees.block(
                given[part],
                f"{at}.{part}",
                1,
                "three numbers, the highest power first",
                reading.table(place),
                index=(k, side),
            )
            if row.size != 3:
                raise InputError(
                    f"{row.size} numbers",
                    "3, the highest power first (leading zeros where it is of lower order)",
                    field=f"{at}.{part}",
                )
            rows.append(row)
        result.append(rows)
    return np.array(result).reshape(-1, 2, 3)


def _number(value: Any, place: str, reading: Reading) -> Any:
    reading.renamed(f"{place}[0]", place)
    result = trees.real(value, place, (), reading.table(place))
    if result - result != 0.0:
        raise InputError(f'"{value[:40]}"', "a number within the doubles", field=place)
    return result


def _matrix(value: Any, place: str, reading: Reading) -> Any:
    if isinstance(value, dict):
        return _from_file(value, place, reading)
    return trees.block(value, place, 2, HOLDS["matrix"], reading.table(place))


def _from_file(value: Any, place: str, reading: Reading) -> Any:
    """Read ``{"file": "A.mtx"}``: relative to the model file, links resolved, not outside its folder unless allowed."""
    given = as_object(value, place, ("file",), ("file",), says='{"file": "NAME.mtx"}')
    name = text(given["file"], f"{place}.file")
    if reading.folder is None and not reading.allow_outside:
        raise InputError(
            f"the matrix file {name[:80]!r} in a model that does not come from a file",
            "the matrix itself",
            field=f"{place}.file",
        )
    folder = (reading.folder or Path(".")).resolve()
    try:
        path = (folder / name).resolve()
        inside = path.is_relative_to(folder)
    except (OSError, ValueError, RuntimeError):
        raise InputError(f"{name[:80]!r}", "the name of a file", field=f"{place}.file") from None
    if not inside and not reading.allow_outside:
        raise InputError(
            f"{name[:80]!r} lies outside the folder of the model",
            "a file in the folder of the model",
            field=f"{place}.file",
        )
    try:
        source = open_source(str(path))
        with source.stream:
            if not source.seekable:
                raise InputError("no regular file", "a Matrix Market file")
            return matrix_market.parse(source.everything(TEXT_LIMIT))
    except InputError as error:
        detail = ", ".join(part for part in (name, error.field) if part)
        raise InputError(f"{detail}: {error.found}", error.expected, field=place) from None


def _word(value: Any, place: str, reading: Reading) -> str:
    return text(value, place)


#: What a field holds -> its reader: (JSON value, place, reading) -> argument of the model.
READERS: dict[str, Callable[[Any, str, Reading], Any]] = {
    "polynomials": _channels(False, "polynomials"),
    "roots": _channels(True, "roots"),
    "gains": _gains,
    "pole-list": _block(1, True, "pole-list"),
    "residue-list": _block(3, True, "residue-list"),
    "power-list": _powers,
    "direct": _direct,
    "section-list": _sections,
    "number": _number,
    "matrix": _matrix,
    "signal-list": signals,
    "frequency-list": _block(1, False, "frequency-list"),
    "frequency-unit": _word,
    "side": _word,
    "polynomial-matrix": _block(3, False, "polynomial-matrix"),
    "response": _block(3, True, "response"),
    "record": _block(2, False, "record"),
    "samples": _block(3, False, "samples"),
    "real-response": _block(3, False, "real-response"),
}
