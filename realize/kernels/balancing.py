"""Balancing by square roots of the Gramians."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import scipy.linalg
import scipy.linalg.lapack
from numpy.typing import NDArray

from realize.kernels.leading_part import leading_part
from realize.kernels.lyapunov import (
    SquareRoots,
    schur_eigenvalues,
    shifted_solutions,
    square_roots,
)

Array = NDArray[np.float64]

EPS = float(np.finfo(float).eps)
#: Up to this order the Hankel singular values come from one-sided Jacobi rotations, accurate far below the largest.
JACOBI_ORDER = 200
#: How many frequencies, those of the poles nearest to the axis, tell what rounding in A does to the response.
SENSITIVE_FREQUENCIES = 24


@dataclass(frozen=True)
class HankelFactors:
    """Square roots of the Gramians of a stable model in real Schur form, and the singular values of their product.

    Attributes
    ----------
    roots : SquareRoots
        L and R with L L' and R'R the Gramians, and the model as they see it.
    values : (n,) array
        Hankel singular values, decreasing.
    left, right : (n, k) arrays U, Z
        R L = U diag(values) Z' but for rounding; k = n up to order 200, and beyond as many as stand above rounding.
    errors : (n,) array
        Estimated absolute error of each value.
    response_error : float
        Estimated largest gain of the difference between the model and the one whose exact factors these are: the
        backward error of the Schur form, before any value or entry is rounded further.
    """

    roots: SquareRoots
    values: Array
    left: Array
    right: Array
    errors: Array
    response_error: float


def _jacobi(product_left: Array, product_right: Array) -> tuple[Array, Array, Array] | None:
    """SVD of a product of graded factors: pivoted QR moves the grading to one side, one-sided Jacobi keeps it [1]_.

    .. [1] Z. Drmac, Accurate computation of the product-induced singular value decomposition with applications, SIAM J.
           Numer. Anal. 35 (1998) 1969-1994.
    """
    n = product_left.shape[0]
    size = np.linalg.norm(product_right, axis=1)
    exponent = np.where(size > 0, np.frexp(size)[1], 0)
    with np.errstate(under="ignore"):
        graded = np.ldexp(product_left, exponent[None, :])
        plain = np.ldexp(product_right, -exponent[:, None])
        Q, r, pivots = scipy.linalg.qr(graded, pivoting=True, check_finite=False)
        inner = r @ plain[pivots]
    if not np.any(inner) or n < 2:
        return None
    # transposed, because the routine prefers columns of like length
    values, u, v, work, counts, info = scipy.linalg.lapack.dgejsv(
        np.asfortranarray(inner.T), joba=0, jobu=0, jobv=0, jobr=0, jobt=0, jobp=0
    )
    if info != 0 or not np.all(np.isfinite(values)):
        return None
    values = values * (work[0] / work[1])
    rank = int(counts[0])
    if rank < n and not (np.all(np.isfinite(u)) and np.all(np.isfinite(v))):
        return None
    order = np.argsort(-values, kind="stable")
    return Q @ v[:, order], values[order], u[:, order]


def product_svd(R: Array, L: Array) -> tuple[Array, Array, Array]:
    """Return U, the singular values and Z with R L = U diag(values) Z', one-sided Jacobi rotations up to order 200."""
    n = R.shape[0]
    if 1 < n <= JACOBI_ORDER:
        result = _jacobi(R, L)
        if result is not None:
            return result
    U, values, Zt = scipy.linalg.svd(R @ L, check_finite=False)
    return U, values, Zt.T


def backward_error(A: Array) -> float:
    """Return the part of the backward error of a Schur or Hessenberg form of A that counts: 4 eps min(n^1/2, 4) |A|."""
    return 4 * EPS * min(math.sqrt(A.shape[0]), 4.0) * float(np.linalg.norm(A))


def _response_error(T: Array, B: Array, C: Array, sampled: bool) -> float:
    """Return the estimated effect of the backward error of the Schur form on the response.

    Two models whose responses differ by at most d have Hankel singular values that differ by at most d (Weyl's
    inequality for Hankel operators). A Schur form is exact for a matrix within 4 n^1/2 eps |A| of A (Frobenius norm;
    measured: 3 n^1/2 at n = 250 and 1000). It moves the response by |C (sI - A)^-1| |(sI - A)^-1 B| times that, or
    n^-1/2 of it where the change has no direction of its own (n^-1 for independent entries): up to n = 16 all of it
    counts, beyond 4 n^-1/2 of it. Against exact arithmetic half of that was reached once, on a companion form of
    order 12, and a hundredth is usual.
    """
    poles = schur_eigenvalues(T)
    distance = np.abs(np.abs(poles) - 1) if sampled else np.abs(poles.real)
    near = poles[poles.imag >= 0][np.argsort(distance[poles.imag >= 0], kind="stable")[:SENSITIVE_FREQUENCIES]]
    points = np.asarray(np.exp(1j * np.angle(near)) if sampled else 1j * near.imag, dtype=complex)
    try:
        state = shifted_solutions(T, points, B)
        costate = shifted_solutions(np.ascontiguousarray(T.T[::-1, ::-1]), points, C.T[::-1])
    except ValueError:
        # a pole on the axis to working precision: nothing is known
        return math.inf
    return backward_error(T) * float(np.max(state * costate))


