"""Pole relocation, residues and variable projection, on arrays alone."""

from __future__ import annotations

import numpy as np
import pytest

from realize.kernels import variable_projection as vp
from realize.kernels import vector_fitting as vf
from realize.kernels.additions import best_additions

X = np.concatenate([[0.0], np.geomspace(0.02, 30, 200)])
POLES = vf.ordered_poles(np.array([-0.05 + 1j, -0.05 - 1j, -0.4 + 6j, -0.4 - 6j, -0.2]))
RESIDUES = np.array([[0.3], [0.2 + 0.1j], [0.2 - 0.1j], [1 - 2j], [1 + 2j]])


def response() -> np.ndarray:
    return (1 / (1j * X[:, None] - POLES)) @ RESIDUES + 0.5


def test_residues_and_direct_term_are_recovered_with_the_true_poles() -> None:
    H = response()
    residues, direct, misfit = vf.residues_of(1j * X, POLES, H, np.ones(H.shape), True)
    assert np.max(np.abs(residues - RESIDUES)) < 1e-13
    assert abs(direct[0] - 0.5) < 1e-13
    assert np.max(np.abs(misfit)) < 1e-13


def test_one_relocation_finds_the_poles_of_an_exact_response() -> None:
    H = response()
    start = vf.starting_poles(0.02, 30, 5, "logarithmic")
    moved = vf.relocated(1j * X, start, H, np.ones(H.shape), True)
    assert np.max(np.abs(moved - POLES) / np.abs(POLES)) < 1e-9


def test_relocation_keeps_poles_stable_unless_told_not_to() -> None:
    H = (1 / (1j * X - 1))[:, None]
    start = vf.ordered_poles(np.array([-0.3 + 0j]))
    assert vf.relocated(1j * X, start, H, np.ones(H.shape), True)[0].real < 0
    assert vf.relocated(1j * X, start, H, np.ones(H.shape), True, reflect=False)[0] == pytest.approx(1.0)


@pytest.mark.parametrize("spacing", ["logarithmic", "linear", "real"])
@pytest.mark.parametrize("count", [0, 1, 2, 3, 8])
@pytest.mark.parametrize("band", [(1e-3, 1e3), (0.9999, 1.0001)])
def test_starting_poles_are_stable_pairs_in_the_band(spacing: str, count: int, band: tuple[float, float]) -> None:
    poles = vf.starting_poles(*band, count, spacing)
    assert poles.size == count
    assert np.all(poles.real < 0)
    assert np.all((np.abs(poles) > band[0] * 0.99) & (np.abs(poles) < band[1] * 1.01))
    for k in np.flatnonzero(poles.imag > 0):
        assert poles[k + 1] == poles[k].conjugate()


def test_ordering_reflects_and_keeps_pairs_adjacent() -> None:
    poles = vf.ordered_poles(np.array([3.0, 1 + 2j, 1 - 2j, 0j, 5j, -5j]))
    assert np.all(poles.real < 0)
    assert poles.tolist()[1:3] == [-1 + 2j, -1 - 2j]
    assert poles[4] == poles[5].conjugate() or poles[3] == -3.0


def test_coinciding_poles_are_set_apart_about_their_middle() -> None:
    poles = vf.separated_poles(np.array([-1, -1, -2 + 1j, -2 - 1j, -2 + 1j, -2 - 1j], dtype=complex))
    assert np.unique(poles).size == 6
    # the product of the factors changes by the square of the distance only
    assert abs(np.prod(1j - poles) / ((1j + 1) ** 2 * ((1j + 2) ** 2 + 1) ** 2) - 1) < 1e-9


@pytest.mark.parametrize("vanish", [np.inf, 1.5])
def test_derivatives_of_the_sections(vanish: float) -> None:
    """Against central differences; the parts left out on purpose lie in the span of the basis."""
    theta = np.log(np.array([1.0, 3.0, 0.3, 7.0, 0.8]))
    points = 1j * X
    coefficient = np.array([0.3, -1.0, 0.7, 0.2, 1.1])
    basis = vp.Sections(points, theta, 2, vanish).columns()
    at = vp.Sections(points, theta, 2, vanish)
    slope = at.tangents() @ at.mixing(coefficient[:, None])[0]
    for k in range(5):
        up, down = theta.copy(), theta.copy()
        up[k] += 1e-6
        down[k] -= 1e-6
        numeric = (
            (vp.Sections(points, up, 2, vanish).columns() - vp.Sections(points, down, 2, vanish).columns())
            @ coefficient
            / 2e-6
        )
        rest = vf.stacked((numeric - slope[:, k])[:, None])[:, 0]
        outside = rest - vf.stacked(basis) @ vf.least_squares(vf.stacked(basis), rest)
        assert np.linalg.norm(outside) < 1e-6 * np.linalg.norm(numeric)


def test_sections_hold_the_poles() -> None:
    for poles in (POLES, np.array([-1e-3, -1e3, -2.0], dtype=complex), np.zeros(0, complex)):
        again = vp.poles_of(*vp.sections_of(poles))
        assert np.max(np.abs(again - vf.ordered_poles(poles)) / np.abs(again), initial=0) < 1e-12


def test_polish_finds_the_minimum_and_never_makes_it_worse() -> None:
    H = response()
    rng = np.random.default_rng(3)
    noisy = H + 0.02 * (rng.normal(size=H.shape) + 1j * rng.normal(size=H.shape))
    W = np.ones(H.shape)
    start, before = vf.vector_fit(1j * X, vf.starting_poles(0.02, 30, 5, "logarithmic"), noisy, W, True, np.inf, 20)
    poles, cost = vp.polished(1j * X, start, noisy, W, True, np.inf, 60, 1e-10)
    assert cost <= before
    assert np.all(poles.real < 0)
    for k in range(poles.size):
        for factor in (1.001, 0.999):
            moved = poles.copy()
            moved[k] *= factor
            if moved[k].imag != 0:
                mate = k + 1 if moved[k].imag > 0 else k - 1
                moved[mate] = moved[k].conjugate()
            misfit = vf.residues_of(1j * X, moved, noisy, W, True)[2]
            assert vf.weighted_cost(misfit, W) >= cost * (1 - 1e-9)
    # from the true poles of exact data there is nothing to gain
    same, zero = vp.polished(1j * X, POLES, H, W, True, np.inf, 20, 1e-6)
    assert zero < 1e-24
    assert np.max(np.abs(same - POLES)) < 1e-12


def test_best_addition_points_at_the_missing_resonance() -> None:
    H = response()
    W = np.ones(H.shape)
    pair, _ = best_additions(1j * X, np.delete(POLES, [3, 4]), H, W, True, np.inf)
    assert abs(abs(pair[0]) / 6 - 1) < 0.1
    _, real = best_additions(1j * X, POLES[1:], H, W, True, np.inf)
    assert 0.1 < -real[0].real < 0.4
