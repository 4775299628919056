"""Hankel singular values in doubles: no error is ever larger than its estimate."""

from __future__ import annotations

import numpy as np
import pytest
from flint import arb, fmpq

from realize.kernels.exact.hankel_values import hankel_values
from realize.kernels.exact.numbers import precision
from realize.kernels.exact.states import transfer_matrix
from realize.kernels.hankel_estimates import estimated_values
from realize.kernels.lyapunov import NotStable
from realize.testing.gramians import rational


def true_values(A, B, C):
    A, B, C = rational(A), rational(B), rational(C)
    numerators, d = transfer_matrix(A, B, C, [[fmpq(0)] * len(B[0]) for _ in C])
    return hankel_values([[(n, d) for n in row] for row in numerators], len(A)).balls


def outside(A, B, C):
    values, errors, exponent = estimated_values(A, B, C, sampled=False)
    with precision(200):
        unit = arb(2) ** exponent
        return [
            k
            for k, ball in enumerate(true_values(A, B, C))
            if not abs(ball - arb(float(values[k])) * unit) < arb(float(errors[k])) * unit
        ]


def ladder(n):
    A = -2 * np.eye(n) + np.diag(np.ones(n - 1), 1) + np.diag(np.ones(n - 1), -1)
    A[-1, -1] = -1
    return A, np.eye(n)[:, :1], np.eye(n)[-1:]


def turned(rng, n, condition):
    """Lightly damped modes in coordinates of that condition number."""
    w, z = 10 ** rng.uniform(0, 2, n // 2), 10 ** rng.uniform(-3, -1, n // 2)
    A = np.zeros((n, n))
    for k in range(n // 2):
        A[2 * k : 2 * k + 2, 2 * k : 2 * k + 2] = [[0, w[k]], [-w[k], -2 * z[k] * w[k]]]
    left, right = (np.linalg.qr(rng.standard_normal((n, n)))[0] for _ in range(2))
    T = left * np.geomspace(1, condition, n) @ right
    B, C = rng.standard_normal((n, 2)), rng.standard_normal((2, n))
    return T @ A @ np.linalg.inv(T), T @ B, C @ np.linalg.inv(T)


@pytest.mark.parametrize("n", [1, 2, 10, 30])
def test_ladders(n):
    assert outside(*ladder(n)) == []


@pytest.mark.parametrize("condition", [1.0, 1e2, 1e4])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_modes_in_ill_conditioned_coordinates(condition, seed):
    assert outside(*turned(np.random.default_rng(seed), 10, condition)) == []


def test_stiff_and_far_units():
    rng = np.random.default_rng(6)
    A = np.diag(-(10 ** rng.uniform(-6, 6, 12)))
    B, C = rng.standard_normal((12, 1)), rng.standard_normal((1, 12))
    assert outside(A, B, C) == []
    assert outside(A, B * 1e200, C * 1e-300) == []


def test_well_conditioned_values_have_small_estimates():
    values, errors, _ = estimated_values(*turned(np.random.default_rng(7), 20, 1.0), sampled=False)
    assert np.all(errors < 1e-10 * values)


def test_order_zero_and_not_stable():
    values, errors, exponent = estimated_values(np.zeros((0, 0)), np.zeros((0, 1)), np.zeros((1, 0)), sampled=False)
    assert values.size == errors.size == exponent == 0
    with pytest.raises(NotStable):
        estimated_values(np.eye(2), np.ones((2, 1)), np.ones((1, 2)), sampled=False)
