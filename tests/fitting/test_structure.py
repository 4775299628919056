"""What a fit must keep is exact in the result, and costs nothing where the truth has it."""

from __future__ import annotations

import numpy as np
import pytest

from realize.errors import UsageError
from realize.fitting import Fit, Structure, fit_response
from realize.kernels.structured_basis import Free, Known, StructuredBasis

W = np.geomspace(0.05, 200, 240)


def noisy(values: np.ndarray, seed: int = 0, level: float = 0.01) -> np.ndarray:
    rng = np.random.default_rng(seed)
    noise = rng.normal(size=values.shape) + 1j * rng.normal(size=values.shape)
    return values * (1 + level * noise / np.sqrt(2))


def drive(s: np.ndarray) -> np.ndarray:
    """An integrator, two real poles, one resonance with its antiresonance: relative degree 3."""
    return 150 * (s**2 + 0.1 * s + 9) / (s * (s + 2) * (s**2 + 0.2 * s + 25) * (s + 50))


def steady(fit: Fit) -> np.ndarray:
    if fit.factors is not None:
        values = [
            (gain * np.prod(-zeros) / np.prod(-fit.poles)).real
            for zeros, gain in zip(fit.factors.zeros, fit.factors.gain.ravel(), strict=True)
        ]
        return np.reshape(values, fit.factors.gain.shape)
    return fit.direct + np.sum(fit.residues / (-fit.poles[:, None, None]) ** fit.powers[:, None, None], axis=0).real


@pytest.mark.parametrize("order", [5, "auto"])
def test_an_integrator_is_exactly_at_the_origin_and_the_relative_degree_is_exact(order: int | str) -> None:
    fit = fit_response(W, noisy(drive(1j * W)), order=order, structure=Structure(integrators=1, relative_degree=3))
    assert fit.order == 5
    assert np.sum(fit.poles == 0) == 1
    assert fit.factors is not None
    assert fit.factors.zeros[0].size == 2
    assert not np.any(fit.direct)
    assert abs(fit.factors.gain[0, 0] - 150) < 2
    assert 0.8 < fit.weighted < 1.2


def test_fixed_zeros_and_poles_come_back_to_the_last_bit() -> None:
    zeros = tuple(np.roots([1, 0.1, 9]).tolist())
    structure = Structure(integrators=1, relative_degree=3, fixed_poles=(-2.0,), fixed_zeros=zeros)
    fit = fit_response(W, noisy(drive(1j * W)), order=5, structure=structure)
    assert fit.factors is not None
    assert set(fit.factors.zeros[0].tolist()) == set(zeros)
    assert {0j, -2 + 0j} <= set(fit.poles.tolist())
    assert 0.8 < fit.weighted < 1.2


def test_a_double_integrator_has_powers_one_and_two() -> None:
    s = 1j * W
    fit = fit_response(W, noisy((s + 3) / (s**2 * (s + 1))), order="auto", structure=Structure(integrators=2))
    assert fit.order == 3
    assert sorted(fit.powers[fit.poles == 0].tolist()) == [1, 2]
    double = fit.residues[(fit.poles == 0) & (fit.powers == 2)][0, 0, 0]
    assert abs(double - 3) < 0.05


@pytest.mark.parametrize("degree", [0, 1, 2])
def test_the_steady_state_gain_of_every_channel_is_met_to_rounding(degree: int) -> None:
    w = np.concatenate([[0.0], W])
    s = 1j * w
    one = 3 / ((s + 1) * (s / 50 + 1))
    values = np.stack([one, one * (s + 4) / (s + 3) / 2, 2 * one / (s + 3)], axis=1)[:, None, :]
    gain = np.array([[3.1, 2.0, 2.0]])
    structure = Structure(relative_degree=degree, steady_state_gain=gain)
    fit = fit_response(w, noisy(values), order=3, structure=structure)
    assert np.max(np.abs(steady(fit) - gain)) < 1e-13


def test_sampled_integrator_zero_and_delay_steps_are_exact() -> None:
    period = 0.01
    w = np.linspace(0.01, 0.999, 300) * np.pi / period
    z = np.exp(1j * w * period)
    truth = 0.3 * (z + 0.5) / ((z - 1) * (z**2 - 1.2 * z + 0.72))
    structure = Structure(integrators=1, relative_degree=2, fixed_zeros=(-0.5,))
    fit = fit_response(w, noisy(truth), order=3, period=period, structure=structure)
    assert np.sum(fit.poles == 1) == 1
    assert fit.factors is not None
    assert fit.factors.zeros[0].tolist() == [-0.5]
    assert abs(fit.factors.gain[0, 0] - 0.3) < 0.01
    assert np.max(np.abs(np.abs(fit.poles[fit.poles.imag > 0]) ** 2 - 0.72)) < 0.01


