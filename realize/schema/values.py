"""Values of options: text to numbers, with words when the text is none."""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from typing import Any

from realize.schema.claims import CLAIMS
from realize.schema.verbs import ESTIMATED_DEAD_TIMES

_UNITS = {
    "hz": 2 * math.pi,
    "khz": 2e3 * math.pi,
    "mhz": 2e6 * math.pi,
    "ghz": 2e9 * math.pi,
    "rad/s": 1.0,
    "": 1.0,
}
_QUANTITY = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*([a-zA-Z/]*)\s*", re.ASCII)


def number(text: str) -> float:
    """Return a finite number."""
    try:
        value = float(text)
    except ValueError:
        raise ValueError(f"{text!r} is not a number") from None
    if not math.isfinite(value):
        raise ValueError(f"{text!r} is not a finite number")
    return value


def integer(text: str | int) -> int:
    """Return an integer that is not negative."""
    text = str(text)
    if not re.fullmatch(r"\d{1,9}", text, re.ASCII):
        raise ValueError(f"{text!r} is not a whole number")
    return int(text)


def frequency(text: str) -> float:
    """Return rad/s from a number with an optional suffix: 120Hz, 2.4kHz, 1MHz, 0.1rad/s; a plain number is rad/s.

    Mega and milli differ by case alone: ``MHz`` is mega; ``mHz`` is milli.
    """
    match = _QUANTITY.fullmatch(text)
    if match is None:
        raise ValueError(f"{text!r} is not a frequency; write 120Hz, 2.4kHz or 0.1rad/s")
    value, unit = float(match.group(1)), match.group(2)
    factor = 2e-3 * math.pi if unit == "mHz" else _UNITS.get(unit.lower())
    if factor is None:
        raise ValueError(f"{unit!r} is no unit of frequency; there are Hz, kHz, MHz, GHz, mHz and rad/s")
    if not math.isfinite(value * factor) or value < 0:
        raise ValueError(f"{text!r} is not a frequency of zero or more")
    return value * factor


def band(text: str) -> tuple[float, float]:
    """Return LOW,HIGH in rad/s."""
    parts = text.split(",")
    if len(parts) != 2:
        raise ValueError(f"{text!r} is not LOW,HIGH, such as 1Hz,2kHz")
    low, high = (frequency(part) for part in parts)
    if not low < high:
        raise ValueError(f"{text!r}: the lower frequency must be below the higher one")
    return low, high


def frequencies(text: str) -> list[float]:
    """Return a list of frequencies in rad/s."""
    return [frequency(part) for part in text.split(",")]


def order(text: str) -> str | int | tuple[int, int]:
    """Return N, (A, B) or "auto"."""
    if text == "auto":
        return text
    match = re.fullmatch(r"(\d{1,6})(?:\.\.(\d{1,6}))?", text, re.ASCII)
    if match is None:
        raise ValueError(f"{text!r} is not an order; write N, A..B or auto")
    first, last = match.group(1), match.group(2)
    if last is None:
        return int(first)
    if int(first) > int(last):
        raise ValueError(f"{text!r}: the range runs backwards")
    return int(first), int(last)


def error(text: str) -> float:
    """Return a relative error from 0.01 or 1%."""
    value = number(text[:-1]) / 100 if text.endswith("%") else number(text)
    if not value > 0:
        raise ValueError(f"{text!r} is not an error greater than zero")
    return value


def positive(text: str) -> float:
    """Return a finite number greater than zero."""
    value = number(text)
    if not value > 0:
        raise ValueError(f"{text!r} is not a number greater than zero")
    return value


def seconds(text: str) -> float:
    """Return a time in seconds: a plain number, or with the suffix s, ms or us."""
    match = re.fullmatch(r"\s*(.*?[\d.])\s*(s|ms|us)?\s*", text)
    if match is None:
        raise ValueError(f"{text!r} is not a time; write 0.002 or 2ms")
    value = number(match.group(1)) * {None: 1.0, "s": 1.0, "ms": 1e-3, "us": 1e-6}[match.group(2)]
    if value < 0:
        raise ValueError(f"{text!r} is negative")
    return value


def delay(text: str) -> float | str:
    """Return a time in seconds, or which dead times a fit estimates."""
    return text if text in ESTIMATED_DEAD_TIMES else seconds(text)


def root(text: str) -> list[float]:
    """Return real and imaginary part of a number such as -2, -2+3j, 5i, 1e3-2e2j."""
    plain = text.strip().replace(" ", "").replace("i", "j")
    try:
        value = complex(plain)
    except ValueError:
        raise ValueError(f"{text!r} is not a number; write -2, or -2+3j and -2-3j for a pair") from None
    if not (math.isfinite(value.real) and math.isfinite(value.imag)):
        raise ValueError(f"{text!r} is not a finite number")
    return [value.real, value.imag]


def roots(text: str) -> list[list[float]]:
    """Return a list of complex numbers [re, im]."""
    return [root(part) for part in text.split(",")]


def matrix(text: str) -> list[list[float]]:
    """Return rows of numbers: semicolons between rows, commas within; one number is one row."""
    rows = [[number(entry) for entry in row.split(",")] for row in text.split(";")]
    if len({len(row) for row in rows}) > 1:
        raise ValueError(f"{text!r} has rows of different lengths")
    return rows


def columns(text: str) -> list[str]:
    """Return a list of column names."""
    names = [name.strip() for name in text.split(",")]
    if not all(names):
        raise ValueError(f"{text!r} has an empty column name; write skip for a column to leave out")
    return names


def rate(text: str) -> float:
    """Return samples a second: a plain number, or with the suffix Hz, kHz, MHz or GHz."""
    match = _QUANTITY.fullmatch(text)
    factors = {"": 1.0, "hz": 1.0, "khz": 1e3, "mhz": 1e6, "ghz": 1e9}
    if match is None or match.group(2).lower() not in factors:
        raise ValueError(f"{text!r} is not a sampling rate; write 1000, 44.1kHz or 2MHz")
    return positive(repr(float(match.group(1)) * factors[match.group(2).lower()]))


def share(text: str) -> float:
    """Return a share from 0.5 or 50%."""
    value = number(text[:-1]) / 100 if text.endswith("%") else number(text)
    if not 0 <= value < 1:
        raise ValueError(f"{text!r} is not a share from 0 to 1")
    return value


def weights(text: str) -> list[float]:
    """Return a list of finite numbers greater than zero."""
    return [positive(entry) for entry in text.split(",")]


def limits(texts: tuple[str, ...]) -> dict[str, float]:
    """Return limits by claim name."""
    result: dict[str, float] = {}
    for text in texts:
        name, equals, value = text.partition("=")
        if not equals:
            raise ValueError(f"{text!r} is not NAME=VALUE")
        if name not in CLAIMS:
            raise ValueError(f"no claim {name!r}; there are: {', '.join(CLAIMS)}")
        result[name] = number(value)
    return result


PARSERS: dict[str, Callable[[Any], Any]] = {
    "text": str,
    "path": str,
    "number": positive,
    "integer": integer,
    "error": error,
    "band": band,
    "frequencies": frequencies,
    "order": order,
    "time": seconds,
    "delay": delay,
    "roots": roots,
    "matrix": matrix,
    "columns": columns,
    "weights": weights,
    "rate": rate,
    "share": share,
    "limit": limits,
}
