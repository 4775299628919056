"""Smith-McMillan form against constructed ones, all minors or drawn ones; decoupling zeros by construction."""

from __future__ import annotations

import random
from typing import Any

import pytest
from flint import fmpq, fmpq_mat, fmpq_poly

from realize.kernels.exact import smith
from realize.kernels.exact.order import mcmillan_degree
from realize.kernels.exact.polynomials import ONE, ZERO, product, reduce_fraction
from realize.kernels.exact.smith import decoupling_polynomials, determinant, smith_mcmillan
from realize.kernels.exact.states import transfer_matrix

S = fmpq_poly([0, 1])


def unimodular(draw: random.Random, size: int) -> list[list[fmpq_poly]]:
    """Product of random elementary operations with polynomial factors: its determinant is 1."""
    rows = [[ONE if i == j else ZERO for j in range(size)] for i in range(size)]
    for _ in range(2 * size):
        i, j = draw.sample(range(size), 2)
        factor = fmpq_poly([draw.randint(-3, 3), draw.randint(-1, 1)])
        rows[i] = [x + factor * y for x, y in zip(rows[i], rows[j], strict=True)]
    return rows


def times(one: list[list[Any]], two: list[list[Any]]) -> list[list[Any]]:
    return [
        [sum((a * b for a, b in zip(row, column, strict=True)), ZERO) for column in zip(*two, strict=True)]
        for row in one
    ]


