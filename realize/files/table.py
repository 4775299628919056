"""Tables of a frequency response: CSV and other text, columns recognised by their names.

Frequencies in kHz, MHz or GHz become the doubles nearest to the decimal number of Hz; rad/s stay rad/s. Lines are
sorted by frequency. Real and imaginary part count before magnitude and phase where a channel has both.

- A magnitude is linear unless its name says dB.
- A phase without unit is in degrees beside a magnitude in dB, or where some value exceeds 2 pi; else it is refused as
  ambiguous.
- A frequency without unit is refused, since Hz and rad/s differ by 2 pi; ``omega`` and ``w`` are rad/s.
- Without a header the names must be given (``--columns``); names that are given replace a header.

What a table of columns cannot say (names, units, a sampled time base, receipts) is written as one comment line,
``# realize {...}``, and read back from it.
"""

from __future__ import annotations

import csv
import io
import itertools
import json
import math
from typing import Any, BinaryIO

import numpy as np

from realize.errors import InputError, UsageError
from realize.files import json_text, touchstone
from realize.files.fields import Reading, as_object
from realize.files.record import build, common_to_record
from realize.files.registry import Format, ReadOptions, register
from realize.files.sources import HEAD, Source
from realize.files.table_names import FREQUENCY_UNITS, TIME_ROLES, Column, parse, split_label, units_of
from realize.files.table_text import (
    COMMENTS,
    Table,
    decimal_comma,
    decode,
    from_decibels,
    is_data,
    numbers,
    place,
    scan,
    split_names,
    turned,
)
from realize.files.table_time import over_time
from realize.models import FrequencyResponse, Model
from realize.schema import COMMON_FIELDS

REMARK = "# realize "
NAMING = (
    "names such as frequency_hz, real, imaginary, magnitude_db, phase_deg, deviation, coherence, or time, input, output"
    "; - leaves a column out"
)


def sniff(head: bytes) -> bool:
    """True where one of the first four lines that are no comments is a line of numbers; not for Touchstone files."""
    if b"\0" in head and not head.startswith((b"\xff\xfe", b"\xfe\xff")):
        return False
    text = head.decode("utf-16" if head[:2] in (b"\xff\xfe", b"\xfe\xff") else "utf-8-sig", "replace")
    if touchstone.sniff(head):
        return False
    lines = text.splitlines()
    if len(head) >= HEAD and len(lines) > 1:
        lines.pop()
    kept = [line for line in lines if line.strip() and line.strip()[0] not in COMMENTS]
    return any(is_data(line) for line in kept[:4])


def read(source: Source, options: ReadOptions) -> Model:
    """Return the data of a table; raises InputError naming line and column."""
    return interpret(scan(decode(source.everything())), options)


def interpret(table: Table, options: ReadOptions) -> Model:
    """Return the data of a table of numbers; raises InputError naming line and column."""
    columns = _columns(table, options.columns)
    comma = decimal_comma(table)
    if any(c.role in TIME_ROLES for c in columns):
        return over_time(table, columns, comma, None if options.rate is None else 1 / options.rate, _remark(table))
    if options.rate is not None:
        raise UsageError("a sampling rate goes with data over time, and this table has frequencies")
    frequency, unit = _frequency(table, columns, comma)
    order = _sorted(frequency, table)
    remarks = ("the lines were not in increasing order of frequency, and are sorted",) if order != sorted(order) else ()
    labels = list(dict.fromkeys(c.label for c in columns if c.role not in ("frequency", "skip")))
    grid, outputs, inputs = _grid(labels)
    shape = (len(frequency), len(outputs), len(inputs))
    response = np.zeros(shape, dtype=complex)
    extra: dict[str, np.ndarray[Any, Any]] = {}
    for label in labels:
        i, j = grid[label]
        response[:, i, j] = _channel(table, columns, label, comma)
        for role in ("deviation", "coherence"):
            found = _one(columns, role, label)
            if found is not None:
                values = extra.setdefault(role, np.full(shape, np.nan))
                values[:, i, j] = numbers(table, found, columns[found].name, comma)
                _in_range(role, values[:, i, j], table, found, columns[found].name)
    for role, values in extra.items():
        if np.isnan(values).any():
            missing = next(label for label in labels if np.isnan(values[0][grid[label]]))
            raise InputError(
                f"no {role} for the channel {missing or 'without label'!r}", f"a {role} for every channel, or none"
            )
    arguments: dict[str, Any] = {
        "frequency": np.array(frequency)[order],
        "frequency_unit": unit,
        "response": response[order],
        **{role: values[order] for role, values in extra.items()},
    }
    record = _remark(table)
    units = units_of(columns, grid, len(outputs), len(inputs))
    for k, (side, names) in enumerate((("outputs", outputs), ("inputs", inputs))):
        if side not in record and (any(names) or any(units[k])):
            record[side] = [{"name": name, "unit": unit} for name, unit in zip(names, units[k], strict=True)]
    made = build("frequency-response", arguments, record, Reading())
    return made.with_(remarks=remarks) if remarks else made


