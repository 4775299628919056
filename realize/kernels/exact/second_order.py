"""Exact transfer matrix of second-order equations M q'' + D q' + K q = F u."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from flint import fmpq, fmpq_mat, fmpq_poly

from realize.kernels.exact.numbers import fraction
from realize.kernels.exact.states import transfer_matrix as pencil_transfer_matrix

Ratios = Sequence[Sequence[Any]]


def _rationals(matrix: Ratios) -> list[list[fmpq]]:
    return [[fraction(entry) for entry in row] for row in matrix]


def transfer_matrix(
    M: Ratios, D: Ratios, K: Ratios, F: Ratios, P: Ratios, V: Ratios, W: Ratios, G: Ratios
) -> tuple[list[list[fmpq_poly]], fmpq_poly]:
    """Return (P + s V + s^2 W) adj(s^2 M + s D + K) F + G det, one polynomial a channel, and det(s^2 M + s D + K).

    The pencil of twice the size with E = diag(I, M) has the same determinant and is read twice: once for positions
    and velocities, once for the positions whose second derivative is an output, times s^2.

    Raises
    ------
    SingularPencil
        If the determinant is identically zero.
    """
    n, p = len(M), len(G)
    zero, one = fmpq(0), fmpq(1)
    m, d, k, f = (_rationals(matrix) for matrix in (M, D, K, F))
    top = [[zero] * n + [one if i == j else zero for j in range(n)] for i in range(n)]
    A = top + [[-entry for entry in k[i]] + [-entry for entry in d[i]] for i in range(n)]
    unit = [[one if i == j else zero for j in range(2 * n)] for i in range(n)]
    E = unit + [[zero] * n + m[i] for i in range(n)]
    B = [[zero] * len(f[0]) for _ in range(n)] + f
    plain = [a + b for a, b in zip(_rationals(P), _rationals(V), strict=True)]
    accelerations = _rationals(W)
    moved = [i for i in range(p) if any(accelerations[i])]
    C = plain + [accelerations[i] + [zero] * n for i in moved]
    rows = _rationals(G) + [[zero] * len(f[0]) for _ in moved]
    numerators, denominator = pencil_transfer_matrix(A, B, C, rows, E)
    square = fmpq_poly([0, 0, 1])
    result = numerators[:p]
    for i, row in zip(moved, numerators[p:], strict=True):
        result[i] = [a + square * b for a, b in zip(result[i], row, strict=True)]
    return result, denominator


def value_at(matrices: Sequence[Ratios], x: fmpq) -> list[list[fmpq]]:
    """Return the transfer matrix at a rational point by one exact solve with x^2 M + x D + K.

    Parameters
    ----------
    matrices : M, D, K, F, P, V, W, G
    x : rational

    Raises
    ------
    ZeroDivisionError
        If the point is a pole.
    """
    M, D, K, F, P, V, W, G = matrices

    def at(a: Ratios, b: Ratios, c: Ratios) -> fmpq_mat:
        parts = (_rationals(matrix) for matrix in (a, b, c))
        return fmpq_mat(
            [[u + x * (v + x * w) for u, v, w in zip(*rows, strict=True)] for rows in zip(*parts, strict=True)]
        )

    response = at(P, V, W) * at(K, D, M).solve(fmpq_mat(_rationals(F))) + fmpq_mat(_rationals(G))
    table: list[list[fmpq]] = response.tolist()
    return table
