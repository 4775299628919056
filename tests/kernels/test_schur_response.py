"""The response of large dense models: against solutions point by point, at poles, and which frequencies are dropped."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg

from realize.kernels.schur_response import BLOCK, LARGE, POINTS, Basis, SchurResponse, suits, thinned

EPS = np.finfo(float).eps


@pytest.mark.parametrize("n", [1, 2, BLOCK, BLOCK + 1, 3 * BLOCK + 5])
@pytest.mark.parametrize("shape", [(1, 1), (1, 3), (2, 1)])
def test_values_and_solutions(n, shape):
    rng = np.random.default_rng(n)
    A = rng.standard_normal((n, n)) - 2 * np.sqrt(n) * np.eye(n)
    B, C = rng.standard_normal((n, shape[1])), rng.standard_normal((shape[0], n))
    large = SchurResponse(A, B, C)
    points = np.concatenate([1j * np.geomspace(1e-3, 1e3, POINTS + 3), [2.0 - 3j]])
    values = large.values(points)
    right, left = large.solutions(points)
    a, b, c = large.scaled
    for s, value, x, y in zip(points, values, right, left, strict=True):
        expected = C @ np.linalg.solve(s * np.eye(n) - A, B)
        assert np.abs(value - expected).max() <= 1e4 * EPS * np.abs(expected).max()
        pencil = s * np.eye(n) - a
        assert np.linalg.norm(pencil @ x.T - b) <= 1e3 * EPS * np.linalg.norm(pencil) * np.linalg.norm(x)
        assert np.linalg.norm(y @ pencil - c) <= 1e3 * EPS * np.linalg.norm(pencil) * np.linalg.norm(y)
    expected = np.sort_complex(np.linalg.eigvals(A))
    assert np.abs(np.sort_complex(large.poles) - expected).max() <= 1e3 * EPS * np.abs(A).max() * n


def test_infinite_at_a_pole_alone():
    values = SchurResponse(np.diag([-1.0, -2.0, -3.0]), np.ones((3, 1)), np.ones((1, 3))).values(
        np.array([-2.0 + 0j, 0j])
    )
    assert np.isinf(values[0]).all() and values[1, 0, 0] == pytest.approx(1 + 1 / 2 + 1 / 3)


def test_no_points():
    assert SchurResponse(-np.eye(2), np.ones((2, 1)), np.ones((3, 2))).values(np.zeros(0, complex)).shape == (0, 3, 1)


def test_which_models():
    dense = np.random.default_rng(1).standard_normal((LARGE, LARGE))
    assert suits(dense, None) and not suits(dense, np.eye(LARGE)) and not suits(dense[1:, 1:], None)
    assert not suits(scipy.linalg.schur(dense)[0], None)


def test_thinned_keeps_what_a_close_pole_needs():
    w = np.linspace(0, 10, 1001)
    poles = np.array([-0.01 + 5j, -0.01 - 5j, -3.0])
    kept = thinned(w, 1j * w, poles, 0.2)
    assert kept[0] == 0 and kept[-1] == 10 and kept.size < 200
    near = kept[np.abs(kept - 5) < 0.05]
    assert near.size >= 9
    # nowhere a gap larger than a fifth of the distance to the nearest pole, but for the steps of the samples themselves
    gap = np.diff(kept)
    distance = np.min(np.abs(1j * kept[:-1, None] - poles), axis=1)
    assert np.all(gap <= 0.2 * distance + 0.0101)


def test_points_that_were_seen_before_and_none_at_all():
    rng = np.random.default_rng(3)
    A, B, C = rng.standard_normal((40, 40)), rng.standard_normal((40, 3)), rng.standard_normal((2, 40))
    response = SchurResponse(A, B, C)
    points = np.array([0.5 + 1j, 2j, 0.5 + 1j, -3j])
    exact = np.array([C @ np.linalg.solve(s * np.eye(40) - A, B) for s in points])
    first, again = response.values(points), response.values(points[::-1])
    assert np.abs(first - exact).max() < 1e-10 * np.abs(exact).max()
    assert np.array_equal(first[::-1], again)
    assert response.values(points[:0]).shape == (0, 2, 3)
    assert [part.shape for part in response.solutions(points[:0])] == [(0, 3, 40), (0, 2, 40)]


def blocked(n, sizes, lower):
    """Return a stable block triangular matrix with blocks of these sizes."""
    rng = np.random.default_rng(n)
    T, at = np.triu(rng.standard_normal((n, n))), 0
    while at < n:
        for size in sizes:
            T[at : at + size, at : at + size] = rng.standard_normal(T[at : at + size, at : at + size].shape)
            at += size
    T -= 3 * np.sqrt(n) * np.eye(n)
    return T.T if lower else T


@pytest.mark.parametrize("lower", [False, True])
@pytest.mark.parametrize("sizes", [(1,), (3, 1, 2), (BLOCK + 5,), (2, 2 * BLOCK)])
def test_bases_with_longer_blocks(sizes, lower):
    n = 3 * BLOCK + 7
    N = blocked(n, sizes, lower)
    rng = np.random.default_rng(1)
    Q = np.linalg.qr(rng.standard_normal((n, n)))[0]
    states = rng.integers(-9, 9, n)
    units = np.ldexp(1.0, states)
    A = units[:, None] * (Q @ N @ Q.T) / units
    B, C = rng.standard_normal((n, 2)), rng.standard_normal((3, n))
    F, H = Q.T @ (B / units[:, None]), (C * units) @ Q
    made = SchurResponse.of_basis(A, B, C, Basis(states, (Q, N, F), (Q.T, N, H), np.linalg.eigvals(N)))
    assert made is not None
    points = 1j * np.geomspace(1e-2, 1e2, 9)
    exact = np.array([C @ np.linalg.solve(s * np.eye(n) - A, B) for s in points])
    assert np.abs(made.values(points) - exact).max() <= 1e5 * EPS * np.abs(exact).max()
    right, left = made.solutions(points)
    a, b, c = made.scaled
    for s, x, y in zip(points, right, left, strict=True):
        pencil = s * np.eye(n) - a
        assert np.linalg.norm(pencil @ x.T - b) <= 1e3 * EPS * np.linalg.norm(pencil) * np.linalg.norm(x)
        assert np.linalg.norm(y @ pencil - c) <= 1e3 * EPS * np.linalg.norm(pencil) * np.linalg.norm(y)


def test_a_narrow_basis():
    """Inputs that reach a part of the states only need no more."""
    rng = np.random.default_rng(2)
    A = np.triu(rng.standard_normal((30, 30))) - 9 * np.eye(30)
    B, C = np.zeros((30, 1)), rng.standard_normal((1, 30))
    B[:10] = 1.0
    L, R = np.eye(30)[:, :10], np.eye(30)
    basis = Basis(np.zeros(30, dtype=np.int64), (L, A[:10, :10], B[:10]), (R, A, C), np.diagonal(A).astype(complex))
    made = SchurResponse.of_basis(A, B, C, basis)
    assert made is not None
    assert made.values(np.array([2j]))[0, 0, 0] == pytest.approx(
        complex((C @ np.linalg.solve(2j * np.eye(30) - A, B))[0, 0])
    )


@pytest.mark.parametrize("wrong", ["A", "B", "C", "N", "M", "not finite"])
def test_a_basis_of_another_model_is_refused(wrong):
    rng = np.random.default_rng(4)
    A, B, C = rng.standard_normal((40, 40)), rng.standard_normal((40, 2)), rng.standard_normal((1, 40))
    T, Q = scipy.linalg.schur(A)
    parts = {"A": A.copy(), "B": B.copy(), "C": C.copy(), "N": T.copy(), "M": T.copy()}
    if wrong != "not finite":
        # one entry, by little
        parts[wrong][0, -1] += 1e-8
    else:
        parts["N"][0, 0] = np.nan
    basis = Basis(
        np.zeros(40, dtype=np.int64), (Q, parts["N"], Q.T @ B), (Q.T, parts["M"], C @ Q), np.linalg.eigvals(A)
    )
    assert SchurResponse.of_basis(A, B, C, basis) is None or wrong in "ABC"
    assert SchurResponse.of_basis(parts["A"], parts["B"], parts["C"], basis) is None
