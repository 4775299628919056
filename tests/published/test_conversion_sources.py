"""Zeros, poles, sections, coefficients and states from standards and textbooks, converted into each other."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from realize.models import Model, PoleResidue, Sections, StateSpace, TimeBase, TransferFunction, ZeroPoleGain
from realize.schema import UNIVERSAL_KINDS
from realize.steps import convert, inspect

HARD = Path(__file__).parents[3] / "shared" / "data" / "hard-inputs.json"


def decibels(model: Model, hertz: list[float]) -> np.ndarray:
    value = model.evaluate(model.time.points(2 * np.pi * np.array(hertz)))[:, 0, 0]
    return 20 * np.log10(np.abs(value))


# IEC 61672-1:2013, annex E (pole frequencies) and table 3 (A weighting, dB, at 10^(n/10) Hz), from memory
A_POLES = (20.598997, 107.65265, 737.86223, 12194.217)
A_TABLE = {10: -70.4, 31.622776601683793: -39.4, 100: -19.1, 316.2277660168379: -6.6, 1000: 0.0, 1995.2623149688795:
1.2,
           3981.0717055349724: 1.0, 10000: -2.5, 19952.623149688796: -9.3}  # fmt: skip


def a_weighting() -> ZeroPoleGain:
    f1, f2, f3, f4 = (2 * math.pi * f for f in A_POLES)
    # 2.000 dB restore 0 dB at 1 kHz (the standard's A_1000 is -2.000 dB)
    return ZeroPoleGain(zeros=[0.0] * 4, poles=[-f1, -f1, -f2, -f3, -f4, -f4], gain=f4**2 * 10**0.1)


@pytest.mark.parametrize("to", UNIVERSAL_KINDS)
def test_a_weighting_in_every_kind(to: str) -> None:
    """Four zeros at the origin under poles from 20 Hz to 12 kHz: 70 dB down at 10 Hz, where sums of residues cancel."""
    made = convert(a_weighting(), to)
    assert np.allclose(decibels(made.model, list(A_TABLE)), list(A_TABLE.values()), atol=0.051)
    assert made.receipt.claim("response-error").value < 1e-9


# IEC 60098:1987 (RIAA), time constants and table (dB at Hz), from memory
RIAA = (3180e-6, 318e-6, 75e-6)
RIAA_TABLE = {20: 19.3, 50: 16.9, 100: 13.1, 500: 2.6, 1000: 0.0, 2000: -2.6, 5000: -8.2, 10000: -13.7, 20000: -19.6}


@pytest.mark.parametrize("to", UNIVERSAL_KINDS)
def test_riaa_in_every_kind(to: str) -> None:
    t1, t2, t3 = RIAA
    source = TransferFunction(numerator=[t2, 1.0], denominator=[t1 * t3, t1 + t3, 1.0])
    made = convert(source, to)
    at_one = decibels(made.model, [1000.0])[0]
    assert np.allclose(decibels(made.model, list(RIAA_TABLE)) - at_one, list(RIAA_TABLE.values()), atol=0.06)


def test_riaa_time_constants_are_the_poles_and_the_zero() -> None:
    t1, t2, t3 = RIAA
    source = TransferFunction(numerator=[t2, 1.0], denominator=[t1 * t3, t1 + t3, 1.0])
    made = convert(source, "zero-pole-gain").model
    assert isinstance(made, ZeroPoleGain)
    assert np.allclose(np.sort(made.poles[0][0].real), [-1 / t3, -1 / t1], rtol=1e-13)
    assert np.allclose(made.zeros[0][0].real, [-1 / t2], rtol=1e-14)
    # residues by hand: (1 + s T2)/((1 + s T1)(1 + s T3)) at s = -1/T1: (1 - T2/T1)/(T1 (1 - T3/T1))
    parts = convert(source, "pole-residue").model
    assert isinstance(parts, PoleResidue)
    slow = int(np.argmin(np.abs(parts.poles)))
    assert parts.residues[slow, 0, 0].real == pytest.approx((1 - t2 / t1) / (t1 - t3), rel=1e-13)
    fast = 1 - slow
    assert parts.residues[fast, 0, 0].real == pytest.approx((1 - t2 / t3) / (t3 - t1), rel=1e-13)


# Recommendation ITU-R BS.1770, annex 1, tables 1 and 2: K weighting at 48 kHz as decimal strings, from memory
SHELF = (("1.53512485958697", "-2.69169618940638", "1.19839281085285"), ("1", "-1.69065929318241", "0.73248077421585"))
HIGHPASS = (("1.0", "-2.0", "1.0"), ("1", "-1.99004745483398", "0.99007225036621"))
#  response at these frequencies, computed from the coefficients with 40 digits; 0.691 dB at 997 Hz is the
# Recommendation's own
K_TABLE = {20.0: -13.275367792527211, 100.0: -1.1334980926854066, 997.0: 0.6910140954660231, 10000.0: 4.041882222570132}


def k_weighting() -> Sections:
    pairs = (SHELF, HIGHPASS)
    decimals = {(k, side, c): pairs[k][side][c] for k in range(2) for side in range(2) for c in range(3)}
    return Sections(
        sections=[[[float(c) for c in row] for row in pair] for pair in pairs],
        decimals={"sections": decimals},
        time=TimeBase("sampled", rate="48000"),
    )


@pytest.mark.parametrize("to", UNIVERSAL_KINDS)
def test_k_weighting_in_every_kind(to: str) -> None:
    """A double zero at z = 1 and poles at 0.995: 1e-16 in a coefficient is 1e-12 of the response at 20 Hz."""
    made = convert(k_weighting(), to)
    assert np.allclose(decibels(made.model, list(K_TABLE)), list(K_TABLE.values()), atol=1e-9)
    assert made.model.time.exact_period.denominator == 48000
    claim = made.receipt.claim("response-error")
    if to == "transfer-function":
        # at 24 rad/s the numerator is 0.042 |z - 1|^2 = 1e-8 between coefficients up to 6: one rounding is 1e-7 of it
        assert claim.holds is False and 1e-8 < claim.value < 1e-6
    elif to == "matrix-fraction":
        # coefficients too, without a default limit
        assert claim.holds is None and 1e-8 < claim.value < 1e-6
    else:
        assert claim.value < 1e-9


def test_the_double_zero_of_the_k_weighting_stays_at_one() -> None:
    record = inspect(convert(k_weighting(), "zero-pole-gain"))
    assert [1.0, 0.0, 2] in record["zeros"]
    record = inspect(convert(k_weighting(), "state-space"))
    assert [1.0, 0.0, 2] in record["zeros"]


# Normalised low-pass prototypes (Weinberg 1962; Zverev 1967), from memory: exact poles against rounded tables
BUTTERWORTH = {
    2: [1, 1.4142, 1],
    3: [1, 2, 2, 1],
    4: [1, 2.6131, 3.4142, 2.6131, 1],
    5: [1, 3.2361, 5.2361, 5.2361, 3.2361, 1],
    6: [1, 3.8637, 7.4641, 9.1416, 7.4641, 3.8637, 1],
}


@pytest.mark.parametrize("n", BUTTERWORTH)
def test_butterworth_poles_give_the_tables(n: int) -> None:
    """Poles exp(j pi (2k + n - 1)/(2n)), closed under conjugation to the last bit."""
    upper = [np.exp(1j * np.pi * (2 * k + n - 1) / (2 * n)) for k in range(1, n // 2 + 1)]
    poles = [root for pole in upper for root in (pole, np.conj(pole))] + ([-1.0] if n % 2 else [])
    made = convert(ZeroPoleGain(zeros=[], poles=poles, gain=1.0), "transfer-function").model
    assert isinstance(made, TransferFunction)
    assert np.allclose(made.denominator[0][0], BUTTERWORTH[n], atol=5e-5)


# Bessel polynomials are integers (Thomson 1949; any handbook, from memory)
BESSEL = {3: [1, 6, 15, 15], 4: [1, 10, 45, 105, 105], 6: [1, 21, 210, 1260, 4725, 10395, 10395]}


@pytest.mark.parametrize("n", BESSEL)
def test_bessel_polynomials_come_back_from_their_companions_exactly(n: int) -> None:
    source = TransferFunction(numerator=[float(BESSEL[n][-1])], denominator=[float(c) for c in BESSEL[n]])
    for form in ("controllable-companion", "observable-companion"):
        states = convert(source, "state-space", form=form)
        made = convert(states, "transfer-function").model
        assert isinstance(made, TransferFunction)
        assert made.denominator[0][0].tolist() == BESSEL[n]
        assert made.numerator[0][0].tolist() == [BESSEL[n][-1]]
    assert convert(source, "state-space").receipt.claim("response-error").value < 1e-15


# Pade approximations of exp(-s) (Baker & Graves-Morris, from memory): all-pass, zeros mirror the poles
@pytest.mark.parametrize(
    "coefficients", [[1, 2], [1, 6, 12], [1, 12, 60, 120], [1, 20, 180, 840, 1680]], ids=lambda c: str(len(c) - 1)
)
@pytest.mark.parametrize("to", UNIVERSAL_KINDS)
def test_pade_approximations_stay_all_pass(coefficients: list[int], to: str) -> None:
    n = len(coefficients) - 1
    numerator = [float(c * (-1) ** (n - k)) for k, c in enumerate(coefficients)]
    source = TransferFunction(numerator=numerator, denominator=[float(c) for c in coefficients])
    made = convert(source, to).model
    w = np.array([0.05, 0.3, 1.0, 3.0, 20.0])
    value = made.evaluate(1j * w)[:, 0, 0]
    assert np.allclose(np.abs(value), 1.0, rtol=1e-13)
    # the phase of exp(-s) to the order 2n + 1 of the approximation
    assert np.angle(value[0]) == pytest.approx(-w[0], abs=w[0] ** (2 * n + 1))


def test_kundur_machine_on_an_infinite_bus() -> None:
    """P. Kundur, Power System Stability and Control (1994), example 12.3: eigenvalues -0.11 +- j6.41, -0.204 (from
    memory).
    """
    A = [[0.0, -0.1092, -0.1236], [376.99, 0.0, 0.0], [0.0, -0.1938, -0.4229]]
    plant = StateSpace(A=A, B=[[1.0], [0.0], [0.0]], C=[[0.0, 1.0, 0.0]])
    poles = inspect(plant)["poles"]
    assert sorted(round(re, 2) for re, _, _ in poles) == [-0.2, -0.11, -0.11]
    assert sorted(round(im, 2) for _, im, _ in poles) == [-6.41, 0.0, 6.41]
    for to in UNIVERSAL_KINDS:
        made = convert(plant, to)
        assert made.receipt.claim("response-error").value < 1e-12
    # trace and determinant by hand: s^3 + 0.4229 s^2 + 0.1092*376.99 s + 376.99 (0.1092*0.4229 - 0.1236*0.1938)
    d = convert(plant, "transfer-function").model.denominator[0][0]
    assert d[1:] == pytest.approx([0.4229, 0.1092 * 376.99, 376.99 * (0.1092 * 0.4229 - 0.1236 * 0.1938)], rel=1e-12)


def test_gilbert_residues_and_order() -> None:
    """E. G. Gilbert (1963): the order of simple partial fractions is the sum of the ranks of the residues (from
    memory).

    [1/(s+1), 2/(s+1); 1/((s+1)(s+2)), 1/(s+2)]: residues [1 2; 1 0] at -1 (rank 2), [0 0; -1 1] at -2 (rank 1):
    order 3.
    """
    plant = TransferFunction(
        numerator=[[[1.0], [2.0]], [[1.0], [1.0]]],
        denominator=[[[1.0, 1.0], [1.0, 1.0]], [[1.0, 3.0, 2.0], [1.0, 2.0]]],
    )
    parts = convert(plant, "pole-residue").model
    assert isinstance(parts, PoleResidue)
    assert parts.poles.tolist() == [-1.0, -2.0]
    assert parts.residues[0].real.tolist() == [[1.0, 2.0], [1.0, 0.0]]
    assert parts.residues[1].real.tolist() == [[0.0, 0.0], [-1.0, 1.0]]
    states = convert(plant, "state-space")
    assert states.model.order == 3 and not states.receipt.failed


def _hard(name: str) -> dict[str, Any]:
    if not HARD.exists():
        pytest.skip("../shared/data/hard-inputs.json is absent")
    return next(case for case in json.loads(HARD.read_text())["cases"] if case["id"] == name)


@pytest.mark.parametrize("name", ["TF02", "TF07", "TF09", "TF13", "TF15"])
def test_hard_coefficients_to_states(name: str) -> None:
    """Exact responses computed outside of the project; 60 light modes, high-order filters, a zero easily lost."""
    case = _hard(name)
    source = TransferFunction(numerator=case["input"]["num"], denominator=case["input"]["den"])
    made = convert(source, "state-space")
    w = np.array(case["oracle"]["w"])
    exact = np.array(case["oracle"]["response"]["re"]) + 1j * np.array(case["oracle"]["response"]["im"])
    value = made.model.evaluate(1j * w)[:, 0, 0]
    error = np.max(np.abs(value - exact.reshape(-1)) / np.abs(exact.reshape(-1)))
    assert error < 1e-9
    assert not made.receipt.failed


@pytest.mark.parametrize("name", ["SS01", "SS05", "SS09"])
def test_hard_states_to_coefficients(name: str) -> None:
    """The claim is the exact error of the coefficients, whether they can carry the plant or not; where they
    cannot, it fails.
    """
    case = _hard(name)
    source = StateSpace(**{key: case["input"][key] for key in "ABCD"})
    made = convert(source, "transfer-function")
    p, m = source.shape
    w = np.array(case["oracle"]["w"])
    exact = np.array(case["oracle"]["response"]["re"]) + 1j * np.array(case["oracle"]["response"]["im"])
    exact = np.moveaxis(exact.reshape(p, m, -1), 2, 0)
    value = made.model.evaluate(1j * w)
    error = np.max(np.linalg.norm(value - exact, axis=(1, 2)) / np.linalg.norm(exact, axis=(1, 2)))
    claim = made.receipt.claim("response-error")
    assert error < 1e-9 or claim.holds is False
    assert claim.value is not None
