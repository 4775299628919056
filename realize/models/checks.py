"""Checks and normal forms of the numbers in a model: friendly input in, read-only arrays out."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.errors import InputError

MAX_EXPONENT = 5000
MAX_DIGITS = 2000
_DECIMAL = re.compile(r"[+-]?(?:(\d+)(?:\.(\d*))?|\.(\d+))(?:[eE]([+-]?\d+))?", re.ASCII)


def decimal_fraction(text: str, place: str) -> Fraction:
    """Return the exact value of a decimal string; raises InputError when it is none, or beyond the stated limits."""
    match = _DECIMAL.fullmatch(text)
    if match is None:
        raise InputError(f"{text[:40]!r}", 'a number, or a decimal string such as "0.1"', field=place)
    digits = sum(len(part) for part in match.groups()[:3] if part)
    if digits > MAX_DIGITS:
        raise InputError(f"a decimal string of {digits} digits", f"at most {MAX_DIGITS} digits", field=place)
    exponent = match.group(4)
    if exponent is not None and (len(exponent) > 9 or abs(int(exponent)) > MAX_EXPONENT):
        raise InputError(f"{text[:40]!r}", f"an exponent within +-{MAX_EXPONENT}", field=place)
    return Fraction(text)


def rational(value: float | str, place: str) -> Fraction:
    """Return the exact value of a double or decimal string."""
    if isinstance(value, str):
        return decimal_fraction(value, place)
    if isinstance(value, bool) or not math.isfinite(value):
        raise InputError(f"{value}", "a finite number", field=place)
    return Fraction(value)


def nearest_double(value: Fraction) -> float:
    """Return the double nearest to a fraction; infinite past the range."""
    try:
        return value.numerator / value.denominator
    except OverflowError:
        return math.inf if value > 0 else -math.inf


def place_of(name: str, index: Sequence[int]) -> str:
    """Return ``name[i][j]``."""
    return name + "".join(f"[{int(i)}]" for i in index)


def frozen(values: NDArray[Any]) -> NDArray[Any]:
    """Return a contiguous read-only copy."""
    copy = np.array(values, order="C", copy=True)
    copy.flags.writeable = False
    return copy


def array(
    value: Any, name: str, dimensions: int, dtype: type = float, *, allow: Mapping[Any, str] | None = None
) -> NDArray[Any]:
    """Return a read-only array of the given number of dimensions with finite entries.

    ``allow`` holds the indices of exact decimals, whose nearest double may be infinite.
    """
    try:
        raw = np.asarray(value)
        if raw.dtype.kind not in "fiucb" and raw.size:
            raise ValueError
        if raw.dtype.kind == "b" and raw.size:
            raise ValueError
        if raw.dtype.kind == "c" and dtype is float:
            if np.any(raw.imag != 0):
                raise InputError("complex numbers", "real numbers", field=name)
            raw = raw.real
        values: NDArray[Any] = raw.astype(dtype)
    except (ValueError, TypeError, OverflowError):
        raise InputError(
            "ragged rows or something that is no number", f"{dimensions}-dimensional numbers", field=name
        ) from None
    if values.ndim != dimensions:
        if values.size == 0 and values.ndim < dimensions:
            values = values.reshape(values.shape + (0,) * (dimensions - values.ndim))
        else:
            raise InputError(f"{values.ndim} dimensions", f"{dimensions} dimensions", field=name)
    finite = np.isfinite(values)
    if not finite.all():
        for row in np.argwhere(~finite):
            index = tuple(int(i) for i in row)
            if not (allow and any(key[: len(index)] == index for key in allow)):
                raise InputError(f"{values[index]}", "a finite number", field=place_of(name, index))
    return frozen(values)


def step_of_time(value: Any, sampling: float | None) -> float:
    """Return the step of samples, s: a positive number, the sampling period itself where there is one."""
    period = float(array([value], "period", 1)[0])
    if not period > 0:
        raise InputError(f"{period}", "a number of seconds greater than zero", field="period")
    if sampling is not None and period != sampling:
        raise InputError(f"{period} s", f"the sampling period, {sampling} s", field="period")
    return period


Channels = tuple[tuple[NDArray[Any], ...], ...]


def is_vector(value: Any) -> bool:
    """True for a flat list of numbers (an empty one too)."""
    if isinstance(value, np.ndarray):
        return value.ndim == 1 and value.dtype.kind in "fiuc"
    return isinstance(value, (list, tuple)) and all(
        not isinstance(entry, (list, tuple)) and np.ndim(entry) == 0 for entry in value
    )


def channels(value: Any, name: str, dtype: type, *, allow: Mapping[Any, str] | None = None) -> Channels:
    """Return outputs x inputs x vector from one vector or a nested list of vectors."""
    if is_vector(value):
        value = [[value]]
    rows = list(value)
    if not rows:
        raise InputError("no outputs", "at least one row", field=name)
    result = []
    width = None
    for i, row in enumerate(rows):
        if is_vector(row) and not (isinstance(row, (list, tuple)) and len(row) == 0):
            raise InputError("one list of lists", "outputs x inputs x list", field=f"{name}[{i}]")
        row = list(row)
        if width is None:
            width = len(row)
        if len(row) != width:
            raise InputError(f"{len(row)} entries", f"{width}, as in the first row", field=f"{name}[{i}]")
        if not row:
            raise InputError("no inputs", "at least one entry", field=f"{name}[{i}]")
        line = []
        for j, entry in enumerate(row):
            inner = {k[2:]: v for k, v in (allow or {}).items() if k[:2] == (i, j)}
            line.append(array(entry, f"{name}[{i}][{j}]", 1, dtype, allow=inner))
        result.append(tuple(line))
    return tuple(result)


def spread(value: Channels, shape: tuple[int, int], name: str) -> Channels:
    """Return the channels with a single entry repeated to the given shape."""
    have = (len(value), len(value[0]))
    if have == shape:
        return value
    if have == (1, 1):
        return tuple(tuple(value[0][0] for _ in range(shape[1])) for _ in range(shape[0]))
    raise InputError(f"{have[0]} x {have[1]} channels", f"{shape[0]} x {shape[1]}", field=name)


def conjugation_closed(values: NDArray[np.complex128], name: str) -> None:
    """Raise InputError unless every complex number has its conjugate in the list, as often as itself."""
    seen: dict[complex, int] = {}
    for value in values.tolist():
        if value.imag != 0:
            seen[value] = seen.get(value, 0) + 1
    for k, value in enumerate(values.tolist()):
        if value.imag != 0 and seen.get(value) != seen.get(value.conjugate()):
            raise InputError(
                f"{value.real!r}{value.imag:+}j without its conjugate",
                "both members of every conjugate pair, equal to the last bit",
                field=f"{name}[{k}]",
            )


def signals(value: Any, count: int, name: str, factory: type) -> tuple[Any, ...]:
    """Return ``count`` signals; an empty sequence means unnamed."""
    given = tuple(value)
    if not given:
        return tuple(factory() for _ in range(count))
    if len(given) != count:
        raise InputError(f"{len(given)} entries", f"{count}, one for each", field=name)
    names = [signal.name for signal in given if signal.name]
    for k, signal in enumerate(given):
        if signal.name and names.count(signal.name) > 1:
            raise InputError(f"the name {signal.name!r} twice", "different names", field=f"{name}[{k}].name")
    return given


def _ratio(value: float) -> tuple[int, int]:
    return float(value).as_integer_ratio()


def exact_tree(value: Any, decimals: Mapping[tuple[int, ...], str], index: tuple[int, ...] = ()) -> Any:
    """Return nested lists of integer ratios; complex entries become [real, imaginary] pairs of ratios."""
    if value is None:
        return None
    if isinstance(value, (tuple, list)) or (isinstance(value, np.ndarray) and value.ndim > 0):
        if not decimals and isinstance(value, np.ndarray) and value.dtype.kind == "f" and value.ndim <= 2:
            if value.ndim == 1:
                return [entry.as_integer_ratio() for entry in value.tolist()]
            return [[entry.as_integer_ratio() for entry in row] for row in value.tolist()]
        return [exact_tree(entry, decimals, (*index, k)) for k, entry in enumerate(value)]
    if isinstance(value, (complex, np.complexfloating)):
        return [exact_tree(value.real, decimals, (*index, 0)), exact_tree(value.imag, decimals, (*index, 1))]
    text = decimals.get(index)
    if text is not None:
        fraction = decimal_fraction(text, "")
        return fraction.numerator, fraction.denominator
    return _ratio(value)
