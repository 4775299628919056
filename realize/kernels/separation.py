"""Reachable states by staircase, and by a search for hidden modes where a staircase is blind."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from realize.kernels.staircase import Staircase, decided_staircase
from realize.kernels.within_rounding import hidden_side

Array = NDArray[np.float64]


def separated(
    A: Array, B: Array, thresholds: tuple[float, float], tolerance: float, band: float, gap: float, searched: int
) -> Staircase:
    """Return a staircase whose last states are those that no input reaches within an elementwise relative change.

    A chain of steps passes rounding on, so that its late decisions can be blind: up to the order `searched`, each mode
    is tried by itself as well. Where that finds more unreachable states, their space comes last, and the staircase is
    that of the others.

    Parameters
    ----------
    A, B, thresholds, band, gap
        As in `decided_staircase`.
    tolerance : float
        Elementwise relative change within which a mode counts as unreachable.
    searched : int
    """
    n = A.shape[0]
    plain = decided_staircase(A, B, thresholds, band, gap)
    if not 1 < n <= searched:
        return plain
    side = hidden_side(A, B, tolerance)
    r = n - side.vectors.shape[1]
    if r >= plain.order:
        return plain
    first, _ = np.linalg.qr(side.vectors, mode="complete")
    first = np.hstack([first[:, n - r :], first[:, : n - r]])
    rotated = first.T @ A @ first
    inner = decided_staircase(rotated[:r, :r], first[:, :r].T @ B, thresholds, band, gap)
    new = np.zeros((n, n))
    new[:r, :r], new[r:, r:] = inner.A, rotated[r:, r:]
    new[:r, r:] = inner.Q.T @ rotated[:r, r:]
    b = np.zeros(B.shape)
    b[:r] = inner.B
    Q = np.hstack([first[:, :r] @ inner.Q, first[:, r:]])
    errors = np.sort(np.array(side.errors))[::-1] / tolerance
    return Staircase(new, b, Q, inner.sizes, (*inner.kept, np.zeros(0)), (*inner.dropped, errors))
