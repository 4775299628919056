"""Digest of a model: what it says, without receipts, times and versions."""

from __future__ import annotations

import hashlib
from functools import lru_cache
from typing import Any

import numpy as np

from realize.models.base import Model, Signal
from realize.schema import ModelMark

_ZEROS = {kind: np.zeros((), dtype=kind) for kind in ("<f8", "<c16", "<i8")}


def _feed(parts: list[bytes], value: Any) -> None:
    """Add a value to what is hashed with its type and shape, so that no two values share a byte stream."""
    if value is None:
        parts.append(b"n;")
    elif isinstance(value, np.ndarray):
        kind = {"f": "<f8", "c": "<c16", "i": "<i8"}[value.dtype.kind]
        # adding zero turns -0.0 into 0.0: the two are the same number
        parts.append(f"a{value.dtype.kind}{value.shape};".encode())
        parts.append((value.astype(kind, copy=False) + _ZEROS[kind]).tobytes())
    elif isinstance(value, (tuple, list)):
        parts.append(f"l{len(value)};".encode())
        for entry in value:
            _feed(parts, entry)
    elif isinstance(value, float):
        parts.append(f"f{(value + 0.0).hex()};".encode())
    else:
        text = str(value)
        parts.append(f"s{len(text)}:{text};".encode())


def digest(model: Model) -> str:
    """Return ``sha256:`` and 64 hexadecimal digits over everything but receipts."""
    return model.remembered("digest", lambda: _digest(model))  # type: ignore[no-any-return]


def _digest(model: Model) -> str:
    time = model.time
    period = str(time.exact_period) if time.sampled else ""
    parts = [_head(model.kind, time.domain, period, model.inputs, model.outputs, getattr(model, "states", ()))]
    dead = model.dead_time
    _feed(parts, None if dead is None else [dead.inputs, dead.outputs, dead.channels])
    offset = model.offset
    _feed(parts, None if offset is None else [offset.inputs, offset.outputs, offset.states])
    if model.ports is not None:
        _feed(parts, ["ports", model.ports.parameter, model.ports.reference])
    for name, value in model.parameters().items():
        if name != "states":
            parts.append(_label(name))
            _feed(parts, value)
    for name in sorted(model.decimals):
        rows = model.decimals[name]
        _feed(parts, [name, [[list(index), rows[index]] for index in sorted(rows)]])
    return "sha256:" + hashlib.sha256(b"".join(parts)).hexdigest()


@lru_cache(maxsize=256)
def _label(name: str) -> bytes:
    """Return how a pair of this name and something begins."""
    parts: list[bytes] = []
    _feed(parts, [name, None])
    return b"".join(parts[:-1])


@lru_cache(maxsize=64)
def _head(kind: str, domain: str, period: str, *lists: tuple[Signal, ...]) -> bytes:
    """Return what is hashed of kind, time and signals; thousands of models in a row share it."""
    parts: list[bytes] = []
    _feed(parts, ["realize model 1", kind])
    _feed(parts, [domain, period])
    for signals in lists:
        _feed(parts, [[signal.name, signal.unit] for signal in signals])
    return b"".join(parts)


def mark(model: Model) -> ModelMark:
    """Return what a receipt keeps of a model."""
    return ModelMark(kind=model.kind, order=model.order, digest=digest(model))
