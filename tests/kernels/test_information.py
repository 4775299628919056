"""Derivatives and roots of covariances against finite differences and dense formulas."""

from __future__ import annotations

import numpy as np
import pytest

from realize.kernels.information import channel_factor, channel_slopes, inverse_root, length
from realize.kernels.low_rank_residues import (
    Unknowns,
    flat_rows,
    moved,
    nearest_in_metric,
    shape_of,
    tangent,
)
from realize.kernels.vector_fitting import real_basis

POLES = np.array([-0.5, -0.1 + 2j, -0.1 - 2j, -0.3 + 3j, -0.3 - 3j])
POINTS = 1j * np.linspace(0, 5, 40)


def residues(seed: int = 0) -> np.ndarray:
    rng = np.random.default_rng(seed)
    r = rng.normal(size=5) + 1j * rng.normal(size=5)
    r[0] = r[0].real
    r[[2, 4]] = r[[1, 3]].conj()
    return r


def response(poles: np.ndarray, r: np.ndarray, direct: float, vanish: float) -> np.ndarray:
    value = (1 / (POINTS[:, None] - poles)) @ r + direct
    return value - ((1 / (vanish - poles)) @ r).real if np.isfinite(vanish) else value


def shifted(values: np.ndarray, k: int, step: float) -> np.ndarray:
    """Move the k-th coordinate (real and imaginary part of the first of a pair in turn)."""
    result = values.copy()
    if k == 0:
        result[0] += step
        return result
    first = k if k % 2 else k - 1
    result[first] += step if k % 2 else 1j * step
    result[first + 1] = result[first].conj()
    return result


@pytest.mark.parametrize("vanish", [np.inf, 4.0])
def test_slopes_are_the_derivatives(vanish: float) -> None:
    r, h = residues(), 1e-6
    slopes = channel_slopes(POINTS, POLES, r, False, vanish)
    for k in range(5):
        up, down = (response(shifted(POLES, k, e), r, 0, vanish) for e in (h, -h))
        assert np.max(np.abs((up - down) / (2 * h) - slopes[:, k])) < 1e-7 * np.max(np.abs(slopes[:, k]))
        up, down = (response(POLES, shifted(r, k, e), 0, vanish) for e in (h, -h))
        assert np.max(np.abs((up - down) / (2 * h) - slopes[:, 5 + k])) < 1e-7 * np.max(np.abs(slopes[:, 5 + k]))


def test_a_channel_factor_holds_the_normal_equations_and_counts_the_line_at_zero_half() -> None:
    rng = np.random.default_rng(1)
    weights = rng.uniform(1, 2, 40)
    misfit = rng.normal(size=40) + 1j * rng.normal(size=40)
    slopes = channel_slopes(POINTS, POLES, residues(), True, np.inf)
    factor = channel_factor(slopes, weights, misfit, POINTS == 0)
    own = np.where(POINTS == 0, weights / np.sqrt(2), weights)
    J = own[:, None] * slopes
    e = own * misfit
    square = (J.conj().T @ J).real
    assert np.allclose(factor.triangle.T @ factor.triangle, square, rtol=1e-10, atol=1e-10 * np.max(square))
    right = (J.conj().T @ e).real
    assert np.allclose(factor.triangle.T @ factor.inner, right, rtol=1e-9, atol=1e-9 * np.max(np.abs(right)))
    assert factor.inner @ factor.inner + factor.outer == pytest.approx(np.sum(np.abs(e) ** 2))


@pytest.mark.parametrize("size", [1e-100, 1.0, 1e100])
def test_the_inverse_root_and_what_is_not_determined(size: float) -> None:
    rng = np.random.default_rng(2)
    M = rng.normal(size=(9, 4)) * np.array([1, 1e-8, 1e5, 1]) * size
    root, loose = inverse_root(M)
    assert loose.shape[1] == 0
    assert np.allclose(2 * (M @ root).T @ (M @ root), np.eye(4))
    M[:, 3] = M[:, 0]
    root, loose = inverse_root(M)
    assert root.shape == (4, 3)
    assert np.max(np.abs(M @ loose)) < 1e-12 * np.max(np.abs(M)) * np.max(np.abs(loose))
    assert np.array_equal(length(np.array([[3.0, 4.0]])), [5.0])


