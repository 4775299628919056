"""What a state model hides within the rounding of its own numbers, and what is left of it."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from realize.forms.minimal_states import BOTH, UNOBSERVABLE, UNREACHABLE, Matrices
from realize.kernels import many_modes
from realize.kernels.hidden_modes import Part, Side, hidden_side, spectra
from realize.kernels.unit_scaling import Scaled, scale_model

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
EPS = float(np.finfo(float).eps)
#: Up to this order the model is truncated in balanced coordinates of high precision.
HIGH_PRECISION = 60
#: Above this order all modes are tried at once, unless their eigenvalues are crowded.
TOGETHER_FROM = 60
#: A step in the singular values of F' V this large makes their rank clear.
CLEAR = 1e3


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
    doubtful : bool
        How many modes of a group of near eigenvalues are hidden on both sides was no clear decision, or a mode among
        them may have been missed; or the numbers span more than doubles hold.
    """

    order: int
    modes: list[Mode]
    kept: float
    unreachable: Array
    unobservable: Array
    doubtful: bool


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
    if any(np.count_nonzero(a) != np.count_nonzero(b) for a, b in ((A, scaled.A), (B, scaled.B), (C, scaled.C))):
        # what is lost by underflow could hide a mode: nothing is decided
        n = A.shape[0]
        return Hidden(n, [], math.inf, np.zeros((n, 0)), np.zeros((n, 0)), doubtful=True)
    if A.shape[0] > TOGETHER_FROM:
        vectors = many_modes.decomposition(scaled.A)
        if not many_modes.crowded(vectors[0]):
            return _together(scaled, threshold, *vectors)
    left, right = spectra(scaled.A)
    first = hidden_side(scaled.A, scaled.B, threshold, left)
    second = hidden_side(scaled.A.T, scaled.C.T, threshold, right)
    unit = math.ldexp(1.0, scaled.time)
    modes = []
    doubtful, both = first.doubtful or second.doubtful, 0
    for unreachable, unobservable, poles in _blocks(first, second):
        count, clear = _shared(unreachable, unobservable, poles)
        doubtful, both = doubtful or not clear, both + count
        change = max((part.error for part in (*unreachable, *unobservable)), default=0.0)
        for k, pole in enumerate(pole for part in unreachable for pole in part.modes):
            modes.append(Mode(pole * unit, BOTH if k < count else UNREACHABLE, change))
        for pole in [pole for part in unobservable for pole in part.modes][count:]:
            modes.append(Mode(pole * unit, UNOBSERVABLE, change))
    size = np.ldexp(1.0, scaled.states)
    return Hidden(
        A.shape[0] - len(modes),
        sorted(modes, key=lambda mode: (abs(mode.pole), mode.pole.real, -mode.pole.imag)),
        min(first.kept, second.kept),
        first.vectors / size[:, None],
        _reachable(first.vectors, second.vectors, both) * size[:, None],
        doubtful,
    )


def _together(scaled: Scaled, threshold: float, poles: ComplexArray, W: ComplexArray, X: ComplexArray) -> Hidden:
    """Return the same for a large model whose eigenvalues are apart: all of them tried at once."""
    first, unreached = many_modes.hidden_modes(scaled.A, scaled.B, threshold, poles, W, X)
    second, unseen = many_modes.hidden_modes(scaled.A.T, scaled.C.T, threshold, poles, X, W)
    unit = math.ldexp(1.0, scaled.time)
    why = {(True, True): BOTH, (True, False): UNREACHABLE, (False, True): UNOBSERVABLE}
    change = max([*first.errors, *second.errors], default=0.0)
    modes = [
        Mode(complex(poles[k]) * unit, why[bool(unreached[k]), bool(unseen[k])], change)
        for k in np.flatnonzero(unreached | unseen).tolist()
    ]
    size = np.ldexp(1.0, scaled.states)
    return Hidden(
        poles.size - len(modes),
        sorted(modes, key=lambda mode: (abs(mode.pole), mode.pole.real, -mode.pole.imag)),
        min(first.kept, second.kept),
        first.vectors / size[:, None],
        _reachable(first.vectors, second.vectors, int(np.sum(unreached & unseen))) * size[:, None],
        False,
    )


def _blocks(first: Side, second: Side) -> list[tuple[list[Part], list[Part], int]]:
    """Return unreachable and unobservable parts that share eigenvalues together, and how many eigenvalues that are."""
    blocks: list[tuple[list[Part], list[Part], frozenset[int]]] = []
    for side, parts in enumerate((first.parts, second.parts)):
        for part in parts:
            near = [block for block in blocks if block[2] & part.places]
            merged: tuple[list[Part], list[Part]] = [], []
            places = part.places
            for block in near:
                merged[0].extend(block[0])
                merged[1].extend(block[1])
                places = places | block[2]
            merged[side].append(part)
            blocks = [block for block in blocks if not any(block is other for other in near)]
            blocks.append((*merged, places))
    return [(unreachable, unobservable, len(places)) for unreachable, unobservable, places in blocks]


def _shared(unreachable: list[Part], unobservable: list[Part], size: int) -> tuple[int, bool]:
    """Return how many modes of a block of eigenvalues are hidden on both sides, and whether that is clear.

    As many as the rank of F' V, F the left and V the right vectors: of k states of which a are unreachable and b
    unobservable, at least a + b - k. Between vectors of one eigenvalue that stands alone it is one.
    """
    if not unreachable or not unobservable:
        return 0, True
    F, V = (np.hstack([part.vectors for part in side]) for side in (unreachable, unobservable))
    least, most = max(F.shape[1] + V.shape[1] - size, 0), min(F.shape[1], V.shape[1])
    if least == most:
        return most, True
    F, V = np.linalg.qr(F)[0], np.linalg.qr(V)[0]
    floor = EPS * float(F.shape[0])
    values = np.maximum(np.linalg.svd(F.T @ V, compute_uv=False), floor)
    steps = np.concatenate([[1.0], values, [floor]])
    ratios = steps[least : most + 1] / steps[least + 1 : most + 2]
    return least + int(np.argmax(ratios)), bool(ratios.max() >= CLEAR)


def _reachable(F: Array, V: Array, both: int) -> Array:
    """Return an orthonormal basis of the unobservable states that are reachable."""
    if not F.shape[1] or not V.shape[1]:
        return V
    W = V @ np.linalg.svd(F.T @ V)[2][both:].T
    return np.linalg.qr(W - F @ (F.T @ W))[0]


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
