"""The shortest vector that satisfies linear inequalities.

Source: C. L. Lawson, R. J. Hanson, Solving Least Squares Problems, Prentice-Hall 1974, chapter 23 (least distance
programming by nonnegative least squares).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

#: A residual of the dual problem below this says that the inequalities contradict each other: some roundings.
INFEASIBLE = 1e-11


def shortest(rows: Array, bounds: Array) -> Array | None:
    """Return the shortest x with rows @ x >= bounds, None if there is none.

    Parameters
    ----------
    rows : [m][n] float
    bounds : [m] float
    """
    from scipy.optimize import nnls

    size = np.linalg.norm(rows, axis=1)
    if np.any((size == 0) & (bounds > 0)):
        return None
    keep = size > 0
    rows, bounds = rows[keep] / size[keep, None], bounds[keep] / size[keep]
    top = float(np.max(bounds, initial=0.0))
    if top <= 0:
        return np.zeros(rows.shape[1])
    # in units of the largest bound the answer is near 1 in length
    whole = np.vstack([rows.T, bounds / top])
    goal = np.zeros(whole.shape[0])
    goal[-1] = 1.0
    dual = nnls(whole, goal, maxiter=50 * whole.shape[1])[0]
    rest = whole @ dual - goal
    if np.linalg.norm(rest) <= INFEASIBLE:
        return None
    return np.asarray(-rest[:-1] / rest[-1] * top, dtype=float)