@pytest.mark.parametrize("paired", [True, False])
@pytest.mark.parametrize(("rank", "free"), [(1, 6), (2, 10), (3, 12)])
def test_shapes_of_each_rank(paired: bool, rank: int, free: int) -> None:
    """Matrices 4 x 3 of rank r have r (4 + 3 - r) free numbers."""
    rng = np.random.default_rng(3)
    residue = rng.normal(size=(4, 3)) + (1j * rng.normal(size=(4, 3)) if paired else 0)
    shape = shape_of(residue, rank, 0, paired)
    assert shape.size == free * (2 if paired else 1)
    u, d, vt = np.linalg.svd(residue)
    assert np.allclose(shape.residue, (u[:, :rank] * d[:rank]) @ vt[:rank])
    slopes = tangent(shape)
    assert np.linalg.matrix_rank(flat_rows(slopes, paired)) == shape.size
    for k in range(shape.size):
        step = np.zeros(shape.size)
        step[k] = 1e-6
        change = (moved(shape, step).residue - moved(shape, -step).residue) / 2e-6
        assert np.allclose(change, slopes[k], atol=1e-8)


def test_the_nearest_in_a_metric_beats_the_nearest_by_singular_values() -> None:
    rng = np.random.default_rng(4)
    residue = rng.normal(size=(3, 3)) + 1j * rng.normal(size=(3, 3))
    metric = np.diag(10.0 ** rng.uniform(-1, 1, 18))
    start = shape_of(residue, 1, 0, True)
    before = np.sum((metric @ flat_rows((residue - start.residue)[None], True)[0]) ** 2)
    near, distance = nearest_in_metric(residue, metric, start, 30)
    assert distance < 0.5 * before
    missed = metric @ flat_rows((residue - near.residue)[None], True)[0]
    assert distance == pytest.approx(missed @ missed)
    # at the minimum the misfit is orthogonal to the tangent
    slopes = metric @ flat_rows(tangent(near), True).T
    cosine = np.abs(slopes.T @ missed) / (np.linalg.norm(slopes, axis=0) * np.linalg.norm(missed))
    assert np.max(cosine) < 0.05


def test_unknowns_of_all_channels_follow_the_chain_rule() -> None:
    rng = np.random.default_rng(5)
    scale = np.exp2(rng.integers(-2, 3, (2, 3)))
    shapes = []
    for k in (0, 1, 3):
        residue = rng.normal(size=(2, 3)) + (1j * rng.normal(size=(2, 3)) if k else 0)
        shapes.append(shape_of(residue, 1 + k % 2, k, bool(k)))
    unknowns = Unknowns(5, shapes, scale, True)
    assert unknowns.size == 5 + sum(s.size for s in shapes) + 6
    step = rng.normal(size=unknowns.size) * 1e-6
    channel = 4
    change = unknowns.matrix(channel) @ step
    basis = real_basis(POINTS, POLES)
    for s, start in zip(shapes, unknowns.starts, strict=False):
        plus, minus = (moved(s, e * step[start : start + s.size]).residue * scale for e in (1, -1))
        d = (plus - minus)[1, 1] / 2
        wanted = basis[:, s.index] * d.real + (basis[:, s.index + 1] * d.imag if s.paired else 0)
        columns = [5 + s.index, 5 + s.index + 1] if s.paired else [5 + s.index]
        found = basis[:, [c - 5 for c in columns]] @ change[columns]
        assert np.allclose(found, wanted, rtol=1e-5, atol=1e-12)
    assert np.array_equal(change[:5], step[:5])
    assert change[-1] == step[unknowns.starts[-1] + channel]
