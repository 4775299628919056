"""Norms, gaps and margins against sources outside the project, each named beside its check."""

from __future__ import annotations

import json
import math
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import scipy.signal

import realize
from realize import StateSpace, TransferFunction
from realize.verification.difference import difference_states, linf_error

DATA = Path(__file__).parents[2] / ".." / "shared" / "data" / "slicot-examples"


def example(name: str) -> tuple[dict[str, Any], dict[str, Any]]:
    """Input and printed results of a SLICOT example program (SLICOT-Reference 5.9.1, BSD-3-Clause)."""
    path = DATA / f"{name}.json"
    if not path.exists():
        pytest.skip(f"{path.name} is not in ../shared/data/slicot-examples")
    record = json.loads(path.read_text())
    return record["input"], record["expected"]


def fraction(numerator: Any, denominator: Any) -> TransferFunction:
    return TransferFunction(numerator=numerator, denominator=denominator)


def constant(matrix: Any) -> StateSpace:
    D = np.atleast_2d(np.asarray(matrix, dtype=float))
    return StateSpace(A=np.zeros((0, 0)), B=np.zeros((0, D.shape[1])), C=np.zeros((D.shape[0], 0)), D=D)


# Zhou & Doyle, Essentials of Robust Control (1998), chapter 17, from memory; checked by hand where a formula is beside.


@pytest.mark.parametrize(("k1", "k2"), [(1.0, 2.0), (0.1, -3.0), (5.0, 5.5), (2.0, -0.5)])
def test_two_gains(k1: float, k2: float) -> None:
    """|k1 - k2| / (sqrt(1 + k1^2) sqrt(1 + k2^2)), as long as 1 + k1 k2 is not 0 (then 1)."""
    claim = realize.gap_distance(constant(k1), constant(k2))
    assert claim.value == pytest.approx(abs(k1 - k2) / math.hypot(1, k1) / math.hypot(1, k2), rel=1e-14)


def test_100_over_2s_plus_minus_1() -> None:
    """P1 = 100/(2s + 1) and P2 = 100/(2s - 1): close although one is unstable; kappa(0) = 200/10001."""
    claim = realize.gap_distance(fraction([100.0], [2.0, 1.0]), fraction([100.0], [2.0, -1.0]))
    assert claim.value == pytest.approx(200 / 10001, rel=1e-14) and claim.basis == "proved"
    third = fraction([100.0], [1.0, 2.0, 1.0])
    # 100/(s + 1)^2 is stable like P1, and far from it
    assert realize.gap_distance(fraction([100.0], [2.0, 1.0]), third).value > 0.8


def test_one_over_s() -> None:
    """1/s and 1/(s + a): kappa^2 = a^2 / ((1 + x)(1 + a^2 + x)), largest at x = w^2 = 0: a / sqrt(1 + a^2)."""
    for a in (0.1, 1.0, 3.0, 1e-8):
        claim = realize.gap_distance(fraction([1.0], [1.0, 0.0]), fraction([1.0], [1.0, a]))
        assert claim.value == pytest.approx(a / math.hypot(1, a), rel=1e-14)
        # on the other side of the axis it is as far
        other = realize.gap_distance(fraction([1.0], [1.0, 0.0]), fraction([1.0], [1.0, -a]))
        assert other.value == claim.value


@pytest.mark.parametrize("a", [0.1, 0.9, 1.1, 3.0])
def test_where_the_winding_number_decides(a: float) -> None:
    """a/(s + 1) and a/(s - 1): kappa = 2 a / (1 + a^2 + w^2) is below 1 at every frequency, whatever a is.

    f1 f2~ (1 + P2~ P1) = a^2 - (s + 1)^2 has the roots -1 + a and -1 - a, and one of them must be on the right: the gap
    is 2 a / (1 + a^2) for a > 1, and 1 for a < 1, where no high gain hides the unstable pole. Derived by hand.
    """
    claim = realize.gap_distance(fraction([a], [1.0, 1.0]), fraction([a], [1.0, -1.0]))
    assert claim.basis == "proved"
    assert claim.value == (pytest.approx(2 * a / (1 + a * a), rel=1e-14) if a > 1 else 1.0)


