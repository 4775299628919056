"""Separation of unstable and marginal poles: what is kept, where it is put, and that the response stays."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import block_diag

from realize.kernels.splitting import split_stable


def turned(J, seed=0):
    V = np.random.default_rng(seed).standard_normal(J.shape)
    return V @ J @ np.linalg.inv(V)


def response(parts, s):
    return sum(C @ np.linalg.solve(s * np.eye(len(A)) - A, B) for A, B, C in parts if len(A))


def split(A, sampled=False):
    n = len(A)
    rng = np.random.default_rng(n)
    B, C = rng.standard_normal((n, 2)), rng.standard_normal((3, n))
    result = split_stable(A, B, C, sampled=sampled)
    s = 0.3 + 1.1j
    expected = response([(A, B, C)], s)
    error = np.abs(response([result.stable, result.kept], s) - expected).max()
    assert error <= 1e-11 * np.abs(expected).max() * (1 + result.coupling)
    block = block_diag(result.stable[0], result.kept[0])
    assert np.abs(result.left @ result.right - np.eye(n)).max() <= 1e-11 * (1 + result.coupling)
    assert np.abs(result.left @ A @ result.right - block).max() <= 1e-10 * (1 + result.coupling) * np.abs(A).max()
    return result


INTEGRATORS = np.diag([1.0, 1.0], 1)


@pytest.mark.parametrize(
    ("A", "kept"),
    [
        (np.diag([-1.0, -2.0, 3.0]), [3]),
        (turned(np.diag([-1.0, -2.0, 3.0])), [3]),
        (block_diag(INTEGRATORS, np.diag([-1.0, -2.0])), [0, 0, 0]),
        (turned(block_diag(INTEGRATORS, np.diag([-1.0, -2.0, -3.0]))), [0, 0, 0]),
        (turned(block_diag(INTEGRATORS[:2, :2], np.diag([-1.0, -2.0, 2.0]))), [0, 0, 2]),
        (turned(block_diag([[0.0, 3.0], [-3.0, 0.0]], [[0.0]], np.diag([-1.0, -2.0]))), [0, -3j, 3j]),
        (turned(block_diag([[0.0]], -np.diag(np.arange(1.0, 100.0)))), [0]),
        (np.zeros((1, 1)), [0]),
    ],
)
def test_kept_poles(A, kept):
    result = split(A)
    found = result.kept_poles
    expected = np.array(kept, dtype=complex)
    assert found.size == expected.size
    assert np.allclose(np.sort_complex(found), np.sort_complex(expected), rtol=1e-9, atol=0)
    # poles on the axis are on it exactly, and said to be so
    assert np.all(found[result.marginal].real == 0)
    assert np.count_nonzero(result.marginal) == np.count_nonzero(expected.real == 0)
    assert np.all(result.stable_poles.real < 0)


def test_sampled():
    J = block_diag(INTEGRATORS[:2, :2] + np.eye(2), [[-1.0]], [[0.6, 0.8], [-0.8, 0.6]], np.diag([0.1, 0.2, 1.3]))
    result = split(turned(J), sampled=True)
    assert np.count_nonzero(result.kept_poles == 1) == 2 and np.count_nonzero(result.kept_poles == -1) == 1
    assert result.kept_poles.size == 6 and np.count_nonzero(result.marginal) == 5
    assert np.all(np.abs(result.stable_poles) < 1)


def test_stable_models_with_slow_or_ill_conditioned_poles_keep_nothing():
    companion = np.diag(np.ones(19), -1)
    companion[0] = -np.poly(-np.ones(20))[1:]
    for A in (companion, np.diag([-1e-6, -1e10]), np.diag([-1e-10, -3.7])):
        result = split_stable(A, np.ones((len(A), 1)), np.ones((1, len(A))), sampled=False)
        assert result.kept_poles.size == 0 and result.coupling == 0


def test_no_states_and_nothing_stable():
    none = split_stable(np.zeros((0, 0)), np.zeros((0, 1)), np.zeros((2, 0)), sampled=False)
    assert none.stable[0].shape == none.kept[0].shape == (0, 0)
    unstable = split(np.diag([1.0, 2.0]))
    assert unstable.stable[0].shape == (0, 0) and unstable.stable[2].shape == (3, 0)


def test_a_third_of_a_hundred_poles_unstable():
    rng = np.random.default_rng(8)
    A = rng.standard_normal((100, 100))
    result = split(A)
    assert result.kept_poles.size == np.count_nonzero(np.linalg.eigvals(A).real > 0)
    assert result.separation > 0
