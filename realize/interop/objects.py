"""Objects of `control` and `scipy.signal`, in and out."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.errors import Refused, UsageError
from realize.interop.arrays import from_arrays
from realize.interop.carried import attach, carried, labels, require_doubles, signals, time_of
from realize.models import FrequencyResponse, Model, StateSpace, TransferFunction, ZeroPoleGain
from realize.steps.conversion import Conversion, model_of

LIBRARIES = ("control", "scipy.signal")


def from_library(value: Any) -> Model:
    """Return the model of an object of `control` or `scipy.signal`, or of a tuple of arrays.

    Every number stays the double that it is. Labels of `control` become names (its usual ``u[0]`` are no names), its
    ``dt`` the time base; an object that `to_library` made gives back units, operating point and exact rate as well.

    Parameters
    ----------
    value : object
        TransferFunction, StateSpace or FrequencyResponseData of `control`; TransferFunction, StateSpace or
        ZerosPolesGain of `scipy.signal`, continuous or discrete; or arrays as in `to_arrays`.

    Raises
    ------
    InputError
        For anything else, or a sampled object without a sampling period.
    """
    if isinstance(value, (Model, Conversion)):
        return model_of(value)
    home = type(value).__module__.split(".")
    if home[0] == "control":
        return _from_control(value)
    if home[:2] == ["scipy", "signal"]:
        return _from_scipy(value)
    for base in type(value).__mro__:  # a class of the user's that is derived from one of theirs
        if base.__module__.startswith("control."):
            return _from_control(value)
        if base.__module__.startswith("scipy.signal."):
            return _from_scipy(value)
    return from_arrays(value)


def _from_control(value: Any) -> Model:
    import control

    count = getattr(value, "nstates", None)
    kept = carried(value, (value.noutputs, value.ninputs), count)
    common: dict[str, Any] = {
        "time": time_of(value.dt, kept),
        "inputs": signals(value.input_labels, "u", kept.inputs if kept else None),
        "outputs": signals(value.output_labels, "y", kept.outputs if kept else None),
        "offset": kept.offset if kept else None,
        "ports": kept.ports if kept else None,
    }
    if isinstance(value, control.StateSpace):
        states = signals(value.state_labels, "x", kept.states if kept else None)
        return StateSpace(A=value.A, B=value.B, C=value.C, D=value.D, states=states, **common)
    if isinstance(value, control.TransferFunction):
        return TransferFunction(numerator=value.num_list, denominator=value.den_list, **common)
    if isinstance(value, control.FrequencyResponseData):
        response = np.moveaxis(np.asarray(value.frdata), 2, 0)
        return FrequencyResponse(frequency=value.omega, frequency_unit="rad/s", response=response, **common)
    return from_arrays(value)


def _from_scipy(value: Any) -> Model:
    from scipy import signal

    if isinstance(value, signal.StateSpace):
        shape, count = value.D.shape, value.A.shape[0]
    else:
        shape, count = (1, 1), None
    kept = carried(value, shape, count)
    common: dict[str, Any] = {"time": time_of(value.dt, kept)}
    if kept is not None:
        common |= {"inputs": kept.inputs, "outputs": kept.outputs, "offset": kept.offset, "ports": kept.ports}
    if isinstance(value, signal.StateSpace):
        states = kept.states if kept is not None else ()
        return StateSpace(A=value.A, B=value.B, C=value.C, D=value.D, states=states, **common)
    if isinstance(value, signal.ZerosPolesGain):
        return ZeroPoleGain(zeros=value.zeros, poles=value.poles, gain=float(value.gain), **common)
    if isinstance(value, signal.TransferFunction):
        return TransferFunction(numerator=value.num, denominator=value.den, **common)
    return from_arrays(value)


def to_library(model: Model | Conversion, library: str = "control") -> Any:
    """Return a model as an object of another library, every number as it is.

    Names become labels of `control`; what a library has no place for (units, names in `scipy.signal`, operating point,
    ports, an exact rate) rides along on the object for `from_library`. Receipts stay behind.

    Parameters
    ----------
    library : str
        "control" or "scipy.signal".

    Raises
    ------
    UsageError
        For another library.
    Refused
        For what the library cannot hold: a dead time, a descriptor matrix, decimals that are no doubles, another kind,
        several channels of transfer functions in `scipy.signal`.
    """
    if library not in LIBRARIES:
        raise UsageError(f"no library {library!r}; there are: {', '.join(LIBRARIES)}")
    value = model_of(model)
    require_doubles(value)
    if value.dead_time is not None:
        raise Refused(f"{library} cannot hold a dead time; take the rational part: model.with_(dead_time=None)")
    if isinstance(value, StateSpace) and value.E is not None:
        raise Refused(f"{library} has no descriptor models; convert to state-space without E, or to transfer-function")
    made = _to_control(value) if library == "control" else _to_scipy(value)
    return attach(made, value)


def _to_control(value: Model) -> Any:
    import control

    common: dict[str, Any] = {
        "dt": value.time.seconds if value.time.sampled else 0,
        "inputs": labels(value.inputs, "u"),
        "outputs": labels(value.outputs, "y"),
    }
    if isinstance(value, StateSpace):
        states = labels(value.states, "x") if value.states else [f"x[{k}]" for k in range(value.order or 0)]
        return control.StateSpace(
            value.A, value.B, value.C, value.D, states=states, remove_useless_states=False, **common
        )
    if isinstance(value, TransferFunction):
        parts = ([[np.array(c) for c in row] for row in part] for part in (value.numerator, value.denominator))
        return control.TransferFunction(*parts, **common)
    if isinstance(value, FrequencyResponse):
        if value.deviation is not None or value.coherence is not None:
            raise Refused(
                "control cannot hold deviation and coherence; leave them: data.with_(deviation=None, coherence=None)"
            )
        return control.FrequencyResponseData(np.moveaxis(value.response, 0, 2), value.radians, **common)
    raise Refused(f"control has no {value.kind} models; convert to state-space or transfer-function first")


def _to_scipy(value: Model) -> Any:
    from scipy import signal

    time = {"dt": value.time.seconds} if value.time.sampled else {}
    if isinstance(value, StateSpace):
        return signal.StateSpace(value.A, value.B, value.C, value.D, **time)
    if isinstance(value, (TransferFunction, ZeroPoleGain)) and value.shape != (1, 1):
        raise Refused(f"scipy.signal has no {value.kind} models of several channels; convert to state-space first")
    if isinstance(value, TransferFunction):
        made = signal.TransferFunction([1.0], [1.0], **time)
        # set afterwards, because the constructor divides by the leading coefficient, which rounds
        made.num, made.den = np.array(value.numerator[0][0]), np.array(value.denominator[0][0])
        return made
    if isinstance(value, ZeroPoleGain):
        return signal.ZerosPolesGain(
            np.array(value.zeros[0][0]), np.array(value.poles[0][0]), float(value.gain[0, 0]), **time
        )
    raise Refused(f"scipy.signal has no {value.kind} objects; convert to state-space or transfer-function first")
