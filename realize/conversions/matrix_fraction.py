"""Rows of the conversion table about matrix fractions."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from realize.errors import Refused
from realize.forms.descriptor import with_polynomial_part
from realize.models import MatrixFraction, Model, StateSpace
from realize.models.fractions import form_fractions

if TYPE_CHECKING:
    from realize.conversions.route import Task

Grid = list[list[tuple[Any, Any]]]


def _coprime(grid: Grid, side: str) -> Any:
    """Return the coprime right fraction of the grid, or of its transpose for a left one."""
    from realize.kernels.exact.matrix_fractions import coprime_right, transposed
    from realize.kernels.exact.polynomials import reduce_fraction

    reduced = [[reduce_fraction(n, d) for n, d in row] for row in grid]
    return coprime_right(reduced if side == "right" else transposed(reduced))


def matrix_fraction(grid: Grid, task: Task) -> MatrixFraction:
    """Coprime fraction with column-reduced (right) or row-reduced (left) denominator, each coefficient rounded once."""
    from realize.conversions.builders import rounded
    from realize.kernels.exact.matrix_fractions import transposed

    side = task.side or "right"
    found = _coprime(grid, side)
    decimals: dict[str, dict[Any, str]] = {"numerator": {}, "denominator": {}}
    fields: dict[str, Any] = {}
    for name, matrix in (("numerator", found.N), ("denominator", found.D)):
        if side == "left":
            matrix = transposed(matrix)
        degree = max(max(entry.degree() for row in matrix for entry in row), 0)
        values = np.zeros((degree + 1, len(matrix), len(matrix[0])))
        for i, row in enumerate(matrix):
            for j, entry in enumerate(row):
                doubles, strings = rounded([entry[degree - k] for k in range(degree + 1)])
                values[:, i, j] = doubles
                decimals[name].update({(k, i, j): text for k, text in strings.items()})
        fields[name] = values
    task.details["matrix_fraction"] = {
        "side": side,
        ("controllability_indices" if side == "right" else "observability_indices"): list(found.indices),
        "degree": sum(found.indices),
        "coprime": True,
        "reduced": "columns" if side == "right" else "rows",
    }
    return MatrixFraction(side=side, **fields, decimals=decimals, **task.model.common())


def states_from_fraction(model: Model, task: Task) -> StateSpace:
    """Controller form (right) or observer form (left) of the coprime, reduced fraction, each entry rounded once."""
    from realize.conversions.builders import state_model
    from realize.kernels.exact.matrix_fractions import controller_form
    from realize.kernels.exact.numbers import nearest

    assert isinstance(model, MatrixFraction)
    p, m = model.shape
    found = _coprime(form_fractions(model), model.side)
    n = sum(found.indices)

    def doubles(rows: Any, shape: tuple[int, int]) -> np.ndarray:
        return np.array([[nearest(entry) for entry in row] for row in rows]).reshape(shape)

    a, b, c = controller_form(found)
    outputs, inputs = (p, m) if model.side == "right" else (m, p)
    A, B, C = doubles(a, (n, n)), doubles(b, (n, inputs)), doubles(c, (outputs, n))
    polynomial = found.polynomial
    degree = max(max(entry.degree() for row in polynomial for entry in row), 0)
    parts = [[[entry[k] for entry in row] for row in polynomial] for k in range(degree + 1)]
    if model.side == "left":
        A, B, C = A.T.copy(), C.T.copy(), B.T.copy()
        parts = [[list(column) for column in zip(*matrix, strict=True)] for matrix in parts]
    D = doubles(parts[0], (p, m))
    name = "controllability_indices" if model.side == "right" else "observability_indices"
    task.details["matrix_fraction"] = {"side": model.side, name: list(found.indices), "degree": n}
    if degree == 0:
        return state_model(task, A, B, C, D)
    try:
        return state_model(task, *with_polynomial_part(A, B, C, D, None, parts[1:]))
    except OverflowError:
        raise Refused("a coefficient of the polynomial part lies beyond the range of doubles; scale time") from None


def bezout_identity(model: Model) -> tuple[list[list[list[Any]]], list[list[list[Any]]]] | None:
    """Return X and Y with X N + Y D = I (right) or N X + D Y = I (left), exactly; None where a factor is common.

    Parameters
    ----------
    model : MatrixFraction

    Returns
    -------
    X, Y : [row][column] lists of Fraction
        Coefficients, highest power first.

    Raises
    ------
    Refused
        If the model is no matrix fraction.
    """
    from fractions import Fraction

    from realize.kernels.exact.matrix_fractions import bezout, transposed
    from realize.kernels.exact.polynomials import coefficients

    if not isinstance(model, MatrixFraction):
        raise Refused("a Bezout identity needs a matrix fraction; convert --to matrix-fraction first")
    N, D = model.polynomials("numerator"), model.polynomials("denominator")
    left = model.side == "left"
    found = bezout(transposed(N), transposed(D)) if left else bezout(N, D)
    if found is None:
        return None
    X, Y = (transposed(part) if left else part for part in found)

    def listed(matrix: Any) -> list[list[list[Any]]]:
        return [[[Fraction(int(c.p), int(c.q)) for c in coefficients(entry)] for entry in row] for row in matrix]

    return listed(X), listed(Y)