def _columns(table: Table, given: tuple[str, ...] | None) -> list[Column]:
    """Return what each column is: from the names given, the header, or the last comment above the numbers."""
    width = len(table.rows[0])
    if given is not None:
        names, where = list(given), "--columns"
    elif table.names is not None:
        names, where = table.names, f"line {table.names_line}"
    else:
        if table.last_comment is not None:
            names = split_names(table.last_comment[1], table.separator)
            columns = [parse(name) for name in names]
            if not any(c.role == "frequency" for c in columns):
                columns = [parse(name, over_time=True) for name in names]
            known = any(c.role == "frequency" or c.role in TIME_ROLES for c in columns)
            if len(columns) == width and all(c.role for c in columns) and known:
                return columns
        if width < 3:
            raise InputError(
                f"{width} columns without names",
                "their names: pass --columns input,output with --rate for data over time; a frequency response has "
                "three or more: frequency, real and imaginary part",
            )
        raise InputError(
            f"{width} columns without names",
            f"their names: pass --columns {_example(width)} (or write that line above the numbers)",
        )
    if len(names) != width:
        hint = ""
        if table.separator == "," and given is None:
            hint = "; with decimal commas, separate the columns by semicolons or tabulators"
        raise InputError(f"{len(names)} names for {width} columns", f"{width} names{hint}", field=where)
    columns = [parse(name) for name in names]
    if not any(c.role == "frequency" for c in columns):
        columns = [parse(name, over_time=True) for name in names]
    for k, column in enumerate(columns):
        if not column.role:
            raise InputError(f"the name {column.name[:60]!r}", NAMING, field=f"{where}, column {k + 1}")
    return columns


def _example(width: int) -> str:
    """Return names for a table of so many columns."""
    pairs = (width - 1) // 2
    names = ["frequency_hz"]
    for k in range(pairs):
        label = f"y{k + 1}_" if pairs > 1 else ""
        names += [f"{label}real", f"{label}imaginary"]
    names += ["-"] * (width - len(names))
    return ",".join(names[:9]) + (",..." if width > 9 else "")


def _one(columns: list[Column], role: str, label: str) -> int | None:
    """Return the position of the column with that role and label, or None; refuses two of them."""
    found = [k for k, column in enumerate(columns) if column.role == role and column.label == label]
    if len(found) > 1:
        of = f" of {label!r}" if label else ""
        raise InputError(
            f"two columns for the {role}{of}: {columns[found[0]].name!r} and {columns[found[1]].name!r}",
            "one; leave the other out with -",
            field=f"column {found[1] + 1}",
        )
    return found[0] if found else None


def _frequency(table: Table, columns: list[Column], comma: bool) -> tuple[list[float], str]:
    at = _one(columns, "frequency", "")
    if at is None:
        raise InputError("no column of frequencies", "a column such as frequency_hz, frequency_khz or omega_rad/s")
    column = columns[at]
    if not column.unit:
        raise InputError(
            f"the frequency {column.name!r} without unit",
            "a name such as frequency_hz or frequency_rad/s",
            field=f"column {at + 1}",
        )
    power, unit = FREQUENCY_UNITS[column.unit]
    values = numbers(table, at, column.name, comma, power)
    for value, line in zip(values, table.lines, strict=True):
        if value < 0:
            raise InputError(f"{value!r}", "a frequency that is not negative", field=place(line, at, column.name))
    return values, unit


