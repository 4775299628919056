"""Models as plain records, ready for JSON (DESIGN 3.2), and back.

The record is validated from the schema: a field that `realize.schema.KINDS` does not have is refused. Decimal strings
become exact decimals of the model, except in dead times, the operating point and powers, which are doubles or integers.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import msgspec
import numpy as np

from realize.errors import InputError
from realize.files import trees
from realize.files.fields import READERS, Reading, as_object, nearest, signals, text
from realize.files.json_text import Mark, Twice
from realize.models import CONTINUOUS, MODEL_TYPES, DeadTime, Model, Offset, Ports, Signal, TimeBase
from realize.schema import COMMON_FIELDS, FORMAT_VERSION, KINDS, Receipt, receipt_from_record, receipt_to_record


def model_from_record(record: Any, *, folder: str | Path | None = None, allow_outside: bool = False) -> Model:
    """Return the model of a record.

    Parameters
    ----------
    record : dict
        As `model_to_record` makes it, or as a model file has it.
    folder : path, optional
        Folder that ``{"file": NAME}`` is relative to.
    allow_outside : bool
        Whether such a file may lie outside the folder.

    Raises
    ------
    InputError
        Naming the field and index, what was found and what was expected.
    Refused
        When a matrix cannot be held.
    """
    kind = kind_of(record)
    fields = KINDS[kind].fields
    known = (*COMMON_FIELDS, *(f.name for f in fields))
    as_object(record, "", known)
    for f in fields:
        if f.required and f.name not in record:
            raise InputError(f"missing in a {kind} model", f.says, field=f.name)
    reading = Reading(None if folder is None else Path(folder), allow_outside)
    values = {f.name: READERS[f.holds](record[f.name], f.name, reading) for f in fields if f.name in record}
    return build(kind, values, record, reading)


def kind_of(record: Any) -> str:
    """Return the kind that a record names, after checking that it is a record of this format version."""
    if not isinstance(record, dict):
        raise InputError(trees.describe(record), "one JSON object with a model")
    if not record:
        raise InputError("an empty object", "a model, starting with the fields realize and kind")
    if isinstance(record, Twice):
        raise InputError("the name is there twice", "each name once", field=record.key)
    if "realize" not in record:
        raise InputError("missing", f"the format version, {FORMAT_VERSION}", field="realize")
    version = record["realize"]
    if isinstance(version, bool) or version != FORMAT_VERSION:
        raise InputError(
            f"format version {trees.describe(version)}",
            f"{FORMAT_VERSION}, the one this program reads",
            field="realize",
        )
    if "kind" not in record:
        raise InputError("missing", "one of " + ", ".join(KINDS), field="kind")
    kind = record["kind"]
    if not isinstance(kind, str) or kind not in KINDS:
        hint = nearest(kind, list(KINDS)) if isinstance(kind, str) else ""
        raise InputError(trees.describe(kind) + hint, "one of " + ", ".join(KINDS), field="kind")
    return kind


def build(kind: str, values: dict[str, Any], record: dict[str, Any], reading: Reading) -> Model:
    """Return the model of field values and the common fields of ``record``."""
    common: dict[str, Any] = {"time": _time(record["time"]) if "time" in record else CONTINUOUS}
    for name in ("inputs", "outputs"):
        if name in record:
            common[name] = signals(record[name], name, reading)
    if "offset" in record:
        common["offset"] = _offset(record["offset"])
    if "ports" in record:
        common["ports"] = _ports(record["ports"])
    if "receipts" in record:
        common["receipts"] = _receipts(record["receipts"])
    dead = _dead_time(record["dead_time"]) if "dead_time" in record else {}
    decimals = {name: table for name, table in reading.decimals.items() if table}
    try:
        model = MODEL_TYPES[kind](**values, **common, decimals=decimals)
        if dead:
            p, m = model.shape
            zeros = {"inputs": (0.0,) * m, "outputs": (0.0,) * p, "channels": ((0.0,) * m,) * p}
            model = model.with_(dead_time=DeadTime(**{**zeros, **dead}))
    except InputError as error:
        raise InputError(error.found, error.expected, field=reading.as_written(error.field), file=error.file) from None
    return model


def _time(value: Any) -> TimeBase:
    given = as_object(value, "time", ("domain", "period", "rate"), ("domain",), says=COMMON_FIELDS["time"])
    domain = text(given["domain"], "time.domain")
    numbers = {}
    for name in ("period", "rate"):
        if name in given:
            number = trees.real(given[name], f"time.{name}", (), None)
            numbers[name] = given[name] if isinstance(given[name], str) else number
    return TimeBase(domain, **numbers)


def _vector(value: Any, place: str) -> tuple[float, ...]:
    if not isinstance(value, list):
        raise InputError(trees.describe(value), "a list of numbers", field=place)
    return tuple(trees.real(entry, f"{place}[{k}]", (), None) for k, entry in enumerate(value))


def _dead_time(value: Any) -> dict[str, Any]:
    given = as_object(value, "dead_time", ("inputs", "outputs", "channels"), says=COMMON_FIELDS["dead_time"])
    parts: dict[str, Any] = {
        name: _vector(given[name], f"dead_time.{name}") for name in ("inputs", "outputs") if name in given
    }
    if "channels" in given:
        place = "dead_time.channels"
        rows = given["channels"]
        if not isinstance(rows, list):
            raise InputError(trees.describe(rows), "outputs x inputs, seconds", field=place)
        lines = tuple(_vector(row, f"{place}[{k}]") for k, row in enumerate(rows))
        for k, line in enumerate(lines):
            if len(line) != len(lines[0]):
                raise InputError(f"{len(line)} entries", f"{len(lines[0])}, as in {place}[0]", field=f"{place}[{k}]")
        parts["channels"] = lines
    return parts


def _offset(value: Any) -> Offset | None:
    given = as_object(value, "offset", ("inputs", "outputs", "states"), says=COMMON_FIELDS["offset"])
    return Offset(**{name: _vector(given[name], f"offset.{name}") for name in given}) if given else None


def _ports(value: Any) -> Ports:
    given = as_object(value, "ports", ("parameter", "reference"), ("parameter",), says=COMMON_FIELDS["ports"])
    reference = _vector(given["reference"], "ports.reference") if "reference" in given else None
    return Ports(text(given["parameter"], "ports.parameter"), reference)


def _sound(value: Any, place: str) -> None:
    """Raise InputError for what JSON readers let through: NaN, infinities, doubled names, broken text."""
    if isinstance(value, Mark) or (isinstance(value, float) and not math.isfinite(value)):
        raise InputError(trees.describe(value), "a finite number, or null", field=place)
    if isinstance(value, str):
        text(value, place)
    elif isinstance(value, list):
        for k, entry in enumerate(value):
            _sound(entry, f"{place}[{k}]")
    elif isinstance(value, dict):
        if isinstance(value, Twice):
            raise InputError("the name is there twice", "each name once", field=f"{place}.{value.key}")
        for name, entry in value.items():
            text(name, place)
            _sound(entry, f"{place}.{name}")


def _receipts(value: Any) -> tuple[Receipt, ...]:
    if not isinstance(value, list):
        raise InputError(trees.describe(value), "a list of receipts, oldest first", field="receipts")
    result = []
    for k, entry in enumerate(value):
        place = f"receipts[{k}]"
        _sound(entry, place)
        try:
            result.append(receipt_from_record(entry))
        except (msgspec.ValidationError, OverflowError) as error:
            words, _, path = str(error).partition(" - at `$")
            raise InputError(
                words[:1].lower() + words[1:], "a receipt as this program writes it", field=place + path.rstrip("`")
            ) from None
    return tuple(result)


def model_to_record(model: Model) -> dict[str, Any]:
    """Return the model as dictionaries, lists, texts and numbers, ready for JSON; no number loses a bit."""
    record: dict[str, Any] = {"realize": FORMAT_VERSION, "kind": model.kind, **common_to_record(model)}
    receipts = record.pop("receipts", None)
    for f in KINDS[model.kind].fields:
        value = getattr(model, f.name)
        if value is None or (f.holds == "signal-list" and not _named(value)):
            continue
        record[f.name] = _WRITERS.get(f.holds, _plain)(value, model.decimals.get(f.name, {}))
    if receipts is not None:
        record["receipts"] = receipts
    return record


def common_to_record(model: Model) -> dict[str, Any]:
    """Return the fields that every kind has, those that say nothing left out."""
    time: dict[str, Any] = {"domain": model.time.domain}
    for name in ("period", "rate"):
        value = getattr(model.time, name)
        if value is not None:
            time[name] = value if isinstance(value, str) else float(value)
    record: dict[str, Any] = {"time": time}
    for name in ("inputs", "outputs"):
        if _named(getattr(model, name)):
            record[name] = signals_to_record(getattr(model, name))
    if model.dead_time is not None:
        dead = model.dead_time
        record["dead_time"] = {
            "inputs": [float(value) for value in dead.inputs],
            "outputs": [float(value) for value in dead.outputs],
            "channels": [[float(value) for value in row] for row in dead.channels],
        }
    if model.offset is not None:
        given = {name: getattr(model.offset, name) for name in ("inputs", "outputs", "states")}
        offset = {name: [float(value) for value in values] for name, values in given.items() if values is not None}
        if offset:
            record["offset"] = offset
    if model.ports is not None:
        record["ports"] = {"parameter": model.ports.parameter}
        if model.ports.reference is not None:
            record["ports"]["reference"] = list(model.ports.reference)
    if model.receipts:
        record["receipts"] = [receipt_to_record(receipt) for receipt in model.receipts]
    return record


def _named(given: tuple[Signal, ...]) -> bool:
    return any(signal.name or signal.unit for signal in given)


def signals_to_record(given: tuple[Signal, ...]) -> list[dict[str, str]]:
    """Return signals as a list of objects, with the parts that are not empty."""
    return [{part: getattr(signal, part) for part in ("name", "unit") if getattr(signal, part)} for signal in given]


def _set(tree: Any, index: tuple[int, ...], value: str) -> None:
    for k in index[:-1]:
        tree = tree[k]
    tree[index[-1]] = value


def _plain(value: Any, decimals: Any) -> Any:
    """Return an array as nested lists, complex numbers as pairs, with the exact decimals in their places."""
    if isinstance(value, str):
        return value
    if not isinstance(value, np.ndarray):
        return decimals.get((), float(value))
    if value.dtype.kind == "c":
        tree = np.stack([value.real, value.imag], axis=-1).tolist()
    else:
        tree = value.tolist()
    for index, decimal in decimals.items():
        _set(tree, index, decimal)
    return tree


def _channels(value: Any, decimals: Any) -> Any:
    tree = [[_plain(entry, {}) for entry in row] for row in value]
    for index, decimal in decimals.items():
        _set(tree, index, decimal)
    return tree[0][0] if len(tree) == 1 and len(tree[0]) == 1 else tree


def _gains(value: Any, decimals: Any) -> Any:
    tree = _plain(value, decimals)
    return tree[0][0] if value.shape == (1, 1) else tree


def _direct(value: Any, decimals: Any) -> Any:
    tree = _plain(value, decimals)
    return tree[0] if len(tree) == 1 else tree


def _sections(value: Any, decimals: Any) -> Any:
    return [{"numerator": entry[0], "denominator": entry[1]} for entry in _plain(value, decimals)]


_WRITERS: dict[str, Callable[[Any, Any], Any]] = {
    "polynomials": _channels,
    "roots": _channels,
    "gains": _gains,
    "direct": _direct,
    "section-list": _sections,
    "signal-list": lambda value, decimals: signals_to_record(value),
}