def test_opposite_signs() -> None:
    """All-pass times 2 and -2: 1 + P2~ P1 = -3, kappa = 4/5; 1/(s - 1) and -1/(s - 1): s^2 / (s^2 - 1), gap 1."""
    two = [fraction([2 * sign, -2 * sign], [1.0, 1.0]) for sign in (1.0, -1.0)]
    assert realize.gap_distance(*two).value == pytest.approx(0.8, rel=1e-14)
    assert realize.gap_distance(fraction([1.0], [1.0, -1.0]), fraction([-1.0], [1.0, -1.0])).value == 1.0


def test_the_optimal_margin_of_an_integrator() -> None:
    """1/s with K = 1: b = 1/sqrt(2), the largest there is (Glover & McFarlane 1989, from memory)."""
    claim = realize.stability_margin(fraction([1.0], [1.0, 0.0]), constant(1.0))
    assert claim.value == pytest.approx(math.sqrt(0.5), rel=1e-11)
    assert claim.value <= math.sqrt(0.5) <= claim.value + claim.uncertainty
    for k in (0.5, 2.0):
        assert realize.stability_margin(fraction([1.0], [1.0, 0.0]), constant(k)).value < 0.7


def test_gap_of_two_constant_matrices_is_the_sine_of_the_largest_angle() -> None:
    """Subspaces spanned by [P; I]: scipy.linalg.subspace_angles."""
    from scipy.linalg import subspace_angles

    rng = np.random.default_rng(0)
    for p, m in ((1, 3), (3, 1), (2, 2), (3, 2), (3, 3)):
        one = rng.standard_normal((p, m))
        two = one + 0.3 * rng.standard_normal((p, m))
        angle = subspace_angles(np.vstack([one, np.eye(m)]), np.vstack([two, np.eye(m)]))[0]
        claim = realize.gap_distance(constant(one), constant(two))
        if np.linalg.det(np.eye(m) + two.T @ one) > 0:
            assert claim.value == pytest.approx(math.sin(angle), rel=1e-10)


# SLICOT example programs


def test_stability_radius_ab13fd() -> None:
    """The distance to the nearest unstable matrix is 1 / sup sigma_max((sI - A)^-1) (Van Loan 1985)."""
    given, expected = example("AB13FD")
    claim = realize.largest_gain(StateSpace(A=given["A"], B=np.eye(4), C=np.eye(4)))
    assert claim.basis == "proved"
    assert 1 / claim.value == pytest.approx(expected["stability_radius"], rel=1e-9)
    assert claim.where["frequency"] == pytest.approx(expected["minimizing_omega"], rel=1e-4)


def test_hankel_norm_ab13ad() -> None:
    given, expected = example("AB13AD")
    claim = realize.hankel_norm(StateSpace(A=given["A"], B=given["B"], C=given["C"]))
    assert claim.value == pytest.approx(expected["hankel_norm"], rel=3e-6)


def test_against_slycot() -> None:
    """ab13bd (H2) and ab13dd (L-infinity) on the stable model of AB13AD."""
    slycot = pytest.importorskip("slycot")
    given, _ = example("AB13AD")
    A, B, C = (np.array(given[name]) for name in "ABC")
    model = StateSpace(A=A, B=B, C=C)
    D = np.zeros((3, 2))
    h2 = realize.h2_norm(model)
    assert h2.basis == "proved"
    assert h2.value == pytest.approx(slycot.ab13bd("C", "H", 7, 2, 3, A, B, C, D), rel=1e-10)
    peak, _ = slycot.ab13dd("C", "I", "N", "D", 7, 2, 3, A, np.eye(7), B, C, D, 1e-10)
    gain = realize.largest_gain(model)
    assert gain.basis == "proved" and gain.value == pytest.approx(peak, rel=1e-9)


