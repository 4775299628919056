"""Staircase and block Hessenberg kernels: orthogonality, exact zeros, steps that exact ranks confirm."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from realize.kernels.staircase import (
    controllability_indices,
    controller_hessenberg,
    observability_indices,
    reachability_staircase,
)

EPS = np.finfo(float).eps


def exact_rank(rows: list[list[Fraction]]) -> int:
    """Rank by elimination over the rationals."""
    rows = [list(row) for row in rows]
    rank = 0
    for column in range(len(rows[0]) if rows else 0):
        pivot = next((k for k in range(rank, len(rows)) if rows[k][column]), None)
        if pivot is None:
            continue
        rows[rank], rows[pivot] = rows[pivot], rows[rank]
        for k in range(rank + 1, len(rows)):
            factor = rows[k][column] / rows[rank][column]
            if factor:
                rows[k] = [a - factor * b for a, b in zip(rows[k], rows[rank], strict=True)]
        rank += 1
    return rank


def exact_steps(A: np.ndarray, B: np.ndarray) -> tuple[int, ...]:
    """Increments of the rank of [B, A B, A A B, ...] over the rationals."""
    a = [[Fraction(float(x)) for x in row] for row in A]
    b = [[Fraction(float(x)) for x in row] for row in B]
    n = len(a)
    columns, last, steps = [list(row) for row in b], b, []
    rank = exact_rank(columns)
    total = 0
    while rank > total:
        steps.append(rank - total)
        total = rank
        last = [
            [sum((a[i][k] * last[k][j] for k in range(n)), Fraction(0)) for j in range(len(last[0]))] for i in range(n)
        ]
        columns = [row + more for row, more in zip(columns, last, strict=True)]
        rank = exact_rank(columns)
    return tuple(steps)


def staircase(A: np.ndarray, B: np.ndarray):
    unit = 4 * max(A.shape[0], 1) * EPS
    return reachability_staircase(A, B, (unit * np.linalg.norm(B), unit * np.linalg.norm(A)))


def integers(n: int, m: int, hidden: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Small integers with `hidden` unreachable states, sheared by integers; exact in doubles."""
    rng = np.random.default_rng(seed)
    A, B = rng.integers(-4, 5, (n, n)).astype(float), rng.integers(-3, 4, (n, m)).astype(float)
    if hidden:
        A[n - hidden :, : n - hidden], B[n - hidden :] = 0, 0
    for _ in range(2 * n if hidden else 0):
        i, j = rng.permutation(n)[:2]
        factor = float(rng.integers(-1, 2))
        # x_i -> x_i + factor x_j
        A[i] += factor * A[j]
        A[:, j] -= factor * A[:, i]
        B[i] += factor * B[j]
    return A, B


CASES = [(1, 1, 0), (1, 3, 0), (2, 1, 1), (3, 5, 1), (6, 1, 2), (6, 2, 2), (7, 3, 0), (9, 2, 4), (10, 4, 3), (4, 2, 4)]


@pytest.mark.parametrize(("n", "m", "hidden"), CASES)
@pytest.mark.parametrize("seed", range(3))
def test_steps_are_those_of_exact_ranks(n: int, m: int, hidden: int, seed: int) -> None:
    A, B = integers(n, m, hidden, seed)
    if m > 2:
        B[:, 2] = B[:, 0] - B[:, 1]
    found = staircase(A, B)
    assert found.sizes == exact_steps(A, B)
    r = found.order
    # the transform, within rounding
    size = np.linalg.norm(A)
    assert np.linalg.norm(found.Q.T @ found.Q - np.eye(n)) <= 20 * n * EPS
    assert np.linalg.norm(found.Q @ found.A - A @ found.Q) <= 20 * n * EPS * size
    assert np.linalg.norm(found.Q @ found.B - B) <= 20 * n * EPS * np.linalg.norm(B)
    # exact zeros
    edges = np.cumsum([0, *found.sizes])
    assert not np.any(found.A[r:, :r]) and not np.any(found.B[edges[1] if r else 0 :])
    for k in range(len(found.sizes) - 1):
        assert not np.any(found.A[edges[k + 2] :, edges[k] : edges[k + 1]])
    # the record of the decisions
    assert len(found.kept) == len(found.dropped) == len(found.sizes) + (r < n)
    assert [values.size for values in found.kept] == [*found.sizes, *([0] if r < n else [])]
    assert found.smallest_kept > 1 >= found.largest_dropped
    assert sum(controllability_indices(found.sizes, m)) == r


@pytest.mark.parametrize(("n", "m", "hidden"), CASES)
def test_hessenberg_has_exact_zeros(n: int, m: int, hidden: int) -> None:
    A, B = integers(n, m, hidden, 5)
    H, b, Q = controller_hessenberg(A, B)
    assert not np.any(np.tril(H, -m - 1)) and not np.any(np.tril(b, -1))
    assert np.linalg.norm(Q.T @ Q - np.eye(n)) <= 20 * n * EPS
    assert np.linalg.norm(Q @ H - A @ Q) <= 20 * n * EPS * np.linalg.norm(A)
    assert np.linalg.norm(Q @ b - B) <= 20 * n * EPS * np.linalg.norm(B)


def test_nothing_reaches_anything() -> None:
    for m in (1, 2):
        found = staircase(np.diag([1.0, 2.0, 3.0]), np.zeros((3, m)))
        assert found.sizes == () and found.order == 0 and not np.any(found.B)
        assert found.smallest_kept == np.inf and found.largest_dropped == 0
    assert staircase(np.zeros((0, 0)), np.zeros((0, 2))).sizes == ()


def test_the_threshold_decides() -> None:
    """A chain with one weak link: 1e-6 of it is kept or dropped by the threshold alone."""
    A = np.diag([1.0, 1.0, 1e-6, 1.0], -1)
    B = np.eye(5)[:, :1]
    for inputs in (B, np.hstack([B, np.zeros((5, 1))])):
        assert reachability_staircase(A, inputs, (0.0, 1e-7)).sizes == (1, 1, 1, 1, 1)
        cut = reachability_staircase(A, inputs, (0.0, 1e-5))
        assert cut.sizes == (1, 1, 1) and cut.largest_dropped == pytest.approx(0.1)
        assert cut.smallest_kept == pytest.approx(1e5)


def test_inputs_are_not_changed() -> None:
    A, B = integers(6, 2, 2, 0)
    before = A.copy(), B.copy()
    staircase(A, B)
    staircase(A, B[:, :1])
    controller_hessenberg(A, B)
    assert np.array_equal(before[0], A) and np.array_equal(before[1], B)


def test_indices_are_the_conjugate_partition() -> None:
    assert controllability_indices((3, 2, 2, 1), 4) == (4, 3, 1, 0)
    assert observability_indices((1, 1, 1), 1) == (3,)
    assert controllability_indices((), 2) == (0, 0)
