"""Nested lists of numbers: from JSON to arrays, with exact decimals kept and every error named by its place.

A number is the double it reads as. A decimal string is exact: its nearest double goes into the array, the string
itself into a table by index.
"""

from __future__ import annotations

import json
import re
from itertools import chain
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.errors import InputError, Refused
from realize.files.json_text import Mark
from realize.models.base import Index
from realize.models.checks import decimal_fraction

#: Most decimal strings in one model.
MAX_DECIMALS = 500_000
_SHORT = re.compile(r"[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d{1,3})?", re.ASCII)

Decimals = dict[Index, str]


def describe(value: Any) -> str:
    """Return a few words for what was found in a JSON place."""
    if value is None:
        return "null"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, Mark):
        return value.text
    if isinstance(value, dict):
        return "an object" if value else "an empty object"
    if isinstance(value, (list, tuple)):
        return f"a list of {len(value)}" if value else "an empty list"
    if isinstance(value, str):
        return f"the text {json.dumps(value[:40])}"
    return repr(value)[:60]


def real(value: Any, place: str, index: Index, decimals: Decimals | None) -> float:
    """Return one real number; a decimal string is noted in ``decimals``, or refused to overflow where that is None.

    Raises InputError for anything that is no finite number.
    """
    kind = type(value)
    if kind is float:
        if value - value != 0.0:
            raise InputError(
                "NaN" if value != value else "a number beyond the largest double, 1.8e308",
                'a finite number (a decimal string such as "1e400" stays exact)',
                field=place,
            )
        return value
    if kind is int:
        try:
            return float(value)
        except OverflowError:
            raise InputError(
                f"an integer of {len(str(value).lstrip('-'))} digits, beyond the largest double",
                "a finite number, or a decimal string",
                field=place,
            ) from None
    if kind is str:
        if len(value) > 40 or _SHORT.fullmatch(value) is None:
            decimal_fraction(value, place)
        number = float(value)
        if decimals is None:
            if number - number != 0.0:
                raise InputError(f'"{value[:40]}"', "a number within the doubles", field=place)
            return number
        if len(decimals) >= MAX_DECIMALS:
            raise Refused(f"{place}: more than {MAX_DECIMALS:,} decimal strings; write plain numbers instead")
        decimals[index] = value
        return number
    if isinstance(value, (list, tuple)) and len(value) == 2 and all(type(part) in (int, float, str) for part in value):
        raise InputError(f"{list(value)!r:.60}", "one real number", field=place)
    raise InputError(describe(value), "a finite number, or a decimal string", field=place)


def number(value: Any, place: str, index: Index, decimals: Decimals) -> complex:
    """Return one complex number from ``[re, im]`` or a real; ``index`` goes on with 0 (real) or 1 (imaginary)."""
    if isinstance(value, list):
        if len(value) != 2:
            raise InputError(describe(value), "a complex number [re, im], or a real one", field=place)
        return complex(
            real(value[0], f"{place}[0]", (*index, 0), decimals), real(value[1], f"{place}[1]", (*index, 1), decimals)
        )
    return complex(real(value, place, (*index, 0), decimals))


def _regular(value: Any, rank: int) -> NDArray[np.float64] | None:
    """Return an array where ``value`` is a regular nested list of plain finite numbers, else None; all in C loops."""
    shape = []
    level = [value]
    for _ in range(rank):
        if set(map(type, level)) != {list}:
            return None
        lengths = set(map(len, level))
        if len(lengths) != 1:
            return None
        shape.append(lengths.pop())
        level = list(chain.from_iterable(level))
        if not level:
            return None
    if not set(map(type, level)) <= {float, int}:
        return None
    try:
        values = np.array(level, dtype=float)
    except OverflowError:
        return None
    return values.reshape(shape) if np.isfinite(values).all() else None


def block(
    value: Any, place: str, rank: int, says: str, decimals: Decimals, *, pairs: bool = False, index: Index = ()
) -> NDArray[Any]:
    """Return a regular array of ``rank`` dimensions, of real numbers or (``pairs``) complex ones.

    Raises InputError naming the row that is ragged, or the entry that is no number, by its place in the file.
    """
    fast = _regular(value, rank + 1 if pairs else rank)
    if fast is not None and pairs:
        if fast.shape[-1] == 2:
            return np.ascontiguousarray(fast).view(complex)[..., 0]
        fast = None
    if fast is not None:
        return fast
    sizes: list[tuple[int, str] | None] = [None] * rank

    def walk(entry: Any, name: str, at: Index, level: int) -> Any:
        if level == rank:
            return number(entry, name, at, decimals) if pairs else real(entry, name, at, decimals)
        if not isinstance(entry, list):
            hint = ", a list for each row such as [[1.0], [2.0]]" if level == 1 and rank == 2 else ""
            raise InputError(describe(entry), f"a list: {says}{hint}", field=name)
        first = sizes[level]
        if first is None:
            sizes[level] = (len(entry), name)
        elif first[0] != len(entry):
            raise InputError(f"{len(entry)} entries", f"{first[0]}, as in {first[1]}", field=name)
        return [walk(part, f"{name}[{k}]", (*at, k), level + 1) for k, part in enumerate(entry)]

    nested = walk(value, place, index, 0)
    shape = [0 if size is None else size[0] for size in sizes]
    return np.array(nested, dtype=complex if pairs else float).reshape(shape)


def channels(
    value: Any, place: str, says: str, decimals: Decimals, *, pairs: bool
) -> tuple[list[list[NDArray[Any]]], bool]:
    """Return outputs x inputs x vector, and whether one flat vector was written.

    Indices of decimals are (output, input, entry[, part]) in both cases.
    """
    if not isinstance(value, list):
        raise InputError(describe(value), f"a list: {says}", field=place)
    first = value[0] if value else None
    if not isinstance(first, list) or (pairs and first and not any(isinstance(part, list) for part in first)):
        return [[block(value, place, 1, says, decimals, pairs=pairs, index=(0, 0))]], True
    rows: list[list[NDArray[Any]]] = []
    for i, row in enumerate(value):
        name = f"{place}[{i}]"
        if not isinstance(row, list):
            raise InputError(describe(row), f"a list for each output: {says}", field=name)
        if not row:
            raise InputError("an empty list", "an entry for each input", field=name)
        if rows and len(row) != len(rows[0]):
            raise InputError(f"{len(row)} entries", f"{len(rows[0])}, as in {place}[0]", field=name)
        rows.append(
            [block(part, f"{name}[{j}]", 1, says, decimals, pairs=pairs, index=(i, j)) for j, part in enumerate(row)]
        )
    return rows, False
