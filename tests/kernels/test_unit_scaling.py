"""Units taken out of a model: chains of states have no drift, couplings in no loop set no unit."""

from __future__ import annotations

import numpy as np
import pytest

from realize.kernels.lyapunov import Companion, observability_factor
from realize.kernels.unit_scaling import far_apart, scale_model


def test_a_chain_in_any_units_is_scaled_like_itself():
    """Heat along a bar, neighbours coupled both ways, each state in a unit of its own."""
    n = 60
    A = 100.0 * (np.diag(np.full(n, -2.0)) + np.diag(np.ones(n - 1), 1) + np.diag(np.ones(n - 1), -1))
    B, C = np.zeros((n, 1)), np.zeros((1, n))
    B[20], C[0, 40] = 1.0, 1.0
    plain = scale_model(A, B, C, sampled=False)
    for seed in range(5):
        units = np.ldexp(1.0, np.random.default_rng(seed).integers(-40, 41, n))
        other = scale_model(units[:, None] * A / units, units[:, None] * B, C / units, sampled=False)
        assert np.array_equal(other.A, plain.A) and other.gain == plain.gain
        assert np.array_equal(other.B, plain.B) and np.array_equal(other.C, plain.C)


@pytest.mark.parametrize("coupling", [1e300, 1e40, 1e13])
def test_couplings_in_no_loop(coupling):
    A = np.array([[-1.0, coupling, 0.0], [0.0, -2.0, coupling / 7], [0.0, 0.0, -3.0]])
    B, C = np.array([[0.0], [0.0], [1.0]]), np.array([[1.0, 0.0, 0.0]])
    scaled = scale_model(A, B, C, sampled=False)
    # all of it is exact: the same model in other units
    states = scaled.states
    assert np.array_equal(np.ldexp(scaled.A, scaled.time + states[:, None] - states[None, :]), A)
    assert np.array_equal(np.ldexp(scaled.B, scaled.input + states[:, None]), B)
    assert np.array_equal(np.ldexp(scaled.C, scaled.output - states[None, :]), C)
    assert far_apart(A)
    if coupling > 1e20:
        assert np.abs(np.diagonal(scaled.A)).max() >= 0.25 and np.abs(scaled.A).max() < 64


def test_far_apart_is_about_loops():
    assert not far_apart(np.array([[-1.0, 1e300], [-1e300, -1.0]]))
    assert not far_apart(np.array([[-1.0, 1e300], [-1e-300, -1.0]]) * 0) and not far_apart(np.zeros((0, 0)))
    assert far_apart(np.array([[-1.0, 1e300], [-1e-300, -1.0]]))


def test_a_companion_is_given_back_in_full():
    T = np.array([[-1.0, 3.0, 2.0, 0.5], [-3.0, -1.0, 0.3, 1.0], [0.0, 0.0, -2.0, 0.7], [0.0, 0.0, 0.0, -0.5]])
    R, V, M = observability_factor(T, np.array([[1.0, 2.0, -1.0, 0.3], [0.5, 0.0, 1.0, 1.0]]))
    assert np.array_equal(Companion.of(M, V).full(), M)
    assert np.allclose(R @ T, Companion.of(M, V).full() @ R, rtol=0, atol=1e-13)


def test_modes_that_stand_alone_are_moved_as_a_whole():
    """Each mode in units of its own: what its input gains its output loses, and no state could move by itself."""
    rng = np.random.default_rng(3)
    k = 40
    w = np.geomspace(1.0, 100.0, k)
    A = np.zeros((2 * k, 2 * k))
    A[:k, k:], A[k:, :k], A[k:, k:] = np.eye(k), -np.diag(w**2), -np.diag(0.02 * w)
    B, C = np.zeros((2 * k, 1)), np.zeros((1, 2 * k))
    B[k:], C[0, k:] = 1.0, 1.0
    units = np.ldexp(1.0, rng.integers(-40, 41, 2 * k))
    scaled = scale_model(units[:, None] * A / units, units[:, None] * B, C / units, sampled=False)
    ratio = np.abs(scaled.B[k:, 0] / scaled.C[0, k:])
    assert ratio.max() <= 64 * ratio.min()
