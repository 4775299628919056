"""Predicted operations of the exact routines, from sizes and bit lengths alone: never from the clock.

One operation is about a nanosecond of one core of the machine that the constants were fitted on. What counts is that
the same input gives the same number everywhere, so that a choice between exact and double arithmetic does not depend on
the machine.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from flint import fmpq_poly

from realize.kernels.exact.integer_scaling import split, state_shifts

#: Operations that one exact step of a conversion may take: some seconds.
BUDGET = 5e9


def affordable(operations: float, budget: float = BUDGET) -> bool:
    """Return whether predicted operations stay within a budget."""
    return operations <= budget


def matrix_bits(A: Sequence[Sequence[Any]]) -> int:
    """Return the length (bits) of the integers that stand for a square matrix after scaling of the states."""
    if not len(A):
        return 0
    parts = split(A)
    shift = state_shifts(parts)
    move = shift[None, :] - shift[:, None]
    present = np.array([[bool(o) for o in row] for row in parts.odd], dtype=bool)
    if not present.any():
        return 0
    return int((parts.top + move)[present].max() - (parts.low + move)[present].min()) + parts.common.bit_length()


def polynomial_bits(p: fmpq_poly) -> int:
    """Return the length (bits) of the longest coefficient over the common denominator."""
    return max((int(c).bit_length() for c in p.numer().coeffs()), default=0) + int(p.denom()).bit_length()


def transfer_operations(states: int, inputs: int, outputs: int, bits: int, descriptor: bool = False) -> float:
    """Return predicted operations of `transfer_matrix`."""
    primes = states * (bits + 8) / 62 + 1
    if descriptor:
        return 5e5 + primes * (6.0 * states**3 + 8.0 * states**2 * (inputs + 4) + 4000.0 * (states + 1)) * 1.3
    krylov = 0.15 * states**3 * min(inputs, outputs) * (1 + primes / 4)
    return 3.0 * primes * states**3 + krylov + 5e5 + 4e3 * states**2 + 2e3 * states * inputs * outputs


def solve_operations(states: int, inputs: int, bits: int, real: bool) -> float:
    """Return predicted operations of `response_at`."""
    n = states if real else 2 * states
    primes = n * (bits + 60) / 62 + 1
    return n**2 * primes * (6.0 + 2.0 * inputs) + 2e3 * n**2


def roots_operations(degree: int, bits: int) -> float:
    """Return predicted operations of `roots` for roots that are not clustered, within a factor of about four."""
    return 3e4 * degree**2 * (1 + bits / 50_000) + 1e5 * degree


def residues_operations(degree: int, bits: int) -> float:
    """Return predicted operations of `residues`, roots included, for simple poles."""
    return roots_operations(degree, bits) + 2e5 * degree + 2e4 * degree**2


def evaluation_operations(degree: int, points: int, sampled: bool) -> float:
    """Return predicted operations of `evaluate`."""
    return points * (8e3 + (400.0 if sampled else 70.0) * degree)


def rank_operations(size: int, bits: int) -> float:
    """Return predicted operations of an exact rank of a square integer matrix."""
    return 3.0 * size**3 * (1 + size * bits / 62) + 1e3 * size**2


def hankel_operations(degree: int, rows: int, columns: int, order: int, bits: int) -> float:
    """Return predicted operations of one trial of `hankel_values` with so many bits, within a factor of two.

    Parameters
    ----------
    degree : int
        Of the common denominator.
    rows, columns : int
        The larger and the smaller number of outputs and inputs.
    order : int
        McMillan degree.
    """
    c = degree * columns
    product = degree * rows * float(c) ** 2
    return (80 + 0.1 * bits) * product + (400 + 0.3 * bits) * (float(order) ** 2 * c + 2e3)
