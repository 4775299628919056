"""Scaling, Hankel singular values and balanced coordinates."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy.linalg
from hypothesis import given, settings
from hypothesis import strategies as st

from realize.kernels.balancing import (
    balanced_part,
    balancing_free_projection,
    equal_groups,
    hankel_factors,
    tail_bounds,
)
from realize.kernels.lyapunov import gramian_factors
from realize.kernels.unit_scaling import scale_model


def random_model(n, m, p, seed, sampled):
    rng = np.random.default_rng(seed)
    A = rng.standard_normal((n, n))
    poles = np.linalg.eigvals(A)
    A = A / np.abs(poles).max() * 0.95 if sampled else A - (poles.real.max() + 0.1) * np.eye(n)
    return A, rng.standard_normal((n, m)), rng.standard_normal((p, n))


def schur_model(A, B, C):
    T, Q = scipy.linalg.schur(A)
    return T, Q.T @ B, C @ Q


@settings(max_examples=30, deadline=None)
@given(n=st.integers(1, 10), seed=st.integers(0, 10**6), sampled=st.booleans())
def test_balanced_model_has_equal_diagonal_gramians(n, seed, sampled):
    T, B, C = schur_model(*random_model(n, 2, 2, seed, sampled))
    factors = hankel_factors(T, B, C, sampled=sampled)
    whole = balanced_part(factors, n)
    L, R = gramian_factors(whole.A, whole.B, whole.C, sampled=sampled)
    size = factors.values[0]
    limit = 1e-9 * size
    assert np.abs(L @ L.T - np.diag(factors.values)).max() <= limit
    assert np.abs(R.T @ R - np.diag(factors.values)).max() <= limit
    part = balanced_part(factors, (n + 1) // 2)
    half = part.A.shape[0]
    assert np.abs(part.W.T @ part.V - np.eye(half)).max() <= 1e-7
    for projected, own in ((part.W.T @ T @ part.V, part.A), (part.W.T @ B, part.B), (C @ part.V, part.C)):
        assert np.abs(projected - own).max() <= 1e-7 * np.abs(own).max()
    W, V = balancing_free_projection(factors, half)
    assert np.abs(W.T @ V - np.eye(half)).max() <= 1e-7
    poles = [np.sort_complex(np.linalg.eigvals(matrix)) for matrix in (W.T @ T @ V, part.A)]
    assert np.abs(poles[0] - poles[1]).max() <= 1e-4 * np.abs(T).max()


def test_values_far_below_the_first_are_accurate():
    """sum of b_i / (s + a_i): the product of the Gramians is a product of Cauchy matrices, exact in rationals."""
    from fractions import Fraction

    import flint

    a = [Fraction(2) ** k for k in range(10)]
    n = len(a)
    gramian = [[1 / (a[i] + a[j]) for j in range(n)] for i in range(n)]
    # P = Q, so the Hankel singular values are the eigenvalues of P, here to 60 digits
    before = flint.ctx.prec
    try:
        flint.ctx.prec = 400
        matrix = flint.acb_mat(
            n, n, [flint.acb(flint.fmpq(g.numerator, g.denominator)) for row in gramian for g in row]
        )
        exact = sorted((float(value.real) for value in matrix.eig()), reverse=True)
    finally:
        flint.ctx.prec = before
    A, B = -np.diag([float(value) for value in a]), np.ones((n, 1))
    scaled = scale_model(A, B, B.T, sampled=False)
    factors = hankel_factors(*schur_model(scaled.A, scaled.B, scaled.C), sampled=False)
    values = np.ldexp(factors.values, scaled.gain)
    error = np.abs(values - exact)
    assert exact[-1] < 1e-6 * exact[0]
    assert np.all(error <= 1e-12 * np.array(exact))
    assert np.all(error <= np.ldexp(factors.errors, scaled.gain) + 1e-14 * values)


@pytest.mark.parametrize("exponents", [(0, 0, 0), (900, -450, 300), (-900, 400, -500), (3, 801, 1)])
def test_units_come_out_exactly(exponents):
    time, inputs, outputs = exponents
    A, B, C = random_model(6, 2, 3, 1, False)
    one = scale_model(A, B, C, sampled=False)
    two = scale_model(np.ldexp(A, time), np.ldexp(B, inputs), np.ldexp(C, outputs), sampled=False)
    assert np.array_equal(one.A, two.A)
    # only the evenness of input and output may shift a factor between B and the exponent
    shift = math.log2(np.abs(two.B / one.B).max())
    assert two.gain - one.gain == inputs + outputs - time - shift
    assert (two.input + two.output) % 2 == 0
    back = np.ldexp(two.A, two.time + two.states[:, None] - two.states[None, :])
    assert np.array_equal(back, np.ldexp(A, time))
    assert np.array_equal(np.ldexp(two.B, two.input + two.states[:, None]), np.ldexp(B, inputs))
    assert np.array_equal(np.ldexp(two.C, two.output - two.states[None, :]), np.ldexp(C, outputs))


def test_state_units_are_balanced_with_inputs_and_outputs():
    A, B, C = np.diag([-1.0, -2.0]), np.array([[1e10], [1e-10]]), np.array([[1e-10, 1e10]])
    scaled = scale_model(A, B, C, sampled=False)
    assert np.abs(scaled.B).min() > 0.1 and np.abs(scaled.C).min() > 0.1


def test_bounds_count_equal_values_once():
    values = np.array([2.0, 1.0, 1.0, 0.25])
    assert list(equal_groups(values)) == [0, 1, 1, 2]
    assert list(tail_bounds(values)) == [6.5, 2.5, 2.5, 0.5, 0.0]
    assert list(tail_bounds(np.zeros(0))) == [0.0]


def test_signs_do_not_depend_on_the_coordinates():
    A, B, C = random_model(5, 1, 2, 3, False)
    Q, _ = np.linalg.qr(np.random.default_rng(1).standard_normal((5, 5)))
    parts = [
        balanced_part(hankel_factors(*schur_model(*model), sampled=False), 3)
        for model in ((A, B, C), (Q.T @ A @ Q, Q.T @ B, C @ Q))
    ]
    assert np.allclose(parts[0].A, parts[1].A, atol=1e-9) and np.allclose(parts[0].C, parts[1].C, atol=1e-9)
