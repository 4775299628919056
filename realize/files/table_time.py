"""Tables of data over time: records of inputs and outputs, impulse responses, step responses.

The step of time comes from the column of times, or is given (``--rate``). A step response becomes the impulse response
of the sampled plant: its first differences, which are the response to one sample of an input that is held.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.errors import InputError
from realize.files.fields import Reading
from realize.files.record import build
from realize.files.table_names import TIME_UNITS, Column, split_label, units_of
from realize.files.table_text import Table, numbers, place
from realize.models import Model

#: Roles of columns that make a table one of data over time.
ROLES = ("time", "input", "output", "impulse", "step")
#: Times may differ from equal steps by this share of a step, and by this one with a caution.
EVEN, NEARLY_EVEN = 1e-3, 0.05
#: A rate that is given may differ from the column of times by this share.
AGREES = 0.01


def over_time(table: Table, columns: list[Column], comma: bool, period: float | None, common: dict[str, Any]) -> Model:
    """Return the time record, impulse response or step response of a table; raises InputError naming the column."""
    strange = [c for c in columns if c.role not in (*ROLES, "skip")]
    if strange:
        raise InputError(
            f"the column {strange[0].name[:60]!r} beside columns of data over time",
            "columns of time, inputs and outputs alone; leave others out with -",
            field=f"column {columns.index(strange[0]) + 1}",
        )
    remarks: list[str] = []
    step = _step(table, columns, comma, period, remarks)
    roles = {c.role for c in columns} - {"time", "skip"}
    if roles == {"input", "output"}:
        sides = {}
        for role in ("input", "output"):
            own = [k for k, c in enumerate(columns) if c.role == role]
            sides[role] = np.column_stack([numbers(table, k, columns[k].name, comma) for k in own])
            _signals(common, role + "s", [columns[k] for k in own])
        return build("time-record", {"period": step, **sides}, common, Reading()).with_(remarks=tuple(remarks))
    if roles == {"impulse"} or roles == {"step"}:
        return _response(table, columns, comma, step, common, roles.pop()).with_(remarks=tuple(remarks))
    found = ", ".join(sorted(roles)) or "times alone"
    raise InputError(
        f"columns of {found}",
        "inputs and outputs (input_force, output_speed), or impulse responses, or step responses",
    )


def _signals(common: dict[str, Any], side: str, columns: list[Column]) -> None:
    """Put the names and units of the columns in, unless the file says them elsewhere."""
    if side not in common and any(c.label or c.quantity for c in columns):
        common[side] = [{"name": c.label, "unit": c.quantity} for c in columns]


def _response(
    table: Table, columns: list[Column], comma: bool, step: float, common: dict[str, Any], role: str
) -> Model:
    """Return the impulse response of columns that are impulse responses, or step responses."""
    own = [(k, c) for k, c in enumerate(columns) if c.role == role]
    pairs = [split_label(c.label) or (c.label, "") for _, c in own]
    if len(set(pairs)) < len(pairs):
        twice = next(k for k, pair in enumerate(pairs) if pair in pairs[:k])
        raise InputError("the same channel twice", "one column a channel", field=f"column {own[twice][0] + 1}")
    outputs = list(dict.fromkeys(output for output, _ in pairs))
    inputs = list(dict.fromkeys(source for _, source in pairs))
    if len(pairs) < len(outputs) * len(inputs):
        raise InputError(
            f"{len(pairs)} columns for {len(outputs)} outputs and {len(inputs)} inputs", "each output with each input"
        )
    samples = np.empty((len(table.rows), len(outputs), len(inputs)))
    for (k, c), (output, source) in zip(own, pairs, strict=True):
        samples[:, outputs.index(output), inputs.index(source)] = numbers(table, k, c.name, comma)
    places = {
        c.label: (outputs.index(output), inputs.index(source))
        for (_, c), (output, source) in zip(own, pairs, strict=True)
    }
    units = units_of(columns, places, len(outputs), len(inputs))
    for side, names, found in (("outputs", outputs, units[0]), ("inputs", inputs, units[1])):
        if side not in common and (any(names) or any(found)):
            common[side] = [{"name": name, "unit": unit} for name, unit in zip(names, found, strict=True)]
    if role == "step":
        samples = np.diff(samples, axis=0, prepend=0.0)
        common.setdefault("time", {"domain": "sampled", "period": step})
    return build("impulse-response", {"period": step, "samples": samples}, common, Reading())


def _step(table: Table, columns: list[Column], comma: bool, period: float | None, remarks: list[str]) -> float:
    """Return the step of time in seconds."""
    at = [k for k, c in enumerate(columns) if c.role == "time"]
    if len(at) > 1:
        raise InputError("two columns of time", "one; leave the other out with -", field=f"column {at[1] + 1}")
    if not at:
        if period is None:
            raise InputError("no column of time", "the sampling rate: pass --rate, such as --rate 1kHz")
        return period
    column = at[0]
    name = columns[column].name
    factor = TIME_UNITS[columns[column].unit or "s"]
    times = np.array(numbers(table, column, name, comma, factor))
    if times.size < 2:
        raise InputError("one line", "two or more, to know the step of time", field=f"line {table.lines[0]}")
    bad = np.flatnonzero(np.diff(times) <= 0)
    if bad.size:
        k = int(bad[0]) + 1
        raise InputError(
            f"{table.rows[k][column]} after {table.rows[k - 1][column]}",
            "increasing times; where they have too few digits, leave the column out with - and pass --rate",
            field=place(table.lines[k], column, name),
        )
    mean = float(times[-1] - times[0]) / (times.size - 1)
    typical = float(np.median(np.diff(times)))
    digits = [len(row[column].lower().partition("e")[0].replace(",", ".").partition(".")[2]) for row in table.rows]
    exponents = [int(row[column].lower().partition("e")[2] or 0) for row in table.rows]
    # programs leave zeros at the end out: the finest of all digits counts
    resolution = min(10.0 ** (e - d + factor) for e, d in zip(exponents, digits, strict=True))
    uneven = np.abs(times - times[0] - mean * np.arange(times.size))
    gaps = np.flatnonzero(np.diff(times) > 1.5 * typical + resolution)
    if gaps.size:
        k = int(gaps[0]) + 1
        raise InputError(
            f"a step of {times[k] - times[k - 1]:.6g} s where others are {typical:.6g} s: samples are missing",
            "equal steps of time; cut the record there",
            field=place(table.lines[k], column, name),
        )
    worst = float(np.max(uneven))
    if worst > NEARLY_EVEN * mean + resolution:
        k = int(np.argmax(uneven))
        raise InputError(
            f"times that are up to {worst / mean:.2g} steps off equal steps",
            "equal steps of time; resample the record first",
            field=place(table.lines[k], column, name),
        )
    if worst > EVEN * mean + resolution:
        remarks.append(f"the times are up to {worst / mean:.2g} steps off equal ones, and are taken as equal")
    if period is not None:
        if abs(period - mean) > AGREES * mean:
            raise InputError(
                f"steps of {mean:.6g} s", f"{period:.6g} s, as the rate says", field=f"column {column + 1} ({name})"
            )
        return period
    return _shortest(mean, (resolution + 8 * np.finfo(float).eps * float(np.max(np.abs(times)))) / (times.size - 1))


def _shortest(value: float, within: float) -> float:
    """Return the number of fewest digits, or the inverse of one, that is as near as ``within``."""
    for digits in range(1, 17):
        for candidate in (float(f"{value:.{digits}g}"), 1 / float(f"{1 / value:.{digits}g}")):
            if abs(candidate - value) <= within:
                return candidate
    return value
