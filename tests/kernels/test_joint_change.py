"""Changes that hide several modes together."""

from __future__ import annotations

import numpy as np
import pytest

from realize.kernels.joint_change import joint_change


def hidden(seed: int, n: int, h: int, m: int, change: float) -> tuple[np.ndarray, np.ndarray]:
    """[A, B] near one whose last h states are unreachable, and the vectors of those."""
    draw = np.random.default_rng(seed)
    A, B = draw.normal(size=(n, n)), draw.normal(size=(n, m))
    A[n - h :, : n - h], B[n - h :] = 0.0, 0.0
    # h equal eigenvalues in one chain
    A[n - h :, n - h :] = -2 * np.eye(h) + np.eye(h, k=1)
    T = draw.normal(size=(n, n)) * np.exp(draw.normal(size=n))
    inverse = np.linalg.inv(T)
    M = np.hstack([T @ A @ inverse, T @ B])
    return M * (1 + change * draw.uniform(-1, 1, M.shape)), inverse[n - h :].T


@pytest.mark.parametrize("h", [1, 2, 3])
@pytest.mark.parametrize("seed", range(4))
def test_a_known_change_is_found_again(seed: int, h: int) -> None:
    n, change = 9, 1e-9
    M, F = hidden(seed, n, h, 2, change)
    # the start is off by more than the change
    start = F * (1 + 1e-6 * np.random.default_rng(seed).normal(size=F.shape))
    before, _, _ = joint_change(M, start, 0.0, 0)
    found, F, S = joint_change(M, start, 0.0)
    assert found < np.sqrt(n) * change < before
    # what hides them: the change of least norm, column by column, is that small and does it
    residual = F.T @ M
    residual[:, :n] -= S @ F.T
    for j in range(M.shape[1]):
        y = np.linalg.lstsq(F.T * np.abs(M[:, j]), -residual[:, j], rcond=None)[0]
        assert np.abs(y).max() <= found * (1 + 1e-6)
    np.testing.assert_allclose(np.linalg.eigvals(S), -2.0, rtol=0.05)


def test_the_change_does_not_depend_on_basis_and_units() -> None:
    M, F = hidden(5, 8, 3, 2, 1e-9)
    draw = np.random.default_rng(0)
    first = joint_change(M, F, 0.0)[0]
    d = 2.0 ** draw.integers(-20, 21, 8)
    other = M * d[:, None] / np.concatenate([d, [2.0**30, 2.0**-12]])
    turned = (F / d[:, None]) @ draw.normal(size=(3, 3))
    assert joint_change(other, turned, 0.0)[0] == pytest.approx(first, rel=0.2)


def test_zeros_stay_zero() -> None:
    A = np.array([[-1.0, 0.0], [1e-12, -2.0]])
    B = np.array([[1.0], [0.0]])
    # the coupling would have to vanish: a change of all of it
    change, _, _ = joint_change(np.hstack([A, B]), np.array([[0.0], [1.0]]), 0.0)
    assert change == 1.0
    change, F, S = joint_change(np.hstack([A.T, B]), np.array([[0.0], [1.0]]), 0.0)
    assert change == 0.0 and S[0, 0] == -2.0 and F[0, 0] == 0.0


def test_every_state_together() -> None:
    A = np.diag([-1.0, -2.0])
    assert joint_change(np.hstack([A, np.zeros((2, 1))]), np.eye(2), 0.0)[0] == 0.0
    assert joint_change(np.hstack([A, np.ones((2, 1))]), np.eye(2), 0.0)[0] == 1.0
