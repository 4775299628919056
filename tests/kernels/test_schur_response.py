"""The response of large dense models: against solutions point by point, at poles, and which frequencies are dropped."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg

from realize.kernels.schur_response import BLOCK, LARGE, POINTS, SchurResponse, suits, thinned

EPS = np.finfo(float).eps


@pytest.mark.parametrize("n", [1, 2, BLOCK, BLOCK + 1, 3 * BLOCK + 5])
@pytest.mark.parametrize("shape", [(1, 1), (1, 3), (2, 1)])
def test_values_and_solutions(n, shape):
    rng = np.random.default_rng(n)
    A = rng.standard_normal((n, n)) - 2 * np.sqrt(n) * np.eye(n)
    B, C = rng.standard_normal((n, shape[1])), rng.standard_normal((shape[0], n))
    large = SchurResponse(A, B, C)
    points = np.concatenate([1j * np.geomspace(1e-3, 1e3, POINTS + 3), [2.0 - 3j]])
    values = large.values(points)
    right, left = large.solutions(points)
    a, b, c = large.scaled
    for s, value, x, y in zip(points, values, right, left, strict=True):
        expected = C @ np.linalg.solve(s * np.eye(n) - A, B)
        assert np.abs(value - expected).max() <= 1e4 * EPS * np.abs(expected).max()
        pencil = s * np.eye(n) - a
        assert np.linalg.norm(pencil @ x.T - b) <= 1e3 * EPS * np.linalg.norm(pencil) * np.linalg.norm(x)
        assert np.linalg.norm(y @ pencil - c) <= 1e3 * EPS * np.linalg.norm(pencil) * np.linalg.norm(y)
    expected = np.sort_complex(np.linalg.eigvals(A))
    assert np.abs(np.sort_complex(large.poles) - expected).max() <= 1e3 * EPS * np.abs(A).max() * n


def test_infinite_at_a_pole_alone():
    values = SchurResponse(np.diag([-1.0, -2.0, -3.0]), np.ones((3, 1)), np.ones((1, 3))).values(
        np.array([-2.0 + 0j, 0j])
    )
    assert np.isinf(values[0]).all() and values[1, 0, 0] == pytest.approx(1 + 1 / 2 + 1 / 3)


def test_no_points():
    assert SchurResponse(-np.eye(2), np.ones((2, 1)), np.ones((3, 2))).values(np.zeros(0, complex)).shape == (0, 3, 1)


def test_which_models():
    dense = np.random.default_rng(1).standard_normal((LARGE, LARGE))
    assert suits(dense, None) and not suits(dense, np.eye(LARGE)) and not suits(dense[1:, 1:], None)
    assert not suits(scipy.linalg.schur(dense)[0], None)


def test_thinned_keeps_what_a_close_pole_needs():
    w = np.linspace(0, 10, 1001)
    poles = np.array([-0.01 + 5j, -0.01 - 5j, -3.0])
    kept = thinned(w, 1j * w, poles, 0.2)
    assert kept[0] == 0 and kept[-1] == 10 and kept.size < 200
    near = kept[np.abs(kept - 5) < 0.05]
    assert near.size >= 9
    # nowhere a gap larger than a fifth of the distance to the nearest pole, but for the steps of the samples themselves
    gap = np.diff(kept)
    distance = np.min(np.abs(1j * kept[:-1, None] - poles), axis=1)
    assert np.all(gap <= 0.2 * distance + 0.0101)


def test_points_that_were_seen_before_and_none_at_all():
    rng = np.random.default_rng(3)
    A, B, C = rng.standard_normal((40, 40)), rng.standard_normal((40, 3)), rng.standard_normal((2, 40))
    response = SchurResponse(A, B, C)
    points = np.array([0.5 + 1j, 2j, 0.5 + 1j, -3j])
    exact = np.array([C @ np.linalg.solve(s * np.eye(40) - A, B) for s in points])
    first, again = response.values(points), response.values(points[::-1])
    assert np.abs(first - exact).max() < 1e-10 * np.abs(exact).max()
    assert np.array_equal(first[::-1], again)
    assert response.values(points[:0]).shape == (0, 2, 3)
    assert [part.shape for part in response.solutions(points[:0])] == [(0, 3, 40), (0, 2, 40)]
