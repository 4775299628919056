"""Descriptor models with the smallest E: algebraic states eliminated, the polynomial part by itself."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from realize.forms.inversion import EXACT_SIZE, Verdict, applied_inverse, divided_out

Array = NDArray[np.float64]


class Algebraic(NamedTuple):
    """E, A, B, C, D after the algebraic states were eliminated, and which states are left."""

    E: Array
    A: Array
    B: Array
    C: Array
    D: Array
    kept: list[int]


def without_algebraic_states(E: Array, A: Array, B: Array, C: Array, D: Array) -> Algebraic | None:
    """Return the model without the states that E does not differentiate, where zero rows and columns of E show them.

    With the algebraic rows 0 = A21 x1 + A22 x2 + B2 u, ::

        A11 - A12 A22^-1 A21,  B1 - A12 A22^-1 B2,  C1 - C2 A22^-1 A21,  D - C2 A22^-1 B2

    Up to EXACT_SIZE states in exact arithmetic, each entry rounded once. None where the zero rows and columns are not
    as many, A22 is not well-conditioned, or there are none.
    """
    rows = np.flatnonzero(~np.any(E != 0, axis=1))
    columns = np.flatnonzero(~np.any(E != 0, axis=0))
    n, m = A.shape[0], B.shape[1]
    if rows.size == 0 or rows.size != columns.size:
        return None
    kept = np.setdiff1d(np.arange(n), columns)
    upper = np.setdiff1d(np.arange(n), rows)
    A22 = A[np.ix_(rows, columns)]
    right = np.hstack([A[np.ix_(rows, kept)], B[rows]])
    _, checked = divided_out(A22, [right])
    if checked is None:
        return None
    e = E[np.ix_(upper, kept)]
    left = np.vstack([A[np.ix_(upper, columns)], C[:, columns]])
    base = np.block([[A[np.ix_(upper, kept)], B[upper]], [C[:, kept], D]])
    if n <= EXACT_SIZE:
        whole = _exact_complement(base, left, A22, right)
        if whole is None:
            return None
    else:
        solved = applied_inverse(A22, [right])
        if solved is None:
            return None
        whole = base - left @ solved[0]
    k = kept.size
    return Algebraic(e, whole[:k, :k], whole[:k, k : k + m], whole[k:, :k], whole[k:, k:], kept.tolist())


def _exact_complement(base: Array, left: Array, middle: Array, right: Array) -> Array | None:
    """Return base - left middle^-1 right, each entry rounded once; None where it leaves the range of doubles."""
    from flint import fmpq, fmpq_mat

    from realize.kernels.exact.numbers import nearest

    def exact(matrix: Array) -> fmpq_mat:
        return fmpq_mat([[fmpq(*entry.as_integer_ratio()) for entry in row] for row in matrix.tolist()])

    if 0 in base.shape:
        return base
    whole = (exact(base) - exact(left) * exact(middle).solve(exact(right))).tolist()
    value = np.array([[nearest(entry) for entry in row] for row in whole]).reshape(base.shape)
    return value if np.all(np.isfinite(value)) else None


def with_polynomial_part(
    A: Array, B: Array, C: Array, D: Array, E: Array | None, parts: Sequence[Sequence[Sequence[Any]]]
) -> tuple[Array, Array, Array, Array, Array]:
    """Return A, B, C, D, E of a model plus P_1 s + P_2 s^2 + ..., by the smallest nilpotent block (entries of E: 0, 1).

    Parameters
    ----------
    E : array or None
        Of the model; None is the identity.
    parts : [power][output][input] rationals
        P_1, P_2, ...; the last one is not zero.

    Raises
    ------
    OverflowError
        If an entry is beyond the range of doubles.
    """
    from realize.kernels.exact.descriptor import smallest_nilpotent
    from realize.kernels.exact.numbers import fraction, nearest

    block = smallest_nilpotent(parts)
    n, (p, m), size = A.shape[0], D.shape, len(block.B)
    N, start = np.zeros((size, size)), 0
    for length in block.blocks:
        N[start : start + length, start : start + length] = np.eye(length, k=1)
        start += length

    def rounded(rows: list[list[Any]], shape: tuple[int, int]) -> Array:
        value = np.array([[nearest(entry) for entry in row] for row in rows]).reshape(shape)
        if not np.all(np.isfinite(value)):
            raise OverflowError
        return value

    a, e = np.eye(n + size), np.zeros((n + size, n + size))
    a[:n, :n], e[:n, :n], e[n:, n:] = A, np.eye(n) if E is None else E, N
    b = np.vstack([B, rounded(block.B, (size, m))])
    c = np.hstack([C, rounded(block.C, (p, size))])
    direct = [[fraction(D[i, j].item().as_integer_ratio()) - block.constant[i][j] for j in range(m)] for i in range(p)]
    return a, b, c, rounded(direct, (p, m)), e


def plain_states(
    E: Array, A: Array, B: Array, *, rows_count: bool = True
) -> tuple[Array, Array, Array | None, Verdict]:
    """Return A, B and E of E dx/dt = A x + B u with E divided out where that is harmless (then None): `divided_out`."""
    if E.shape[0] == 0:
        return A, B, None, Verdict("identity", 1.0)
    verdict, solved = divided_out(E, [A, B], rows_count=rows_count)
    if solved is None:
        return A, B, E, verdict
    return solved[0], solved[1], None, verdict
