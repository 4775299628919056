"""The response of a large dense model: a triangular form once, then blocks of states at many points together.

The form is a real Schur form made here, or an invariant basis that was handed over: a L = L N with b = L F gives
(sI - a)^-1 b = L (sI - N)^-1 F. Such a basis is not trusted: both equations are looked at with the model's own
matrices, and what they leave must be rounding.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.kernels.response import balanced_states, triangular_blocks

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: From this order on it takes the place of the complex Schur form, and its poles that of a second QR algorithm.
LARGE = 400
#: States solved for together.
BLOCK = 16
#: Points treated together.
POINTS = 48
#: Values at so many points are kept: several claims look at the same ones.
REMEMBERED = 4000
#: Samples are no closer than this fraction of the distance to the nearest pole.
SHARE = 0.4
#: Random columns that a basis is tried with: all of them small by chance, with something large behind, is one in 1e12.
TRIALS = 12
#: A basis handed over may leave this many times n^1/2 eps of the norms in its equations.
ROUNDING = 64.0
EPS = float(np.finfo(float).eps)


@dataclass(frozen=True)
class Basis:
    """Invariant bases of a model a, b, c with its states in units 2^states: a = S^-1 A S, b = S^-1 B, c = C S.

    Attributes
    ----------
    states : (n,) int array
    right : (L, N, F)
        a L = L N and b = L F with L (n, k), N (k, k) block triangular.
    left : (R, M, H)
        R a = M R and c = H R with R (j, n), M (j, j) block triangular.
    poles : complex array
        Where the response has its features.
    """

    states: NDArray[np.int64]
    right: tuple[Array, Array, Array]
    left: tuple[Array, Array, Array]
    poles: ComplexArray

    def accepted(self, A: Array, B: Array, C: Array) -> tuple[Array, Array, Array] | None:
        """Return a, b, c if the bases are invariant to within rounding, else None.

        Random columns G stand for the matrices: a (L G) - L (N G) has the size of a L - L N.
        """
        with np.errstate(over="ignore", under="ignore", invalid="ignore"):
            a = np.ldexp(A, self.states[None, :] - self.states[:, None])
            b, c = np.ldexp(B, -self.states[:, None]), np.ldexp(C, self.states[None, :])
        (L, N, F), (R, M, H) = self.right, self.left
        parts = a, b, c, L, N, F, R, M, H
        if not all(np.isfinite(part).all() for part in parts) or np.any((a == 0) != (A == 0)):
            return None
        unit = ROUNDING * math.sqrt(a.shape[0]) * EPS
        size = float(np.linalg.norm(a))
        for matrix, basis, inner, outer, given in ((a, L, N, F, b), (a.T, R.T, M.T, H.T, c.T)):
            columns = np.random.default_rng(inner.shape[0]).standard_normal((inner.shape[0], TRIALS))
            turned = basis @ columns
            rest = matrix @ turned - basis @ (inner @ columns)
            if not np.linalg.norm(rest, axis=0).max(initial=0.0) <= unit * size * np.linalg.norm(basis):
                return None
            whole = np.linalg.norm(given, axis=0) + np.linalg.norm(basis) * np.linalg.norm(outer, axis=0)
            if not np.all(np.linalg.norm(given - basis @ outer, axis=0) <= unit * whole):
                return None
        return a, b, c


class SchurResponse:
    """(sI - A)^-1 B, C (sI - A)^-1 and their product C (sI - A)^-1 B at complex points.

    The states are scaled by powers of two first. With Q'A Q = T quasi-triangular the last half of the states is solved
    for at all points, taken off the rows above in one product, and each half likewise: Golub & Van Loan, Matrix
    Computations, 4th ed. (2013), section 3.1.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array

    Attributes
    ----------
    poles : (n,) complex array
    scaled : tuple of arrays A, B, C
        In the units of the states that the solutions are in.
    """

    def __init__(self, A: Array, B: Array, C: Array) -> None:
        import scipy.linalg.lapack

        a, b, c, _ = balanced_states(A, B, C, None)
        form = scipy.linalg.lapack.dgees(lambda *_: 0, a, lwork=40 * a.shape[0])
        T, real, imaginary, Q, info = form[0], form[2], form[3], form[4], form[-1]
        if info != 0:
            raise np.linalg.LinAlgError("the QR algorithm did not converge")
        poles: ComplexArray = real + 1j * imaginary
        self._prepare((a, b, c), (Q, T, Q.T @ b), (Q.T, T, c @ Q), poles)

    @classmethod
    def of_basis(cls, A: Array, B: Array, C: Array, basis: Basis) -> SchurResponse | None:
        """Return the response by bases that were handed over, None if they do not belong to the model."""
        model = basis.accepted(A, B, C)
        if model is None:
            return None
        made = cls.__new__(cls)
        made._prepare(model, basis.right, basis.left, basis.poles)
        return made

    def _prepare(
        self,
        scaled: tuple[Array, Array, Array],
        right: tuple[Array, Array, Array],
        left: tuple[Array, Array, Array],
        poles: ComplexArray,
    ) -> None:
        self.scaled, self.poles = scaled, poles
        self._right, self._left = right, left
        self._inner = _Inner(right[1], right[2])
        self._c = scaled[2] @ right[0]
        self._known: dict[complex, ComplexArray] = {}

    def values(self, points: ComplexArray) -> ComplexArray:
        """Return C (sI - A)^-1 B at each point, [k][p][m]; infinite at a pole."""
        known = self._known
        new = np.array([point for point in dict.fromkeys(points.tolist()) if point not in known], dtype=complex)
        found: list[ComplexArray] = []
        for k in range(0, new.size, POINTS):
            part = np.einsum("pn,kmn->kpm", self._c, self._inner.solved(new[k : k + POINTS]))
            part[~np.isfinite(part).all(axis=(1, 2))] = np.inf
            found += list(part)
        here = dict(zip(new.tolist(), found, strict=True))
        if len(known) + len(here) <= REMEMBERED:
            known.update(here)
        values = np.empty((points.size, self._c.shape[0], self.scaled[1].shape[1]), dtype=complex)
        for row, point in enumerate(points.tolist()):
            values[row] = here[point] if point in here else known[point]
        return values

    def solutions(self, points: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
        """Return (sI - A)^-1 B as [k][m][n] and C (sI - A)^-1 as [k][p][n], in the units of `scaled`."""
        R, M, H = self._left
        left = _Inner(M.T, H.T).solved(points)
        return _real_product(self._inner.solved(points), self._right[0].T), _real_product(left, R)


class _Inner:
    """(sI - N)^-1 F at many points for a block triangular N, upper or lower."""

    def __init__(self, N: Array, F: Array) -> None:
        self._turned = np.count_nonzero(np.tril(N, -2)) > np.count_nonzero(np.triu(N, 2))
        # a lower triangular matrix read backwards is an upper one
        self._T = np.ascontiguousarray(N[::-1, ::-1] if self._turned else N)
        self._b = np.ascontiguousarray(F[::-1] if self._turned else F)
        self._blocks = _cuts(self._T)

    def solved(self, points: ComplexArray) -> ComplexArray:
        """Return the solutions as [k][m][n]."""
        found = _solved(self._T, self._b, points, self._blocks)
        return found[:, :, ::-1] if self._turned else found


def _solved(T: Array, b: Array, points: ComplexArray, blocks: list[tuple[int, int]]) -> ComplexArray:
    n, m = b.shape
    g = points.size
    # a row for each state: real parts of all points and columns, then imaginary parts
    x = np.zeros((n, 2 * g * m))
    x[:, : g * m] = np.tile(b, (1, g))

    def solve(first: int, last: int) -> None:
        low, high = blocks[first][0], blocks[last - 1][1]
        if last - first == 1:
            size = high - low
            pencil = points[:, None, None] * np.eye(size) - T[low:high, low:high]
            right = _joined(x[low:high]).reshape(size, g, m)
            found = _each_solved(pencil, right.transpose(1, 0, 2)).transpose(1, 0, 2).reshape(size, g * m)
            x[low:high, : g * m], x[low:high, g * m :] = found.real, found.imag
            return
        middle = (first + last) // 2
        solve(middle, last)
        cut = blocks[middle][0]
        with np.errstate(invalid="ignore"):
            x[low:cut] += T[low:cut, cut:high] @ x[cut:high]
        solve(first, middle)

    if blocks:
        solve(0, len(blocks))
    return np.ascontiguousarray(_joined(x).reshape(n, g, m).transpose(1, 2, 0))


def triangular_solutions(T: Array, b: Array, points: ComplexArray) -> Iterator[ComplexArray]:
    """Yield (sI - T)^-1 b as [k][m][n], some points at a time, for a block upper triangular T; infinite at a pole."""
    blocks = _cuts(T)
    for k in range(0, points.size, POINTS):
        yield _solved(T, b, points[k : k + POINTS], blocks)


def _joined(x: Array) -> ComplexArray:
    """Return the complex numbers whose real parts are the first half of the columns."""
    half = x.shape[1] // 2
    result = np.empty((x.shape[0], half), dtype=complex)
    # parts one by one: an infinite one times 1j would not be a number
    result.real, result.imag = x[:, :half], x[:, half:]
    return result


def _real_product(values: ComplexArray, matrix: Array) -> ComplexArray:
    """Return values @ matrix for a real matrix, real and imaginary parts in one product."""
    flat = values.reshape(-1, values.shape[-1])
    with np.errstate(invalid="ignore"):
        product = np.vstack([flat.real, flat.imag]) @ matrix
    result = np.empty((flat.shape[0], matrix.shape[1]), dtype=complex)
    result.real, result.imag = product[: flat.shape[0]], product[flat.shape[0] :]
    return result.reshape(*values.shape[:-1], matrix.shape[1])


def _each_solved(pencil: ComplexArray, right: ComplexArray) -> ComplexArray:
    """Return the solutions of many small systems; infinite where one is singular."""
    try:
        return np.linalg.solve(pencil, right).astype(complex, copy=False)
    except np.linalg.LinAlgError:
        found = np.full(right.shape, complex(np.inf, 0.0))
        for k in range(pencil.shape[0]):
            try:
                found[k] = np.linalg.solve(pencil[k], right[k])
            except np.linalg.LinAlgError:
                continue
        return found


def _cuts(T: Array) -> list[tuple[int, int]]:
    """Return blocks of about `BLOCK` states that divide no block of an upper block triangular matrix."""
    n = T.shape[0]
    lowest = n - 1 - np.argmax(T[::-1] != 0, axis=0)
    lowest[~np.any(T, axis=0)] = 0
    # a cut after k is free where no column up to k reaches below it
    free = np.flatnonzero(np.maximum.accumulate(lowest) <= np.arange(n)) + 1
    blocks, low = [], 0
    while low < n:
        high = int(free[np.searchsorted(free, min(low + BLOCK, n))])
        blocks.append((low, high))
        low = high
    return blocks


def suits(A: Array, E: Array | None) -> bool:
    """Say whether a model is large and dense enough, without a descriptor matrix and not triangular already."""
    return E is None and A.shape[0] >= LARGE and triangular_blocks(A) is None


def thinned(frequencies: Array, points: ComplexArray, poles: ComplexArray, share: float) -> Array:
    """Return those frequencies whose points are farther apart than `share` of their distance to the nearest pole.

    A response changes over distances like that to its nearest pole and no shorter ones; the first and last stay.

    Parameters
    ----------
    frequencies : (k,) array
        Increasing.
    points : (k,) complex array
        Where they are in the plane of the poles.
    poles : (n,) complex array
    share : float
    """
    if frequencies.size < 3 or poles.size == 0:
        return frequencies
    distance = np.concatenate(
        [np.min(np.abs(points[k : k + 256, None] - poles[None, :]), axis=1) for k in range(0, points.size, 256)]
    ).tolist()
    kept = [0]
    places = points.tolist()
    for k in range(1, frequencies.size - 1):
        # a frequency with a closer pole is never dropped in favour of one before it with a farther pole
        if abs(places[k] - places[kept[-1]]) > share * min(distance[k], distance[kept[-1]]):
            kept.append(k)
    kept.append(frequencies.size - 1)
    return frequencies[kept]
