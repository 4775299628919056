"""Model files as ``.npz``: the fields of DESIGN 3.2 as arrays, for large models.

- Numeric fields are arrays of their own name. A matrix NAME may be sparse: NAME_row, NAME_col (from 0), NAME_data,
  NAME_shape.
- Vectors of different lengths by channel (numerator, denominator, zeros, poles) are NAME_values, one channel after the
  other, output by output, and NAME_lengths [outputs][inputs]. One flat vector NAME, or [outputs][inputs][k], reads too.
- ``sections`` is [k][2][3]: numerator and denominator of each section.
- Everything else is JSON text in one array called ``model``: realize, kind, time, signals, dead time, offset, ports,
  receipts, and ``decimals``: for each field a list of [index, decimal string]. Each may also be a text array of its
  own name.
- Without ``kind``, the arrays A, B, C (and D, E) are a continuous state-space model; B or C may be one-dimensional.
  ``frequency`` and ``response`` are a frequency response, ``input`` and ``output`` a time record, ``samples`` an
  impulse response; one channel may be one-dimensional.
- Arrays whose names start with ``published_`` are left alone; any other unknown array is refused.
"""

from __future__ import annotations

from typing import Any, BinaryIO

import numpy as np

from realize.errors import InputError
from realize.files import json_text
from realize.files.fields import READERS, Reading, as_object, nearest, signals
from realize.files.npz_container import SPARSE_PARTS, Arrays
from realize.files.record import build, common_to_record, kind_of, signals_to_record
from realize.files.registry import Format, ReadOptions, register
from realize.files.sources import Source
from realize.files.trees import real
from realize.models import Model
from realize.schema import COMMON_FIELDS, FORMAT_VERSION, KINDS

RAGGED = ("polynomials", "roots")
#: Kinds that are known by their arrays, where no array model says the kind.
BY_ARRAYS = {
    "frequency-response": ("frequency", "response"),
    "time-record": ("input", "output"),
    "impulse-response": ("samples",),
}
#: What a field holds -> dimensions that one channel may leave out.
CHANNELS = {"response": 2, "real-response": 2, "samples": 2, "record": 1}
TEXTS = ("signal-list", "frequency-unit", "side")


def sniff(head: bytes) -> bool:
    """True for a zip archive."""
    return head[:4] in (b"PK\x03\x04", b"PK\x05\x06")


def read(source: Source, options: ReadOptions) -> Model:
    """Return the model of an archive; raises InputError naming the array, Refused when it cannot be held."""
    arrays = Arrays(source.random_access())
    header = _header(arrays)
    if "kind" not in header:
        kind = _by_arrays(arrays)
        header = {"realize": FORMAT_VERSION, **header, "kind": kind}
        if kind == "state-space":
            _require_state_space(arrays)
    decimals = header.pop("decimals", None)
    kind = kind_of(header)
    fields = {f.name: f for f in KINDS[kind].fields}
    as_object(header, "", (*COMMON_FIELDS, *(f.name for f in fields.values() if f.holds in TEXTS)))
    reading = Reading()
    values: dict[str, Any] = {}
    for f in fields.values():
        if f.holds in TEXTS:
            if f.name in header:
                value = header[f.name]
                values[f.name] = (
                    signals(value, f.name, reading)
                    if f.holds == "signal-list"
                    else READERS[f.holds](value, f.name, reading)
                )
        else:
            array = _numeric(arrays, f.name, f.holds)
            if array is not None:
                values[f.name] = array
        if f.name == "frequency_unit" and f.name not in values:
            raise InputError(
                "missing: Hz and rad/s differ by 2 pi, and nothing in the numbers says which it is",
                'a text array, such as numpy.savez(..., frequency_unit="Hz")',
                field=f.name,
            )
        if f.required and f.name not in values:
            raise InputError(f"missing in a {kind} model", f.says, field=f.name)
    if kind == "state-space":
        _stand_up(values)
    for name, value in values.items():
        # one channel or signal may be a plain list
        if fields[name].holds in CHANNELS and value.ndim == 1:
            values[name] = value.reshape((-1,) + (1,) * CHANNELS[fields[name].holds])
    if decimals is not None:
        _read_decimals(decimals, values, reading)
    for name in values:
        if fields[name].holds == "number":
            values[name] = float(values[name])
    return build(kind, values, header, reading)


