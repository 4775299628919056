"""Minimal realizations of a state model on the numbers as given: candidates in several coordinates.

The order is the exact rank of the Hankel matrix (`realize.kernels.exact.order`). The coordinates come from Gramians in
high precision, each entry rounded once; which of them keeps the response best is for the claims to decide.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Ratios = Sequence[Sequence[Any]]
Matrices = tuple[Array, Array, Array]

#: Why a mode is not part of the minimal realization.
UNREACHABLE, UNOBSERVABLE, BOTH = "unreachable", "unobservable", "unreachable and unobservable"


class Mode(NamedTuple):
    """An eigenvalue that goes, and why."""

    pole: complex
    why: str


@dataclass(frozen=True)
class Minimal:
    """Minimal realization of a state model.

    Attributes
    ----------
    order : int
    proved : bool
        The order is exact. Otherwise it is a rank modulo two primes near 2^62: too low only if both divide every minor.
    coordinates : dict of name to function
        Each returns A, B, C in these coordinates.
    hidden : list of Mode
    """

    order: int
    proved: bool
    coordinates: dict[str, Callable[[], Matrices]]
    hidden: list[Mode]


def minimal_states(A: Ratios, B: Ratios, C: Ratios, *, sampled: bool) -> Minimal:
    """Return the minimal realization of C (sI - A)^-1 B on exact numbers.

    Parameters
    ----------
    A, B, C : nested sequences of integer ratios, n x n, n x m, p x n
    sampled : bool

    Raises
    ------
    NoCoordinates
        When no precision gives projections that are the inverse of each other.
    """
    from realize.kernels.exact.gramians import balanced_projection, balanced_states, ranks_of, staircase_states
    from realize.kernels.exact.hidden import hidden_modes
    from realize.kernels.exact.order import minimal_order

    n = len(A)
    found = minimal_order(A, B, C)
    if found.order == n:
        return Minimal(n, True, {}, [])
    m, p = len(B[0]), len(C)
    hidden = [Mode(*mode) for mode in hidden_modes(A, B, C, found.order)]
    if found.order == 0:
        empty = np.zeros((0, 0)), np.zeros((0, m)), np.zeros((p, 0))
        return Minimal(0, found.proved, {"constant": lambda: empty}, hidden)
    projected = balanced_projection(A, B, C, found.order, (*ranks_of(A, B, C), found.order), sampled=sampled)
    coordinates: dict[str, Callable[[], Matrices]] = {
        "staircase": lambda: staircase_states(projected, outputs=p < m),
        "balanced": lambda: balanced_states(projected),
        "dual staircase": lambda: staircase_states(projected, outputs=p >= m),
    }
    return Minimal(found.order, found.proved, coordinates, hidden)


def visible(A: NDArray[np.bool_], B: NDArray[np.bool_], C: NDArray[np.bool_]) -> NDArray[np.int64]:
    """Return the states that nonzero entries join to an input and to an output."""

    def closure(pattern: NDArray[np.bool_], start: NDArray[np.bool_]) -> NDArray[np.bool_]:
        while True:
            more: NDArray[np.bool_] = start | np.any(pattern[:, start], axis=1)
            if np.array_equal(more, start):
                return start
            start = more

    return np.flatnonzero(closure(A, np.any(B, axis=1)) & closure(A.T, np.any(C, axis=0)))
