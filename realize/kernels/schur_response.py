"""The response of a large dense model: real Schur form once, then blocks of states at many points together."""

from __future__ import annotations

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
SHARE = 0.2


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
        self.scaled = a, b, c
        form = scipy.linalg.lapack.dgees(lambda *_: 0, a, lwork=40 * a.shape[0])
        self._T, real, imaginary, self._Q, info = form[0], form[2], form[3], form[4], form[-1]
        if info != 0:
            raise np.linalg.LinAlgError("the QR algorithm did not converge")
        self.poles: ComplexArray = real + 1j * imaginary
        self._b, self._c = self._Q.T @ b, c @ self._Q
        self._T = np.ascontiguousarray(self._T)
        self._blocks = _cuts(self._T)
        self._known: dict[complex, ComplexArray] = {}

    def values(self, points: ComplexArray) -> ComplexArray:
        """Return C (sI - A)^-1 B at each point, [k][p][m]; infinite at a pole."""
        known = self._known
        new = np.array([point for point in dict.fromkeys(points.tolist()) if point not in known], dtype=complex)
        found: list[ComplexArray] = []
        for k in range(0, new.size, POINTS):
            part = np.einsum("pn,kmn->kpm", self._c, self._solved(self._T, self._b, new[k : k + POINTS], self._blocks))
            part[~np.isfinite(part).all(axis=(1, 2))] = np.inf
            found += list(part)
        here = dict(zip(new.tolist(), found, strict=True))
        if len(known) + len(here) <= REMEMBERED:
            known.update(here)
        values = np.empty((points.size, self._c.shape[0], self._b.shape[1]), dtype=complex)
        for row, point in enumerate(points.tolist()):
            values[row] = here[point] if point in here else known[point]
        return values

    def solutions(self, points: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
        """Return (sI - A)^-1 B as [k][m][n] and C (sI - A)^-1 as [k][p][n], in the units of `scaled`."""
        right = self._solved(self._T, self._b, points, self._blocks)
        turned = np.ascontiguousarray(self._T.T[::-1, ::-1])
        left = self._solved(turned, np.ascontiguousarray(self._c.T[::-1]), points, _cuts(turned))[:, :, ::-1]
        return _real_product(right, self._Q.T), _real_product(left, self._Q.T)

    @staticmethod
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
    """Return blocks of about `BLOCK` states that divide no 2 x 2 block."""
    n = T.shape[0]
    blocks, low = [], 0
    while low < n:
        high = min(low + BLOCK, n)
        if high < n and T[high, high - 1] != 0:
            high += 1
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
