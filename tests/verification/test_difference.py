"""The L-infinity norm of a difference, against values worked by hand."""

from __future__ import annotations

import pytest

from realize.models import StateSpace, TransferFunction
from realize.verification.difference import linf_error


def plant(numerator: list[float], denominator: list[float]) -> TransferFunction:
    return TransferFunction(numerator=numerator, denominator=denominator)


@pytest.mark.parametrize("gain", [1e-200, 1e-6, 1.0, 1e6, 1e200])
def test_units_of_the_gain_do_not_matter(gain: float) -> None:
    """1/(s + 1) against 1.5/(s + 1): half of the gain, at zero frequency."""
    found = linf_error(plant([gain], [1.0, 1.0]), plant([1.5 * gain], [1.0, 1.0]))
    assert found.value == pytest.approx(0.5 * gain, rel=1e-12)
    assert found.relative == pytest.approx(0.5, rel=1e-9)
    assert found.basis == "proved" and found.value + found.uncertainty >= 0.5 * gain


def test_a_shared_integrator_cancels() -> None:
    """1/s against (2s + 1)/(s (s + 1)) = 1/s + 1/(s + 1): the difference 1/(s + 1) has the gain 1 at zero frequency."""
    found = linf_error(plant([1.0], [1.0, 0.0]), plant([2.0, 1.0], [1.0, 1.0, 0.0]))
    assert found.basis == "proved" and found.value == pytest.approx(1.0, rel=1e-12)


def test_a_difference_at_infinite_frequency() -> None:
    """1/(s + 1) against (0.001 s + 1)/(s + 1): the difference 0.001 s/(s + 1) grows to 0.001."""
    found = linf_error(plant([1.0], [1.0, 1.0]), plant([0.001, 1.0], [1.0, 1.0]))
    assert found.value + found.uncertainty >= 0.001
    assert found.value == pytest.approx(0.001, rel=1e-6)


def test_unstable_plants() -> None:
    """1/(s - 1) against 2/(s - 1): |1/(jw - 1)| is 1 at zero frequency."""
    found = linf_error(plant([1.0], [1.0, -1.0]), plant([2.0], [1.0, -1.0]))
    assert found.value == pytest.approx(1.0, rel=1e-12)


def test_largest_singular_value_of_two_channels() -> None:
    """diag(1, 2)/(s + 1) against zero gain: the largest singular value is 2, the Frobenius norm would be sqrt(5)."""
    one = StateSpace(A=[[-1.0, 0.0], [0.0, -1.0]], B=[[1.0, 0.0], [0.0, 2.0]], C=[[1.0, 0.0], [0.0, 1.0]])
    other = one.with_(C=[[1e-9, 0.0], [0.0, 1e-9]])
    found = linf_error(one, other)
    assert found.value == pytest.approx(2.0, rel=1e-8)
    assert found.value + found.uncertainty < 2.01
