"""Coordinates of a state model: exact entries, structure, sizes."""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import numpy as np
import pytest

from realize.forms import (
    append_polynomial_part,
    cascade_states,
    controllable_companion,
    group_roots,
    modal_states,
    observable_companion,
)
from realize.models import StateSpace, ZeroPoleGain


def _value(parts: tuple[np.ndarray, ...], s: complex) -> complex:
    A, B, C, D = parts[:4]
    E = parts[4] if len(parts) == 5 else np.eye(A.shape[0])
    return complex((C @ np.linalg.solve(s * E - A, B) + D)[0, 0]) if A.size else complex(D[0, 0])


def test_companion_entries_are_the_coefficients() -> None:
    """(2 s^2 + 3 s + 4)/(2 s^2 + 8 s + 6): monic 1, 4, 3; D = 1, C = [3/2 - 4, 2 - 3]."""
    numerator, denominator = [Fraction(2), Fraction(3), Fraction(4)], [Fraction(2), Fraction(8), Fraction(6)]
    A, B, C, D = controllable_companion([numerator], denominator)
    assert A.tolist() == [[-4.0, -3.0], [1.0, 0.0]]
    assert B.tolist() == [[1.0], [0.0]] and C.tolist() == [[-2.5, -1.0]] and D.tolist() == [[1.0]]
    a, b, c, d = observable_companion([numerator], denominator)
    assert np.array_equal(a, A.T) and np.array_equal(b, C.T) and np.array_equal(c, B.T) and np.array_equal(d, D.T)


@pytest.mark.parametrize(
    ("zeros", "poles"),
    [
        ([], []),
        ([], [-1.0]),
        ([-2.0], [-1.0]),
        ([0.0, 0.0], [-1.0, -2.0]),
        ([1j, -1j], [-1.0, -2.0]),
        ([1j, -1j], [-1 + 2j, -1 - 2j, -3.0]),
        ([-1.0, -2.0, -3.0], [-4.0, -1 + 2j, -1 - 2j]),
        ([-1 + 1j, -1 - 1j, 5.0], [0.0, 0.0, 1j, -1j]),
        ([-1.0], [-2.0, -3.0, -4.0, -5.0]),
        ([-1e-8, -1e8], [-1e-9, -1.0, -1e9]),
        ([], [-1e300, -1e-300]),
    ],
    ids=str,
)
@pytest.mark.parametrize("gain", [Fraction(3), Fraction(-1, 7), Fraction(10) ** 250, Fraction(10) ** -250])
def test_a_cascade_is_the_product(zeros: list[complex], poles: list[complex], gain: Fraction, oracle: Any) -> None:
    zeros, poles = [complex(z) for z in zeros], [complex(p) for p in poles]
    sections = group_roots(zeros, poles)
    assert sorted((p for s in sections for p in s.poles), key=str) == sorted(poles, key=str)
    assert sorted((z for s in sections for z in s.zeros), key=str) == sorted(zeros, key=str)
    assert all(len(s.zeros) <= len(s.poles) for s in sections)
    parts = cascade_states(sections, gain)
    assert parts[0].shape == (len(poles), len(poles))
    assert all(np.all(np.isfinite(part)) for part in parts)
    # exact on both sides: the gain itself may need one rounding, and each entry of the states
    tens = {"decimals": {"gain": {(0, 0): str(gain.numerator)}}} if gain.denominator == 1 else {}
    source = ZeroPoleGain(zeros=zeros, poles=poles, gain=float(gain), **tens)
    made = StateSpace(**dict(zip("ABCD", parts, strict=True)))
    assert oracle.error(source, made, [0.75, 3.0, 40.0]) < 2e-14


def test_a_cascade_of_nothing_is_zero() -> None:
    A, B, C, D = cascade_states(group_roots([], [-1 + 0j]), Fraction(0))
    assert A.shape == (1, 1) and not B.any() and not C.any() and not D.any()


@pytest.mark.parametrize("size", [1e-300, 1e-9, 1.0, 1e9, 1e300])
def test_modal_blocks_at_any_size(size: float) -> None:
    poles = np.array([-1 + 2j, -1 - 2j, -3 + 0j])
    residues = size * np.array([1 + 1j, 1 - 1j, 2]).reshape(3, 1, 1)
    A, B, C, _ = modal_states(poles, residues, np.ones(3, dtype=int), np.zeros((1, 1)))
    assert A.shape == (3, 3)
    s = 0.7j
    expected = sum(residues[k, 0, 0] / size / (s - poles[k]) for k in range(3))
    x = np.linalg.solve(s * np.eye(3) - A, B)
    value = ((C / 2.0 ** np.frexp(np.abs(C).max())[1]) @ (x / 2.0 ** np.frexp(np.abs(x).max())[1]))[0, 0]
    scale = 2.0 ** float(np.frexp(np.abs(C).max())[1]) * 2.0 ** float(np.frexp(np.abs(x).max())[1]) / size
    assert value * scale == pytest.approx(expected, rel=1e-13)


def test_modal_rank_does_not_depend_on_units() -> None:
    """A residue of rank two stays of rank two when one output is measured in nanometres and one input in gigavolts."""
    residue = np.array([[1.0, 2.0], [3.0, 7.0]])
    for left in (1.0, 2.0**-40):
        for right in (1.0, 2.0**40, 2.0**-40):
            scaled = np.diag([1.0, left]) @ residue @ np.diag([1.0, right])
            A, B, C, _ = modal_states(
                np.array([-1 + 0j]), scaled[None].astype(complex), np.ones(1, dtype=int), np.zeros((2, 2))
            )
            assert A.shape == (2, 2)
            assert np.allclose(C @ B, scaled, rtol=1e-14, atol=0.0)
    single = np.outer([1.0, 2.0], [3.0, 4.0])
    A, _, _, _ = modal_states(
        np.array([-1 + 0j]), single[None].astype(complex), np.ones(1, dtype=int), np.zeros((2, 2))
    )
    assert A.shape == (1, 1)


def test_a_repeated_pole_is_a_chain() -> None:
    poles = np.array([-1 + 0j] * 3)
    residues = np.array([1.0, 0.0, 5.0]).reshape(3, 1, 1).astype(complex)
    parts = modal_states(poles, residues, np.array([1, 2, 3]), np.array([[2.0]]))
    assert np.array_equal(np.diag(parts[0]), [-1.0] * 3)
    s = 0.5j
    assert _value(parts, s) == pytest.approx(1 / (s + 1) + 5 / (s + 1) ** 3 + 2, rel=1e-14)


def test_the_polynomial_part_is_exact() -> None:
    """1/(s+2) + 3 s^2 + 4 s + 5 with a nilpotent E."""
    proper = (np.array([[-2.0]]), np.array([[1.0]]), np.array([[1.0]]), np.array([[0.0]]))
    parts = append_polynomial_part(*proper, np.array([3.0, 4.0, 5.0]).reshape(3, 1, 1))
    E = parts[4]
    assert not np.any(np.linalg.matrix_power(E[1:, 1:], 3))
    for s in (0.5, 2j, -7.0):
        assert _value(parts, s) == pytest.approx(1 / (s + 2) + 3 * s**2 + 4 * s + 5, rel=1e-14)
