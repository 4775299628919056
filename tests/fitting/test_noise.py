"""Deviations: estimated, from coherence, given."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from realize.fitting.noise import floored, from_coherence, noise_factor, noise_shape, smoothed_size, unpredicted


def test_unpredicted_is_zero_for_cubics_and_keeps_the_size_of_noise(complex_noise: Callable) -> None:
    x = np.sort(np.random.default_rng(0).uniform(0, 1, 4000)) + np.arange(4000) * 1e-2
    cubic = (x**3 - 2 * x + 1)[:, None] * (1 + 0.5j)
    assert np.max(np.abs(unpredicted(x, cubic))) < 1e-9 * np.max(np.abs(cubic))
    noise = complex_noise((4000, 1), 1)
    assert np.mean(np.abs(unpredicted(x, noise)) ** 2) == pytest.approx(1, rel=0.1)
    assert noise_factor(x, 3 * noise, np.ones((4000, 1))) == pytest.approx(3, rel=0.1)


@pytest.mark.parametrize("kind", ["constant", "proportional", "both"])
def test_the_shape_of_the_noise_is_found(complex_noise: Callable, kind: str) -> None:
    x = np.geomspace(0.1, 100, 600)
    H = (1 / (1j * x + 1) ** 2)[:, None]
    true = {"constant": np.full(x.size, 1e-3), "proportional": 0.01 * np.abs(H[:, 0])}.get(
        kind, np.sqrt(1e-4**2 + (0.01 * np.abs(H[:, 0])) ** 2)
    )
    noisy = H + true[:, None] * complex_noise(H.shape, 2)
    ratio = noise_shape(x, noisy, smoothed_size(noisy, 2))[:, 0] / true
    assert np.max(ratio) < 2
    assert np.min(ratio) > 0.5


def test_zero_deviations_take_the_nearest() -> None:
    sigma = np.array([[0.0], [2.0], [0.0], [0.0], [5.0]])
    assert np.array_equal(floored(sigma, np.ones((5, 1), complex))[:, 0], [2, 2, 2, 5, 5])
    assert floored(np.zeros((3, 1)), np.ones((3, 1), complex)) is None


def test_coherence_formula() -> None:
    """Bendat & Piersol, Random Data, section 9.1 (from memory): variance |H|^2 (1 - c) / (2 n c)."""
    H = np.full((5, 1), 3.0 + 0j)
    c = np.array([0.5, 0.8, 0.9, 0.99, 0.2])[:, None]
    assert np.allclose(from_coherence(H, c) ** 2, 9 * (1 - c) / c)
    assert np.all(np.isfinite(from_coherence(H, np.zeros((5, 1)))))
    assert np.all(from_coherence(H, np.ones((5, 1))) > 0)