def built(draw: random.Random, zeros: list[fmpq_poly], poles: list[fmpq_poly], p: int, m: int) -> Any:
    """A matrix with a given Smith-McMillan form, hidden by unimodular matrices on both sides."""
    common = poles[0]
    middle = [[ZERO] * m for _ in range(p)]
    for k, (e, psi) in enumerate(zip(zeros, poles, strict=True)):
        middle[k][k] = e * (common // psi)
    N = times(times(unimodular(draw, p), middle), unimodular(draw, m))
    return [[(n, common) for n in row] for row in N]


@pytest.mark.parametrize("shape", [(2, 2), (3, 2), (2, 3), (4, 4)])
@pytest.mark.parametrize("drawn", [False, True])
def test_the_form_that_was_built_in(shape: tuple[int, int], drawn: bool, monkeypatch: pytest.MonkeyPatch) -> None:
    if drawn:
        monkeypatch.setattr(smith, "MINORS", 0)
    draw = random.Random(sum(shape))
    zeros = [ONE, (S - 1)]
    poles = [(S + 1) ** 3 * (S + 2) * (S * S + 1), (S + 1) ** 2]
    found = smith_mcmillan(built(draw, zeros, poles, *shape))
    assert list(found.zeros) == zeros
    assert list(found.poles) == poles
    assert found.normal_rank == 2
    assert found.proved is not drawn


def test_multiple_zeros_keep_their_order() -> None:
    draw = random.Random(1)
    zeros = [S - 3, (S - 3) ** 2 * S, (S - 3) ** 4 * S * (S * S + 4)]
    poles = [(S + 5) ** 2, S + 5, ONE]
    found = smith_mcmillan(built(draw, zeros, poles, 3, 3))
    assert list(found.zeros) == zeros
    assert found.zero_polynomial == product(zeros)
    assert found.pole_polynomial == (S + 5) ** 3


def test_infinity_is_the_origin_of_the_reversed_variable() -> None:
    """diag(s^2, 1, 1 / s^3) with constant changes of signals: pole of order 2, zero of order 3."""
    left = [[1, 2, 0], [0, 1, 5], [1, 0, 1]]
    middle = [S**5, S**3, ONE]
    grid = [
        [(sum((fmpq_poly([left[i][k] * left[j][k]]) * middle[k] for k in range(3)), ZERO), S**3) for j in range(3)]
        for i in range(3)
    ]
    found = smith_mcmillan(grid)
    assert found.infinite == (-2, 0, 3)
    assert found.zeros_at_infinity == (3,)
    assert found.poles_at_infinity == (2,)
    # sums of all orders, finite and infinite, cancel in a square regular matrix
    assert found.zero_polynomial.degree() - found.pole_polynomial.degree() + sum(found.infinite) == 0


def test_degree_agrees_with_the_rank_of_markov_parameters() -> None:
    draw = random.Random(7)
    for _ in range(20):
        p, m = draw.randint(1, 4), draw.randint(1, 4)
        poles = [S + draw.randint(-4, 4) for _ in range(3)]
        grid = [
            [
                (fmpq_poly([draw.randint(-2, 2) for _ in range(3)]), product(draw.choices(poles, k=draw.randint(1, 3))))
                for _ in range(m)
            ]
            for _ in range(p)
        ]
        expected = mcmillan_degree([[n for n, _ in row] for row in grid], [[d for _, d in row] for row in grid])
        assert smith_mcmillan(grid).degree == expected.order


def test_nothing_at_all() -> None:
    found = smith_mcmillan([[(ZERO, ONE), (ZERO, S)]])
    assert (found.normal_rank, found.degree, found.infinite) == (0, 0, ())
    assert found.zero_polynomial == ONE
    assert smith_mcmillan([[(fmpq_poly([3]), ONE)]]).infinite == (0,)


def test_determinant() -> None:
    draw = random.Random(3)
    for size in range(5):
        matrix = [[fmpq_poly([draw.randint(-5, 5) for _ in range(3)]) for _ in range(size)] for _ in range(size)]
        at = fmpq(7, 3)
        value = fmpq_mat(size, size, [entry(at) for row in matrix for entry in row]).det() if size else fmpq(1)
        assert determinant(matrix)(at) == value
    assert determinant([[S, S], [S, S]]) == ZERO


#: Rows: mode, reached, seen.
MODES = [
    (-1, True, True),
    (-2, False, True),
    (-3, True, False),
    (-4, False, False),
    (-4, False, False),
    (-5, True, True),
]


@pytest.mark.parametrize("descriptor", [False, True])
@pytest.mark.parametrize(("p", "m"), [(2, 2), (1, 2), (3, 2)])
def test_hidden_modes_by_construction(p: int, m: int, descriptor: bool) -> None:
    draw = random.Random(10 * p + m)
    n = len(MODES)
    T = fmpq_mat(n, n, [fmpq(draw.randint(-3, 3)) + (7 if i == j else 0) for i in range(n) for j in range(n)])
    A = fmpq_mat(n, n, [fmpq(MODES[i][0] if i == j else 0) for i in range(n) for j in range(n)])
    B = fmpq_mat(n, m, [fmpq(draw.randint(1, 9) if MODES[i][1] else 0) for i in range(n) for _ in range(m)])
    C = fmpq_mat(p, n, [fmpq(draw.randint(1, 9) if MODES[j][2] else 0) for _ in range(p) for j in range(n)])
    D = [[fmpq(0)] * m for _ in range(p)]
    E = None
    back = T.inv()
    A, B, C = T * A * back, T * B, C * back
    if descriptor:
        mixed = fmpq_mat(n, n, [fmpq(draw.randint(-2, 2)) + (5 if i == j else 0) for i in range(n) for j in range(n)])
        A, B, E = mixed * A, mixed * B, mixed.tolist()
    numerators, d = transfer_matrix(A.tolist(), B.tolist(), C.tolist(), D, E)
    form = smith_mcmillan([[(numerator, d) for numerator in row] for row in numerators])
    assert form.pole_polynomial == (S + 1) * (S + 5)
    found, invariant = decoupling_polynomials(A.tolist(), B.tolist(), C.tolist(), D, E, form)
    assert found.input == (S + 2) * (S + 4) ** 2
    assert found.output == (S + 3) * (S + 4) ** 2
    assert found.both == (S + 4) ** 2
    if p == m:
        assert invariant == form.zero_polynomial * (S + 2) * (S + 3) * (S + 4) ** 2
    elif p == 1:
        # more inputs than outputs: what no input reaches takes rank, and what no output sees does not by itself
        assert invariant == form.zero_polynomial * found.input
    else:
        assert invariant == form.zero_polynomial * found.output


def test_reduced_entries_do_not_matter() -> None:
    grid = [[(S + 1, (S + 1) * (S + 2)), (ONE, S + 3)], [(ONE, S + 2), (S, S * (S + 3))]]
    plain = [[reduce_fraction(*pair) for pair in row] for row in grid]
    assert smith_mcmillan(grid) == smith_mcmillan(plain)
    assert smith_mcmillan(grid).normal_rank == 1