def test_a_sampled_steady_state_gain_and_a_double_integrator() -> None:
    period = 0.01
    w = np.linspace(0.01, 0.99, 200) * np.pi / period
    z = np.exp(1j * w * period)
    fit = fit_response(
        w,
        noisy(0.2 / (z - 0.8)),
        order=1,
        period=period,
        structure=Structure(relative_degree=1, steady_state_gain=np.array([[1.01]])),
    )
    value = fit.direct + np.sum(fit.residues / (1 - fit.poles[:, None, None]), axis=0)
    assert abs(value[0, 0] - 1.01) < 1e-13
    fit = fit_response(w, noisy(0.2 * z / (z - 1) ** 2), order=2, period=period, structure=Structure(integrators=2))
    assert np.all(fit.poles == 1)
    points = fit.direct + np.sum(
        fit.residues / (z[:, None, None, None] - fit.poles[:, None, None]) ** fit.powers[:, None, None], axis=1
    )
    assert np.max(np.abs(points[:, 0, 0] / (0.2 * z / (z - 1) ** 2) - 1)) < 0.01


def test_unstable_poles_where_they_are_allowed() -> None:
    s = 1j * W
    truth = 2 / ((s - 1) * (s + 10)) + 1 / (s**2 + 0.1 * s + 16)
    held = fit_response(W, noisy(truth), order=4)
    assert any("unstable" in text for text in held.cautions)
    free = fit_response(W, noisy(truth), order=4, structure=Structure(stable=False))
    assert free.rms < 0.05 * held.rms
    assert np.min(np.abs(free.poles - 1)) < 0.01


@pytest.mark.parametrize(
    ("structure", "order", "words"),
    [
        (Structure(integrators=1, steady_state_gain=np.array([[1.0]])), "auto", "infinite"),
        (Structure(relative_degree=3), 2, "no room"),
        (Structure(fixed_poles=(1.0,)), 2, "unstable"),
        (Structure(fixed_poles=(1j,)), 2, "conjugate"),
        (Structure(fixed_poles=(-1.0,), fixed_zeros=(-1.0,)), 2, "cancel"),
        (Structure(integrators=3), 2, "no room"),
    ],
)
def test_contradictions_are_refused_in_words(structure: Structure, order: int | str, words: str) -> None:
    with pytest.raises(UsageError, match=words):
        fit_response(W, drive(1j * W), order=order, structure=structure)


@pytest.mark.parametrize("excess", [0, 1, 2, 3, 4])
def test_the_basis_spans_exactly_the_functions_with_the_structure(excess: int) -> None:
    """Every function with the structure is a combination, to rounding, and the count of columns is its dimension."""
    rng = np.random.default_rng(excess)
    free = Free(np.array([0.5, 3.0]), np.array([0.2, -0.3]), np.array([1.5]))
    known = Known(np.array([0.0, 0.0, -0.1 + 2j, -0.1 - 2j]), np.array([0.0, 0.3 + 1j, 0.3 - 1j]), excess)
    points = 1j * np.geomspace(0.1, 10, 60)
    basis = StructuredBasis(points, free, known)
    columns = basis.columns()
    assert columns.shape[1] == known.columns(5) == 7 - excess
    numerator = rng.normal(size=columns.shape[1])
    value = points * ((points - 0.3) ** 2 + 1) * np.polyval(numerator, points)
    value /= (points**2 + 0.2 * points + 0.25) * (points**2 - 0.3 * points + 9) * (points + 1.5)
    value /= points**2 * ((points + 0.1) ** 2 + 4)
    scale = np.linalg.norm(columns, axis=0)
    both = np.vstack([(columns / scale).real, (columns / scale).imag])
    goal = np.concatenate([value.real, value.imag])
    found = np.linalg.lstsq(both, goal, rcond=None)[0]
    assert np.linalg.norm(both @ found - goal) < 1e-11 * np.linalg.norm(goal)


def test_the_derivatives_of_the_basis_are_those_of_differences() -> None:
    free = Free(np.array([0.5, 3.0]), np.array([0.2, -0.3]), np.array([1.5, -4.0]))
    known = Known(np.array([0.0]), np.array([0.4]), 2)
    points = 1j * np.geomspace(0.1, 10, 40)
    coefficient = np.arange(1.0, known.columns(6) + 1)
    found = StructuredBasis(points, free, known).derivatives(coefficient)
    for k in range(6):
        step = 1e-6
        sides = []
        for sign in (1, -1):
            turn = np.exp(sign * step * (np.arange(6) == k))
            moved = Free(free.w * turn[:2], free.a * turn[2:4], free.single * turn[4:])
            sides.append(StructuredBasis(points, moved, known).columns() @ coefficient)
        slope = (sides[0] - sides[1]) / (2 * step)
        assert np.max(np.abs(found[:, k] - slope)) < 1e-8 * np.max(np.abs(slope))
