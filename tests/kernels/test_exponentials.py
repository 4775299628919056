"""Sums of exponentials: powers, linear coefficients, polish."""

from __future__ import annotations

import numpy as np
import pytest

from realize.kernels import exponentials as ex

POLES = np.array([0.9, 0.7 * np.exp(0.5j), 0.7 * np.exp(-0.5j), -0.8, 0.95 * np.exp(2j), 0.95 * np.exp(-2j)])
COEFFICIENTS = np.array([[0.3], [0.1 + 0.2j], [0.1 - 0.2j], [0.05], [1j], [-1j]])


def samples(count: int = 80) -> np.ndarray:
    return np.real(POLES ** np.arange(count)[:, None] @ COEFFICIENTS)


def test_powers_are_right_to_some_roundings_after_many_samples() -> None:
    from flint import acb

    z = np.array([np.exp(1j) * (1 - 1e-6), -0.999, 0.0, 1e-200])
    found = ex.powers(z, 9_000, 1_001)
    for k in (0, 1, 500, 1000):
        for j, pole in enumerate(z.tolist()):
            exact = complex(acb(pole.real, pole.imag) ** (9_000 + k))
            assert abs(found[k, j] - exact) <= 64 * 2.0**-52 * abs(exact)
    assert ex.powers(np.zeros(1, complex), 0, 3)[:, 0].tolist() == [1, 0, 0]
    assert ex.powers(z, 3, 0).shape == (0, 4)


def test_the_map_to_the_plane_and_back() -> None:
    z = np.array([0.3, -0.99, 0.5 + 0.5j, 0.0, -1.0, 1.0])
    back = ex.to_circle(ex.to_plane(z))
    assert np.all(np.abs(back) < 1)
    assert np.max(np.abs(back - z)) < 1e-14
    # outside of the circle: mirrored
    assert ex.to_circle(ex.to_plane(np.array([2.0 + 0j])))[0] == pytest.approx(0.5)


@pytest.mark.parametrize("first", [0, 7])
def test_derivatives_by_the_unknowns(first: int) -> None:
    theta = np.log(np.array([0.3, 1.2, 0.2, 4.0, 0.7]))
    coefficient = np.array([0.3, -1.0, 0.7, 0.2, 1.1])[:, None]
    sequences = ex.Sequences(theta, 2)
    slope = sequences.columns(first, 40)[1] @ sequences.mixing(coefficient)[0]
    for k in range(5):
        up, down = theta.copy(), theta.copy()
        up[k] += 1e-6
        down[k] -= 1e-6
        ends = [ex.Sequences(t, 2).columns(first, 40)[0] @ coefficient for t in (up, down)]
        assert np.max(np.abs((ends[0] - ends[1])[:, 0] / 2e-6 - slope[:, k])) < 1e-8


def test_coefficients_are_recovered() -> None:
    h = samples()
    found, misfit = ex.coefficients_of(POLES, h, np.ones_like(h))
    assert np.max(np.abs(found - COEFFICIENTS)) < 1e-12
    # some roundings of the largest sample, which sums of four terms and a least squares solution leave
    assert np.max(np.abs(misfit)) < 64 * np.finfo(float).eps * np.max(np.abs(h))
    none, rest = ex.coefficients_of(np.zeros(0, complex), h, np.ones_like(h))
    assert none.shape == (0, 1) and np.array_equal(rest, -h)


def test_polish_finds_the_poles_of_exact_samples_and_a_minimum_in_noise() -> None:
    h = samples()
    W = np.ones_like(h)
    start = POLES * np.array([0.98, 1.01, 1.01, 0.97, 0.99, 0.99])
    poles, cost = ex.polished(start, h, W, 60, 1e-12)
    assert cost < 1e-24
    assert max(np.min(np.abs(poles - z)) for z in POLES) < 1e-10
    noisy = h + 0.01 * np.random.default_rng(1).normal(size=h.shape)
    poles, cost = ex.polished(POLES, noisy, W, 60, 1e-12)
    for j in range(poles.size):
        if poles[j].imag < 0:
            continue
        for factor in (1.0001, 0.9999):
            moved = poles.copy()
            moved[j] *= factor
            if poles[j].imag > 0:
                moved[j + 1] = moved[j].conjugate()
            assert np.sum(ex.coefficients_of(moved, noisy, W)[1] ** 2) >= cost * (1 - 1e-12)
