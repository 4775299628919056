"""Loops with dead time: against formulas, eigenvalues of loops without it, and registers of sampled ones."""

from __future__ import annotations

import math

import numpy as np
import pytest

import realize
from realize.kernels.closed_loop import loop_states
from realize.models import DeadTime, StateSpace, TimeBase
from realize.verification.closed_loop import loop_record
from realize.verification.delayed_loop import delayed_record, with_registers


def late(A, B, C, seconds, D=None, time=None):
    p, m = len(C), len(B[0])
    dead = DeadTime((seconds,) * m, (0.0,) * p, ((0.0,) * m,) * p)
    return StateSpace(A=A, B=B, C=C, D=D, dead_time=dead, time=time or TimeBase("continuous"))


def gain(value):
    return StateSpace(A=np.zeros((0, 0)), B=np.zeros((0, 1)), C=np.zeros((1, 0)), D=[[value]])


#: tan(w T) = -w, and the gain sqrt(1 + w^2) there, for exp(-s T) / (s + 1): by bisection in Python's own numbers.
def largest_gain(T):
    low, high = math.pi / (2 * T), math.pi / T
    for _ in range(200):
        middle = (low + high) / 2
        low, high = (middle, high) if math.atan(middle) + middle * T < math.pi else (low, middle)
    return math.hypot(1, low)


@pytest.mark.parametrize("T", [0.1, 1.0, 5.0])
@pytest.mark.parametrize(("part", "unstable"), [(0.5, 0), (0.999, 0), (1.001, 2), (3.0, None)])
def test_a_lag_with_dead_time(T, part, unstable):
    found = delayed_record(late([[-1.0]], [[1.0]], [[1.0]], T), gain(part * largest_gain(T)))
    assert found["stable"] is (part < 1)
    if unstable is not None:
        assert found["unstable_poles"] == unstable
    if part < 1:
        assert found["gain_margin"] == pytest.approx(1 / part, rel=1e-9)


@pytest.mark.parametrize(("k", "unstable"), [(0.5, 0), (1.57, 0), (1.58, 2), (8.0, 4)])
def test_an_integrator_with_dead_time(k, unstable):
    """k exp(-s) / s: stable up to k = pi / 2, phase margin 90 degrees less k; two more poles every 2 pi."""
    found = delayed_record(late([[0.0]], [[1.0]], [[1.0]], 1.0), gain(k))
    assert found["unstable_poles"] == unstable
    if not unstable:
        assert found["phase_margin"] == pytest.approx(90 - math.degrees(k), abs=1e-8)
        assert found["gain_margin"] == pytest.approx(math.pi / 2 / k, rel=1e-9)


@pytest.mark.parametrize(("k", "unstable"), [(0.5, 1), (1.5, 0), (5.0, 0), (20.0, 2)])
def test_an_unstable_plant_with_dead_time(k, unstable):
    assert delayed_record(late([[1.0]], [[1.0]], [[1.0]], 0.1), gain(k))["unstable_poles"] == unstable


def test_what_cannot_be_decided_is_said():
    through = late([[-1.0]], [[1.0]], [[1.0]], 1.0, D=[[1.0]])
    assert delayed_record(through, gain(0.5))["stable"] is None
    hidden = late([[0.0, 0.0], [0.0, -1.0]], [[0.0], [1.0]], [[1.0, 1.0]], 1.0)
    found = delayed_record(hidden, gain(0.5))
    assert found["stable"] is None and "not seen" in found["note"]
    boundary = late([[0.0]], [[1.0]], [[1.0]], 1.0)
    assert delayed_record(boundary, gain(math.pi / 2))["stable"] in (None, True, False)


def test_without_dead_time_the_eigenvalues_agree():
    rng = np.random.default_rng(0)
    decided = 0
    for _ in range(40):
        n, k, p, m = rng.integers(1, 6), rng.integers(0, 4), rng.integers(1, 3), rng.integers(1, 3)
        A = rng.standard_normal((n, n))
        if rng.random() < 0.5:
            A[0] = 0
        elif rng.random() < 0.4 and n > 2:
            A[:2] = 0
            A[0, 1], A[1, 0] = 1, -4
        plant = StateSpace(A=A, B=rng.standard_normal((n, m)), C=rng.standard_normal((p, n)))
        controller = StateSpace(
            A=rng.standard_normal((k, k)) - rng.integers(0, 3) * np.eye(k),
            B=rng.standard_normal((k, p)),
            C=rng.standard_normal((m, k)),
            D=rng.standard_normal((m, p)),
        )
        found, other = delayed_record(plant, controller), loop_record(plant, controller)
        made = loop_states(*[(one.A, one.B, one.C, one.D) for one in (plant, controller)])
        if found["stable"] is None:
            continue
        decided += 1
        assert found["unstable_poles"] == np.count_nonzero(np.linalg.eigvals(made.A).real > 0)
        assert found["stability_margin"] == pytest.approx(other["stability_margin"], rel=1e-6)
    assert decided >= 35


@pytest.mark.parametrize("channels", [((0, 0, 0), (0, 0, 0)), ((3, 0, 1), (0, 2, 5))])
def test_registers_are_the_dead_time(channels):
    rng = np.random.default_rng(1)
    dead = DeadTime((0.2, 0.0, 0.1), (0.0, 0.3), tuple(tuple(0.1 * k for k in row) for row in channels))
    model = StateSpace(
        A=0.4 * rng.standard_normal((3, 3)),
        B=rng.standard_normal((3, 3)),
        C=rng.standard_normal((2, 3)),
        D=rng.standard_normal((2, 3)),
        dead_time=dead,
        time=TimeBase("sampled", 0.1),
    )
    made = with_registers(model)
    points = np.exp(1j * np.linspace(0, np.pi, 7))
    assert np.allclose(made.rational_part(points), model.evaluate(points), rtol=0, atol=1e-12)


def test_a_sampled_loop_with_dead_time():
    """y[t + 1] = y[t] - k y[t - 2]: the roots of z^2 (z - 1) + k."""
    base = TimeBase("sampled", 0.5)
    for k in (0.1, 0.4, 0.46, 0.9):
        plant = late([[1.0]], [[1.0]], [[1.0]], 1.0, time=base)
        found = delayed_record(
            plant, StateSpace(A=np.zeros((0, 0)), B=np.zeros((0, 1)), C=np.zeros((1, 0)), D=[[k]], time=base)
        )
        assert found["stable"] == (np.abs(np.roots([1, -1, 0, k])).max() < 1)


def test_the_receipt_of_a_reduction():
    """Dead time is part of the loops that are looked at, and nothing is licensed."""
    lag = realize.TransferFunction(numerator=[1.0], denominator=[1.0, 3.2, 3.4, 1.0])
    plant = realize.convert(lag, "state-space").model
    plant = plant.with_(dead_time=DeadTime((2.0,), (0.0,), ((0.0,),)), receipts=())
    weights = {"input_weight": [1.0], "output_weight": [1.0]}
    for k, stable in ((0.5, True), (4.0, False)):
        made = realize.reduce(plant, order=2, controller=gain(k), **weights).receipt
        loop = made.details["closed_loop"]
        assert loop["dead_time"] and loop["full"]["stable"] is stable and loop["reduced"]["stable"] is stable
        assert not made.details["licence"]["given"]
        assert any("NOT stable" in text for text in made.cautions) is not stable
        assert any("dead time included" in text for text in made.cautions)
    # without its dead time the loop would be stable
    assert realize.reduce(plant.with_(dead_time=None), order=2, controller=gain(4.0)).receipt.details["closed_loop"][
        "full"
    ]["stable"]