def _header(arrays: Arrays) -> dict[str, Any]:
    """Return the JSON fields, from the array ``model`` and from text arrays of their own; refuse unknown arrays."""
    header: dict[str, Any] = {}
    if "model" in arrays:
        parsed = json_text.parse(arrays.text("model").encode("utf-8", "surrogatepass"))
        if not isinstance(parsed, dict) or isinstance(parsed, json_text.Twice):
            raise InputError("JSON that is no object with each name once", "one JSON object", field="model")
        header.update(parsed)
    texts = (*COMMON_FIELDS, *{f.name for kind in KINDS.values() for f in kind.fields if f.holds in TEXTS})
    for name in texts:
        if name not in arrays:
            continue
        if name in header:
            raise InputError("given in the array model too", "each field once", field=name)
        if name in ("kind", "frequency_unit", "side"):
            header[name] = arrays.text(name)
        elif name == "realize":
            version = arrays.raw(name)
            header[name] = version.reshape(-1)[0].item() if version.size == 1 else version.tolist()
        else:
            header[name] = json_text.parse(arrays.text(name).encode("utf-8", "surrogatepass"))
    kind = header.get("kind", _by_arrays(arrays))
    own = KINDS[kind].fields if isinstance(kind, str) and kind in KINDS else ()
    known = {"model", *texts}
    for f in own:
        parts = SPARSE_PARTS if f.holds == "matrix" else ("values", "lengths") if f.holds in RAGGED else ()
        known |= {f.name, *(f"{f.name}_{part}" for part in parts)}
    for name in arrays.names if own else ():
        if name not in known and not name.startswith("published_"):
            shown = [f.name for f in own]
            raise InputError(
                f"an unknown array{nearest(name, shown)}",
                f"the arrays of a {kind} model: {', '.join(shown)}",
                field=name[:60],
            )
    return header


def _by_arrays(arrays: Arrays) -> str:
    """Return the kind that an archive has by the names of its arrays."""
    return next((kind for kind, names in BY_ARRAYS.items() if all(name in arrays for name in names)), "state-space")


def _require_state_space(arrays: Arrays) -> None:
    for name in "ABC":
        if name not in arrays and not arrays.has_sparse(name):
            raise InputError(
                "missing",
                "the arrays A, B, C (and D, E) of a state-space model, or an array model with kind",
                field=name,
            )


def _numeric(arrays: Arrays, name: str, holds: str) -> Any:
    """Return the argument for a numeric field, or None where the archive does not have it."""
    if holds == "matrix" and arrays.has_sparse(name):
        if name in arrays:
            raise InputError("given both dense and sparse", "one of them", field=name)
        return arrays.sparse(name)
    if holds in RAGGED and (f"{name}_values" in arrays or f"{name}_lengths" in arrays):
        return _ragged(arrays, name)
    if name not in arrays:
        return None
    values = arrays.numbers(name)
    if values.dtype.kind == "c" and holds not in ("roots", "pole-list", "residue-list", "response"):
        raise InputError("complex numbers", "real numbers", field=name)
    if holds in RAGGED:
        if values.ndim == 1:
            return [[values]]
        if values.ndim != 3:
            raise InputError(
                f"{values.ndim} dimensions", "1 dimension, or 3: outputs x inputs x coefficients", field=name
            )
        return [list(row) for row in values]
    if holds == "number":
        if values.size != 1 or not np.isfinite(values).all():
            raise InputError(f"{values.tolist()!r:.40}", "one finite number", field=name)
        return np.float64(values.reshape(-1)[0])
    if holds == "gains" and values.size == 1:
        return values.reshape(1, 1)
    if holds == "power-list":
        return READERS[holds](values.tolist(), name, Reading())
    return values


def _ragged(arrays: Arrays, name: str) -> list[list[Any]]:
    for part in ("values", "lengths"):
        if f"{name}_{part}" not in arrays:
            raise InputError("missing", "NAME_values and NAME_lengths", field=f"{name}_{part}")
    values, lengths = arrays.numbers(f"{name}_values"), arrays.numbers(f"{name}_lengths", whole=True)
    if values.ndim != 1:
        raise InputError(f"{values.ndim} dimensions", "one dimension", field=f"{name}_values")
    if lengths.ndim != 2 or lengths.size == 0:
        raise InputError(f"shape {list(lengths.shape)}", "outputs x inputs", field=f"{name}_lengths")
    counts = [int(entry) for entry in lengths.reshape(-1)]
    if min(counts) < 0 or sum(counts) != values.size:
        raise InputError(
            f"lengths that add up to {sum(counts)}", f"{values.size}, as there are values", field=f"{name}_lengths"
        )
    parts = iter(np.split(values, np.cumsum(counts)[:-1]))
    return [[next(parts) for _ in range(lengths.shape[1])] for _ in range(lengths.shape[0])]


