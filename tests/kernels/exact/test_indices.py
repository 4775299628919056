"""Controllability and observability indices, relative degrees, on plants where they can be read off."""

from __future__ import annotations

import numpy as np
import pytest

from realize.kernels.exact.indices import krylov_indices, markov_indices, state_relative_degrees
from realize.kernels.exact.pencils import prime


def exact(matrix):
    return [[float(entry).as_integer_ratio() for entry in row] for row in np.atleast_2d(matrix)]


def chains(sizes):
    """Chains of integrators of these lengths, each driven at its own input."""
    n = sum(sizes)
    A, B = np.zeros((n, n)), np.zeros((n, len(sizes)))
    start = 0
    for j, size in enumerate(sizes):
        for k in range(size - 1):
            A[start + k + 1, start + k] = 1.0
        if size:
            B[start, j] = 1.0
        start += size
    return A, B


@pytest.mark.parametrize("sizes", [(3,), (2, 2), (4, 1), (1, 3, 2), (2, 0, 1)])
def test_chains_in_any_coordinates(sizes):
    A, B = chains(sizes)
    rng = np.random.default_rng(1)
    n = A.shape[0]
    T, S = np.eye(n, dtype=int), np.eye(n, dtype=int)
    for _ in range(12):
        i, j = rng.integers(0, n, 2)
        if i != j:
            shear = np.eye(n, dtype=int)
            shear[i, j] = int(rng.integers(-3, 4))
            back = 2 * np.eye(n, dtype=int) - shear
            T, S = shear @ T, S @ back
    assert np.array_equal(T @ S, np.eye(n, dtype=int))
    F = rng.integers(-2, 3, (len(sizes), n))
    # feedback and coordinates leave the indices alone
    assert krylov_indices(exact(T @ (A + B @ F) @ S), exact(T @ B)) == list(sizes)


def test_units_do_not_matter():
    A, B = chains((3, 2))
    d = np.ldexp(1.0, [300, -200, 0, 7, -400])
    assert krylov_indices(exact(A * d[:, None] / d), exact(B * d[:, None] * [1e-200, 1e200])) == [3, 2]


def test_order_of_inputs_counts():
    # b2 = A b1: what the second input reaches first is already the second step of the first
    A = np.array([[0.0, 0.0], [1.0, 0.0]])
    assert krylov_indices(exact(A), exact([[1.0, 0.0], [0.0, 1.0]])) == [1, 1]
    assert krylov_indices(exact(A), exact([[1.0, 2.0], [0.0, 0.0]])) == [2, 0]
    assert krylov_indices(exact(A), exact([[0.0, 1.0], [1.0, 0.0]])) == [1, 1]


def test_hidden_states_are_not_counted():
    assert krylov_indices(exact(np.diag([-1.0, -2.0, -3.0])), exact([[1.0], [0.0], [1.0]])) == [2]
    assert krylov_indices(exact(-np.eye(3)), exact([[1.0], [1.0], [1.0]])) == [1]
    assert krylov_indices([], []) == []


def test_indices_from_markov_parameters():
    # diag(1/s^2, 1/s): h_1 = diag(0, 1), h_2 = diag(1, 0)
    zero = [0, 0, 0, 0]
    assert markov_indices([[0, 0, 0, 1], [1, 0, 0, 0], zero], 2, 2, 2, prime(0)) == ([2, 1], [2, 1])
    # one input, two outputs, 1/s and 2/s: the second output sees nothing new
    assert markov_indices([[1, 2]], 1, 2, 1, prime(0)) == ([1], [1, 0])


def test_relative_degrees_of_states():
    A, B = chains((3,))
    C = np.vstack([np.eye(3)[2], np.eye(3)[0], np.zeros(3), np.eye(3)[1]])
    D = np.array([[0.0], [0.0], [0.0], [1e-300]])
    assert state_relative_degrees(exact(A), exact(B), exact(C), exact(D)) == [[3], [1], [None], [0]]
    assert state_relative_degrees([], [], [[]], exact([[2.0]])) == [[0]]
