"""Frequencies where a state model may pass from passive to not passive, from the eigenvalues of a Hamiltonian pencil.

The Hermitian part G + G^* is singular at jw if and only if jw is an eigenvalue of the pencil

    [[A, 0, B], [0, -A', -C'], [C, B', D + D']] - s diag(I, I, 0),

and sigma(G) = level if and only if it is one of

    [[A, 0, B, 0], [0, -A', 0, -C'], [0, B', -level I, D'], [C, 0, D, -level I]] - s diag(I, I, 0, 0).

Nothing is inverted, so a direct term may be singular or absent.

Sources
-------
1. S. Boyd, V. Balakrishnan, P. Kabamba, A bisection method for computing the H-infinity norm of a transfer matrix,
   Math. Control Signals Systems 2 (1989) 207-219.
2. S. Grivet-Talocia, Passivity enforcement via perturbation of Hamiltonian matrices, IEEE Transactions on Circuits and
   Systems I 51(9) (2004) 1755-1769 (from memory).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: An eigenvalue counts as on the axis when its real part is no more than this fraction of its size: rounding moves a
#: double one by the root of eps. Places that are none cost one evaluation each.
NEAR_AXIS = 1e-6


def singular_frequencies(A: Array, B: Array, C: Array, D: Array, kind: str, level: float) -> Array:
    """Return the frequencies (rad/s, not negative, rising) where the pencil has an eigenvalue on the axis or near it.

    Parameters
    ----------
    A, B, C, D : arrays
        Square response, continuous time.
    kind : str
        "positive-real" or "bounded-real".
    level : float
        Of the singular values; for positive real the Hermitian part is raised by it.
    """
    import scipy.linalg

    n, p = B.shape
    zero, none = np.zeros((n, n)), np.zeros((n, p))
    unit = np.eye(p)
    if kind == "positive-real":
        left = np.block([[A, zero, B], [zero, -A.T, -C.T], [C, B.T, D + D.T + 2 * level * unit]])
    else:
        left = np.block(
            [
                [A, zero, B, none],
                [zero, -A.T, none, -C.T],
                [none.T, B.T, -level * unit, D.T],
                [C, none.T, D, -level * unit],
            ]
        )
    right = np.zeros(left.shape)
    right[: 2 * n, : 2 * n] = np.eye(2 * n)
    alpha, beta = scipy.linalg.eigvals(left, right, homogeneous_eigvals=True, check_finite=False)
    finite = np.abs(beta) > np.finfo(float).eps * np.abs(alpha)
    values = alpha[finite] / beta[finite]
    values = values[np.isfinite(values)]
    near = np.abs(values.real) <= NEAR_AXIS * np.abs(values)
    found: Array = np.unique(np.abs(values[near].imag))
    return found


def violation(values: ComplexArray, kind: str) -> Array:
    """Return -lambda_min((G + G^*)/2), or sigma_max(G) - 1, at each point of [k][p][p]: positive where not passive."""
    if kind == "positive-real":
        hermitian = (values + values.conj().transpose(0, 2, 1)) / 2
        return np.asarray(-np.linalg.eigvalsh(hermitian)[:, 0], dtype=float)
    return np.asarray(np.linalg.svd(values, compute_uv=False)[:, 0] - 1.0, dtype=float)


def between(frequencies: Array) -> Array:
    """Return 0, the frequencies, the middles between them and a place beyond the last: one in each interval."""
    if frequencies.size == 0:
        return np.zeros(1)
    edges = np.concatenate([[0.0], frequencies])
    middles = (edges[1:] + edges[:-1]) / 2
    result: Array = np.unique(np.concatenate([edges, middles, [2 * frequencies[-1]]]))
    return result
