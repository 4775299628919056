"""Loops u = -K y with dead time: sampled ones with registers as states, continuous ones by their frequency response."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.kernels.encirclements import Undecided, arc_radii, axis_grid, right_zeros
from realize.kernels.norms import gains, refined_peak
from realize.kernels.splitting import split_stable
from realize.kernels.unit_scaling import scale_model
from realize.models import StateSpace
from realize.verification.closed_loop import crossing_margins, loop_record

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
Matrices = tuple[Array, Array, Array, Array]

#: Most states of a sampled loop's half with its registers.
MOST_STATES = 600
#: The loop gain counts as small from the frequency on where it stays below this, an octave after octave.
SMALL, OCTAVES = 0.2, 6
#: Frequencies beyond that one at which margins are looked for.
BEYOND = 100


def delay_lines(counts: NDArray[np.int64]) -> Matrices:
    """Return states of y_k[t] = u_k[t - counts_k]."""
    n, k = int(counts.sum()), counts.size
    A, B, C = np.zeros((n, n)), np.zeros((n, k)), np.zeros((k, n))
    at = 0
    for channel, count in enumerate(counts.tolist()):
        if count:
            B[at, channel] = 1.0
            A[at + 1 : at + count, at : at + count - 1] = np.eye(count - 1)
            C[channel, at + count - 1] = 1.0
            at += count
    return A, B, C, np.diag((counts == 0).astype(float))


def in_series(first: Matrices, second: Matrices) -> Matrices:
    """Return states of the second model after the first."""
    A1, B1, C1, D1 = first
    A2, B2, C2, D2 = second
    A = np.block([[A1, np.zeros((A1.shape[0], A2.shape[0]))], [B2 @ C1, A2]])
    return A, np.vstack([B1, B2 @ D1]), np.hstack([D2 @ C1, C2]), D2 @ D1


def with_registers(model: StateSpace) -> StateSpace | None:
    """Return a sampled model with its dead time as states, None where that takes too many.

    Delays that belong to inputs and outputs take one register each; what is left is taken input by input.
    """
    if model.dead_time is None:
        return model
    counts = np.rint(model.dead_time.total / model.time.seconds).astype(np.int64)
    at_input = counts.min(axis=0)
    at_output = (counts - at_input).min(axis=1)
    rest = counts - at_input - at_output[:, None]
    columns = range(counts.shape[1]) if np.any(rest) else [slice(None)]
    copies = len(columns)
    if copies * (model.order + counts.max() * counts.shape[0]) + at_input.sum() > MOST_STATES:
        return None
    parts = []
    for j in columns:
        chosen = [j] if isinstance(j, int) else j
        late = at_output + (rest[:, j] if isinstance(j, int) else 0)
        own = model.A, model.B[:, chosen], model.C, model.D[:, chosen]
        parts.append(in_series(own, delay_lines(np.asarray(late))))
    whole: Matrices = (
        scipy.linalg.block_diag(*[part[0] for part in parts]),
        scipy.linalg.block_diag(*[part[1] for part in parts]),
        np.hstack([part[2] for part in parts]),
        np.hstack([part[3] for part in parts]),
    )
    A, B, C, D = in_series(delay_lines(at_input), whole)
    return StateSpace(A=A, B=B, C=C, D=D, time=model.time)


def delayed_record(plant: StateSpace, controller: StateSpace) -> dict[str, Any]:
    """Return what is found about a loop with dead time: as `loop_record`, with ``stable`` None where not decided.

    Sampled: the dead times are whole periods, and their registers states of the loop. Continuous: encirclements of zero
    by det(I + K P), dead time included, tell how many closed-loop poles are unstable, and margins come from samples:
    that is not proved.
    """
    if plant.time.sampled:
        first, second = with_registers(plant), with_registers(controller)
        if first is None or second is None:
            return _undecided("the dead time takes too many states")
        return loop_record(first, second)
    try:
        return _continuous(plant, controller)
    except (Undecided, ValueError, np.linalg.LinAlgError) as reason:
        return _undecided(str(reason))


def _undecided(note: str) -> dict[str, Any]:
    return {"stable": None, "worst_pole": None, "stability_margin": None, "basis": "measured", "note": note}


def _continuous(plant: StateSpace, controller: StateSpace) -> dict[str, Any]:
    m = plant.shape[1]
    if np.any(controller.D @ plant.D):
        raise Undecided("feed-through all the way around a loop with dead time is not looked at")
    poles, unstable, on_axis = [], 0, []
    for model in (plant, controller):
        scaled = scale_model(model.A, model.B, model.C, sampled=False)
        split = split_stable(scaled.A, scaled.B, scaled.C, sampled=False)
        kept = np.ldexp(split.kept_poles.real, scaled.time) + 1j * np.ldexp(split.kept_poles.imag, scaled.time)
        stable = split.stable_poles
        poles += [np.ldexp(stable.real, scaled.time) + 1j * np.ldexp(stable.imag, scaled.time), kept[~split.marginal]]
        unstable += int(np.count_nonzero(~split.marginal))
        on_axis += np.abs(kept[split.marginal].imag).tolist()
    off, axis = np.concatenate(poles).astype(complex), np.unique(np.array(on_axis))
    delay = sum(0.0 if model.dead_time is None else float(model.dead_time.total.max()) for model in (plant, controller))

    def both(s: Any) -> tuple[ComplexArray, ComplexArray]:
        with np.errstate(all="ignore"):
            P, K = (np.asarray(model.evaluate(s), dtype=complex) for model in (plant, controller))
            return P, K

    def around(s: ComplexArray) -> ComplexArray:
        P, K = both(s)
        with np.errstate(all="ignore"):
            return np.asarray(np.linalg.det(np.eye(m) + K @ P), dtype=complex)

    high = _end(both, off, axis, delay)
    grid = axis_grid(off, axis, delay, high)
    radii = arc_radii(off, axis, delay, high)
    _seen(around, axis, radii)
    count, seen = right_zeros(around, grid, axis, radii, unstable)
    if count < 0:
        raise Undecided("the encirclements contradict the open-loop poles")
    record: dict[str, Any] = {
        "stable": count == 0,
        "worst_pole": None,
        "unstable_poles": count,
        "stability_margin": 0.0,
        "lower": None,
        "basis": "measured",
        "largest_sensitivity": None,
    }
    if count == 0:
        identity = np.eye(m)

        def sensitivity(w: Array) -> Array:
            P, K = both(1j * w)
            return gains(np.linalg.inv(identity + K @ P).astype(complex))

        def whole(w: Array) -> Array:
            P, K = both(1j * w)
            inner = np.linalg.inv(identity + K @ P)
            top = np.concatenate([P @ inner, inner], axis=1)
            return gains(np.concatenate([top, -top @ K], axis=2).astype(complex))

        # poles on the axis were passed at a distance, and margins may be smallest beside them
        beside = np.concatenate([axis + part * radii for share in (0.1, 0.01, 0.001) for part in (-share, share)])
        seen = np.unique(np.concatenate([seen, beside[beside > 0], np.geomspace(high, 1e6 * high, BEYOND)]))
        # at infinity, where one of the two feed-throughs is zero
        D, Dk = plant.D, controller.D
        end = float(np.linalg.norm(np.block([[D, -D @ Dk], [identity, -Dk]]), 2))
        record["stability_margin"] = min(1.0, 1 / max(end, refined_peak(whole, seen)[0]))
        record["largest_sensitivity"] = max(1.0, refined_peak(sensitivity, seen)[0])
        if plant.shape == (1, 1):

            def loop(w: Array) -> ComplexArray:
                P, K = both(1j * w)
                return np.asarray((P * K)[:, 0, 0], dtype=complex)

            record |= {"margins_basis": "measured", **crossing_margins(loop, seen[seen > 0])}
    record["infinite"] = [name for name, value in record.items() if isinstance(value, float) and math.isinf(value)]
    return record


def _end(both: Any, poles: ComplexArray, axis: Array, delay: float) -> float:
    """Return a frequency from which on the loop gain was found small, octave after octave."""
    sizes = np.concatenate([np.abs(poles), axis, [1 / delay if delay > 0 else 0.0]])
    w = 4 * float(sizes.max(initial=0.0)) or 1.0
    for _ in range(200):
        P, K = both(1j * w * 2.0 ** np.arange(OCTAVES))
        # so that det(I + K P) stays near 1
        size = P.shape[2] * gains(K) * gains(P)
        if np.all(size < SMALL) and np.all(np.diff(size) <= 0):
            return w
        w *= 2
    raise Undecided("the loop gain does not become small at high frequencies")


def _seen(around: Any, axis: Array, radii: Array) -> None:
    """Raise unless det(I + K P) grows towards every pole on the axis: one that it does not see is hidden."""
    for w, radius in zip(axis.tolist(), radii.tolist(), strict=True):
        near, nearer = (abs(around(np.array([1j * w + part * radius]))[0]) for part in (1.0, 0.1))
        if not nearer > 5 * near:
            raise Undecided(f"a pole on the axis at {w:.6g} rad/s is not seen by the loop")
