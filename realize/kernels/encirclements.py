"""Zeros of an analytic function in the right half plane, counted by how often its values go around zero."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Between two samples the value turns by less than this (rad), or another one is put between them.
TURN = 0.5
#: Steps along the axis in units of the distance to the nearest pole, and of the phase of the longest delay (rad).
STEP, PHASE = 0.2, 0.3
#: Most samples; rounds of halving.
MOST, ROUNDS = 60_000, 60
#: Radius of the arc around a pole on the axis, relative to the distance to what is nearest.
ARC = 1e-4


class Undecided(ValueError):
    """The encirclements could not be counted."""


def axis_grid(poles: ComplexArray, on_axis: Array, delay: float, high: float) -> Array:
    """Return frequencies from 0 to `high` close enough together for every pole and for the phase of a delay.

    Parameters
    ----------
    poles : complex array
        Those off the axis.
    on_axis : float array
        Frequencies (not negative) of poles on the axis; nothing nearer than the radius of their arcs is returned.
    delay : float
        Seconds.
    high : float
        rad/s.
    """
    every = np.concatenate([poles, poles.conj(), 1j * on_axis, -1j * on_axis])
    most = PHASE / delay if delay > 0 else math.inf
    arcs = arc_radii(poles, on_axis, delay, high)
    grid, w = [], float(arcs[0]) if on_axis.size and on_axis[0] == 0 else 0.0
    while w < high:
        grid.append(w)
        distance = float(np.abs(1j * w - every).min()) if every.size else high / 50
        step = min(STEP * distance, most)
        for place, radius in zip(on_axis.tolist(), arcs.tolist(), strict=True):
            if w <= place - radius < w + step:
                grid.append(place - radius)
                step = place + radius - w
        w += max(step, 1e-12 * high)
        if len(grid) > MOST:
            raise Undecided("too many frequencies would have to be looked at")
    return np.array([*grid, high])


def arc_radii(poles: ComplexArray, on_axis: Array, delay: float, high: float) -> Array:
    """Return the radii of the arcs around poles on the axis."""
    radii = []
    for w in on_axis.tolist():
        others = np.concatenate([poles, 1j * on_axis[on_axis != w], -1j * on_axis[on_axis > 0]])
        others = others[others != 1j * w]
        nearest = float(np.abs(1j * w - others).min()) if others.size else high
        radii.append(ARC * min(nearest, 1 / delay if delay > 0 else nearest))
    return np.array(radii)


def right_zeros(
    value: Callable[[ComplexArray], ComplexArray], grid: Array, on_axis: Array, radii: Array, unstable: int
) -> tuple[int, Array]:
    """Return how many zeros a function has to the right of the axis, and the frequencies that were looked at.

    The function is real on the real axis, tends to 1 far out to the right, and has `unstable` poles to the right of the
    axis and those on it; by the argument principle [1]_ it turns by pi (poles - zeros) from 0 to j infinity.

    Parameters
    ----------
    value : callable
    grid : (k,) array
        Frequencies (rad/s), the last one so high that the value stays within 1/2 of 1 beyond.
    on_axis, radii : arrays
        Frequencies of poles on the axis (not negative), passed on the right at this distance.
    unstable : int

    Raises
    ------
    Undecided
        If the value goes through zero, or does not settle.

    References
    ----------
    .. [1] H. Nyquist, Regeneration theory, Bell System Technical Journal 11 (1932) 126-147 (from memory).
    """
    points: list[ComplexArray] = [np.asarray(1j * grid, dtype=complex)]
    angles = np.linspace(-math.pi / 2, math.pi / 2, 33)
    for w, radius in zip(on_axis.tolist(), radii.tolist(), strict=True):
        arc = 1j * w + radius * np.exp(1j * (angles if w > 0 else angles[16:]))
        points.append(np.asarray(arc[1:-1] if w > 0 else arc[:-1], dtype=complex))
    path = np.concatenate(points)
    # along the axis, arcs in their places: by frequency, and by angle on an arc
    path = path[np.argsort(path.imag, kind="stable")]
    if on_axis.size == 0 or on_axis[0] > 0:
        path[0] = 0.0
    found = value(path)
    for _ in range(ROUNDS):
        if not np.all(np.isfinite(found)):
            raise Undecided("the loop is not finite on the axis")
        if np.any(found == 0):
            raise Undecided("the loop is on the boundary of stability")
        turn = np.angle(found[1:] / found[:-1])
        wide = np.flatnonzero(np.abs(turn) > TURN)
        if wide.size == 0:
            break
        middle = (path[wide] + path[wide + 1]) / 2
        if path.size + middle.size > MOST or np.any((middle == path[wide]) | (middle == path[wide + 1])):
            raise Undecided("the loop is too near to the boundary of stability to be told from it")
        path, found = _inserted(path, wide, middle), _inserted(found, wide, value(middle))
    else:
        raise Undecided("the loop is too near to the boundary of stability to be told from it")
    if abs(found[-1] - 1) > 0.5:
        raise Undecided("the loop gain does not become small at high frequencies")
    total = float(turn.sum()) - float(np.angle(found[-1]))
    turns = total / math.pi
    if abs(turns - round(turns)) > 0.01:
        raise Undecided("the encirclements do not add up to a whole number")
    return unstable - round(turns), path[path.real == 0].imag


def _inserted(values: ComplexArray, places: NDArray[np.int64], more: ComplexArray) -> ComplexArray:
    return np.asarray(np.insert(values, places + 1, more), dtype=complex)
