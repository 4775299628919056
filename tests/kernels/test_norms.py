"""Norms: closed forms, samples that must stay below, units, and models without states."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from realize.kernels.lyapunov import NotStable
from realize.kernels.norms import gains, peak_gain, refined_peak, squared_norm
from realize.kernels.response import state_response


def peak(A, B, C, D, sampled=False):
    return peak_gain(*(np.asarray(matrix, dtype=float) for matrix in (A, B, C, D)), sampled=sampled, tolerance=1e-10)


@pytest.mark.parametrize("damping", [0.5, 0.1, 1e-3, 1e-6])
@pytest.mark.parametrize("power", [0, 600, -600])
def test_resonance(damping, power):
    """1 / (s^2 + 2 d s + 1): peak 1 / (2 d sqrt(1 - d^2)) at sqrt(1 - 2 d^2)."""
    A = np.ldexp([[0.0, 1.0], [-1.0, -2 * damping]], power)
    found = peak(A, np.ldexp([[0.0], [1.0]], power), [[1.0, 0.0]], [[0.0]])
    expected = 1 / (2 * damping * math.sqrt(1 - damping**2))
    assert found.value == pytest.approx(expected, rel=1e-10)
    assert math.ldexp(found.frequency, -power) == pytest.approx(math.sqrt(1 - 2 * damping**2), rel=1e-6)
    assert found.basis == "bounded" and found.value <= found.upper <= found.value * (1 + 1e-5)


def test_first_order_sampled():
    for pole, angle in ((0.9, 0.0), (-0.9, math.pi)):
        found = peak([[pole]], [[1.0]], [[2.0]], [[0.0]], sampled=True)
        assert found.value == pytest.approx(20, rel=1e-12) and found.frequency == pytest.approx(angle, abs=1e-6)


def test_unstable_and_all_pass():
    assert peak([[2.0]], [[1.0]], [[1.0]], [[0.0]]).value == pytest.approx(0.5, rel=1e-12)
    # (1 - s) / (1 + s) has gain 1 everywhere
    found = peak([[-1.0]], [[1.0]], [[2.0]], [[-1.0]])
    assert found.value == pytest.approx(1.0, rel=1e-12) and found.upper <= 1.01


def test_peak_between_features():
    """Two resonances that meet: the peak belongs to neither pole alone."""
    A = np.array([[0, 1, 0, 0], [-1, -0.3, 0, 0], [0, 0, 0, 1], [0, 0, -1.3, -0.3]], dtype=float)
    B, C, D = np.array([[0.0], [1], [0], [1]]), np.array([[1.0, 0, -1, 0]]), np.zeros((1, 1))
    w = np.linspace(0, 3, 200001)
    assert peak(A, B, C, D).value == pytest.approx(gains(state_response(A, B, C, D, None, 1j * w)).max(), rel=1e-8)


@settings(max_examples=30, deadline=None)
@given(
    n=st.integers(1, 12),
    m=st.integers(1, 3),
    p=st.integers(1, 3),
    seed=st.integers(0, 10**6),
    sampled=st.booleans(),
    unstable=st.booleans(),
)
def test_never_below_a_sample(n, m, p, seed, sampled, unstable):
    rng = np.random.default_rng(seed)
    A = rng.standard_normal((n, n))
    poles = np.linalg.eigvals(A)
    if sampled:
        A = A / np.abs(poles).max() * (1.5 if unstable else 0.97)
        near = np.abs(np.abs(np.linalg.eigvals(A)) - 1).min()
    else:
        A = A - (0 if unstable else poles.real.max() + 0.1) * np.eye(n)
        near = np.abs(np.linalg.eigvals(A).real).min()
    if near < 1e-3:
        return
    B, C, D = rng.standard_normal((n, m)), rng.standard_normal((p, n)), rng.standard_normal((p, m))
    found = peak(A, B, C, D, sampled)
    w = np.linspace(0, math.pi, 2001) if sampled else np.concatenate([[0], np.geomspace(1e-3, 1e3, 2000)])
    sample = gains(state_response(A, B, C, D, None, np.exp(1j * w) if sampled else 1j * w))
    assert sample.max() <= found.value * (1 + 1e-9)
    assert found.value <= found.upper
    point = np.array([np.exp(1j * found.frequency) if sampled else 1j * found.frequency])
    if math.isfinite(found.frequency):
        assert gains(state_response(A, B, C, D, None, point))[0] >= found.value * (1 - 1e-9)


@pytest.mark.parametrize("power", [-900, -450, 450, 900])
def test_unit_of_gain(power):
    A, B, C, D = np.diag([-1.0, -3.0]), np.array([[1.0], [2.0]]), np.ones((3, 2)), np.ones((3, 1))
    one = peak(A, B, C, D).value
    assert math.ldexp(peak(A, np.ldexp(B, power), C, np.ldexp(D, power)).value, -power) == pytest.approx(one, rel=1e-12)
    assert math.ldexp(peak(A, B, np.ldexp(C, power), np.ldexp(D, power)).value, -power) == pytest.approx(one, rel=1e-12)


@pytest.mark.parametrize("sampled", [False, True])
def test_without_states(sampled, capfd):
    nothing = np.zeros((0, 0)), np.zeros((0, 2)), np.zeros((1, 0)), np.array([[3.0, 4.0]])
    found = peak(*nothing, sampled)
    assert found.value == pytest.approx(5, rel=1e-15) and found.upper >= 5
    assert squared_norm(*nothing, sampled=sampled) == (pytest.approx(5) if sampled else math.inf)
    assert "".join(capfd.readouterr()) == ""


def test_pole_on_the_axis_is_infinite():
    assert peak([[0.0]], [[1.0]], [[1.0]], [[0.0]]).value == math.inf


def test_many_states_are_measured():
    n = 402
    A = -np.diag(np.arange(1.0, n + 1))
    A[0, 1] = 1e-3
    found = peak(A, np.ones((n, 1)), np.ones((1, n)), [[0.0]])
    assert found.basis == "measured" and found.upper == math.inf
    assert found.value == pytest.approx(float(np.sum(np.linalg.solve(-A, np.ones(n)))), rel=1e-10)


@pytest.mark.parametrize("power", [0, 301, -300])
def test_squared_norm(power):
    """1/(s + a): 1/sqrt(2 a); sampled 1/(z - a): 1/sqrt(1 - a^2)."""
    scale = 2.0**power
    for B, C in (([[1.0]], [[1.0]]), ([[scale]], [[1 / scale]])):
        found = squared_norm(np.array([[-3.0 * scale]]), np.array(B), np.array(C), np.zeros((1, 1)), sampled=False)
        assert found == pytest.approx(1 / math.sqrt(6) * 2.0 ** (-power / 2), rel=1e-14)
    sampled = squared_norm(np.array([[0.5]]), np.ones((1, 1)), np.ones((1, 1)), np.array([[2.0]]), sampled=True)
    assert sampled == pytest.approx(math.sqrt(4 / 3 + 4), rel=1e-14)


def test_squared_norm_refuses():
    with pytest.raises(NotStable):
        squared_norm(np.array([[1.0]]), np.ones((1, 1)), np.ones((1, 1)), np.zeros((1, 1)), sampled=False)
    with pytest.raises(NotStable):
        squared_norm(np.array([[-1.0]]), np.ones((1, 1)), np.ones((1, 1)), np.zeros((1, 1)), sampled=True)


def test_refined_peak_follows_a_narrow_maximum():
    value, where = refined_peak(lambda w: 1 / (1e-6 + (w - math.pi) ** 2), np.linspace(0, 10, 60))
    assert value == pytest.approx(1e6, rel=1e-9) and where == pytest.approx(math.pi, rel=1e-7)
