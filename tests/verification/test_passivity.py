"""The claim `passivity` against closed forms: positive real and bounded real functions at and beside the boundary."""

from __future__ import annotations

import math

import numpy as np
import pytest

from realize.errors import InputError, Refused
from realize.kernels.passive_frequencies import singular_frequencies
from realize.models import DeadTime, Model, PoleResidue, Ports, StateSpace, TimeBase, TransferFunction
from realize.schema import Claim
from realize.verification.passivity import passivity


def plant(numerator: list[float], denominator: list[float], **more: object) -> TransferFunction:
    return TransferFunction(numerator=numerator, denominator=denominator, **more)


def total(claim: Claim) -> float:
    if claim.infinite:
        return math.inf
    assert claim.value is not None
    return claim.value + (claim.uncertainty or 0.0)


@pytest.mark.parametrize(
    ("numerator", "denominator"),
    [
        ([1.0, 2.0], [1.0, 1.0]),
        ([1.0, 1.0], [1.0, 0.0]),  # a capacitor and a resistor: a pole at 0
        ([1.0, 0.0, 1.0], [1.0, 0.0]),  # coil and capacitor in series: lossless, improper
        ([1.0, 0.0], [1.0, 1.0]),  # zero at 0
        ([1.0], [1.0, 1.0]),  # zero at infinity
        ([1.0, 1.0, 1.0], [1.0, 1.0, 1.0]),
        # Re Z = (1 - x)^2 / |d|^2 touches 0 at w = 1: minimum resistance
        ([1.0, 0.5, 1.0], [1.0, 2.0, 1.0]),
    ],
)
def test_positive_real_functions_are_proved(numerator: list[float], denominator: list[float]) -> None:
    claim = passivity(plant(numerator, denominator), "positive-real")
    assert claim.basis == "proved"
    assert total(claim) == 0


def test_a_minimum_resistance_function_touches_zero_and_less_is_seen() -> None:
    """Z = (s^2 + a s + 1)/(s^2 + b s + 1): Re numerator (1 - x)^2 + a b x, zero at x = 1 only for a b = 0."""
    assert total(passivity(plant([1.0, 0.0, 1.0], [1.0, 2.0, 1.0]), "positive-real")) == 0
    claim = passivity(plant([1.0, -(2.0**-20), 1.0], [1.0, 2.0, 1.0]), "positive-real")
    # at w = 1: Z = a/b = -2^-21, and the largest gain is 1
    assert claim.value == pytest.approx(2.0**-21, rel=1e-3)
    assert claim.basis == "proved"
    assert total(claim) >= 2.0**-21


@pytest.mark.parametrize(
    ("numerator", "denominator", "words"),
    [
        ([1.0], [1.0, -1.0], "stability region"),
        ([1.0, 1.0], [1.0, 0.0, 0.0], "not simple"),
        ([-1.0, 1.0], [1.0, 0.0, 1.0], "stability region"),
        ([-1.0, -1.0], [1.0, 0.0], "semidefinite"),
        ([1.0, 0.0, 0.0, 0.0], [1.0, 1.0], "more than one"),
    ],
)
def test_what_can_never_be_positive_real(numerator: list[float], denominator: list[float], words: str) -> None:
    claim = passivity(plant(numerator, denominator), "positive-real")
    assert claim.infinite
    assert words in claim.note


@pytest.mark.parametrize("excess", [1e-3, 1e-9, 1e-13])
def test_a_singular_value_above_one_is_never_less_than_it_is(excess: float) -> None:
    gain = 1.0 + excess
    claim = passivity(plant([gain], [1.0, 1.0]), "bounded-real")
    assert total(claim) >= gain - 1.0
    assert claim.value is not None
    assert claim.value > 0


def test_all_passes_are_bounded_real_to_the_last_bit() -> None:
    assert total(passivity(plant([-1.0, 1.0], [1.0, 1.0]), "bounded-real")) == 0
    assert total(passivity(plant([1.0, -0.5, 4.0], [1.0, 0.5, 4.0]), "bounded-real")) == 0


def two_ports(coupling: float) -> PoleResidue:
    """R_1/(s + 1) with the residue [[1, c], [c, 1]]: positive real if and only if |c| <= 1."""
    residue = np.array([[[1.0, coupling], [coupling, 1.0]]])
    return PoleResidue(poles=[-1.0], residues=residue, direct=np.zeros((2, 2)))


