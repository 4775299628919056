"""Descriptor models of index 1: their algebraic states solved for, what is left has an identity in place of E."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

EPS = float(np.finfo(float).eps)
#: An E whose dynamic part has a larger condition number is not divided out.
HARMLESS = 1e8


class NotIndexOne(ValueError):
    """The algebraic equations do not determine the algebraic states: the index is above 1, or the pencil singular."""


class Undecided(ValueError):
    """Which states are algebraic cannot be told: E has singular values in between."""


@dataclass(frozen=True)
class Ordinary:
    """A model without E: dynamic part solved, algebraic states put into the other matrices.

    Attributes
    ----------
    A, B, C, D : arrays
    algebraic : int
        States that were solved for.
    condition : float
        Of the dynamic part of the scaled E.
    left_out : float
        Condition number of the equations that gave the algebraic states; 1 without any.
    """

    A: Array
    B: Array
    C: Array
    D: Array
    algebraic: int
    condition: float
    left_out: float


def _powers(sizes: Array) -> Array:
    return np.ldexp(1.0, -np.where(sizes > 0, np.frexp(sizes)[1], 0))


def without_descriptor(A: Array, B: Array, C: Array, D: Array, E: Array) -> Ordinary:
    """Return E dx/dt = A x + B u, y = C x + D u as an ordinary model (sampled alike).

    With E = U [S 0; 0 0] V' (rows and columns scaled by powers of two first) and A22 = U2'A V2 nonsingular,
    x2 = -A22^-1 (A21 x1 + B2 u) and S dx1/dt = (A11 - A12 A22^-1 A21) x1 + (B1 - A12 A22^-1 B2) u. Without algebraic
    states the states stay as they are.

    Parameters
    ----------
    A, E : (n, n) arrays
    B : (n, m) array
    C : (p, n) array
    D : (p, m) array

    Returns
    -------
    Ordinary

    Raises
    ------
    NotIndexOne, Undecided
    """
    n = A.shape[0]
    row = _powers(np.maximum(np.abs(E).max(axis=1), 0.0))
    # rows of E that are zero are scaled by their entries of A
    empty = ~np.any(E, axis=1)
    row[empty] = _powers(np.abs(A[empty]).max(axis=1))
    scaled = row[:, None] * E
    column = _powers(np.abs(scaled).max(axis=0))
    scaled = scaled * column
    U, s, Vt = np.linalg.svd(scaled)
    rank = int(np.count_nonzero(s > 64 * n * EPS * s[0])) if s[0] > 0 else 0
    condition = float(s[0] / s[rank - 1]) if rank else 1.0
    if not condition < HARMLESS:
        raise Undecided(
            f"the singular values of E (scaled) run down to {s[rank - 1] / s[0]:.1e} of the largest before those that "
            f"count as zero: too small to be divided by, too large to be left out"
        )
    # row scaling changes the equations, column scaling the states
    A, B = row[:, None] * A, row[:, None] * B
    if rank == n:
        solved = np.linalg.solve(row[:, None] * E, np.hstack([A, B])).astype(float)
        return Ordinary(solved[:, :n], solved[:, n:], C, D, 0, condition, 1.0)
    A, C = U.T @ (A * column) @ Vt.T, (C * column) @ Vt.T
    B = U.T @ B
    inner = A[rank:, rank:]
    left, size, right = np.linalg.svd(inner)
    largest = max(float(np.abs(A[rank:]).max()), float(np.abs(A[:, rank:]).max()))
    if size[-1] <= 64 * n * EPS * largest:
        raise NotIndexOne("the algebraic equations do not determine the algebraic states")
    known = right.T @ ((left.T @ np.hstack([A[rank:, :rank], B[rank:]])) / size[:, None])
    X, Y = known[:, :rank], known[:, rank:]
    top = s[:rank, None]
    return Ordinary(
        (A[:rank, :rank] - A[:rank, rank:] @ X) / top,
        (B[:rank] - A[:rank, rank:] @ Y) / top,
        C[:, :rank] - C[:, rank:] @ X,
        D - C[:, rank:] @ Y,
        n - rank,
        condition,
        largest / float(size[-1]),
    )
