"""Network parameters: a network of resistors and others by hand, every pair there and back, deviations by sampling."""

from __future__ import annotations

from itertools import permutations

import numpy as np
import pytest

from realize.kernels.network_parameters import converted, variables_of
from realize.schema import PORT_PARAMETERS

REFERENCE = np.array([50.0, 75.0])
RNG = np.random.default_rng(0)
Z = (RNG.standard_normal((5, 2, 2)) + 1j * RNG.standard_normal((5, 2, 2))) * 40 + 60 * np.eye(2)


def _from_impedance(name: str) -> np.ndarray:
    made, _, _ = converted(Z, None, variables_of("impedance", REFERENCE), variables_of(name, REFERENCE))
    return made


def test_textbook_formulas() -> None:
    assert np.allclose(_from_impedance("admittance"), np.linalg.inv(Z), rtol=1e-12)
    root = np.diag(np.sqrt(REFERENCE))
    inverse = np.diag(1 / np.sqrt(REFERENCE))
    normal = inverse @ Z @ inverse
    expected = (normal - np.eye(2)) @ np.linalg.inv(normal + np.eye(2))
    assert np.allclose(_from_impedance("scattering"), expected, rtol=1e-12)
    assert np.allclose(root @ normal @ root, Z)
    z11, z12, z21, z22 = Z[:, 0, 0], Z[:, 0, 1], Z[:, 1, 0], Z[:, 1, 1]
    h = np.array([[(z11 * z22 - z12 * z21) / z22, z12 / z22], [-z21 / z22, 1 / z22]])
    assert np.allclose(_from_impedance("hybrid"), np.moveaxis(h, 2, 0), rtol=1e-12)
    assert np.allclose(_from_impedance("inverse-hybrid"), np.linalg.inv(_from_impedance("hybrid")), rtol=1e-12)
    one = np.array([[[25.0 + 0j]]])
    made, _, _ = converted(
        one, None, variables_of("impedance", REFERENCE[:1]), variables_of("scattering", REFERENCE[:1])
    )
    assert made[0, 0, 0] == pytest.approx(-1 / 3, rel=1e-15)


@pytest.mark.parametrize(("first", "second"), list(permutations(PORT_PARAMETERS, 2)))
def test_there_and_back(first: str, second: str) -> None:
    start = _from_impedance(first)
    old, new = variables_of(first, REFERENCE), variables_of(second, REFERENCE)
    there, _, _ = converted(start, None, old, new)
    back, _, share = converted(there, None, new, old)
    assert np.allclose(back, start, rtol=1e-11) and np.all(share > 1e-6)


@pytest.mark.parametrize("second", ["impedance", "admittance", "hybrid"])
def test_deviations_are_those_of_many_samples(second: str) -> None:
    start = _from_impedance("scattering")[:1]
    old, new = variables_of("scattering", REFERENCE), variables_of(second, REFERENCE)
    sigma = np.array([[[1e-5, 2e-5], [3e-5, 4e-5]]])
    centre, deviation, _ = converted(start, sigma, old, new)
    assert deviation is not None
    error = (RNG.standard_normal((4000, 2, 2)) + 1j * RNG.standard_normal((4000, 2, 2))) / np.sqrt(2) * sigma
    many, _, _ = converted(start + error, None, old, new)
    assert np.allclose(np.sqrt(np.mean(np.abs(many - centre) ** 2, axis=0)), deviation[0], rtol=0.06)


def test_a_network_without_such_parameters_shows() -> None:
    """A through connection has neither impedance nor admittance parameters, but hybrid ones."""
    through = np.array([[[0, 1], [1, 0]]], dtype=complex)
    old = variables_of("scattering", np.array([50.0, 50.0]))
    for name, singular in (("impedance", True), ("admittance", True), ("hybrid", False)):
        made, _, share = converted(through, None, old, variables_of(name, np.array([50.0, 50.0])))
        assert (share[0] < 1e-12) == singular
        if not singular:
            assert np.allclose(made[0], [[0, 1], [-1, 0]], atol=1e-12)
