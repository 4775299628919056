"""Are these the Hankel singular values? An answer from Gramians in high precision and counted signs.

It shares nothing with how the package computes such values: both Gramians are summed by squaring the state matrix of
the bilinear image, and the number of values above a level is the number of positive pivots of L'QL - level^2 I
(Sylvester's law of inertia), L the Cholesky factor of the other Gramian.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
from flint import arb, arb_mat, fmpq

from realize.kernels.exact.numbers import precision

Matrix = Sequence[Sequence[Any]]


def rational(matrix: Any) -> list[list[fmpq]]:
    """Return a matrix of doubles as exact rationals."""
    return [[fmpq(*float(entry).as_integer_ratio()) for entry in row] for row in np.atleast_2d(matrix)]


def _matrix(entries: Matrix) -> arb_mat:
    return arb_mat([[arb(entry) for entry in row] for row in entries])


def gramian_product(A: Matrix, B: Matrix, C: Matrix, bits: int, *, sampled: bool = False) -> arb_mat:
    """Return L'QL, whose eigenvalues are the squares of the Hankel singular values, in so many bits.

    P = sum F^k G G' F'^k by P := P + F P F', F := F F [1]_; a continuous model by F = (s + A) / (s - A) first.

    Parameters
    ----------
    A, B, C : nested lists of rationals
        Stable and minimal.
    bits : int
        Enough for about twice the number of bits by which the last value is below the first.
    sampled : bool

    References
    ----------
    .. [1] R. A. Smith, Matrix equation XA + BX = C, SIAM J. Appl. Math. 16 (1968) 198-201.
    """
    n = len(A)
    with precision(bits):
        F, G, H = _matrix(A), _matrix(B), _matrix(C)
        if not sampled:
            size = np.abs(np.linalg.eigvals(np.array([[int(e.p) / int(e.q) for e in row] for row in A])))
            shift = arb(float(np.sqrt(size.max() * size.min())))
            one = _matrix([[int(i == j) for j in range(n)] for i in range(n)]) * shift
            root = (2 * shift).sqrt()
            below = one - F
            F, G = below.solve(one + F), below.solve(G) * root
            H = below.transpose().solve(H.transpose()).transpose() * root
        P, Q = G * G.transpose(), H.transpose() * H
        while max(abs(entry) for entry in F.entries()) > arb(2) ** -bits:
            P, Q = (P + F * P * F.transpose()).mid(), (Q + F.transpose() * Q * F).mid()
            F = (F * F).mid()
        L = _cholesky(P)
        return (L.transpose() * Q * L).mid()


def _cholesky(P: arb_mat) -> arb_mat:
    n, rows = P.nrows(), P.tolist()
    L = [[arb(0)] * n for _ in range(n)]
    for j in range(n):
        for i in range(j, n):
            value = rows[i][j]
            for k in range(j):
                value = value - L[i][k] * L[j][k]
            L[i][j] = (value.mid().sqrt() if i == j else value / L[j][j]).mid()
    return arb_mat(L)


def count_above(square: arb_mat, level: arb) -> int:
    """Return how many eigenvalues of a symmetric matrix are above a level: positive pivots of the difference."""
    n, rows = square.nrows(), square.tolist()
    for i in range(n):
        rows[i][i] = rows[i][i] - level
    positive = 0
    for k in range(n):
        pivot = rows[k][k]
        positive += bool(pivot > 0)
        for i in range(k + 1, n):
            factor = (rows[i][k] / pivot).mid()
            for j in range(i, n):
                rows[i][j] = (rows[i][j] - factor * rows[k][j]).mid()
            for j in range(k + 1, i):
                rows[i][j] = rows[j][i]
    return positive


def misplaced(
    square: arb_mat, values: Sequence[float], errors: Sequence[float], bits: int, which: Iterable[int] | None = None
) -> list[int]:
    """Return the indices of values that are not within their errors of the true ones.

    Parameters
    ----------
    square : matrix
        From `gramian_product`.
    values, errors : sequences of floats
        Decreasing values, absolute errors.
    which : iterable of int, optional
        Indices to look at; all by default.
    """
    wrong = []
    with precision(bits):
        for k in range(len(values)) if which is None else which:
            low, high = arb(values[k]) - arb(errors[k]), arb(values[k]) + arb(errors[k])
            # the value of index k is in low..high: more than k are above low, at most k above high
            above_low = count_above(square, low * low) if low > 0 else len(values)
            if above_low <= k or count_above(square, high * high) > k:
                wrong.append(k)
    return wrong
