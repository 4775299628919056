"""Shifted systems with an upper Hessenberg matrix, many shifts at once, in matrix products."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Columns treated together: the small systems cost its square, the calls its inverse (flat between 16 and 48).
BLOCK = 32


class ShiftedHessenberg:
    """Solver of (H + p I) X = W for an upper Hessenberg matrix H and several shifts p.

    From the last block of columns to the first, a unitary combination of the columns makes all but one of them
    irrelevant to the rows above; that one is carried to the next block [1]_. In a block the rows have one column more
    than rows: the least solution and the null vector come from the system bordered by a random row, both made
    orthogonal afterwards, so that everything above is updated by one product with H for all shifts.

    Parameters
    ----------
    H : (n, n) array
        Upper Hessenberg.

    References
    ----------
    .. [1] G. Henry, The shifted Hessenberg system solve computation, Cornell Theory Center technical report (1994)
           (from memory).
    """

    def __init__(self, H: Array) -> None:
        n = H.shape[0]
        self.matrix = H
        self._rows = np.ascontiguousarray(H.T)
        self._ends = [(max(end - BLOCK, 0), end) for end in range(n, 0, -BLOCK)]
        self._border = np.random.default_rng(n).standard_normal(BLOCK + 1)

    def solve(self, shifts: ComplexArray, W: Array) -> ComplexArray:
        """Return X [k, m, n] with (H + shifts[k] I) X[k].T = W.

        Parameters
        ----------
        shifts : (k,) complex array
        W : (n, m) array

        Raises
        ------
        numpy.linalg.LinAlgError
            If H + p I is singular.
        """
        n, m = W.shape
        g = shifts.size
        columns = self._rows
        # rows :m are right-hand sides, row m is the column that is carried along
        w = np.empty((g, m + 1, n), dtype=complex)
        w[:, :m] = W.T
        w[:, m] = columns[n - 1]
        w[:, m, n - 1] += shifts
        parts: list[ComplexArray] = []
        for low, high in self._ends[:-1]:
            size = high - low
            bordered = np.empty((g, size + 1, size + 1), dtype=complex)
            bordered[:, :size, :size] = columns[low - 1 : high - 1, low:high].T
            bordered[:, np.arange(size - 1), np.arange(1, size)] += shifts[:, None]
            bordered[:, :size, size] = w[:, m, low:high]
            bordered[:, size] = self._border[: size + 1] * np.abs(bordered[:, :size]).max(axis=(1, 2))[:, None]
            right = np.zeros((g, size + 1, m + 1), dtype=complex)
            right[:, :size, :m] = w[:, :m, low:high].transpose(0, 2, 1)
            right[:, size, m] = 1.0
            found: ComplexArray = np.linalg.solve(bordered, right).astype(complex, copy=False)
            null = found[:, :, m]
            null /= np.linalg.norm(null, axis=1)[:, None]
            along = null.conj()[:, None, :] @ found[:, :, :m]
            found[:, :, :m] -= null[:, :, None] * along
            parts.append(found)
            y = found.transpose(0, 2, 1)
            stacked = np.concatenate([y.real, y.imag]).reshape(2 * g * (m + 1), size + 1)
            product = stacked[:, :size] @ columns[low - 1 : high - 1, :low]
            above = np.empty((g, m + 1, low), dtype=complex)
            above.real = product[: g * (m + 1)].reshape(above.shape)
            above.imag = product[g * (m + 1) :].reshape(above.shape)
            above += y[:, :, size, None] * w[:, m, None, :low]
            above[:, :, low - 1] += shifts[:, None] * y[:, :, 0]
            w[:, :m, :low] -= above[:, :m]
            w[:, m, :low] = above[:, m]
        size = self._ends[-1][1]
        last = np.empty((g, size, size), dtype=complex)
        last[:, :, : size - 1] = columns[: size - 1, :size].T
        last[:, np.arange(size - 1), np.arange(size - 1)] += shifts[:, None]
        last[:, :, size - 1] = w[:, m, :size]
        first: ComplexArray = np.linalg.solve(last, w[:, :m, :size].transpose(0, 2, 1)).astype(complex, copy=False)
        first = first.transpose(0, 2, 1)
        X = np.empty((g, m, n), dtype=complex)
        X[:, :, : size - 1] = first[:, :, :-1]
        coordinate = first[:, :, -1]
        for (low, high), found in zip(self._ends[-2::-1], parts[::-1], strict=True):
            whole = found[:, :, :m].transpose(0, 2, 1) + coordinate[:, :, None] * found[:, None, :, m]
            X[:, :, low - 1 : high - 1] = whole[:, :, :-1]
            coordinate = whole[:, :, -1]
        X[:, :, n - 1] = coordinate
        return X
