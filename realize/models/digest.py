"""Digest of a model: what it says, without receipts, times and versions."""

from __future__ import annotations

import hashlib
from typing import Any

import numpy as np

from realize.models.base import Model
from realize.schema import ModelMark


def _feed(hasher: Any, value: Any) -> None:
    """Add a value to the hash with its type and shape, so that no two values share a byte stream."""
    if value is None:
        hasher.update(b"n;")
    elif isinstance(value, np.ndarray):
        kind = {"f": "<f8", "c": "<c16", "i": "<i8"}[value.dtype.kind]
        # adding zero turns -0.0 into 0.0: the two are the same number
        data = np.ascontiguousarray(value.astype(kind) + np.zeros((), dtype=kind))
        hasher.update(f"a{value.dtype.kind}{value.shape};".encode())
        hasher.update(data.tobytes())
    elif isinstance(value, (tuple, list)):
        hasher.update(f"l{len(value)};".encode())
        for entry in value:
            _feed(hasher, entry)
    elif isinstance(value, float):
        hasher.update(f"f{(value + 0.0).hex()};".encode())
    else:
        text = str(value)
        hasher.update(f"s{len(text)}:{text};".encode())


def digest(model: Model) -> str:
    """Return ``sha256:`` and 64 hexadecimal digits over kind, time, signals, dead time, operating point and numbers."""
    hasher = hashlib.sha256()
    _feed(hasher, ["realize model 1", model.kind])
    time = model.time
    _feed(hasher, [time.domain, str(time.exact_period) if time.sampled else ""])
    for signals in (model.inputs, model.outputs, getattr(model, "states", ())):
        _feed(hasher, [[signal.name, signal.unit] for signal in signals])
    dead = model.dead_time
    _feed(hasher, None if dead is None else [dead.inputs, dead.outputs, dead.channels])
    offset = model.offset
    _feed(hasher, None if offset is None else [offset.inputs, offset.outputs, offset.states])
    for name, value in model.parameters().items():
        if name != "states":
            _feed(hasher, [name, value])
    for name in sorted(model.decimals):
        rows = model.decimals[name]
        _feed(hasher, [name, [[list(index), rows[index]] for index in sorted(rows)]])
    return "sha256:" + hasher.hexdigest()


def mark(model: Model) -> ModelMark:
    """Return what a receipt keeps of a model."""
    return ModelMark(kind=model.kind, order=model.order, digest=digest(model))
