"""Exact fractions of models that are given by matrices of polynomials, from determinants by fraction-free elimination.

Bareiss, Sylvester's identity and multistep integer-preserving Gaussian elimination, Math. Comp. 22 (1968) 565-578.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from flint import fmpq_poly

Rows = list[list[Any]]
Read = Callable[..., Any]

ZERO = fmpq_poly([])
ONE = fmpq_poly([1])


def determinant(rows: Rows) -> Any:
    """Return the determinant of a square matrix of polynomials over the rationals."""
    rows = [list(row) for row in rows]
    n, sign, before = len(rows), 1, ONE
    for k in range(n - 1):
        pivot = next((i for i in range(k, n) if rows[i][k]), None)
        if pivot is None:
            return ZERO
        if pivot != k:
            rows[k], rows[pivot], sign = rows[pivot], rows[k], -sign
        for i in range(k + 1, n):
            for j in range(k + 1, n):
                rows[i][j] = (rows[i][j] * rows[k][k] - rows[i][k] * rows[k][j]) // before
        before = rows[k][k]
    return rows[n - 1][n - 1] * sign if n else ONE


def bordered(rows: Rows, column: list[Any], row: list[Any]) -> Any:
    """Return row adj(rows) column."""
    return -determinant([[*line, entry] for line, entry in zip(rows, column, strict=True)] + [[*row, ZERO]])


def polynomials(values: Any, read: Read) -> Rows:
    """Return a matrix of polynomials from [power][row][column], highest power first."""
    top = values.shape[0] - 1
    return [
        [
            fmpq_poly([read(values[top - k, i, j], top - k, i, j) for k in range(top + 1)])
            for j in range(values.shape[2])
        ]
        for i in range(values.shape[1])
    ]


def matrix_fraction(model: Any, numbers: Callable[[str], Any]) -> list[list[tuple[Any, Any]]]:
    """Return N adj(D) (right) or adj(D) N (left) over det(D)."""
    N, D = (polynomials(getattr(model, name), numbers(name).real) for name in ("numerator", "denominator"))
    p, m = model.shape
    below = determinant(D)
    n = len(D)
    unit = [[ONE if i == j else ZERO for j in range(n)] for i in range(n)]
    if model.side == "right":
        return [[(bordered(D, unit[j], N[i]), below) for j in range(m)] for i in range(p)]
    return [[(bordered(D, [row[j] for row in N], unit[i]), below) for j in range(m)] for i in range(p)]


def second_order(model: Any, numbers: Callable[[str], Any]) -> list[list[tuple[Any, Any]]]:
    """Return (P + s V + s^2 W) adj(s^2 M + s D + K) F + G det(...) over det(...)."""

    def together(*names: str) -> Rows:
        parts = [(getattr(model, name), numbers(name).real) for name in names]
        shape = parts[0][0].shape
        return [
            [fmpq_poly([read(value[i, j], i, j) for value, read in parts]) for j in range(shape[1])]
            for i in range(shape[0])
        ]

    pencil = together("stiffness", "damping", "mass")
    outputs = together("position_output", "velocity_output", "acceleration_output")
    (F,), (G,) = ((together(name),) for name in ("input", "direct"))
    below = determinant(pencil)
    p, m = model.shape
    return [
        [(bordered(pencil, [row[j] for row in F], outputs[i]) + G[i][j] * below, below) for j in range(m)]
        for i in range(p)
    ]
