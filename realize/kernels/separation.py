"""Staircases of what inputs reach, behind one decision about what they do not reach."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from realize.kernels.hidden_spaces import Unreached, unreached_states
from realize.kernels.staircase import Staircase, decided_staircase

Array = NDArray[np.float64]

#: Factors to the thresholds of the steps, until as many states are reached as were decided.
FINER = (1.0, 1e-4, 1e-8, 0.0)


def separated(
    A: Array, B: Array, thresholds: tuple[float, float], tolerance: float, band: float, gap: float
) -> tuple[Staircase, Unreached]:
    """Return a staircase whose last states are those that no input reaches, and the decision about these.

    A chain of steps passes rounding on, so that its late decisions can be blind. How many states are reached is decided
    before (`unreached_states`); the steps decide their own sizes alone. Only where poles are too crowded for that
    decision do steps that reach fewer states stand.

    Parameters
    ----------
    A, B, thresholds, band, gap
        As in `decided_staircase`.
    tolerance : float
        Elementwise relative change within which a mode counts as unreachable.
    """
    n = A.shape[0]
    found = unreached_states(A, B, tolerance)
    r = n - found.side.vectors.shape[1]
    if r == n:
        first, rotated, inputs = np.eye(n), A, B
    else:
        first = np.linalg.qr(found.side.vectors, mode="complete")[0]
        first = np.hstack([first[:, n - r :], first[:, : n - r]])
        rotated, inputs = first.T @ A @ first, first[:, :r].T @ B
    inner = decided_staircase(rotated[:r, :r], inputs, thresholds, band, gap)
    if not found.blind:
        for factor in FINER[1:]:
            if inner.order == r:
                break
            finer = (factor * thresholds[0], factor * thresholds[1])
            inner = decided_staircase(rotated[:r, :r], inputs, finer, 1.0, gap)
            kept, dropped = (tuple(factor * values for values in part) for part in (inner.kept, inner.dropped))
            inner = Staircase(inner.A, inner.B, inner.Q, inner.sizes, kept, dropped)
    if r == n:
        return inner, found
    new = np.zeros((n, n))
    new[:r, :r], new[r:, r:] = inner.A, rotated[r:, r:]
    new[:r, r:] = inner.Q.T @ rotated[:r, r:]
    b = np.zeros(B.shape)
    b[:r] = inner.B
    Q = np.hstack([first[:, :r] @ inner.Q, first[:, r:]])
    return Staircase(new, b, Q, inner.sizes, inner.kept, inner.dropped), found
