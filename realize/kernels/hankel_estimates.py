"""Hankel singular values in double arithmetic, each with an estimate of its error."""

from __future__ import annotations

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.kernels.balancing import product_svd
from realize.kernels.lyapunov import schur_gramian_factors
from realize.kernels.unit_scaling import scale_model

Array = NDArray[np.float64]

EPS = float(np.finfo(float).eps)
#: How often the values are computed, up to this order, and beyond it.
DRAWS, MANY_DRAWS_ORDER, FEW_DRAWS = 5, 400, 3
#: The estimate is this many times the largest distance between two draws among neighbours; found on models whose
#: values are known exactly, where distances were never off by more than a third of it.
SAFETY = 8.0
#: Neighbours on each side whose distances count.
REACH = 3


def estimated_values(A: Array, B: Array, C: Array, *, sampled: bool) -> tuple[Array, Array, int]:
    """Return Hankel singular values, estimated absolute errors, and the exponent of two by which both are multiplied.

    The singular values of the product of Gramian factors from the real Schur form [1]_, one-sided Jacobi rotations up
    to moderate orders. Everything from the Schur form on is done several times, on the model and its dual, with states
    in other orders and after a random reflection of each group of states that act on one another, so that rounding
    errors are drawn anew each time.

    Parameters
    ----------
    A, B, C : (n, n), (n, m), (p, n) arrays
    sampled : bool

    Returns
    -------
    values, errors : (n,) arrays
    exponent : int

    Raises
    ------
    NotStable
        If a pole is outside the stability region, or so near to its edge that one of the draws has it outside.

    References
    ----------
    .. [1] M. S. Tombs, I. Postlethwaite, Truncated balanced realization of a stable non-minimal state-space system,
           Int. J. Control 46 (1987) 1319-1330.
    """
    scaled = scale_model(A, B, C, sampled=sampled)
    n = A.shape[0]
    if n == 0:
        return np.zeros(0), np.zeros(0), 0
    from scipy.sparse.csgraph import connected_components

    blocks = connected_components(scaled.A != 0, directed=True, connection="strong")[1]
    rng = np.random.default_rng(n)
    drawn = []
    for k in range(DRAWS if n <= MANY_DRAWS_ORDER else FEW_DRAWS):
        a, b, c = scaled.A, scaled.B, scaled.C
        if k % 2:
            a, b, c = a.T, c.T, b.T
        if k > 2:
            a, b, c = _reflected(a, b, c, blocks, rng)
        if k:
            order = rng.permutation(n)
            a, b, c = a[np.ix_(order, order)], b[order], c[:, order]
        drawn.append(_values(a, b, c, sampled))
    values = drawn[0]
    apart = np.max([np.abs(other - values) for other in drawn[1:]], axis=0)
    padded = np.pad(apart, REACH)
    window = np.max([padded[k : k + n] for k in range(2 * REACH + 1)], axis=0)
    errors = SAFETY * (window + n * EPS * values)
    return values, errors, scaled.gain


def _values(A: Array, B: Array, C: Array, sampled: bool) -> Array:
    T, Q = scipy.linalg.schur(np.ascontiguousarray(A), output="real", check_finite=False)
    L, R = schur_gramian_factors(T, Q.T @ B, C @ Q, sampled=sampled)
    return product_svd(R, L)[1]


def _reflected(
    A: Array, B: Array, C: Array, blocks: NDArray[np.int32], rng: np.random.Generator
) -> tuple[Array, Array, Array]:
    """Return the model after a random reflection I - 2 v v' in each group of states."""
    v: Array = np.asarray(rng.standard_normal(A.shape[0]))
    count = int(blocks.max()) + 1
    v = v / np.sqrt(np.asarray(np.bincount(blocks, v * v, count)))[blocks]

    def turned(rows: Array) -> Array:
        sums = np.zeros((count, rows.shape[1]))
        np.add.at(sums, blocks, v[:, None] * rows)
        return rows - 2 * v[:, None] * sums[blocks]

    return turned(turned(A).T).T, turned(B), turned(C.T).T
