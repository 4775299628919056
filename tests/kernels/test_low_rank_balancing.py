"""Gramian factors of large models without a Schur form: against the Schur form, and what is left to it."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg

from realize.kernels import low_rank_balancing
from realize.kernels.alternating_directions import low_rank_factor
from realize.kernels.balancing import balanced_part, hankel_factors
from realize.kernels.hessenberg import BLOCK, ShiftedHessenberg
from realize.kernels.leading_part import leading_part
from realize.kernels.low_rank_balancing import low_rank_factors
from realize.kernels.splitting import split_stable

EPS = np.finfo(float).eps
ORDER = 300


@pytest.fixture(autouse=True)
def small_models_too(monkeypatch):
    monkeypatch.setattr(low_rank_balancing, "FROM_ORDER", 50)


def damped(sampled, n=ORDER, m=1, p=1):
    rng = np.random.default_rng(n + sampled)
    A = rng.standard_normal((n, n)) / np.sqrt(n)
    A = A / np.abs(np.linalg.eigvals(A)).max() * 0.7 if sampled else A - 1.5 * np.eye(n)
    return A, rng.standard_normal((n, m)), rng.standard_normal((p, n))


@pytest.mark.parametrize("n", [1, 2, BLOCK - 1, BLOCK, BLOCK + 1, 2 * BLOCK + 1, 110])
def test_shifted_solutions(n):
    rng = np.random.default_rng(n)
    H = scipy.linalg.hessenberg(rng.standard_normal((n, n)))
    W, shifts = rng.standard_normal((n, 3)), np.array([0.3 + 1j, -4.0 + 0j, 20 - 3j])
    for shift, x in zip(shifts, ShiftedHessenberg(H).solve(shifts, W), strict=True):
        size = np.linalg.norm(H) * np.linalg.norm(x) + np.linalg.norm(W)
        assert np.linalg.norm((H + shift * np.eye(n)) @ x.T - W) <= 200 * EPS * size


def test_shifted_solutions_of_a_split_matrix():
    """Zeros below the diagonal at and beside the border of a block."""
    n = 3 * BLOCK
    H = np.triu(np.random.default_rng(1).standard_normal((n, n)), -1) - 9 * np.eye(n)
    for k in (BLOCK - 2, BLOCK - 1, BLOCK, 2 * BLOCK - 1, 2 * BLOCK):
        H[k + 1, k] = 0.0
    W, shifts = np.ones((n, 1)), np.array([-3.0 + 2j])
    x = ShiftedHessenberg(H).solve(shifts, W)[0]
    assert np.linalg.norm((H + shifts[0] * np.eye(n)) @ x.T - W) <= 1e4 * EPS * np.linalg.norm(H) * np.linalg.norm(x)


@pytest.mark.parametrize("sampled", [False, True])
def test_same_as_by_the_schur_form(sampled):
    A, B, C = damped(sampled)
    found = low_rank_factors(A, B, C, sampled=sampled)
    assert found is not None
    split = split_stable(A, B, C, sampled=sampled)
    expected = hankel_factors(*split.stable, sampled=sampled)
    assert found.left.shape[1] >= 8
    assert np.all(np.abs(found.values - expected.values) <= found.errors + expected.errors)
    assert np.abs(found.values - expected.values)[:8].max() <= 1e3 * EPS * expected.values[0]
    roots = found.roots
    for one, two in (
        (A @ roots.L, roots.L @ roots.N),
        (roots.R @ A, roots.M @ roots.R),
        (B, roots.L @ roots.input),
        (C, roots.output @ roots.R),
    ):
        assert np.linalg.norm(one - two) <= 1e3 * EPS * max(np.linalg.norm(one), np.linalg.norm(two))
    part, other = balanced_part(found, 6), balanced_part(expected, 6)
    for name in "ABC":
        assert np.allclose(getattr(part, name), getattr(other, name), rtol=0, atol=1e-8)
    assert np.abs(part.W.T @ part.V - np.eye(6)).max() <= 1e-10


@pytest.mark.parametrize("pole", [0.2, 0.0, -1e-12, 1e-12])
def test_unstable_and_nearly_so_is_left_to_the_schur_form(pole):
    A, B, C = damped(False)
    rng = np.random.default_rng(5)
    A = scipy.linalg.block_diag(A[:-1, :-1], pole)
    Q = np.linalg.qr(rng.standard_normal(A.shape))[0]
    assert low_rank_factors(Q @ A @ Q.T, B, C, sampled=False) is None


def test_an_unstable_pole_that_no_input_reaches_is_noticed():
    A, B, C = damped(False)
    A[:-1, -1] = 0.0
    A[-1] = 0.0
    A[-1, -1] = 0.5
    B[-1] = 0.0
    C[:, -1] = 0.0
    assert low_rank_factors(A, B, C, sampled=False) is None


def test_many_lightly_damped_modes_are_left_to_the_schur_form():
    w = np.geomspace(1, 1000, ORDER // 2)
    A = scipy.linalg.block_diag(*[np.array([[-0.005 * x, x], [-x, -0.005 * x]]) for x in w])
    rng = np.random.default_rng(2)
    assert low_rank_factors(A, rng.standard_normal((ORDER, 1)), rng.standard_normal((1, ORDER)), sampled=False) is None


def test_the_factor_solves_the_equation_but_for_what_it_says():
    A, B, _ = damped(False)
    H, Q = scipy.linalg.hessenberg(A, calc_q=True)
    b = Q.T @ B
    start = np.linalg.eigvals(H[:30, :30]).astype(complex)
    found = low_rank_factor(ShiftedHessenberg(H), b, start, nearest=1e-5, tolerance=1e-6, proof=1e-3)
    assert found is not None
    P = found.L @ found.L.T
    residual = H @ P + P @ H.T + b @ b.T - found.U @ found.U.T
    assert np.linalg.norm(residual) <= 1e3 * EPS * np.linalg.norm(H) * np.linalg.norm(P)
    lacking = scipy.linalg.solve_continuous_lyapunov(H, -found.U @ found.U.T)
    assert 0 < np.trace(lacking) <= found.left_out**2 <= 1e-12 * np.trace(P)


@pytest.mark.parametrize("n", [4, 400])
def test_leading_part(n):
    rng = np.random.default_rng(n)
    U, V = (np.linalg.qr(rng.standard_normal((n, n)))[0] for _ in range(2))
    exact = 10.0 ** -np.arange(n, dtype=float)
    M = (U * exact) @ V.T
    found = leading_part(M.copy(), 1e-12)
    k = found.left.shape[1]
    assert np.all(np.diff(found.values) <= 0) and found.values.size == n
    assert np.all(np.abs(found.values - exact) <= found.rest + 100 * EPS)
    assert np.linalg.norm(M - (found.left * found.values[:k]) @ found.right.T, 2) <= 1.01 * found.rest + 100 * EPS
    assert np.abs(found.left.T @ found.left - np.eye(k)).max() <= 100 * EPS


def test_leading_part_of_nothing():
    found = leading_part(np.zeros((300, 300)), 0.0)
    assert found.left.shape == (300, 0) and not np.any(found.values)
