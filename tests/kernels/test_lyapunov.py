"""Gramian factors: the equations they solve, their companions, and refusal of unstable input."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg
from hypothesis import given, settings
from hypothesis import strategies as st

from realize.kernels.lyapunov import (
    NotStable,
    gramian_factors,
    quasi_triangular_sylvester,
    schur_eigenvalues,
    square_roots,
)

EPS = np.finfo(float).eps


def random_model(n, m, p, seed, sampled):
    rng = np.random.default_rng(seed)
    A = rng.standard_normal((n, n))
    poles = np.linalg.eigvals(A)
    A = A / np.abs(poles).max() * 0.95 if sampled else A - (poles.real.max() + 0.1) * np.eye(n)
    return A, rng.standard_normal((n, m)), rng.standard_normal((p, n))


@settings(max_examples=40, deadline=None)
@given(
    n=st.integers(1, 12), m=st.integers(1, 15), p=st.integers(1, 3), seed=st.integers(0, 10**6), sampled=st.booleans()
)
def test_equations_hold_to_rounding(n, m, p, seed, sampled):
    A, B, C = random_model(n, m, p, seed, sampled)
    L, R = gramian_factors(A, B, C, sampled=sampled)
    P, Q = L @ L.T, R.T @ R
    if sampled:
        one, two = A @ P @ A.T - P + B @ B.T, A.T @ Q @ A - Q + C.T @ C
        scale = 1 + np.linalg.norm(A) ** 2
    else:
        one, two = A @ P + P @ A.T + B @ B.T, A.T @ Q + Q @ A + C.T @ C
        scale = np.linalg.norm(A)
    # backward stable up to a modest power of n; the bilinear map adds the distance of the poles from -1
    limit = (2000 if sampled else 100) * n * EPS * scale
    assert np.linalg.norm(one) <= limit * np.linalg.norm(P)
    assert np.linalg.norm(two) <= limit * np.linalg.norm(Q)


@pytest.mark.parametrize("sampled", [False, True])
@pytest.mark.parametrize("n", [1, 2, 3, 41, 90])
def test_companions(n, sampled):
    A, B, C = random_model(n, 2, 3, n, sampled)
    T, Z = scipy.linalg.schur(A)
    B, C = Z.T @ B, C @ Z
    roots = square_roots(T, B, C, sampled=sampled)
    limit = 1e4 * n * EPS
    assert np.linalg.norm(roots.R @ T - roots.M @ roots.R) <= limit * np.linalg.norm(T) * np.linalg.norm(roots.R)
    assert np.linalg.norm(T @ roots.L - roots.L @ roots.N) <= limit * np.linalg.norm(T) * np.linalg.norm(roots.L)
    assert np.linalg.norm(roots.L @ roots.input - B) <= limit * np.linalg.norm(B)
    assert np.linalg.norm(roots.output @ roots.R - C) <= limit * np.linalg.norm(C)


def test_scalar_by_hand():
    L, R = gramian_factors(np.array([[-2.0]]), np.array([[6.0]]), np.array([[4.0]]), sampled=False)
    assert L[0, 0] ** 2 == pytest.approx(9, rel=4 * EPS) and R[0, 0] ** 2 == pytest.approx(4, rel=4 * EPS)
    L, _ = gramian_factors(np.array([[0.5]]), np.array([[3.0]]), np.array([[1.0]]), sampled=True)
    assert L[0, 0] ** 2 == pytest.approx(12, rel=8 * EPS)


@pytest.mark.parametrize("damping", [1.0 - 1e-12, 0.5, 1e-6, 1e-12])
def test_oscillator_by_hand(damping):
    """s^2 + 2 d s + 1 driven by force: position variance 1/(4 d), velocity variance 1/(4 d), uncorrelated."""
    A = np.array([[0.0, 1.0], [-1.0, -2 * damping]])
    L, _ = gramian_factors(A, np.array([[0.0], [1.0]]), np.array([[1.0, 0.0]]), sampled=False)
    P = L @ L.T * 4 * damping
    # the damping itself is known to eps only, relative to the frequency
    assert np.allclose(P, np.eye(2), rtol=0, atol=20 * EPS / damping + 1e-6 * (damping > 0.9))


def test_unreachable_and_unseen_states_give_zero_rows():
    A = np.diag([-1.0, -2.0, -3.0])
    L, R = gramian_factors(A, np.array([[1.0], [0], [0]]), np.array([[0.0, 1.0, 0]]), sampled=False)
    assert np.linalg.matrix_rank(L) == 1 and np.linalg.matrix_rank(R) == 1
    assert not np.any(R @ L)


@pytest.mark.parametrize("sampled", [False, True])
def test_no_states(sampled):
    L, R = gramian_factors(np.zeros((0, 0)), np.zeros((0, 2)), np.zeros((3, 0)), sampled=sampled)
    assert L.shape == R.shape == (0, 0)


@pytest.mark.parametrize("power", [-900, 900])
def test_unit_of_time(power):
    A, B, C = random_model(7, 2, 1, 5, False)
    L, R = gramian_factors(A, B, C, sampled=False)
    other, own = gramian_factors(np.ldexp(A, power), B, C, sampled=False)
    assert np.allclose(np.ldexp(other @ other.T, power), L @ L.T, rtol=1e-12, atol=0)
    assert np.allclose(np.ldexp(own.T @ own, power), R.T @ R, rtol=1e-12, atol=0)


@pytest.mark.parametrize(("pole", "sampled"), [(0.0, False), (1.0, False), (1.0, True), (-1.5, True)])
def test_unstable_is_refused(pole, sampled):
    A = np.diag([pole, -0.5])
    with pytest.raises(NotStable):
        gramian_factors(A, np.ones((2, 1)), np.ones((1, 2)), sampled=sampled)
    assert issubclass(NotStable, ValueError)


@pytest.mark.parametrize("transposed", [False, True])
@pytest.mark.parametrize("sign", [1, -1])
@pytest.mark.parametrize(("m", "n"), [(1, 1), (2, 90), (90, 1), (100, 101)])
def test_sylvester(m, n, sign, transposed):
    rng = np.random.default_rng(m + n)
    A, _ = scipy.linalg.schur(rng.standard_normal((m, m)) + 3 * np.sqrt(m) * np.eye(m))
    B, _ = scipy.linalg.schur(rng.standard_normal((n, n)) + sign * 3 * np.sqrt(n) * np.eye(n))
    F = rng.standard_normal((m, n))
    before = F.copy()
    X = quasi_triangular_sylvester(A, B, F, transposed=transposed, sign=sign)
    residual = (A.T if transposed else A) @ X + sign * X @ B - F
    size = np.linalg.norm(X) * (np.linalg.norm(A) + np.linalg.norm(B))
    assert np.linalg.norm(residual) <= 20 * EPS * size
    assert np.array_equal(F, before)


def test_sylvester_without_solution():
    with pytest.raises(ValueError):
        quasi_triangular_sylvester(np.eye(2), np.eye(2), np.ones((2, 2)), transposed=False, sign=-1)


def test_eigenvalues_of_a_schur_form():
    T, _ = scipy.linalg.schur(np.random.default_rng(3).standard_normal((30, 30)))
    expected = np.linalg.eigvals(T)
    assert np.allclose(np.sort_complex(schur_eigenvalues(T)), np.sort_complex(expected), rtol=1e-12)
    small = schur_eigenvalues(np.array([[-1e-200, 1e-200], [-1e-200, -1e-200]]))
    assert np.allclose(small / 1e-200, [-1 + 1j, -1 - 1j], rtol=1e-14)
