"""Kernels of the starting methods on arrays alone: subspaces, Loewner pencil, barycentric forms."""

from __future__ import annotations

import numpy as np
import pytest

from realize.kernels import barycentric, frequency_subspace, loewner

X = np.concatenate([[0.0], np.geomspace(0.05, 20, 120)])
POLES = np.array([-0.05 + 1j, -0.05 - 1j, -0.4 + 6j, -0.4 - 6j, -0.2])
RESIDUES = np.array([[0.3, 1], [0.3, 1], [1 - 2j, 0.5j], [1 + 2j, -0.5j], [0.3, -0.1]])


def response(x: np.ndarray) -> np.ndarray:
    return (1 / (1j * x[:, None] - POLES)) @ RESIDUES + np.array([0.5, 0.0])


def distance(found: np.ndarray) -> float:
    return float(max(np.min(np.abs(found - pole)) / abs(pole) for pole in POLES))


def test_polynomials_are_orthonormal_and_shift() -> None:
    z = frequency_subspace.circle_points(X[1:], 1.0)
    values, shift = frequency_subspace.orthogonal_polynomials(z, np.linspace(1, 2, z.size), 30)
    flat = np.concatenate([values.real, values.imag])
    assert np.max(np.abs(flat.T @ flat - np.eye(30))) < 1e-13
    assert np.max(np.abs(z[:, None] * values[:, :29] - values @ shift)) < 1e-14
    # four points on the circle: eight real numbers, and no polynomial beyond them
    values, shift = frequency_subspace.orthogonal_polynomials(z[::40], np.ones(3), 30)
    assert values.shape[1] == 6 and shift.shape == (6, 5)


@pytest.mark.parametrize("unlike", [False, True])
def test_subspace_finds_poles_and_their_number(unlike: bool) -> None:
    H = response(X)
    rng = np.random.default_rng(5)
    W = np.exp(rng.normal(size=H.shape)) if unlike else np.full(H.shape, 3.0)
    space = frequency_subspace.observable_space(X, H, W, 8, 1.0)
    assert space.values[5] < 1e-12 * space.values[0] < 1e-6 * space.values[4]
    assert distance(frequency_subspace.subspace_poles(space, 5)) < 1e-11
    assert frequency_subspace.subspace_poles(space, 0).size == 0


def test_noise_of_the_stated_deviation_has_singular_values_near_one() -> None:
    rng = np.random.default_rng(6)
    x = np.linspace(0.1, 10, 4000)
    W = np.exp(rng.normal(size=(x.size, 1)) * 0.5)
    noise = (rng.normal(size=W.shape) + 1j * rng.normal(size=W.shape)) / (np.sqrt(2) * W)
    space = frequency_subspace.observable_space(x, noise, W, 12, 1.0)
    assert np.all(np.abs(space.values - 1) < 0.12)


def test_pencil_of_one_input_and_two_outputs() -> None:
    H = response(X)
    left, right = slice(0, None, 2), slice(1, None, 2)
    directions = np.eye(2, dtype=complex)[np.arange(X[left].size) % 2]
    samples = np.sum(directions * H[left], axis=1)[:, None]
    ones = np.ones((X[right].size, 1), dtype=complex)
    found = loewner.pencil(1j * X[left], directions, samples, 1j * X[right], ones, H[right], 1.0)
    # five poles and a direct term
    assert found.values[6] < 1e-13 * found.values[0] < 1e-9 * found.values[5]
    assert distance(loewner.pencil_poles(found, 6, 1.0)) < 1e-10
    assert loewner.pencil_poles(found, 0, 1.0).size == 0


def test_barycentric_form_is_real_and_interpolates() -> None:
    H = response(X)
    *_, last = barycentric.approximations(X, H, np.ones(H.shape), 6)
    assert last.error < 1e-12
    assert distance(barycentric.poles_of_barycentric(last)) < 1e-10
    s = np.array([0.3 + 2j, 0.3 - 2j, -1.0 + 0.1j, 0.7])
    values = barycentric.evaluated(last, s)
    assert np.allclose(values[0], values[1].conj(), rtol=1e-13)
    assert np.max(np.abs(values[3].imag)) < 1e-12
    exact = (1 / (s[:, None] - POLES)) @ RESIDUES + np.array([0.5, 0.0])
    assert np.max(np.abs(values - exact)) < 1e-10
    at = barycentric.evaluated(last, 1j * last.support)
    assert np.array_equal(at, last.values)
    degrees = [f.degree for f in barycentric.approximations(X, H, np.ones(H.shape), 9)]
    assert degrees == sorted(degrees) and degrees[-1] <= 9