def _sorted(frequency: list[float], table: Table) -> list[int]:
    """Return the order of lines by frequency; refuses two lines with the same one."""
    order = sorted(range(len(frequency)), key=frequency.__getitem__)
    for before, after in itertools.pairwise(order):
        if frequency[before] == frequency[after]:
            raise InputError(
                f"the frequency {frequency[after]!r} in lines {table.lines[before]} and {table.lines[after]}",
                "each frequency once; average repeated measurements first",
                field=f"line {table.lines[after]}",
            )
    return order


def _channel(table: Table, columns: list[Column], label: str, comma: bool) -> np.ndarray[Any, Any]:
    """Return the complex values of one channel."""
    at = {role: _one(columns, role, label) for role in ("real", "imaginary")}
    of = f" of {label!r}" if label else ""
    if at["real"] is not None and at["imaginary"] is not None:
        real, imaginary = (numbers(table, k, columns[k].name, comma) for k in at.values() if k is not None)
        values = np.empty(len(real), dtype=complex)
        values.real, values.imag = real, imaginary
        return values
    magnitude_at, phase_at = _one(columns, "magnitude", label), _one(columns, "phase", label)
    if magnitude_at is None or phase_at is None:
        have = [c.name for c in columns if c.label == label and c.role not in ("frequency", "skip")]
        raise InputError(
            f"the response{of} is not complete: {', '.join(have) or 'no column'}",
            "a real and an imaginary part, or magnitude and phase",
        )
    magnitude = np.array(numbers(table, magnitude_at, columns[magnitude_at].name, comma))
    phase = np.array(numbers(table, phase_at, columns[phase_at].name, comma))
    if columns[magnitude_at].unit == "db":
        magnitude, beyond = from_decibels(magnitude)
        bad, expected = np.flatnonzero(beyond), "decibels within the doubles"
    else:
        bad, expected = np.flatnonzero(magnitude < 0), "a magnitude that is not negative, or a name that says dB"
    if bad.size:
        found = table.rows[int(bad[0])][magnitude_at]
        raise InputError(
            f"{found[:40]!r}", expected, field=place(table.lines[bad[0]], magnitude_at, columns[magnitude_at].name)
        )
    if _degrees(columns[phase_at], columns[magnitude_at], phase, phase_at):
        return magnitude * turned(phase)
    return magnitude * np.exp(1j * phase)


def _degrees(phase: Column, magnitude: Column, values: np.ndarray[Any, Any], at: int) -> bool:
    """True where a phase is in degrees; refuses one that may be in either unit."""
    if phase.unit:
        return phase.unit == "deg"
    if magnitude.unit == "db" or np.any(np.abs(values) > 2 * math.pi):
        return True
    raise InputError(
        f"the phase {phase.name!r} without unit, with values that could be degrees or radians",
        "a name such as phase_deg or phase_rad",
        field=f"column {at + 1}",
    )


def _in_range(role: str, values: np.ndarray[Any, Any], table: Table, at: int, name: str) -> None:
    bad = np.flatnonzero((values < 0) | ((values > 1) & (role == "coherence")))
    if bad.size:
        expected = "a number between 0 and 1" if role == "coherence" else "a number that is not negative"
        raise InputError(f"{float(values[bad[0]])!r}", expected, field=place(table.lines[int(bad[0])], at, name))


