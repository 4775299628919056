"""Linear-quadratic (normalised coprime) Riccati equations of a model, and square roots of their solutions.

With y = C x + D u and the costs y'y + u'u, R = I + D'D, S = I + D D', continuous in time:

    A'X + X A + C'C - (X B + C'D) R^-1 (B'X + D'C) = 0,
    A Y + Y A' + B B' - (Y C' + B D') S^-1 (C Y + D B') = 0.

With F = R^-1 (B'X + D'C) the first one is A_F'X + X A_F + H'H = 0, A_F = A - B F and H = [C - D F; F]: a Lyapunov
equation whose solution comes as a square root, and as one step of Newton's method where X was not exact [1]_. Sampled:
F = (R + B'X B)^-1 (B'X A + D'C) and A_F'X A_F - X + H'H = 0 with the same H.

.. [1] D. L. Kleinman, On an iterative technique for Riccati equation computations, IEEE Trans. Automat. Control 13
       (1968) 114-115.
"""

from __future__ import annotations

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.kernels.lyapunov import NotStable, gramian_factors

Array = NDArray[np.float64]
#: Newton's method from the solution of the eigenvalue method: its error squares in each step.
STEPS = 3


class NoSolution(ValueError):
    """The Riccati equation has no stabilising solution, or none that doubles can find."""


def gain_of(A: Array, B: Array, C: Array, D: Array, X: Array, *, sampled: bool) -> Array:
    """Return the optimal gain F of u = -F x for a solution X."""
    R = np.eye(B.shape[1]) + D.T @ D
    if sampled:
        return np.asarray(np.linalg.solve(R + B.T @ X @ B, B.T @ X @ A + D.T @ C))
    return np.asarray(np.linalg.solve(R, B.T @ X + D.T @ C))


def riccati_factor(A: Array, B: Array, C: Array, D: Array, *, sampled: bool) -> Array:
    """Return Z with X = Z'Z, the stabilising solution of the Riccati equation of control.

    Parameters
    ----------
    A : (n, n), B : (n, m), C : (p, n), D : (p, m) arrays
        Scaled beforehand. The filter's equation is that of A', C', B', D'.
    sampled : bool

    Returns
    -------
    (n, n) array

    Raises
    ------
    NoSolution
        If the closed loop is not stable: a mode on the boundary of stability that is not controllable or not seen.
    """
    n, m = B.shape
    if n == 0:
        return np.zeros((0, 0))
    weight = np.eye(m) + D.T @ D
    solver = scipy.linalg.solve_discrete_are if sampled else scipy.linalg.solve_continuous_are
    try:
        X = solver(A, B, C.T @ C, weight, s=C.T @ D)
    except (np.linalg.LinAlgError, ValueError) as error:
        raise NoSolution(str(error)) from None
    factor = np.zeros((n, n))
    for _ in range(STEPS):
        F = gain_of(A, B, C, D, X, sampled=sampled)
        seen = np.vstack([C - D @ F, F])
        try:
            _, factor = gramian_factors(A - B @ F, B, seen, sampled=sampled)
        except NotStable:
            raise NoSolution("the closed loop is not stable") from None
        X = factor.T @ factor
    return factor


def residual(A: Array, B: Array, C: Array, D: Array, X: Array, *, sampled: bool) -> float:
    """Return the norm of the control equation's left-hand side over the sum of the norms of its terms."""
    R = np.eye(B.shape[1]) + D.T @ D
    if sampled:
        cross = A.T @ X @ B + C.T @ D
        terms = [A.T @ X @ A, -X, C.T @ C, -cross @ np.linalg.solve(R + B.T @ X @ B, cross.T)]
    else:
        cross = X @ B + C.T @ D
        terms = [A.T @ X, X @ A, C.T @ C, -cross @ np.linalg.solve(R, cross.T)]
    size = sum(float(np.linalg.norm(term)) for term in terms)
    return float(np.linalg.norm(np.sum(terms, axis=0))) / size if size > 0 else 0.0
