"""Constrained fits and passivity against sources outside of the project: textbook functions and measured networks."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from realize.files import read
from realize.models import FrequencyResponse, PoleResidue, TransferFunction
from realize.steps import fit
from realize.verification.passivity import passivity

FOLDER = Path(__file__).resolve().parents[3] / "shared" / "data" / "measured"
needs_data = pytest.mark.skipif(not FOLDER.is_dir(), reason=f"measured data are not at {FOLDER}")


@pytest.mark.parametrize(
    ("numerator", "denominator", "positive"),
    [
        # the biquadratic (s^2 + a1 s + a0)/(s^2 + b1 s + b0) is positive real if and only if
        # a1 b1 >= (sqrt(a0) - sqrt(b0))^2 (R. M. Foster; E. A. Guillemin, Synthesis of Passive Networks, 1957;
        # from memory)
        ([1.0, 1.0, 4.0], [1.0, 1.0, 1.0], True),  # 1 >= 1: at the boundary
        ([1.0, 1.0, 4.0], [1.0, 1.25, 1.0], True),
        ([1.0, 1.0, 4.0], [1.0, 0.9375, 1.0], False),
        ([1.0, 4.0, 9.0], [1.0, 1.0, 1.0], True),  # 4 >= 4
        ([1.0, 4.0, 9.25], [1.0, 1.0, 1.0], False),
        # O. Brune 1931: a function of minimum resistance (s^2 + s + 1)/(s^2 + s + 4)
        ([1.0, 1.0, 1.0], [1.0, 1.0, 4.0], True),
    ],
)
def test_biquadratics_of_network_synthesis(numerator: list[float], denominator: list[float], positive: bool) -> None:
    claim = passivity(TransferFunction(numerator=numerator, denominator=denominator), "positive-real")
    assert claim.basis == "proved"
    assert (claim.value == 0) is positive


def test_lossless_ladders_of_butterworth_filters() -> None:
    """|S11|^2 + |S21|^2 = 1 (V. Belevitch, Classical Network Theory, 1968): third order, in exact coefficients."""
    d = [1.0, 2.0, 2.0, 1.0]
    # S22 = S11 of a symmetric ladder: S11(-s) S21(s) + S21(-s) S22(s) is zero for s^3/d and 1/d
    reflection, transmission = [1.0, 0.0, 0.0, 0.0], [1.0]
    grid = [[reflection, transmission], [transmission, reflection]]
    model = TransferFunction(numerator=grid, denominator=[[d, d], [d, d]])
    claim = passivity(model, "bounded-real")
    assert claim.value == 0
    assert claim.basis == "proved"
    louder = TransferFunction(
        numerator=[[reflection, [1.0 + 2.0**-40]], [transmission, reflection]], denominator=[[d, d], [d, d]]
    )
    assert passivity(louder, "bounded-real").value > 0


def test_against_the_hamiltonian_norm_of_an_independent_library() -> None:
    """The largest singular value of random stable two-ports by `control.linfnorm`: the claim is the same excess."""
    control = pytest.importorskip("control")
    rng = np.random.default_rng(2)
    for _ in range(3):
        poles = np.array([-0.3 + 2j, -0.3 - 2j, -1.0])
        residue = rng.normal(size=(2, 2)) + 1j * rng.normal(size=(2, 2))
        residues = np.array([residue, residue.conj(), rng.normal(size=(2, 2))])
        direct = 0.3 * rng.normal(size=(2, 2))
        model = PoleResidue(poles=poles, residues=residues, direct=direct)
        A = np.kron(np.array([[-0.3, -2.0, 0], [2.0, -0.3, 0], [0, 0, -1.0]]), np.eye(2))
        B = np.vstack([np.eye(2), np.zeros((2, 2)), np.eye(2)])
        C = np.hstack([2 * residue.real, -2 * residue.imag, residues[2].real])
        norm = control.linfnorm(control.ss(A, B, C, direct))[0]
        claim = passivity(model, "bounded-real")
        assert claim.value == pytest.approx(max(norm - 1, 0), rel=2e-3)


@needs_data
def test_battery_impedance_with_an_integrator_is_positive_real() -> None:
    rows = np.loadtxt(FOLDER / "EIS_battery_exampleData.csv", delimiter=",")
    impedance = (rows[:, 1] + 1j * rows[:, 2])[:, None, None]
    order = np.argsort(rows[:, 0])
    data = FrequencyResponse(frequency=rows[order, 0], frequency_unit="Hz", response=impedance[order])
    done = fit(data, order=6, integrators=1, passive="positive-real")
    assert done.receipt.claim("passivity").holds is True
    assert done.receipt.claim("fixed-poles").value == 0
    assert done.receipt.claim("rms-misfit").value < 0.025


@needs_data
@pytest.mark.parametrize(
    ("name", "order", "misfit"),
    [
        ("resonator_36mm.s2p", (4, 12), 0.01),
        ("ring_slot_measured.s1p", (3, 5), 0.05),
        ("bandpass_450_550MHz_simulated.s2p", (4, 8), 1e-6),
    ],
)
def test_measured_scattering_is_made_bounded_real(name: str, order: tuple[int, int], misfit: float) -> None:
    data = read(FOLDER / name)
    done = fit(data, order=order, symmetric=data.shape[0] > 1, passive="auto")
    claim = done.receipt.claim("passivity")
    assert claim.holds is True
    assert claim.basis == "proved"
    assert done.receipt.claim("rms-misfit").value < misfit
    if data.shape[0] > 1:
        assert done.receipt.claim("symmetry").holds is True
