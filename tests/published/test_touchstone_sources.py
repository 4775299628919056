"""Touchstone files: examples of the specification (from memory), and published measurements."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import realize
from realize import Ports, files

FOLDER = Path(__file__).resolve().parents[3] / "shared" / "data" / "measured"
measured = pytest.mark.skipif(not FOLDER.is_dir(), reason=f"measured data are not at {FOLDER}")

#: The same impedance as version 1 (relative to 75 ohm) and version 2 (ohm), 100 to 500 MHz.
ONE_PORT_1 = """! 1-port Z-parameter file, multiple frequency points
# MHz Z MA R 75
!freq magZ11 angZ11
100 0.99 -4
200 0.80 -22
300 0.707 -45
400 0.40 -62
500 0.01 -89
"""
ONE_PORT_2 = """[Version] 2.0
# MHz Z MA
[Number of Ports] 1
[Number of Frequencies] 5
[Reference] 20.0
[Network Data]
100 74.25 -4
200 60 -22
300 53.025 -45
400 30 -62
500 0.75 -89
[End]
"""
AMPLIFIER_1 = """! 2-port network, S-parameter and noise data
! Default MA format, GHz frequencies, 50 ohm reference, S-parameters
#
! NETWORK PARAMETERS
2 .95 -26 3.57 157 .04 76 .66 -14
22 .60 -144 1.30 40 .14 40 .56 -85
! NOISE PARAMETERS
4 .7 .64 69 .38
18 2.7 .46 -33 .40
"""
AMPLIFIER_2 = """[Version] 2.0
#
[Number of Ports] 2
[Two-Port Data Order] 21_12
[Number of Frequencies] 2
[Number of Noise Frequencies] 2
[Reference] 50 25.0
[Network Data]
! NETWORK PARAMETERS
2 .95 -26 3.57 157 .04 76 .66 -14
22 .60 -144 1.30 40 .14 40 .56 -85
[Noise Data]
4 .7 .64 69 19
18 2.7 .46 -33 20
[End]
"""
FOUR_PORT = """! 4-port S-parameter data, default impedances
[Version] 2.0
# GHz S MA R 50
[Number of Ports] 4
[Number of Frequencies] 1
[Reference] 50 75 0.01 0.01
[Matrix Format] Full
[Network Data]
5.00000 0.60 161.24 0.40 -42.20 0.42 -66.58 0.53 -79.34 !row 1
0.40 -42.20 0.60 161.20 0.53 -79.34 0.42 -66.58 !row 2
0.42 -66.58 0.53 -79.34 0.60 161.24 0.40 -42.20 !row 3
0.53 -79.34 0.42 -66.58 0.40 -42.20 0.60 161.24 !row 4
[End]
"""
FOUR_PORT_LOWER = """[Version] 2.0
# GHz S MA R 50
[Number of Ports] 4
[Number of Frequencies] 1
[Reference] 50 75
0.01 0.01
[Matrix Format] Lower
[Network Data]
5.00000 0.60 161.24
0.40 -42.20 0.60 161.20
0.42 -66.58 0.53 -79.34 0.60 161.24
0.53 -79.34 0.42 -66.58 0.40 -42.20 0.60 161.24
[End]
"""


def _read(text: str, name: str, folder: Path) -> realize.FrequencyResponse:
    (folder / name).write_text(text)
    model = files.read(folder / name)
    assert isinstance(model, realize.FrequencyResponse)
    return model


def test_examples_of_the_specification(tmp_path: Path) -> None:
    """IBIS Open Forum, Touchstone File Format Specification, version 2.0, 2009: examples from memory."""
    one, two = _read(ONE_PORT_1, "one.s1p", tmp_path), _read(ONE_PORT_2, "one.ts", tmp_path)
    assert np.allclose(one.response, two.response, rtol=1e-15, atol=0)
    assert np.array_equal(one.frequency, [1e8, 2e8, 3e8, 4e8, 5e8])
    assert (one.ports, two.ports) == (Ports("impedance", (75.0,)), Ports("impedance", (20.0,)))
    one, two = _read(AMPLIFIER_1, "amplifier.s2p", tmp_path), _read(AMPLIFIER_2, "amplifier.ts", tmp_path)
    assert np.array_equal(one.response, two.response)
    assert np.allclose(np.abs(one.response[0]), [[0.95, 0.04], [3.57, 0.66]], rtol=1e-15)
    assert np.allclose(np.degrees(np.angle(one.response[1])), [[-144, 40], [40, -85]], rtol=1e-14)
    assert (one.ports, two.ports) == (Ports("scattering", (50.0, 50.0)), Ports("scattering", (50.0, 25.0)))
    assert "noise" in one.remarks[0] and "noise" in two.remarks[0]
    one, two = _read(FOUR_PORT, "coupler.ts", tmp_path), _read(FOUR_PORT_LOWER, "half.ts", tmp_path)
    assert np.array_equal(one.response, two.response) and one.ports == two.ports
    assert one.ports == Ports("scattering", (50.0, 75.0, 0.01, 0.01))


@measured
def test_measured_two_port() -> None:
    """A 36 mm microstrip resonator, 401 points, 1 to 5 GHz: passive, reciprocal, resonance near 2 GHz."""
    data = files.read(FOLDER / "resonator_36mm.s2p")
    assert data.response.shape == (401, 2, 2) and data.frequency[[0, -1]].tolist() == [1e9, 5e9]
    assert np.linalg.svd(data.response, compute_uv=False).max() < 1
    # the order 11, 21, 12, 22: reciprocal within the noise
    assert np.abs(data.response[:, 0, 1] - data.response[:, 1, 0]).max() < 1e-3
    assert data.response[0, 0, 0] == -0.34273978647569076 - 0.9252291821731725j
    assert data.response[0, 1, 0] == 6.45089004466933e-05 - 1.4883016017487004e-05j
    fitted = realize.fit(data, order=12)
    assert fitted.receipt.claim("rms-misfit").value < 3e-3
    assert fitted.model.ports == Ports("scattering", (50.0, 50.0))
    pairs = [m["frequency"] / (2e9 * np.pi) for m in fitted.receipt.details["modes"] if m["damping"] < 0.02]
    assert np.min(np.abs(np.array(pairs) - 1.96)) < 0.01


@measured
def test_measured_one_port() -> None:
    """A ring slot, 75 to 110 GHz."""
    data = files.read(FOLDER / "ring_slot_measured.s1p")
    assert data.response.shape == (101, 1, 1) and data.frequency[[0, 1]].tolist() == [75e9, 75.3499999999e9]
    assert np.abs(data.response).max() < 1
    assert realize.fit(data, order=3).receipt.claim("rms-misfit").value < 0.04


@measured
def test_simulated_filter() -> None:
    """Three ideal resonators: order 6 to rounding, lossless."""
    data = files.read(FOLDER / "bandpass_450_550MHz_simulated.s2p")
    assert np.allclose(np.linalg.svd(data.response, compute_uv=False), 1, atol=1e-9)
    fitted = realize.fit(data)
    assert fitted.model.order == 6
    assert fitted.receipt.claim("rms-misfit").value < 1e-13
