"""Models as tuples of arrays, and back."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.errors import InputError, Refused
from realize.interop.carried import require_doubles
from realize.models import FrequencyResponse, Model, Sections, StateSpace, TransferFunction, ZeroPoleGain
from realize.steps.conversion import Conversion, model_of

TUPLES = "(numerator, denominator), (zeros, poles, gain), (A, B, C, D), (A, B, C, D, E), or sections as an array [k][6]"


def from_arrays(value: Any) -> Model:
    """Return the continuous model of plain arrays.

    Parameters
    ----------
    value : tuple or ndarray
        ``(numerator, denominator)``, ``(zeros, poles, gain)``, ``(A, B, C, D)``, ``(A, B, C, D, E)``, or an array
        [k][6] of second-order sections, each b2 b1 b0 a2 a1 a0.

    Raises
    ------
    InputError
    """
    if isinstance(value, np.ndarray) and value.ndim == 2 and value.shape[1] == 6:
        return Sections(sections=[(row[:3], row[3:]) for row in value], gain=1.0)
    if isinstance(value, (tuple, list)):
        if len(value) == 2:
            return TransferFunction(numerator=value[0], denominator=value[1])
        if len(value) == 3:
            return ZeroPoleGain(zeros=value[0], poles=value[1], gain=value[2])
        if len(value) in (4, 5):
            return StateSpace(**dict(zip("ABCDE", value, strict=False)))
    raise InputError(f"{type(value).__name__} that is no model", f"a model, an object of a library, or {TUPLES}")


def to_arrays(model: Model | Conversion) -> Any:
    """Return a model as plain arrays, in the order that `from_library` takes; names and time base are not in them.

    Returns
    -------
    tuple or ndarray
        ``(A, B, C, D)`` or ``(A, B, C, D, E)``; ``(numerator, denominator)`` and ``(zeros, poles, gain)`` of a channel,
        or nested lists of outputs and inputs; sections [k][6], the gain in the first one; ``(frequency, response)`` of
        data, rad/s.

    Raises
    ------
    Refused
        For another kind (convert it first), a dead time, or decimals that doubles do not hold.
    """
    value = model_of(model)
    require_doubles(value)
    if value.dead_time is not None:
        raise Refused("plain arrays cannot hold a dead time; take the rational part: model.with_(dead_time=None)")
    single = value.shape == (1, 1)
    if isinstance(value, StateSpace):
        return (value.A, value.B, value.C, value.D) + (() if value.E is None else (value.E,))
    if isinstance(value, TransferFunction):
        return (value.numerator[0][0], value.denominator[0][0]) if single else (value.numerator, value.denominator)
    if isinstance(value, ZeroPoleGain):
        whole = (value.zeros, value.poles, value.gain)
        return (value.zeros[0][0], value.poles[0][0], float(value.gain[0, 0])) if single else whole
    if isinstance(value, Sections):
        rows = np.array(value.sections, dtype=float).reshape(-1, 6)
        if not len(rows):
            rows = np.array([[0.0, 0.0, 1.0, 0.0, 0.0, 1.0]])
        rows[0, :3] *= value.gain
        return rows
    if isinstance(value, FrequencyResponse):
        return value.radians, value.response
    raise Refused(f"no plain arrays for {value.kind}; convert it to state-space or transfer-function first")
