"""What a loop u = -K y does with a plant, in double arithmetic: eigenvalues, stability margin, classical margins."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.errors import InputError, Refused
from realize.kernels.closed_loop import IllPosed, LoopStates, loop_states
from realize.kernels.norms import peak_gain, pole_frequencies
from realize.models import Model, StateSpace
from realize.verification.curves import same_base
from realize.verification.margins import loop_margins

Array = NDArray[np.float64]

TOLERANCE = 1e-8
#: Together with the controller's, up to this order the classical margins of a single loop are exact.
EXACT_ORDER = 24


def checked_loop(plant: Model, controller: Model) -> None:
    """Raise unless the controller fits the plant.

    Raises
    ------
    InputError
        If numbers of channels, or time bases, do not fit.
    """
    if controller.shape != plant.shape[::-1]:
        raise InputError(
            f"a controller with {controller.shape[0]} outputs and {controller.shape[1]} inputs",
            f"{plant.shape[1]} outputs and {plant.shape[0]} inputs: its outputs are the plant's inputs (u = -K y)",
        )
    same_base(plant, controller)


def loop_record(plant: StateSpace, controller: StateSpace) -> dict[str, Any]:
    """Return what is found about a loop: stability by the eigenvalues of the whole loop, margins.

    Parameters
    ----------
    plant, controller : StateSpace
        Without E and dead time, in the units in which the stability margin is meant.

    Returns
    -------
    dict
        ``stable``, ``worst_pole`` ([re, im], the one nearest to instability or beyond), ``stability_margin`` (b(P, K),
        0 where not stable) with ``basis`` and ``lower`` (what it does not fall below, None where not confirmed),
        ``largest_sensitivity``, and for a single loop ``gain_margin``, ``phase_margin`` (degrees), ``margins_basis``;
        ``infinite`` lists the names of what is infinite.
    """
    sampled = plant.time.sampled
    try:
        made = loop_states(
            (plant.A, plant.B, plant.C, plant.D), (controller.A, controller.B, controller.C, controller.D)
        )
    except IllPosed as reason:
        return {"stable": False, "worst_pole": None, "stability_margin": 0.0, "basis": "measured", "note": str(reason)}
    poles = np.linalg.eigvals(made.A).astype(complex) if made.A.size else np.zeros(0, dtype=complex)
    reach = np.abs(poles) - 1 if sampled else poles.real
    stable = bool(np.all(reach < 0))
    worst = complex(poles[np.argmax(reach)]) if poles.size else None
    record: dict[str, Any] = {
        "stable": stable,
        "worst_pole": None if worst is None else [worst.real, worst.imag],
        "stability_margin": 0.0,
        "lower": None,
        "basis": "measured",
        "largest_sensitivity": None,
    }
    if stable:
        peak = peak_gain(made.A, made.B, made.C, made.D, sampled=sampled, tolerance=TOLERANCE)
        record["stability_margin"] = min(1.0, 1 / peak.value)
        record["basis"] = peak.basis
        record["lower"] = min(1.0, 1 / peak.upper) if math.isfinite(peak.upper) else None
        record["largest_sensitivity"] = _sensitivity(made, plant, sampled)
    if plant.shape == (1, 1):
        record |= _classical(plant, controller, stable)
    # a record has no infinite numbers: their names are listed
    record["infinite"] = [name for name, value in record.items() if isinstance(value, float) and math.isinf(value)]
    return record


def _sensitivity(made: LoopStates, plant: StateSpace, sampled: bool) -> float:
    """Return the largest gain of (I + K P)^-1: from r to u."""
    p, m = plant.shape
    part = made.A, made.B[:, :m], made.C[p:], made.D[p:, :m]
    return peak_gain(*part, sampled=sampled, tolerance=TOLERANCE).value


def _classical(plant: StateSpace, controller: StateSpace, stable: bool) -> dict[str, Any]:
    none = {"gain_margin": None, "phase_margin": None, "margins_basis": "measured"}
    if not stable:
        return none
    if plant.order + controller.order <= EXACT_ORDER:
        try:
            found = loop_margins(plant, controller)
        except (Refused, ValueError):
            found = None
        if found is not None and found.stable:
            return {
                "gain_margin": _plain(found.gain_margin.value, found.gain_margin.infinite),
                "phase_margin": _plain(found.phase_margin.value, found.phase_margin.infinite),
                "margins_basis": "proved",
            }
    return none | _sampled_margins(plant, controller)


def _plain(value: float | None, infinite: bool) -> float | None:
    return math.inf if infinite else value


def _sampled_margins(plant: StateSpace, controller: StateSpace) -> dict[str, Any]:
    """Return gain and phase margin from samples: crossings between neighbours are bisected."""
    period = plant.time.seconds if plant.time.sampled else None
    poles = np.concatenate([np.linalg.eigvals(part.A).astype(complex) for part in (plant, controller)])
    w = pole_frequencies(poles, sampled=period is not None)
    if w.size > 4000:
        w = w[np.unique(np.linspace(0, w.size - 1, 4000).astype(int))]
    w = w[w > 0] / (period or 1.0)

    def loop(x: Array) -> NDArray[np.complex128]:
        points = plant.time.points(x)
        with np.errstate(all="ignore"):
            return np.asarray((plant.rational_part(points) * controller.rational_part(points))[:, 0, 0], dtype=complex)

    return crossing_margins(loop, w)


def crossing_margins(loop: Callable[[Array], NDArray[np.complex128]], w: Array) -> dict[str, Any]:
    """Return gain and phase margin (degrees) from samples of the loop gain: crossings between neighbours are bisected.

    Parameters
    ----------
    loop : callable
        Frequencies (rad/s) to values of K P.
    w : (k,) array
        Rising, above zero.
    """

    def zeros(size: Any) -> Array:
        values = size(loop(w))
        cross = np.flatnonzero((values[:-1] * values[1:] < 0) & np.isfinite(values[:-1]) & np.isfinite(values[1:]))
        low, high = w[cross], w[cross + 1]
        below = values[cross]
        for _ in range(50):
            middle = np.sqrt(low * high)
            at = size(loop(middle)) if middle.size else middle
            same = at * below > 0
            low, high = np.where(same, middle, low), np.where(same, high, middle)
        return np.sqrt(low * high)

    phases = loop(zeros(lambda L: np.abs(L) - 1))
    reals = loop(zeros(lambda L: L.imag)).real
    angle = np.degrees(np.abs(np.angle(-phases)))
    factors = -1 / reals[reals < 0]
    return {
        "gain_margin": float(factors[factors > 1].min(initial=math.inf)),
        "phase_margin": float(angle.min(initial=math.inf)),
    }