def _stand_up(values: dict[str, Any]) -> None:
    """Give B (a column), C (a row), D and scalars two dimensions."""
    shapes = {"B": (-1, 1), "C": (1, -1)}
    for name, shape in shapes.items():
        if name in values and values[name].ndim < 2:
            values[name] = values[name].reshape(shape)
    for name in ("A", "E"):
        if name in values and values[name].ndim == 0:
            values[name] = values[name].reshape(1, 1)
    if "D" in values and values["D"].ndim < 2:
        values["D"] = values["D"].reshape((-1, 1) if values["B"].shape[-1] == 1 else (1, -1))


def _read_decimals(given: Any, values: dict[str, Any], reading: Reading) -> None:
    """Check that each exact decimal has a place, and that its nearest double stands there."""
    if not isinstance(given, dict):
        raise InputError("no object", "for each field a list of [index, decimal string]", field="decimals")
    for name, entries in given.items():
        place = f"decimals.{name[:60]}"
        if name not in values or not isinstance(entries, list):
            raise InputError(
                "no list for a numeric field", "for each field a list of [index, decimal string]", field=place
            )
        for k, entry in enumerate(entries):
            at = f"{place}[{k}]"
            if not (
                isinstance(entry, list) and len(entry) == 2 and isinstance(entry[0], list) and isinstance(entry[1], str)
            ):
                raise InputError("something else", "[index, decimal string]", field=at)
            if not all(type(part) is int and part >= 0 for part in entry[0]):
                raise InputError(f"{entry[0]!r:.40}", "an index of integers from 0", field=at)
            index = tuple(entry[0])
            value = real(entry[1], at, index, reading.table(name))
            try:
                there = _at(values[name], index)
            except (IndexError, TypeError):
                raise InputError(f"index {list(index)!r:.60}", f"an index of an entry of {name}", field=at) from None
            if value != there:
                raise InputError(
                    f"{entry[1]!r:.40} beside the double {there!r}", "the decimal's nearest double", field=at
                )


def _at(value: Any, index: tuple[int, ...]) -> float:
    """Return the number at an index, where a complex number goes on with 0 (real) or 1 (imaginary)."""
    for k in index:
        if isinstance(value, (complex, np.complexfloating)):
            if k > 1:
                raise IndexError
            value = (value.real, value.imag)[k]
        else:
            value = value[k]
    if isinstance(value, (list, tuple, complex, np.complexfloating)) or np.ndim(value):
        raise IndexError
    return float(value)


def write(model: Model, stream: BinaryIO) -> None:
    """Write the model; a matrix that is mostly zeros goes as a sparse one."""
    header: dict[str, Any] = {"realize": FORMAT_VERSION, "kind": model.kind, **common_to_record(model)}
    arrays: dict[str, Any] = {}
    for f in KINDS[model.kind].fields:
        value = getattr(model, f.name)
        if value is None:
            continue
        if f.holds == "signal-list":
            if any(signal.name or signal.unit for signal in value):
                header[f.name] = signals_to_record(value)
        elif f.holds in TEXTS:
            header[f.name] = value
        elif f.holds in RAGGED:
            arrays[f"{f.name}_values"] = np.concatenate([part for row in value for part in row])
            arrays[f"{f.name}_lengths"] = np.array([[part.size for part in row] for row in value], dtype=np.int64)
        elif f.holds == "matrix":
            arrays.update(_matrix(f.name, value, bool(model.decimals.get(f.name))))
        else:
            arrays[f.name] = np.asarray(value)
    decimals = {
        name: [[[int(k) for k in index], text] for index, text in table.items()]
        for name, table in model.decimals.items()
    }
    if decimals:
        header["decimals"] = decimals
    arrays["model"] = np.array(json_text.one_line(header))
    np.savez(stream, **arrays)


def _matrix(name: str, value: Any, decimals: bool) -> dict[str, Any]:
    """Return the arrays of a matrix: sparse where that is smaller, is finite, and loses no negative zero."""
    kept = (value != 0) | np.signbit(value)
    if decimals or value.size < 64 or 4 * int(kept.sum()) > value.size:
        return {name: value}
    row, column = np.nonzero(kept)
    return {
        f"{name}_row": row.astype(np.int64),
        f"{name}_col": column.astype(np.int64),
        f"{name}_data": value[row, column],
        f"{name}_shape": np.array(value.shape, dtype=np.int64),
    }


NPZ = register(Format("npz", "a model as numpy arrays, any kind", (".npz",), sniff, read, write))
