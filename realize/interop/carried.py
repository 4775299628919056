"""What an object of another library has no place for rides along on it, so that the way back loses nothing."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np

from realize.errors import InputError, Refused
from realize.models import CONTINUOUS, Model, Offset, Ports, Signal, TimeBase

#: Name of the attribute on an object of another library.
ATTRIBUTE = "realize_carried"


@dataclass(frozen=True)
class Carried:
    """Signals, time base, operating point and ports of the model that an object was made from."""

    inputs: tuple[Signal, ...]
    outputs: tuple[Signal, ...]
    states: tuple[Signal, ...]
    time: TimeBase
    offset: Offset | None
    ports: Ports | None


def attach(target: Any, model: Model) -> Any:
    """Return the object with the model's signals, time base, operating point and ports on it."""
    states = tuple(getattr(model, "states", ()) or ())
    setattr(target, ATTRIBUTE, Carried(model.inputs, model.outputs, states, model.time, model.offset, model.ports))
    return target


def carried(source: Any, shape: tuple[int, int], states: int | None) -> Carried | None:
    """Return what rides on an object, unless the object has changed its size since."""
    found = getattr(source, ATTRIBUTE, None)
    if not isinstance(found, Carried) or (len(found.outputs), len(found.inputs)) != shape:
        return None
    return found if states is None or not found.states or len(found.states) == states else None


def time_of(period: Any, kept: Carried | None) -> TimeBase:
    """Return the time base of a library's sampling period (None and 0: continuous).

    Raises InputError for the "sampled, with a period nobody gave" that libraries know.
    """
    if period is True:
        raise InputError("sampled time without a period", "the sampling period in seconds, as dt of the object")
    if period is None or period == 0:
        return CONTINUOUS
    if kept is not None and kept.time.sampled and kept.time.seconds == float(period):
        return kept.time
    return TimeBase("sampled", period=float(period))


def signals(labels: list[str], usual: str, kept: tuple[Signal, ...] | None) -> tuple[Signal, ...]:
    """Return signals of a library's labels: ``u[0]`` and the like are no names, and units ride along."""
    found = []
    for k, label in enumerate(labels):
        name = "" if label == f"{usual}[{k}]" else label
        unit = kept[k].unit if kept and k < len(kept) and kept[k].name == name else ""
        found.append(Signal(name, unit))
    return tuple(found)


def labels(given: tuple[Signal, ...], usual: str) -> list[str]:
    """Return labels for a library; a signal without a name gets the library's own."""
    return [signal.name or f"{usual}[{k}]" for k, signal in enumerate(given)]


def require_doubles(model: Model) -> None:
    """Raise Refused where decimals of a model are not the doubles that they read as."""
    for name, rows in model.decimals.items():
        array = np.asarray(getattr(model, name), dtype=object)
        for index, text in rows.items():
            value: Any = array
            for i in index:
                value = value[i] if not isinstance(value, complex) else (value.real, value.imag)[i]
            if not np.isfinite(value) or Fraction(float(value)) != Fraction(text):
                raise Refused(
                    f"{name}{''.join(f'[{i}]' for i in index)} is the decimal {text[:30]}, which no double holds; "
                    "accept the nearest doubles with model.with_(decimals={}) first"
                )