def _grid(labels: list[str]) -> tuple[dict[str, tuple[int, int]], list[str], list[str]]:
    """Return (output, input) of each label, and the names of outputs and inputs; refuses a grid with holes."""
    if not labels:
        raise InputError("no column of the response", NAMING)
    pairs = {label: split_label(label) for label in labels}
    if any(pair is None for pair in pairs.values()):
        return {label: (k, 0) for k, label in enumerate(labels)}, list(labels), [""]
    places = {label: pair for label, pair in pairs.items() if pair is not None}
    outputs = list(dict.fromkeys(output for output, _ in places.values()))
    inputs = list(dict.fromkeys(source for _, source in places.values()))
    for output in outputs:
        for source in inputs:
            if (output, source) not in places.values():
                raise InputError(f"no column for output {output!r} and input {source!r}", "each output with each input")
    return {label: (outputs.index(o), inputs.index(s)) for label, (o, s) in places.items()}, outputs, inputs


def _remark(table: Table) -> dict[str, Any]:
    """Return the common fields that a table written by this program keeps in a comment."""
    for comment in table.comments:
        if not comment.startswith(REMARK + "{"):
            continue
        try:
            record = json_text.parse(comment[len(REMARK) :].encode("utf-8", "surrogatepass"))
            known = tuple(name for name in COMMON_FIELDS if name not in ("realize", "kind"))
            return dict(as_object(record, "", known))
        except InputError as error:
            where = f"comment {REMARK.strip()!r} {error.field}".strip()
            raise InputError(error.found, error.expected, field=where) from None
    return {}


def _labels(model: Model) -> tuple[list[list[str]], bool]:
    """Return a label for each channel that reads back as one, and whether it is made of the signals' names."""
    p, m = model.shape
    if p * m == 1 and not model.outputs[0].name:
        return [[""]], False
    outputs = [signal.name or f"y{i + 1}" for i, signal in enumerate(model.outputs)]
    inputs = [signal.name or f"u{j + 1}" for j, signal in enumerate(model.inputs)]

    def joined(left: list[str], right: list[str]) -> list[list[str]]:
        return [[f"{output}/{source}" if m > 1 else output for source in right] for output in left]

    labels = joined(outputs, inputs)
    flat = [label for row in labels for label in row]
    sound = len(set(flat)) == len(flat) and all(
        parse(f"{label}_{role}") == Column(f"{label}_{role}", role, "", label)
        and (split_label(label) is not None) == (m > 1)
        and label.isprintable()
        and label[0] not in COMMENTS
        for label in flat
        for role in ("real", "imaginary", "deviation", "coherence")
    )
    if sound and m > 1:
        sound = all(split_label(labels[i][j]) == (outputs[i], inputs[j]) for i in range(p) for j in range(m))
    if sound:
        return labels, True
    return joined([f"y{i + 1}" for i in range(p)], [f"u{j + 1}" for j in range(m)]), False


def write(model: Model, stream: BinaryIO) -> None:
    """Write a frequency response as a table from which every bit of its numbers reads back."""
    if not isinstance(model, FrequencyResponse):
        raise InputError(f"a {model.kind} model", "a frequency-response for a table")
    text = io.StringIO()
    common = common_to_record(model)
    if not model.time.sampled:
        del common["time"]
    labels, named = _labels(model)
    p, m = model.shape
    for side, given in (("outputs", model.outputs), ("inputs", model.inputs if m > 1 else ())):
        if named and given and all(signal.name and not signal.unit for signal in given):
            common.pop(side)  # the columns say it
    if common:
        text.write(REMARK + json.dumps(common) + "\n")
    header = ["frequency_hz" if model.frequency_unit == "Hz" else "frequency_rad/s"]
    columns = [model.frequency]
    for i in range(p):
        for j in range(m):
            label = f"{labels[i][j]}_" if labels[i][j] else ""
            parts = {
                "real": model.response.real,
                "imaginary": model.response.imag,
                "deviation": model.deviation,
                "coherence": model.coherence,
            }
            for role, values in parts.items():
                if values is not None:
                    header.append(label + role)
                    columns.append(values[:, i, j])
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(header)
    for row in zip(*(column.tolist() for column in columns), strict=True):
        writer.writerow([repr(value) for value in row])
    stream.write(text.getvalue().encode("utf-8"))


TABLE = register(
    Format(
        "table",
        "a table of measured data",
        (".csv", ".txt", ".tsv", ".dat"),
        sniff,
        read,
        write,
        ("frequency-response",),
    )
)
