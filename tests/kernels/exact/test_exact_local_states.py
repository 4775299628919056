"""Local minimal states of poles against exact responses, ranks and unlucky coefficients."""

from __future__ import annotations

import random

import numpy as np
import pytest
from flint import fmpq, fmpq_mat, fmpq_poly

from realize.kernels.exact.local_states import (
    expansion_of,
    expansions,
    hankel_rank,
    infinite_block,
    local_block,
    modal_matrices,
    multiplicities,
    rational_matrices,
)
from realize.kernels.exact.smith import smith_mcmillan
from realize.kernels.exact.states import response_at

S = fmpq_poly([0, 1])


def jordan(draw: random.Random, pole: int, sizes: list[int], p: int, m: int) -> tuple[fmpq_mat, fmpq_mat, fmpq_mat]:
    """Jordan blocks of one pole with generic integer input and output."""
    n = sum(sizes)
    A = fmpq_mat(n, n)
    start = 0
    for size in sizes:
        for k in range(size):
            A[start + k, start + k] = fmpq(pole)
            if k + 1 < size:
                A[start + k, start + k + 1] = fmpq(1)
        start += size
    B = fmpq_mat(n, m, [fmpq(draw.randint(-9, 9)) for _ in range(n * m)])
    C = fmpq_mat(p, n, [fmpq(draw.randint(-9, 9)) for _ in range(n * p)])
    return A, B, C


@pytest.mark.parametrize("sizes", [[1], [2], [1, 1], [3, 1], [2, 2], [4, 2, 1]])
def test_jordan_blocks_come_back(sizes: list[int]) -> None:
    """The rank is the number of states, N is strictly triangular, and C N^k B are the residues."""
    draw = random.Random(len(sizes) + sum(sizes))
    A, B, C = jordan(draw, -3, sizes, 3, 3)
    n = A.nrows()
    N = A + 3 * fmpq_mat(n, n, [fmpq(int(i == j)) for i in range(n) for j in range(n)])
    terms, v = {}, B
    for k in range(1, max(sizes) + 1):
        terms[k] = (C * v).tolist()
        v = N * v
    assert hankel_rank(terms) == n
    block = local_block(expansion_of(fmpq(-3), terms), n)
    a, b, c = modal_matrices([block], 3, 3)
    assert np.array_equal(np.diag(a), np.full(n, -3.0))
    assert not np.any(np.tril(a, -1))
    shift = a + 3 * np.eye(n)
    for k, expected in terms.items():
        wanted = np.array([[float(x.p) / float(x.q) for x in row] for row in expected])
        got = c @ np.linalg.matrix_power(shift, k - 1) @ b
        assert np.abs(got - wanted).max() <= 1e-13 * max(np.abs(wanted).max(), 1)


def test_high_precision_states_have_the_exact_response() -> None:
    """Complex, real and repeated poles: the rationals of the working precision reproduce an exact point."""
    grid = [
        [(S + 2, (S * S + S + 3) * (S + 1)), (fmpq_poly([1]), (S + 1) ** 2)],
        [(fmpq_poly([5]), (S * S + S + 3) ** 2), (S, (S + 4) * (S + 1))],
    ]
    form = smith_mcmillan(grid)
    found = expansions(grid)
    ranks = multiplicities([root for root, _ in found], form.poles)
    blocks = [local_block(expansion, rank) for (_, expansion), rank in zip(found, ranks, strict=True)]
    assert sum(block.order for block in blocks) == form.degree
    A, B, C = rational_matrices(blocks, 2, 2)
    at = fmpq(7, 5)
    made = response_at(A, B, C, [[fmpq(0)] * 2] * 2, None, at, fmpq(0))
    for i in range(2):
        for j in range(2):
            n, d = grid[i][j]
            assert abs(made[i][j][0] / (n(at) / d(at)) - 1) < fmpq(1, 10**150)


def test_infinite_block() -> None:
    """s [1 2; 2 4] + s^2 [0 0; 0 1], and one row of s: least rank, exact coefficients."""
    first, second = [[fmpq(1), fmpq(2)], [fmpq(2), fmpq(4)]], [[fmpq(0), fmpq(0)], [fmpq(0), fmpq(1)]]
    (N, b, c), degree = infinite_block({1: first, 2: second})
    assert degree == 3
    for k, expected in ((1, first), (2, second), (0, None), (3, None)):
        wanted = np.zeros((2, 2)) if expected is None else np.array([[float(x.p) for x in row] for row in expected])
        assert np.abs(c @ np.linalg.matrix_power(N, k) @ b - wanted).max() < 1e-14


def test_zero_residues_leave_exact_zeros() -> None:
    """A decoupled pole stays decoupled: no rounding couples channels."""
    terms = {1: [[fmpq(1, 3), fmpq(0)], [fmpq(0), fmpq(1, 7)]]}
    _, b, c = modal_matrices([local_block(expansion_of(fmpq(-1), terms), 2)], 2, 2)
    product = c @ b
    assert product[0, 1] == product[1, 0] == 0.0
