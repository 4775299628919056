"""States set to their steady state: what is left of a model when the rest of its states follows at once."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


class NoSteadyState(ValueError):
    """The states to be left out have a pole at zero frequency, or nearly so."""


def residual_solution(A: Array, B: Array, count: int, *, sampled: bool) -> tuple[Array, Array]:
    """Return (X, Y) with x2 = X x1 + Y u in steady state: X = -A22^-1 A21, sampled (I - A22)^-1 A21, and Y likewise.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    count : int
        States that stay; the others come to rest.
    sampled : bool

    Raises
    ------
    NoSteadyState
        If A22 (sampled: I - A22) is singular to working precision.
    """
    rest = A[count:, count:]
    pencil = np.eye(rest.shape[0]) - rest if sampled else -rest
    if pencil.size == 0:
        return np.zeros((0, count)), np.zeros((0, B.shape[1]))
    try:
        solved = np.linalg.solve(pencil, np.hstack([A[count:, :count], B[count:]])).astype(float)
    except np.linalg.LinAlgError:
        solved = np.full((rest.shape[0], 1), np.inf)
    if not np.all(np.isfinite(solved)):
        raise NoSteadyState("the states to be left out have no steady state")
    return solved[:, :count], solved[:, count:]


def residualised(
    A: Array, B: Array, C: Array, D: Array, count: int, *, sampled: bool
) -> tuple[Array, Array, Array, Array]:
    """Return the model of the first `count` states with all others in steady state [1]_.

    With x2 = X x1 + Y u: A11 + A12 X, B1 + A12 Y, C1 + C2 X, D + C2 Y. The gain at zero frequency stays as it was.

    Parameters
    ----------
    A, B, C, D : arrays (n, n), (n, m), (p, n), (p, m)
    count : int
    sampled : bool

    Returns
    -------
    A, B, C, D : arrays

    Raises
    ------
    NoSteadyState

    References
    ----------
    .. [1] Y. Liu, B. D. O. Anderson, Singular perturbation approximation of balanced systems, Int. J. Control 50 (1989)
           1379-1405.
    """
    X, Y = residual_solution(A, B, count, sampled=sampled)
    above = A[:count, count:]
    return (
        A[:count, :count] + above @ X,
        B[:count] + above @ Y,
        C[:, :count] + C[:, count:] @ X,
        D + C[:, count:] @ Y,
    )


def steady_state_gain(A: Array, B: Array, C: Array, D: Array, *, sampled: bool) -> Array:
    """Return D - C A^-1 B (sampled: D + C (I - A)^-1 B); infinite throughout where A (I - A) is singular."""
    if A.shape[0] == 0:
        return D
    try:
        return residualised(A, B, C, D, 0, sampled=sampled)[3]
    except NoSteadyState:
        return np.full(D.shape, np.inf)
