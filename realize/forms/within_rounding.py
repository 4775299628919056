"""What a state model hides within the rounding of its own numbers, and what is left of it."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from realize.forms.minimal_states import BOTH, UNOBSERVABLE, UNREACHABLE, Matrices
from realize.kernels.balancing import scale_model
from realize.kernels.within_rounding import CLUSTER, hidden_side, spectra

Array = NDArray[np.float64]
#: Up to this order the model is truncated in balanced coordinates of high precision.
HIGH_PRECISION = 120


class Mode(NamedTuple):
    """An eigenvalue that goes, why, and by how much the numbers have to change for it."""

    pole: complex
    why: str
    change: float


@dataclass(frozen=True)
class Hidden:
    """What goes within rounding.

    Attributes
    ----------
    order : int
    modes : list of Mode
    kept : float
        Smallest relative change of the numbers found that would hide one more mode.
    unreachable, unobservable : arrays (n, k)
        Left and right vectors of what goes, in the model's own coordinates.
    clustered : int
        Poles of the largest cluster: among three and more the search may miss what is hidden.
    """

    order: int
    modes: list[Mode]
    kept: float
    unreachable: Array
    unobservable: Array
    clustered: int


def _plain(A: Array, B: Array, E: Array | None) -> tuple[Array, Array]:
    if E is None:
        return A, B
    scale = np.ldexp(1.0, -np.frexp(np.abs(E).max(axis=1))[1])[:, None]
    solved = np.linalg.solve(scale * E, scale * np.hstack([A, B]))
    return solved[:, : A.shape[0]], solved[:, A.shape[0] :]


def _channels(B: Array, C: Array) -> tuple[Array, Array]:
    """Return powers of two that bring each input and output to the size 1."""
    columns, rows = np.abs(B).max(axis=0, initial=0.0), np.abs(C).max(axis=1, initial=0.0)
    return (
        np.ldexp(1.0, -np.where(columns > 0, np.frexp(columns)[1], 0)),
        np.ldexp(1.0, -np.where(rows > 0, np.frexp(rows)[1], 0)),
    )


def hidden_within(A: Array, B: Array, C: Array, E: Array | None, threshold: float, *, sampled: bool) -> Hidden:
    """Return the modes that a relative change of every number by at most the threshold hides.

    Parameters
    ----------
    A, B, C : arrays (n, n), (n, m), (p, n)
    E : (n, n) array, optional
        Divided out first where given: the decision is then about the numbers of E^-1 A and E^-1 B.
    threshold : float
    sampled : bool
    """
    A, B = _plain(A, B, E)
    columns, rows = _channels(B, C)
    scaled = scale_model(A, B * columns, C * rows[:, None], sampled=sampled)
    left, right = spectra(scaled.A)
    first = hidden_side(scaled.A, scaled.B, threshold, spectrum=left)
    if first.modes:
        second = hidden_side(scaled.A.T, scaled.C.T, threshold, _orthogonal_to(first.vectors))
    else:
        second = hidden_side(scaled.A.T, scaled.C.T, threshold, spectrum=right)
    modes = []
    unit = math.ldexp(1.0, scaled.time)
    for pole, change in zip(first.modes, first.errors, strict=True):
        modes.append(Mode(pole * unit, UNREACHABLE, change))
    for pole, change in zip(second.modes, second.errors, strict=True):
        modes.append(Mode(pole * unit, UNOBSERVABLE, change))
    if first.modes:
        every = hidden_side(scaled.A.T, scaled.C.T, threshold, spectrum=right)
        both = len(every.modes) - len(second.modes)
        spare = [pole * unit for pole in every.modes]
        for pole in second.modes:
            spare.pop(int(np.argmin([abs(pole * unit - other) for other in spare])) if spare else 0)
        for other in spare[: max(both, 0)]:
            near = [k for k, mode in enumerate(modes) if mode.why == UNREACHABLE]
            if near:
                k = min(near, key=lambda k: abs(modes[k].pole - other))
                modes[k] = Mode(modes[k].pole, BOTH, modes[k].change)
    size = np.ldexp(1.0, scaled.states)
    return Hidden(
        A.shape[0] - len(first.modes) - len(second.modes),
        sorted(modes, key=lambda mode: (abs(mode.pole), mode.pole.real, -mode.pole.imag)),
        min(first.kept, second.kept),
        first.vectors / size[:, None],
        second.vectors * size[:, None],
        _largest_cluster(left[0]),
    )


def _largest_cluster(poles: NDArray[np.complex128]) -> int:
    near = np.abs(poles[:, None] - poles) <= CLUSTER * np.abs(poles)[:, None]
    return int(near.sum(axis=1).max(initial=0))


def _orthogonal_to(vectors: Array) -> Array:
    n, k = vectors.shape
    return np.linalg.qr(vectors, mode="complete")[0][:, k:] if k else np.eye(n)


def truncated(
    A: Array,
    B: Array,
    C: Array,
    E: Array | None,
    order: int,
    unreachable: Array,
    unobservable: Array,
    *,
    sampled: bool,
) -> Iterator[tuple[str, Callable[[], Matrices]]]:
    """Return coordinates of what is left: truncated balanced ones in high precision, and an orthogonal projection.

    Parameters
    ----------
    unreachable, unobservable : arrays (n, k)
        From `hidden_within`.
    """
    A, B = _plain(A, B, E)
    n = A.shape[0]
    p, m = C.shape[0], B.shape[1]
    if order == 0:
        yield "constant", lambda: (np.zeros((0, 0)), np.zeros((0, m)), np.zeros((p, 0)))
        return
    if n <= HIGH_PRECISION:
        from realize.kernels.exact.gramians import balanced_projection, balanced_states, staircase_states

        data = [[[x.as_integer_ratio() for x in row] for row in matrix.tolist()] for matrix in (A, B, C)]
        projected = balanced_projection(data[0], data[1], data[2], order, None, sampled=sampled)
        yield "balanced", lambda: balanced_states(projected)
        yield "staircase", lambda: staircase_states(projected, outputs=p < m)

    def projection() -> Matrices:
        columns, rows = _channels(B, C)
        scaled = scale_model(A, B * columns, C * rows[:, None], sampled=sampled)
        size = np.ldexp(1.0, scaled.states)
        left, right = unreachable * size[:, None], unobservable / size[:, None]
        # orthonormal axes of the reachable states, the unobservable ones among them left out
        outside = np.linalg.qr(np.hstack([left, right]), mode="complete")[0][:, left.shape[1] + right.shape[1] :]
        unit = math.ldexp(1.0, scaled.time)
        a = outside.T @ scaled.A @ outside * unit
        b = np.ldexp(outside.T @ scaled.B, scaled.input) / columns
        c = np.ldexp(scaled.C @ outside, scaled.output) / rows[:, None]
        return a, b, c

    yield "orthogonal projection", projection
