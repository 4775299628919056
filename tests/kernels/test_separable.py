"""The projected least squares problem: chunks, groups of weights, Jacobian."""

from __future__ import annotations

import numpy as np
import pytest

from realize.kernels import separable
from realize.kernels import variable_projection as vp
from realize.kernels import vector_fitting as vf

X = np.geomspace(0.1, 10, 150)
THETA = np.log(np.array([0.5, 3.0, 0.1, 0.7, 1.3]))


def response() -> np.ndarray:
    rng = np.random.default_rng(2)
    columns = vp.Sections(1j * X, THETA + 0.02, 2, np.inf).columns()
    clean = columns @ rng.normal(size=(5, 3)) + rng.normal(size=3)
    return clean + 0.01 * (rng.normal(size=clean.shape) + 1j * rng.normal(size=clean.shape))


def weights(kind: str) -> np.ndarray:
    rng = np.random.default_rng(3)
    if kind == "alike":
        return np.exp(rng.normal(size=(X.size, 1))) * np.array([1.0, 0.3, 5.0])
    return np.exp(rng.normal(size=(X.size, 3)))


def residual(theta: np.ndarray, H: np.ndarray, W: np.ndarray, vanish: float) -> np.ndarray:
    """Weighted residual with the best coefficients, channel below channel, by another route."""
    columns = vp.Sections(1j * X, theta, 2, vanish).columns()
    if not np.isfinite(vanish):
        columns = np.hstack([columns, np.ones((X.size, 1))])
    parts = []
    for c in range(H.shape[1]):
        matrix, right = vf.stacked(W[:, [c]] * columns), vf.stacked((W[:, c] * H[:, c])[:, None])[:, 0]
        parts.append(right - matrix @ np.linalg.lstsq(matrix, right, rcond=None)[0])
    return np.concatenate(parts)


@pytest.mark.parametrize("kind", ["alike", "unlike"])
@pytest.mark.parametrize("vanish", [np.inf, 0.8])
def test_cost_and_gradient_are_those_of_the_whole_problem(kind: str, vanish: float) -> None:
    H, W = response(), weights(kind)
    groups = separable.groups_of(W)
    assert len(groups) == (1 if kind == "alike" else 3)
    found = vp.projection(1j * X, THETA, 2, H, groups, not np.isfinite(vanish), vanish)
    rest = residual(THETA, H, W, vanish)
    assert found.cost == pytest.approx(rest @ rest, rel=1e-10)
    gradient = 2 * found.jacobian.T @ found.residual
    for k in range(5):
        up, down = THETA.copy(), THETA.copy()
        up[k] += 1e-5
        down[k] -= 1e-5
        numeric = (np.sum(residual(up, H, W, vanish) ** 2) - np.sum(residual(down, H, W, vanish) ** 2)) / 2e-5
        assert gradient[k] == pytest.approx(numeric, rel=1e-5, abs=1e-6 * np.max(np.abs(gradient)))


def test_chunks_of_rows_give_the_same_numbers(monkeypatch: pytest.MonkeyPatch) -> None:
    H, W = response(), weights("unlike")
    groups = separable.groups_of(W)
    one = vp.projection(1j * X, THETA, 2, H, groups, True, np.inf)
    monkeypatch.setattr(separable, "CHUNK_NUMBERS", 10)
    many = vp.projection(1j * X, THETA, 2, H, groups, True, np.inf)
    assert many.cost == pytest.approx(one.cost, rel=1e-12)
    assert np.allclose(many.jacobian.T @ many.jacobian, one.jacobian.T @ one.jacobian, rtol=1e-9)
    assert np.allclose(many.jacobian.T @ many.residual, one.jacobian.T @ one.residual, rtol=1e-7)


def test_a_channel_without_weight_counts_nothing() -> None:
    H, W = response(), weights("unlike")
    W[:, 1] = 0
    found = vp.projection(1j * X, THETA, 2, H, separable.groups_of(W), True, np.inf)
    rest = residual(THETA, H[:, [0, 2]], W[:, [0, 2]], np.inf)
    assert found.cost == pytest.approx(rest @ rest, rel=1e-10)


def test_the_search_stays_within_bounds_and_never_goes_up() -> None:
    H, W = response(), weights("alike")
    groups = separable.groups_of(W)

    def at(theta: np.ndarray) -> separable.Projected:
        return vp.projection(1j * X, theta, 2, H, groups, True, np.inf)

    lower, upper = THETA - 0.01, THETA + 0.01
    total = float(np.sum((W * np.abs(H)) ** 2))
    theta, cost, start = separable.minimised(THETA, lower, upper, at, total, 20, 1e-9)
    assert np.all(theta >= lower) and np.all(theta <= upper)
    assert cost < start == pytest.approx(at(THETA).cost)
    assert cost == pytest.approx(at(theta).cost)
