"""Evaluation is never the weak link: every kind against exact values near poles and zeros, far out and close in."""

from __future__ import annotations

import math
import time
from collections.abc import Sequence
from fractions import Fraction
from typing import Any

import numpy as np
import pytest
import scipy.signal

from realize.kernels.cascade_response import cascades_of
from realize.models import Model, PoleResidue, Sections, StateSpace, TimeBase, TransferFunction, ZeroPoleGain
from realize.steps import convert

EPS = np.finfo(float).eps


def closed(roots: Any) -> list[complex]:
    upper = [complex(r) for r in np.asarray(roots, dtype=complex) if r.imag > 1e-12 * abs(r)]
    real = [complex(r.real) for r in np.asarray(roots, dtype=complex) if abs(r.imag) <= 1e-12 * abs(r)]
    return real + [z for r in upper for z in (r, r.conjugate())]


def exact_error(oracle: Any, model: Model, points: Sequence[complex]) -> float:
    """Return the largest relative error of `evaluate` against the fractions of Python."""
    values = model.evaluate(np.array(points))
    worst = 0.0
    for k, point in enumerate(points):
        wanted = oracle.at(model, (Fraction(point.real), Fraction(point.imag)))
        for i, row in enumerate(wanted):
            for j, (re, im) in enumerate(row):
                value = complex(values[k, i, j])
                gap = (Fraction(value.real) - re) ** 2 + (Fraction(value.imag) - im) ** 2
                size = re * re + im * im
                if size and not Fraction(1, 10**580) < size < 10**600:
                    continue  # no double holds it to full accuracy
                worst = max(worst, math.sqrt(gap / size) if size else float(gap != 0))
    return worst


def points_of(scale: float) -> list[complex]:
    """Real, imaginary and general points around a scale, and far from it."""
    sizes = scale * np.array([1e-9, 0.03, 0.4, 0.97, 1.0, 1.13, 3.0, 50.0, 1e9])
    return [z for x in sizes.tolist() for z in (1j * x, complex(x), complex(-0.3 * x, 0.8 * x), complex(0.1 * x, -x))]


BUTTERWORTH = scipy.signal.butter(40, 1.0, analog=True, output="zpk")
ELLIPTIC = scipy.signal.ellip(12, 0.5, 90, 1.0, analog=True, output="zpk")


def factors(design: Any) -> ZeroPoleGain:
    z, p, k = design
    return ZeroPoleGain(zeros=closed(z), poles=closed(p), gain=float(k))


@pytest.mark.parametrize("to", ["transfer-function", "zero-pole-gain", "pole-residue", "sections", "state-space"])
@pytest.mark.parametrize("name", ["butterworth 40", "elliptic 12"])
def test_filters(name: str, to: str, oracle: Any) -> None:
    source = factors(BUTTERWORTH if name.startswith("b") else ELLIPTIC)
    model = convert(source, to).model if to != "zero-pole-gain" else source
    points = points_of(1.0)
    # close to poles and zeros
    points += [complex(r) * (1 + d) for r in source.poles[0][0][:6].tolist() for d in (1e-3, 1e-9)]
    points += [complex(r) * (1 + d) for r in source.zeros[0][0][:6].tolist() for d in (1e-3, 1e-9)]
    if to == "state-space":
        # an exact solve a point: a few will do
        points = points[3::5]
    assert exact_error(oracle, model, points) <= 1e-12


def test_coefficients_that_cancel(oracle: Any) -> None:
    wilkinson = convert(ZeroPoleGain(zeros=[], poles=[-float(k) for k in range(1, 21)], gain=1.0), "transfer-function")
    points = [complex(-k - 1e-8) for k in range(1, 21)] + [complex(-10.3, 1e-3), 7j, 1e-5j, 1e6j]
    assert exact_error(oracle, wilkinson.model, points) <= 4 * EPS


def test_a_stop_band_from_residues(oracle: Any) -> None:
    made = convert(factors(scipy.signal.butter(12, 1.0, analog=True, output="zpk")), "pole-residue").model
    points = [30j, 100j, 1e3j, 1e4 + 0j, 3e5j]
    assert exact_error(oracle, made, points) <= 4 * EPS


def test_sampled_filters_near_one(oracle: Any) -> None:
    _, p, k = scipy.signal.butter(8, 0.002, output="zpk")
    clock = TimeBase("sampled", period=1e-3)
    source = ZeroPoleGain(zeros=[-1.0] * 8, poles=closed(p), gain=float(k), time=clock)
    points = [complex(1.0, 1e-6), complex(1 - 1e-5, 2e-5), complex(0.99, 0.1), -1 + 1e-7j, 0.3 + 0j]
    for to in ("transfer-function", "sections", "state-space"):
        assert exact_error(oracle, convert(source, to).model, points) <= 1e-12, to


def test_light_modes_at_their_peaks(oracle: Any) -> None:
    frequency = [1.0, 1.7, 2.9, 5.3]
    poles = [z for w in frequency for z in (complex(-1e-7 * w, w), complex(-1e-7 * w, -w))]
    residues = [z for w in frequency for z in (complex(0, -1 / w), complex(0, 1 / w))]
    model = PoleResidue(poles=poles, residues=np.array(residues).reshape(-1, 1, 1))
    points = [1j * w * (1 + d) for w in frequency for d in (0.0, 1e-7, -1e-10)] + [1.3j, 2.2j]
    for to in ("transfer-function", "sections", "zero-pole-gain", "pole-residue"):
        assert exact_error(oracle, convert(model, to).model, points) <= 1e-12, to


