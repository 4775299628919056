"""Hankel matrices of Markov parameters: products, singular values, poles."""

from __future__ import annotations

import numpy as np
import pytest

from realize.kernels import markov


def plant(order: int, p: int, m: int, seed: int = 0) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    A = rng.normal(size=(order, order))
    A *= 0.97 / np.max(np.abs(np.linalg.eigvals(A)))
    B, C = rng.normal(size=(order, m)), rng.normal(size=(p, order))
    return A, B, C, np.array([C @ np.linalg.matrix_power(A, k) @ B for k in range(120)])


def test_products_are_those_of_the_matrix() -> None:
    *_, h = plant(5, 2, 3)
    whole = markov.laid_out(h, 7, 11)
    right = np.random.default_rng(1).normal(size=(33, 4))
    assert np.allclose(markov.times(h, right, 7), whole @ right, atol=1e-12 * np.max(np.abs(whole)))
    assert np.array_equal(whole[2:4, 3:6], h[2])


@pytest.mark.parametrize("shape", [(1, 1), (2, 2), (1, 3), (3, 1)])
@pytest.mark.parametrize("dense", [True, False])
def test_poles_and_realization(shape: tuple[int, int], dense: bool, monkeypatch: pytest.MonkeyPatch) -> None:
    if not dense:
        monkeypatch.setattr(markov, "DENSE", 0)
    A, _, _, h = plant(6, *shape)
    hankel = markov.decomposed(h, 60, 60, 8)
    assert hankel.values[6] < 1e-13 * hankel.values[0] < 1e-3 * hankel.values[5]
    true = np.linalg.eigvals(A)
    for poles in (markov.shifted_poles(hankel, 6), markov.shift_invariant_poles(hankel, 6)):
        assert max(np.min(np.abs(poles - z)) for z in true) < 1e-9
    a, b, c = markov.realized(hankel, 6)
    again = np.array([c @ np.linalg.matrix_power(a, k) @ b for k in range(120)])
    assert np.max(np.abs(again - h)) < 1e-11 * np.max(np.abs(h))


def test_no_states() -> None:
    hankel = markov.decomposed(np.zeros((4, 1, 1)), 2, 2, 1)
    assert markov.shifted_poles(hankel, 0).size == 0
    assert [part.shape for part in markov.realized(hankel, 0)] == [(0, 0), (0, 1), (1, 0)]