def hankel_factors(T: Array, B: Array, C: Array, *, sampled: bool) -> HankelFactors:
    """Return Gramian factors and Hankel singular values of a stable model in real Schur form.

    The values are the singular values of R L [1]_, up to order 200 by one-sided Jacobi rotations. Beyond, only values
    that stand above the rounding of the product are computed, and the others are bounded. All share one estimated
    error: what the backward error of the Schur form does to the response, and n^1/2 eps |R| |L| for their product.

    Parameters
    ----------
    T : (n, n) array
        Real Schur form, stable, scaled.
    B : (n, m) array
    C : (p, n) array
    sampled : bool

    Returns
    -------
    HankelFactors

    Raises
    ------
    NotStable
        From the Gramian factors.

    References
    ----------
    .. [1] M. S. Tombs, I. Postlethwaite, Truncated balanced realization of a stable non-minimal state-space system,
           Int. J. Control 46 (1987) 1319-1330.
    """
    n = T.shape[0]
    roots = square_roots(T, B, C, sampled=sampled)
    L, R = roots.L, roots.R
    if n == 0:
        return HankelFactors(roots, np.zeros(0), L, R, np.zeros(0), 0.0)
    response = _response_error(T, B, C, sampled)
    product = math.sqrt(n) * EPS * float(np.linalg.norm(R)) * float(np.linalg.norm(L))
    if n <= JACOBI_ORDER:
        U, values, Z = product_svd(R, L)
        return HankelFactors(roots, values, U, Z, response + product + 4 * n * EPS * values, response)
    found = leading_part(R @ L, product)
    errors = np.full(n, response + product + found.rest)
    return HankelFactors(roots, found.values, found.left, found.right, errors, response)


def equal_groups(values: Array) -> NDArray[np.int64]:
    """Return for each of the decreasing values the number of its group; equal means within 8 n eps of the neighbour."""
    n = values.size
    if n == 0:
        return np.zeros(0, dtype=np.int64)
    apart = values[:-1] - values[1:] > 8 * n * EPS * values[:-1]
    return np.concatenate([[0], np.cumsum(apart)]).astype(np.int64)


def tail_bounds(values: Array) -> Array:
    """Return 2 * (sum of the distinct values after the first r) for r = 0..n, equal values counted once."""
    n = values.size
    group = equal_groups(values)
    first = np.ones(n, dtype=bool)
    first[1:] = group[1:] != group[:-1]
    bounds = np.zeros(n + 1)
    total = 0.0
    for k in range(n - 1, -1, -1):
        # inside a group the value counts from its first member on, so that a cut there is charged too
        bounds[k] = 2 * (total + values[k])
        if first[k]:
            total += values[k]
    return bounds


def state_signs(rows: Array, columns: Array) -> Array:
    """Return +1 or -1 per state: the first large entry of its row (of its column, if that is noise) gets positive."""
    sign = np.ones(rows.shape[0])
    for k, (row, column) in enumerate(zip(rows, columns, strict=True)):
        chosen = column if np.linalg.norm(row) <= 1e-8 * np.linalg.norm(column) else row
        size = np.abs(chosen)
        if size.max(initial=0.0) > 0:
            sign[k] = np.sign(chosen[np.argmax(size >= 0.999 * size.max())])
    return sign


@dataclass(frozen=True)
class Balanced:
    """The first states of a balanced model, with the projections that lead there: W'V = I, A = W'T V, B = W'B..."""

    A: Array
    B: Array
    C: Array
    W: Array
    V: Array


def balanced_part(factors: HankelFactors, order: int) -> Balanced:
    """Return the `order` most significant states of the balanced model.

    V = L Z1 S1^-1/2 and W = R'U1 S1^-1/2 [1]_, but the large matrices are not projected: with R T = M R and T L = L N

        A = S1^-1/2 (U1'M U1) S1^1/2 = S1^1/2 (Z1'N Z1) S1^-1/2,   B = S1^1/2 Z1'L^-1 B,   C = C R^-1 U1 S1^1/2,

    where M, N, L^-1 B and C R^-1 come with the Gramian factors and are as large as the poles only. Above the diagonal
    the first form damps rounding errors, below it the second. Signs: the first large entry of each row of B (of each
    column of C, where that row is zero) is positive.

    Parameters
    ----------
    factors : HankelFactors
    order : int
        At most the number of values well above zero.

    Returns
    -------
    Balanced

    References
    ----------
    .. [1] Tombs & Postlethwaite 1987, as in `hankel_factors`.
    """
    roots = factors.roots
    root = np.sqrt(factors.values[:order])
    U, Z = factors.left[:, :order], factors.right[:, :order]
    above = (U.T @ (roots.M @ U)) / root[:, None] * root
    below = (Z.T @ (roots.N @ Z)) * root[:, None] / root
    B = root[:, None] * (Z.T @ roots.input)
    C = (roots.output @ U) * root
    sign = state_signs(B, C.T)
    A = (np.triu(above) + np.tril(below, -1)) * sign[:, None] * sign
    return Balanced(A, B * sign[:, None], C * sign, roots.R.T @ U / root * sign, roots.L @ Z / root * sign)


def balancing_free_projection(factors: HankelFactors, order: int) -> tuple[Array, Array]:
    """Return (W, V) with W'V = I onto the same states in well-conditioned coordinates that are not balanced [1]_.

    Parameters
    ----------
    factors : HankelFactors
    order : int

    Returns
    -------
    W, V : (n, order) arrays

    References
    ----------
    .. [1] A. Varga, Balancing-free square-root algorithm for computing singular perturbation approximations, Proc. 30th
           IEEE CDC (1991) 1062-1065.
    """
    V, _ = np.linalg.qr(factors.roots.L @ factors.right[:, :order])
    W, _ = np.linalg.qr(factors.roots.R.T @ factors.left[:, :order])
    return np.linalg.solve(W.T @ V, W.T).T, V