def test_several_channels(oracle: Any) -> None:
    source = TransferFunction(
        numerator=[[[1.0], [2.0, 1.0]], [[0.0], [3.0]]],
        denominator=[[[1.0, 3.0, 3.0, 1.0], [1.0, 2.0, 5.0]], [[1.0], [1.0, 1.0]]],
    )
    points = [-1 + 1e-6j, -1 - 2j + 1e-9, 3j, 1e8j]
    assert exact_error(oracle, source, points) <= 1e-12
    assert exact_error(oracle, convert(source, "state-space", form="cascade").model, points) <= 1e-12
    assert exact_error(oracle, convert(source, "pole-residue").model, points) <= 1e-12


def test_zeros_and_poles_hit_exactly() -> None:
    model = TransferFunction(numerator=[1.0, 0.0, 4.0], denominator=[1.0, 3.0, 3.0, 1.0])
    values = model.evaluate([2j, -1.0, 0.0])[:, 0, 0]
    assert values[0] == 0 and np.isinf(values[1]) and values[2] == 4.0
    common = TransferFunction(numerator=[1.0, 1.0], denominator=[1.0, 3.0, 2.0])
    assert common.evaluate(-1.0)[0, 0] == 1.0
    assert TransferFunction(numerator=[1.0, 0.0], denominator=[1.0, 0.0]).evaluate(0.0)[0, 0] == 1.0
    states = convert(model, "state-space").model
    assert states.evaluate(2j)[0, 0] == 0 and np.isinf(states.evaluate(-1.0)[0, 0])
    parts = PoleResidue(poles=[-1.0, -2.0], residues=[[[1.0]], [[-2.0]]])
    assert parts.evaluate(0.0)[0, 0] == 0 and np.isinf(parts.evaluate(-1.0)[0, 0])
    sections = Sections(sections=[[[1.0, 0.0, 4.0], [1.0, 1.0, 1.0]]], gain=2.0)
    assert sections.evaluate(2j)[0, 0] == 0


@pytest.mark.parametrize("gain", [1e-300, 1e300])
def test_sizes_at_the_ends_of_the_doubles(gain: float, oracle: Any) -> None:
    model = TransferFunction(numerator=[gain, gain], denominator=[1.0, 0.0, 1.0])
    assert exact_error(oracle, model, [1j * (1 + 1e-6), -1 + 1e-10j, 2.0 + 0j]) <= 1e-12
    assert np.all(np.isfinite(model.evaluate([1e100j, 1e-300j])))
    far = TransferFunction(numerator=[1e200], denominator=[1e-200, 1.0, 1.0])
    assert exact_error(oracle, far, [1e200j, complex(-1e200, 1e150), 3j]) <= 1e-12


def test_decimals_count(oracle: Any) -> None:
    source = ZeroPoleGain(zeros=[-0.1], poles=[-0.3, -0.7, -1.1], gain=0.1)
    for to in ("transfer-function", "zero-pole-gain", "sections"):
        made = convert(convert(source, "transfer-function").model, to, digits=40).model
        points = [complex(-0.3 + 1e-13), complex(-0.1 + 1e-12), 1j]
        assert exact_error(oracle, made, points) <= 1e-12, to
    beyond = ZeroPoleGain(zeros=[], poles=[-1.0, -2.0], gain=[[np.inf]], decimals={"gain": {(0, 0): "1e400"}})
    assert beyond.evaluate(1e100j)[0, 0].real == pytest.approx(-1e200)
    rounded = PoleResidue(
        poles=[-0.1], residues=[[[0.3]]], decimals={"poles": {(0, 0): "-0.1"}, "residues": {(0, 0, 0, 0): "0.3"}}
    )
    value = rounded.evaluate(-0.1)[0, 0]  # the double -0.1 is not the decimal
    gap = Fraction(-0.1) - Fraction("-0.1")
    assert value.real == pytest.approx(float(Fraction("0.3") / gap), rel=1e-14)


def test_a_cascade_is_recognised_and_nothing_else() -> None:
    source = factors(ELLIPTIC)
    states = convert(source, "state-space").model
    assert isinstance(states, StateSpace)
    chains = cascades_of(states.A, states.B, states.C, states.D)
    assert chains is not None and len(chains) == 1 and len(chains[0].sections) == 6
    other = convert(source, "state-space", form="modal").model
    A = states.A.copy()
    A[-1, 0] *= 1 + 1e-9
    assert cascades_of(A, states.B, states.C, states.D) is None
    assert cascades_of(states.A.T, states.C.T, states.B.T, states.D) is None
    assert np.allclose(other.evaluate(1j), states.evaluate(1j))


def test_exact_values_are_capped_by_predicted_cost() -> None:
    roots = np.exp(1j * np.linspace(0.51 * np.pi, 0.99 * np.pi, 100))
    n = np.real(np.poly(np.concatenate([roots, roots.conj()])))
    model = TransferFunction(numerator=[1.0], denominator=n)
    started = time.perf_counter()
    values = model.evaluate(1j * np.linspace(0.9, 1.1, 40_000))
    assert time.perf_counter() - started < 15
    assert np.all(np.isfinite(values))
