"""Minimal orders and poles of worked examples from outside the project."""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import numpy as np
import pytest

import realize
from realize.kernels.exact.polynomials import polynomial
from realize.models import StateSpace, TransferFunction

#: SLICOT-Reference 5.9.1 (BSD-3-Clause, The SLICOT Team), example programs TB01PD and AB01ND: orders as printed.
SLICOT: dict[str, tuple[Any, Any, Any, int]] = {
    "TB01PD": (
        [[1.0, 2.0, 0.0], [4.0, -1.0, 0.0], [0.0, 0.0, 1.0]],
        [[1.0], [0.0], [1.0]],
        [[0.0, 1.0, -1.0], [0.0, 0.0, 1.0]],
        3,
    ),
    "AB01ND, every state seen": (
        [[-1.0, 0.0, 0.0], [-2.0, -2.0, -2.0], [-1.0, 0.0, -3.0]],
        [[1.0, 0.0], [0.0, 2.0], [0.0, 1.0]],
        np.eye(3).tolist(),
        2,
    ),
}


@pytest.mark.parametrize("exact", [True, False])
@pytest.mark.parametrize("name", SLICOT)
def test_orders_of_the_example_programs(name: str, exact: bool) -> None:
    A, B, C, order = SLICOT[name]
    made = realize.minimal(StateSpace(A=A, B=B, C=C), exact=exact)
    assert made.receipt.details["order"] == made.model.order == order
    if name.startswith("AB01ND"):
        # the printed controllable part has the eigenvalues -3 and -1: -2 is what is left out
        assert [row["pole"][0] for row in made.receipt.details["removed"]] == [-2.0]
        np.testing.assert_allclose(np.sort(np.linalg.eigvals(made.model.A).real), [-3.0, -1.0], rtol=1e-12)


#: Transfer matrices with their McMillan degree and poles, from memory, recomputed: Gilbert, SIAM J. Control A 1 (1963);
#: Chen, Linear System Theory and Design; Maciejowski, Multivariable Feedback Design (1989), section 2.2; Skogestad &
#: Postlethwaite, Multivariable Feedback Control.
ONE, TWO, BOTH = [1, 1], [1, 2], [1, 3, 2]
MATRICES: dict[str, tuple[Any, Any, list[float]]] = {
    "Gilbert": ([[[1], [2]], [[-1], [1]]], [[ONE, ONE], [BOTH, TWO]], [-1, -1, -2]),
    "Chen, degree 1": ([[[1], [1]], [[1], [1]]], [[ONE, ONE], [ONE, ONE]], [-1]),
    "Chen, degree 2": ([[[2], [1]], [[1], [1]]], [[ONE, ONE], [ONE, ONE]], [-1, -1]),
    "Maciejowski": (
        [[[1], [-1]], [[1, 1, -4], [2, -1, -8]], [[1, 0, -4], [2, 0, -8]]],
        [[BOTH, BOTH]] * 3,
        [-1, -1, -2],
    ),
    "Skogestad & Postlethwaite": ([[[1, -1], [4]], [[4.5], [2, -2]]], [[TWO, TWO], [TWO, TWO]], [-2]),
}


def stacked(numerator: Any, denominator: Any) -> StateSpace:
    """A companion form for each entry, side by side: exact, and far from minimal."""
    p, m = len(numerator), len(numerator[0])
    blocks = []
    D = np.zeros((p, m))
    for i in range(p):
        for j in range(m):
            d = [Fraction(c) for c in denominator[i][j]]
            n = [Fraction(0)] * (len(d) - len(numerator[i][j])) + [Fraction(c) for c in numerator[i][j]]
            D[i, j] = float(n[0])
            k = len(d) - 1
            a = np.eye(k, k=1)
            a[-1] = [-float(c) for c in d[:0:-1]]
            row = [float(x - n[0] * y) for x, y in zip(n[:0:-1], d[:0:-1], strict=True)]
            blocks.append((i, j, a, row))
    size = sum(len(row) for *_, row in blocks)
    A, B, C, start = np.zeros((size, size)), np.zeros((size, m)), np.zeros((p, size)), 0
    for i, j, a, row in blocks:
        part = slice(start, start + len(row))
        A[part, part], B[part.stop - 1, j], C[i, part] = a, 1.0, row
        start = part.stop
    return StateSpace(A=A, B=B, C=C, D=D)


@pytest.mark.parametrize("exact", [True, False])
@pytest.mark.parametrize("name", MATRICES)
def test_mcmillan_degrees_of_worked_examples(name: str, exact: bool) -> None:
    numerator, denominator, poles = MATRICES[name]
    states = stacked(numerator, denominator)
    assert states.order is not None and states.order > len(poles)
    made = realize.minimal(states, exact=exact)
    assert made.receipt.details["order"] == made.model.order == len(poles)
    assert made.receipt.claim("peak-error").value < 1e-14
    # a double pole splits by the root of the rounding
    np.testing.assert_allclose(np.sort(np.linalg.eigvals(made.model.A).real), np.sort(poles), atol=1e-6)
    coefficients = realize.minimal(TransferFunction(numerator=numerator, denominator=denominator), exact=exact)
    assert coefficients.receipt.details["order"] == len(poles)


def test_the_fractions_of_the_stacked_form_are_those_given() -> None:
    numerator, denominator, _ = MATRICES["Maciejowski"]
    fractions = realize.convert(stacked(numerator, denominator), "transfer-function").model
    for i in range(3):
        for j in range(2):
            ours = [
                polynomial(list(side[i][j])) for side in (fractions.exact("numerator"), fractions.exact("denominator"))
            ]
            n, d = (polynomial([(c, 1) for c in side[i][j]]) for side in (numerator, denominator))
            assert ours[0] * d == n * ours[1]