def exact_size(one: StateSpace, two: StateSpace, frequency: float) -> float:
    """|G2 - G1| of two controllable companion forms (first row of A) at s = jw, in Python's rational arithmetic."""
    w = Fraction(frequency)
    values = []
    for model in (one, two):
        den = [Fraction(1), *(-Fraction(a) for a in model.A[0])]
        num = [Fraction(c) for c in model.C[0]]
        pair = []
        for coefficients in (num, den):
            re, im = Fraction(0), Fraction(0)
            for c in coefficients:
                re, im = -im * w + c, re * w
            pair.append((re, im))
        (a, b), (c, d) = pair
        size = c * c + d * d
        values.append(((a * c + b * d) / size, (b * c - a * d) / size))
    (a, b), (c, d) = values
    square = (c - a) ** 2 + (d - b) ** 2
    return math.sqrt(square)


@pytest.mark.parametrize("order", [4, 8, 10, 12])
def test_differences_of_filters_in_companion_form(order: int) -> None:
    """Chebyshev filters at 1 kHz and 1.02 kHz (scipy.signal): the norm is attained and proved; slycot's is too small.

    Up to order 4 ab13dd agrees to 1e-12. From the 8th on it returns 3.6 to 6.2 % less than the difference has at a
    frequency where it can be evaluated by hand.
    """
    models = []
    for frequency in (1000.0, 1020.0):
        A, B, C, D = scipy.signal.tf2ss(*scipy.signal.cheby1(order, 1, 2 * math.pi * frequency, analog=True))
        models.append(StateSpace(A=A, B=B, C=C, D=D))
    claim = linf_error(*models)
    assert claim.basis == "proved" and claim.uncertainty < 1e-11 * claim.value
    attained = exact_size(*models, claim.where["frequency"])
    assert claim.value == pytest.approx(attained, rel=1e-12)
    nearby = [exact_size(*models, claim.where["frequency"] * (1 + k * 1e-4)) for k in range(-40, 41)]
    assert max(nearby) <= (claim.value + claim.uncertainty) * (1 + 1e-15)
    slycot = pytest.importorskip("slycot")
    A, B, C, D = difference_states(*models)
    n = A.shape[0]
    peak, _ = slycot.ab13dd("C", "I", "N", "D", n, 1, 1, A, np.eye(n), B, C, D, 1e-10)
    if order == 4:
        assert peak == pytest.approx(attained, rel=1e-9)
    else:
        assert peak < attained * (1 + 1e-9)


# python-control


@pytest.mark.filterwarnings("ignore")
def test_margins_against_python_control() -> None:
    control = pytest.importorskip("control")
    for num, den in (([4.0], [1.0, 3.0, 3.0, 1.0]), ([10.0, 10.0], [1.0, 11.0, 10.5, 2.0, 0.0])):
        found = realize.loop_margins(fraction(num, den))
        gm, pm, sm, wpc, wgc, _ = control.stability_margins(control.tf(num, den))
        assert found.phase_margin.value == pytest.approx(pm, rel=1e-8)
        assert found.phase_margin.where["frequency"] == pytest.approx(wgc, rel=1e-8)
        assert found.largest_sensitivity.value == pytest.approx(1 / sm, rel=1e-6)
        if math.isfinite(gm):
            assert found.gain_margin.value == pytest.approx(gm, rel=1e-8)
            assert found.gain_margin.where["frequency"] == pytest.approx(wpc, rel=1e-8)
        else:
            assert found.gain_margin.infinite


def test_margins_by_hand() -> None:
    """4/(s + 1)^3: phase -180 at sqrt(3), gain there 4/8, so the margin is 2; |L| = 1 at sqrt(4^(2/3) - 1)."""
    found = realize.loop_margins(fraction([4.0], [1.0, 3.0, 3.0, 1.0]))
    assert found.gain_margin.value == 2.0 and found.gain_margin.where["frequency"] == math.sqrt(3)
    w = math.sqrt(4 ** (2 / 3) - 1)
    assert found.phase_margin.value == pytest.approx(180 - 3 * math.degrees(math.atan(w)), rel=1e-13)
    assert found.delay_margin.value == pytest.approx(math.radians(found.phase_margin.value) / w, rel=1e-13)
    assert found.gain_reduction_margin.value == 0.0
