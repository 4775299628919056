"""Real Schur form with its blocks in a given order."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def block_starts(R: Array, place: int = 0) -> NDArray[np.int64]:
    """Return the first index of each diagonal block of a real Schur form, from a block's place on."""
    n = R.shape[0]
    first = np.ones(n, dtype=bool)
    first[1:] = np.diagonal(R, -1) == 0
    first[:place] = False
    return np.flatnonzero(first)


def block_eigenvalues(R: Array, starts: NDArray[np.int64]) -> ComplexArray:
    """Return one eigenvalue of each block, that with positive imaginary part of a pair.

    A 2 x 2 block in standard form [[a, b], [c, a]] with b c < 0 has a +- i sqrt(-b c).
    """
    n = R.shape[0]
    values = np.diagonal(R)[starts].astype(complex)
    pairs = np.flatnonzero(np.diff(np.append(starts, n)) == 2)
    at = starts[pairs]
    values[pairs] += 1j * np.sqrt(np.abs(R[at, at + 1])) * np.sqrt(np.abs(R[at + 1, at]))
    return values


def ordered_schur(A: Array, key: Callable[[ComplexArray], Array]) -> tuple[Array, Array, int]:
    """Return R, Q with A = Q R Q', and how many blocks could not be put in their place.

    Parameters
    ----------
    A : (n, n) array
    key : function of eigenvalues [k]
        Rows [k, l]; blocks come in the increasing order of the rows, the first column counting most.

    Returns
    -------
    R, Q : (n, n) arrays
        Exact zeros below the blocks.
    stuck : int
    """
    import scipy.linalg
    import scipy.linalg.lapack

    n = A.shape[0]
    if n == 0:
        return np.zeros((0, 0)), np.zeros((0, 0)), 0
    R, Q = scipy.linalg.schur(A, output="real", check_finite=False)
    R, Q = np.asfortranarray(R), np.asfortranarray(Q)
    place, stuck = 0, 0
    while place < n:
        # swaps move eigenvalues by roundings and can split a pair, so the blocks are read anew each time
        starts = block_starts(R, place)
        first = int(np.lexsort(key(block_eigenvalues(R, starts)).T[::-1])[0])
        if first:
            R, Q, info = scipy.linalg.lapack.dtrexc(
                R, Q, int(starts[first]) + 1, place + 1, overwrite_a=1, overwrite_q=1
            )
            stuck += bool(info)
        place += 2 if place + 1 < n and R[place + 1, place] != 0 else 1
    return np.ascontiguousarray(np.triu(R, -1)), np.ascontiguousarray(Q), stuck


def eigenvalue_conditions(R: Array, eigenvalues: ComplexArray) -> Array:
    """Return |y| |x| / |y'x| of each eigenvalue, with its left and right eigenvectors y and x; infinite if defective.

    Parameters
    ----------
    R : (n, n) array
    eigenvalues : [k]
        Of R; each takes the condition of the computed eigenvalue nearest to it.
    """
    import scipy.linalg

    values, left, right = scipy.linalg.eig(R, left=True, right=True, check_finite=False)
    with np.errstate(divide="ignore", invalid="ignore"):
        size = np.linalg.norm(left, axis=0) * np.linalg.norm(right, axis=0)
        conditions = size / np.abs(np.sum(left.conj() * right, axis=0))
    conditions = np.where(np.isfinite(conditions), conditions, np.inf)
    nearest = np.argmin(np.abs(eigenvalues[:, None] - values[None, :]), axis=1)
    return conditions[nearest]