def test_a_matrix_with_a_residue_at_the_boundary() -> None:
    assert total(passivity(two_ports(1.0), "positive-real")) == 0
    assert total(passivity(two_ports(-1.0), "positive-real")) == 0
    claim = passivity(two_ports(1.5), "positive-real")
    # at w = 0: eigenvalues 2.5 and -0.5, the gain is 2.5
    assert claim.value == pytest.approx(0.2, rel=1e-3)
    assert claim.where["frequency"] == pytest.approx(0.0, abs=0.05)


def test_an_antisymmetric_part_is_lossless() -> None:
    """A gyrator [[0, r], [-r, 0]] dissipates nothing; with a resistance it is passive, with a negative one not."""
    gyrator = np.array([[0.0, 3.0], [-3.0, 0.0]])
    assert total(passivity(PoleResidue(poles=[], residues=[], direct=gyrator), "positive-real")) == 0
    with_loss = PoleResidue(poles=[], residues=[], direct=gyrator - 0.3 * np.eye(2))
    assert passivity(with_loss, "positive-real").value == pytest.approx(0.3 / np.hypot(3.0, 0.3), rel=1e-3)


def test_sampled_functions_on_the_circle() -> None:
    time = TimeBase(domain="sampled", period=0.1)
    # the bilinear image of 1/(s + 1): (z + 1)/(3 z - 1)
    assert total(passivity(plant([1.0, 1.0], [3.0, -1.0], time=time), "positive-real")) == 0
    assert total(passivity(plant([1.0], [1.0, 0.0], time=time), "bounded-real")) == 0
    claim = passivity(plant([1.0], [1.0, -0.5], time=time), "positive-real")
    # 1/(z - 1/2) on the circle at z = -1: -2/3; the gain is 2
    assert claim.value == pytest.approx(1 / 3, rel=1e-3)


def test_the_ports_say_what_passive_means() -> None:
    scattering = plant([-1.0, 1.0], [1.0, 1.0], ports=Ports("scattering", (50.0,)))
    assert total(passivity(scattering)) == 0
    impedance = plant([-1.0, 1.0], [1.0, 1.0], ports=Ports("impedance"))
    assert passivity(impedance).value == pytest.approx(1.0, rel=1e-3)
    with pytest.raises(InputError, match="without ports"):
        passivity(plant([1.0], [1.0, 1.0]))
    with pytest.raises(InputError, match="one of"):
        passivity(plant([1.0], [1.0, 1.0]), "active")
    wide = StateSpace(A=[[-1.0]], B=[[1.0, 2.0]], C=[[1.0]])
    with pytest.raises(Refused, match="square"):
        passivity(wide, "positive-real")


def test_dead_times() -> None:
    late = plant([0.5], [1.0, 1.0], dead_time=DeadTime((0.1,), (0.2,), ((0.0,),)))
    assert total(passivity(late, "bounded-real")) == 0
    assert passivity(late, "positive-real").value is None


@pytest.mark.parametrize("unit", [1e-300, 1e-12, 1e12, 1e300])
def test_units_of_gain_and_time_do_not_change_the_answer(unit: float) -> None:
    models: list[Model] = [
        PoleResidue(poles=[-1.0], residues=[[[unit]]], direct=[[unit]]),
        PoleResidue(poles=[-unit], residues=[[[unit]]], direct=[[1.0]]),
    ]
    for model in models:
        assert total(passivity(model, "positive-real")) == 0
    bad = PoleResidue(poles=[-unit], residues=[[[-3 * unit]]], direct=[[1.0]])
    assert passivity(bad, "positive-real").value == pytest.approx(1.0, rel=1e-3)


def test_the_hamiltonian_pencil_finds_the_crossings() -> None:
    """Z = 1 + k/(s + 1) with k = -3: Re Z = 1 - 3/(1 + x) is zero at w^2 = 2; |0.5 + 1/(s + 1)| = 1 at w^2 = 5/3."""
    A, B = np.array([[-1.0]]), np.array([[1.0]])
    found = singular_frequencies(A, B, np.array([[-3.0]]), np.array([[1.0]]), "positive-real", 0.0)
    assert found == pytest.approx(np.full(found.size, math.sqrt(2.0)))
    assert found.size
    found = singular_frequencies(A, B, np.array([[1.0]]), np.array([[0.5]]), "bounded-real", 1.0)
    assert found == pytest.approx(np.full(found.size, math.sqrt(5 / 3)))
    assert found.size


def test_large_models_are_judged_in_doubles() -> None:
    rng = np.random.default_rng(0)
    n = 120
    A = np.diag(-np.geomspace(0.1, 100, n))
    C = rng.normal(size=(3, n))
    model = StateSpace(A=A, B=C.T, C=C, D=np.eye(3))
    claim = passivity(model, "positive-real")
    assert claim.basis == "measured"
    assert claim.value == 0
    assert claim.uncertainty is None
