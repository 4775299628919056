"""Lists of poles and zeros as text: size, frequency, damping, and what a control engineer calls them."""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import Any

import numpy as np

from realize.reports.look import PLAIN, Page, grid, laid_out, words
from realize.reports.numbers import hertz, short

#: Rows of a list before the rest is only counted.
MOST_ROWS = 24


def poles_table(
    poles: Iterable[tuple[complex, int]], period: float | None = None, *, name: str = "pole", page: Page = PLAIN
) -> str:
    """Return poles (or zeros) as a table: size in rad/s and Hz, damping ratio, the number itself, multiplicity.

    Parameters
    ----------
    poles : iterable of (complex, multiplicity)
        A conjugate pair is shown once; a member without its mate is shown by itself.
    period : float, optional
        Sampling period, s: the numbers are then of z, and frequency and damping are those of ln(z) / period.
    name : str, optional
        Heading: ``pole`` or ``zero``.
    """
    return laid_out([roots_grid(poles, period, name)], page)


def roots_grid(poles: Iterable[tuple[complex, int]], period: float | None, name: str, most: int = MOST_ROWS) -> Any:
    """Return the table of `poles_table` before it is laid out."""
    from rich.console import Group

    listed = _paired([(complex(value), int(count)) for value, count in poles])
    rows = []
    for value, count, paired in listed[:most]:
        equivalent = _equivalent(value, period)
        size = abs(equivalent)
        number = short(value.real, 4)
        if value.imag:
            sign = "±" if paired else "+" if value.imag > 0 else "-"
            number += f" {sign} {short(abs(value.imag), 4)}j"
        known = math.isfinite(size)
        rows.append(
            [
                number,
                short(size, 4) if known else "-",
                hertz(size) if known else "-",
                _damping(equivalent),
                _character(value, equivalent, period, name),
                f"{count}×" if count > 1 else "",
            ]
        )
    if not rows:
        return words(f"no {name}s")
    columns = [
        (name, "left"),
        ("rad/s", "right"),
        ("frequency", "right"),
        ("damping", "right"),
        ("", "left"),
        ("times", "left"),
    ]
    if not any(row[5] for row in rows):
        columns, rows = columns[:5], [row[:5] for row in rows]
    table = grid(columns, rows)
    if len(listed) > most:
        return Group(table, words(f"... and {len(listed) - most} more rows, by size"))
    return table


def _paired(roots: list[tuple[complex, int]]) -> list[tuple[complex, int, bool]]:
    """Return (root, multiplicity, with its conjugate?), each pair once, by size."""
    waiting: dict[tuple[complex, int], int] = {}
    result: list[tuple[complex, int, bool]] = []
    for value, count in roots:
        mate = (value.conjugate(), count)
        if value.imag and waiting.get(mate):
            waiting[mate] -= 1
            where = next(k for k, (v, c, p) in enumerate(result) if (v, c) == mate and not p)
            result[where] = (complex(value.real, abs(value.imag)), count, True)
        else:
            if value.imag:
                waiting[(value, count)] = waiting.get((value, count), 0) + 1
            result.append((value, count, False))
    return sorted(result, key=lambda row: (abs(row[0]), row[0].real, row[0].imag))


def _equivalent(value: complex, period: float | None) -> complex:
    if period is None:
        return value
    return complex(-math.inf) if value == 0 else complex(np.log(value)) / period


def _damping(equivalent: complex) -> str:
    size = abs(equivalent)
    if size == 0 or not math.isfinite(size):
        return "-"
    return short(0.0 - equivalent.real / size + 0.0)


def _character(value: complex, equivalent: complex, period: float | None, name: str) -> str:
    if name != "pole":
        right = abs(value) > 1 if period is not None else value.real > 0
        return "non-minimum phase" if right else ""
    if period is not None and value == 0:
        return "delay"
    distance = abs(value) - 1 if period is not None else value.real
    if distance > 0:
        return "UNSTABLE"
    if distance == 0:
        return "integrator" if equivalent == 0 else "on the boundary"
    return ""
