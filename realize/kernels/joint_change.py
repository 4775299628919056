"""Smallest elementwise relative change that hides several modes of a state model together.

The columns of F span left vectors hidden from the inputs after a change dM of M = [A, B] exactly if

    F' (M + dM) = S [F', 0]

for some S. For given F and S each column of dM is free by itself: with dM_j = |M_j| * y_j and the residual
R = F' M - S [F', 0], the y_j of least norm solves (|M_j| * F)' y_j = -R_j. The change is the largest entry of |y|,
zeros stay zero, and it depends on neither the basis F nor units. F and S are improved by Gauss-Newton steps on the sum
of |y_j|^2 [1]_. No mode needs a vector of its own, so clusters and chains are no exception.

Vectors that look alike through one column ask for more digits than doubles have: F, S and R are kept in the extended
precision of the platform, where it has one; the steps themselves need none.

.. [1] J. B. Rosen, H. Park, J. Glick, Total least norm formulation and solution for structured problems, SIAM J. Matrix
       Anal. Appl. 17 (1996) 110-126: the linear case of changes with a structure (from memory).
"""

from __future__ import annotations

import math

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

Array = NDArray[np.float64]
LongArray = NDArray[np.longdouble]
EPS = float(np.finfo(float).eps)
#: Smallest singular values of |M_j| * F, relative to the largest, in the weights of a step.
FLOORS = (1e-8, 1e-8, 1e-10, 1e-12, 1e-12, 1e-14, 1e-14, 1e-14)
#: Steps without gain that end the search.
PATIENCE = 2


def joint_change(M: Array, F: Array, enough: float, steps: int = len(FLOORS)) -> tuple[float, Array, Array]:
    """Return the smallest change found that hides a subspace near the one given, the subspace and its S.

    Parameters
    ----------
    M : (n, n + m) array
        [A, B].
    F : (n, h) array
        Basis to start from.
    enough : float
        A change this small ends the search.
    steps : int
        Largest number of Gauss-Newton steps; 0 judges the subspace as it is.

    Returns
    -------
    change : float
        Infinite where zeros would have to change.
    F : (n, h) array
        Columns that are zero where those given are.
    S : (h, h) array
        Its eigenvalues are the modes.
    """
    n, h = F.shape
    if h == n:
        # every state: S = A, and what reaches them has to vanish
        change = 1.0 if np.any(M[:, n:]) else 0.0
        return change, np.eye(n), M[:, :n].copy()
    F = F / np.linalg.norm(F, axis=0)
    pivots = _pivots(F)
    S = np.linalg.solve(F[pivots], (F.T @ M)[:, pivots].T).T.astype(float)
    sizes, wide = np.abs(M), M.astype(np.longdouble)
    at: tuple[LongArray, LongArray] = F.astype(np.longdouble), S.astype(np.longdouble)
    change, best, idle = math.inf, (F, S), 0
    for step in range(steps + 1):
        residual = _residual(wide, *at)
        F, S = at[0].astype(float), at[1].astype(float)
        U, values, Wt = np.linalg.svd(sizes.T[:, :, None] * F, full_matrices=False)
        now = _change(residual, U, values, Wt, np.abs(F).T @ sizes)
        idle = idle + 1 if not now < 0.5 * change else 0
        if now < change:
            change, best = now, (F, S)
        if change <= enough or step >= steps or idle > PATIENCE:
            break
        dF, dS = _step(M, F, S, pivots, residual, values, Wt, FLOORS[min(step, len(FLOORS) - 1)])
        at = at[0] + dF, at[1] + dS
        if not (np.isfinite(at[0]).all() and np.isfinite(at[1]).all()):
            break
    return change, *best


def _residual(M: LongArray, F: LongArray, S: LongArray) -> Array:
    residual = F.T @ M
    residual[:, : F.shape[0]] -= S @ F.T
    return residual.astype(float)


def _pivots(F: Array) -> NDArray[np.intp]:
    """Return rows of F that make a well-conditioned square part."""
    pivots: NDArray[np.intp] = scipy.linalg.qr(F.T, mode="r", pivoting=True, check_finite=False)[1][: F.shape[1]]
    return pivots


def _change(residual: Array, U: Array, values: Array, Wt: Array, noise: Array) -> float:
    """Return the largest entry of the changes y_j of least norm."""
    turned = (Wt @ residual.T[:, :, None])[:, :, 0]
    top = values.max(axis=1, keepdims=True)
    live = values > 16 * EPS * top
    # where no number can be changed the residual has to be nothing but its own rounding
    allowed = 4 * residual.shape[0] * EPS * np.linalg.norm(noise, axis=0)[:, None]
    if np.any(~live & (np.abs(turned) > allowed)):
        return math.inf
    weighted = np.divide(turned, values, out=np.zeros(turned.shape), where=live)
    change = float(np.abs((U @ weighted[:, :, None])[:, :, 0]).max(initial=0.0))
    return change if math.isfinite(change) else math.inf


def _step(
    M: Array, F: Array, S: Array, pivots: NDArray[np.intp], residual: Array, values: Array, Wt: Array, floor: float
) -> tuple[Array, Array]:
    """Return the changes of F and S in one Gauss-Newton step: none in the pivot rows of F and its zero rows."""
    (n, h), q = F.shape, M.shape[1]
    free = np.setdiff1d(np.flatnonzero(np.any(F != 0, axis=1)), pivots)
    # a column of zeros has a weight of its own: it weighs what the smallest of the others does
    top = values.max(axis=1, keepdims=True)
    least = floor * float(top.max(initial=0.0)) or 1.0
    weights = Wt / np.maximum(np.maximum(values, floor * top), floor * least)[:, :, None]
    # d residual_j = sum_i M_ij dF_i - S dF_j - dS F_j
    table = np.zeros((q, h, free.size * h + h * h))
    rows = table[:, :, : free.size * h].reshape(q, h, free.size, h)
    rows[:] = weights[:, :, None, :] * M.T[:, None, free, None]
    turned = weights[free] @ S
    for place, state in enumerate(free):
        rows[state, :, place] -= turned[place]
    table[:n, :, free.size * h :] = -(weights[:n, :, :, None] * F[:, None, None, :]).reshape(n, h, h * h)
    right = -(weights @ residual.T[:, :, None])[:, :, 0]
    flat = table.reshape(q * h, -1)
    size = np.linalg.norm(flat, axis=0)
    size[size == 0] = 1.0
    move = scipy.linalg.lstsq(flat / size, right.reshape(-1), lapack_driver="gelsy", check_finite=False)[0] / size
    dF = np.zeros(F.shape)
    dF[free] = move[: free.size * h].reshape(free.size, h)
    return dF, move[free.size * h :].reshape(h, h)
