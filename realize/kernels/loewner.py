"""The Loewner pencil of tangential samples: order from its singular values, poles from its eigenvalues.

Sources
-------
1. A. J. Mayo, A. C. Antoulas, "A framework for the solution of the generalized realization problem", Linear Algebra and
   its Applications 425, 2007.
2. A. C. Antoulas, S. Lefteriu, A. C. Ionita, "A tutorial introduction to the Loewner framework for model reduction", in
   Model Reduction and Approximation, SIAM 2017 (real form; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class Pencil:
    """Real Loewner and shifted Loewner matrices with their singular values.

    Parameters
    ----------
    loewner, shifted : [rows][columns] float
    values : [r] float
        Singular values of [loewner, shifted] side by side.
    left : [rows][r] float
        Left singular vectors of [loewner, shifted].
    right : [columns][r] float
        Right singular vectors of the one above the other.
    """

    loewner: Array
    shifted: Array
    values: Array
    left: Array
    right: Array


def pencil(
    mu: ComplexArray,
    left: ComplexArray,
    v: ComplexArray,
    lam: ComplexArray,
    right: ComplexArray,
    w: ComplexArray,
    scale: float,
) -> Pencil:
    """Return the pencil of samples left_j H(mu_j) = v_j and H(lambda_i) right_i = w_i and of their conjugates.

    L_ji = (v_j right_i - left_j w_i)/(mu_j - lambda_i), M_ji = (mu_j v_j right_i - lambda_i left_j w_i)/(mu_j -
    lambda_i). Rows and columns of conjugate samples are combined to their real and imaginary parts; samples at s = 0
    are real by themselves.

    Parameters
    ----------
    mu, lam : [j], [i] complex
        Points jx, x >= 0, no point in both.
    left, right : [j][outputs], [i][inputs] complex
        Directions.
    v, w : [j][inputs], [i][outputs] complex
        Samples in these directions.
    scale : float
        Unit of frequency, in which M is as large as L.
    """
    low, high = mu[:, None] / scale, lam[None, :] / scale
    first, second = v @ right.T, left @ w.T
    gap = low - high
    # the conjugate of the right sample: its own differences
    other, third = v @ right.conj().T, left @ w.conj().T
    mirrored = low - high.conj()
    plain = ((first - second) / gap, (other - third) / mirrored)
    shift = ((low * first - high * second) / gap, (low * other - high.conj() * third) / mirrored)
    L, M = (_real(a, b, mu.imag > 0, lam.imag > 0) for a, b in (plain, shift))
    u, values, _ = np.linalg.svd(np.hstack([L, M]), full_matrices=False)
    _, _, x = np.linalg.svd(np.vstack([L, M]), full_matrices=False)
    return Pencil(L, M, values, u, x.T)


def _real(a: ComplexArray, b: ComplexArray, rows: NDArray[np.bool_], columns: NDArray[np.bool_]) -> Array:
    """Return the real matrix of [[a, b], [b*, a*]], the second half of rows and columns belonging to the conjugates.

    With T = [[1, 1], [j, -j]]/sqrt 2: T [[a, b], [b*, a*]] T^H.
    """
    top = np.hstack([(a + b).real, ((b - a) * 1j).real[:, columns]])
    bottom = np.hstack([-(a + b).imag, (a - b).real[:, columns]])[rows]
    whole = np.vstack([top, bottom])
    # real samples have no conjugate: T is 1 there
    single_rows = np.concatenate([np.where(rows, 1.0, np.sqrt(0.5)), np.ones(int(np.sum(rows)))])
    single_columns = np.concatenate([np.where(columns, 1.0, np.sqrt(0.5)), np.ones(int(np.sum(columns)))])
    return np.asarray(whole * single_rows[:, None] * single_columns)


def pencil_poles(found: Pencil, order: int, scale: float) -> ComplexArray:
    """Return the finite eigenvalues of (Y^T M X, Y^T L X), Y and X the leading singular vectors; may be unstable."""
    if order == 0:
        return np.zeros(0, complex)
    from scipy.linalg import eigvals

    y, x = found.left[:, :order], found.right[:, :order]
    # L = -O E R and M = -O A R: the pencil (A, E)
    homogeneous = eigvals(y.T @ found.shifted @ x, y.T @ found.loewner @ x, homogeneous_eigvals=True)
    top, bottom = homogeneous[0], homogeneous[1]
    finite = np.abs(bottom) > 2.0**-45 * np.abs(top)
    return np.asarray(top[finite] / bottom[finite] * scale, dtype=complex)


def realized(found: Pencil, order: int) -> tuple[Array, Array, Array, Array]:
    """Return E, A (in units of the scale), X and Y: E s - A is the pencil of the realization by the samples."""
    y, x = found.left[:, :order], found.right[:, :order]
    return -(y.T @ found.loewner @ x), -(y.T @ found.shifted @ x), x, y
