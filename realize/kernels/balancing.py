"""Balancing by square roots of the Gramians, with every unit taken out first in powers of two."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg
import scipy.linalg.lapack
from numpy.typing import NDArray

from realize.kernels.lyapunov import schur_gramian_factors

Array = NDArray[np.float64]

EPS = float(np.finfo(float).eps)
#: Up to this order the Hankel singular values come from one-sided Jacobi rotations, accurate far below the largest.
JACOBI_ORDER = 200
#: Up to this order they are computed twice with independent rounding errors, which measures those errors.
REPEATED_ORDER = 500


@dataclass(frozen=True)
class Scaled:
    """A model in units of its own: exact powers of two taken out.

    A = 2^time S A' S^-1, B = 2^input S B', C = 2^output C' S^-1 with S = diag(2^states), and
    C (sI - A)^-1 B = 2^(input + output - time) C' (s' I - A')^-1 B' at s = 2^time s'. `input` and `output` are both
    even or both odd, so that the balanced coordinates of the two models differ by powers of two only.
    """

    A: Array
    B: Array
    C: Array
    states: NDArray[np.int64]
    time: int
    input: int
    output: int

    @property
    def gain(self) -> int:
        """Exponent of the factor from the scaled model's gains to the model's own."""
        return self.input + self.output - self.time


def _top(matrix: Array) -> int:
    largest = float(np.max(np.abs(matrix), initial=0.0))
    return int(np.frexp(largest)[1]) if largest > 0 else 0


def _power(matrix: Array, exponents: NDArray[np.int64] | int) -> Array:
    return np.ldexp(matrix, np.clip(exponents, -5000, 5000).astype(np.int64) if np.ndim(exponents) else exponents)


def scale_model(A: Array, B: Array, C: Array, *, sampled: bool) -> Scaled:
    """Take units of time, inputs, outputs and states out of a model in powers of two.

    The states are balanced on the bordered matrix [A B; C 0], so that inputs and outputs count too; all inputs share
    one factor and all outputs another, because balanced truncation depends on the weights between them.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
    sampled : bool
        True leaves the unit of time alone.

    Returns
    -------
    Scaled
    """
    n, m, p = A.shape[0], B.shape[1], C.shape[0]
    states = np.zeros(n, dtype=np.int64)
    time = 0 if sampled else _top(A)
    inputs, outputs = _top(B), _top(C)
    with np.errstate(under="ignore"):
        if n:
            border = np.zeros((n + m + p, n + m + p))
            border[:n, :n], border[:n, n : n + m] = np.ldexp(A, -time), np.ldexp(B, -inputs)
            border[n + m :, :n] = np.ldexp(C, -outputs)
            # inputs have no row and outputs no column: the balancing leaves them alone
            _, (factor, _) = scipy.linalg.matrix_balance(border, permute=False, separate=True)
            states = np.frexp(factor[:n])[1].astype(np.int64) - 1
            between = states[None, :] - states[:, None]
            own = _power(A, between)
            if not np.all(np.isfinite(own)):
                states[:] = 0
                between, own = np.zeros_like(between), A
            time = 0 if sampled else _top(own)
            A = _power(A, between - time)
            first, last = _power(B, -states[:, None] - inputs), _power(C, states[None, :] - outputs)
            inputs, outputs = inputs + _top(first), outputs + _top(last)
            inputs += (inputs + outputs) % 2
            B, C = _power(B, -states[:, None] - inputs), _power(C, states[None, :] - outputs)
    return Scaled(A, B, C, states, time, inputs, outputs)


@dataclass(frozen=True)
class HankelFactors:
    """Square roots of the Gramians of a stable model in real Schur form, and the singular values of their product.

    Attributes
    ----------
    controllability, observability : (n, n) arrays L, R
        L L' and R'R are the Gramians.
    values : (n,) array
        Hankel singular values, decreasing.
    left, right : (n, n) arrays U, Z
        R L = U diag(values) Z'.
    errors : (n,) array
        Estimated absolute error of each value.
    """

    controllability: Array
    observability: Array
    values: Array
    left: Array
    right: Array
    errors: Array


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


def _product_svd(R: Array, L: Array) -> tuple[Array, Array, Array]:
    n = R.shape[0]
    if 1 < n <= JACOBI_ORDER:
        result = _jacobi(R, L)
        if result is not None:
            return result
    U, values, Zt = scipy.linalg.svd(R @ L, check_finite=False)
    return U, values, Zt.T


def hankel_factors(T: Array, B: Array, C: Array, *, sampled: bool) -> HankelFactors:
    """Return Gramian factors and Hankel singular values of a stable model in real Schur form.

    The values are the singular values of R L [1]_. Up to order 500 they are computed once more from the dual model,
    whose rounding errors are independent; three times the largest difference among neighbours is the estimated error.
    Beyond, it is n eps |R| |L|.

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
    L, R = schur_gramian_factors(T, B, C, sampled=sampled)
    if n == 0:
        return HankelFactors(L, R, np.zeros(0), L, R, np.zeros(0))
    U, values, Z = _product_svd(R, L)
    if n <= REPEATED_ORDER:
        # the dual in another Schur form: Gramians change places, rounding errors are drawn anew
        dual, Q = scipy.linalg.schur(np.ascontiguousarray(T.T), output="real", check_finite=False)
        try:
            other, own = schur_gramian_factors(dual, Q.T @ C.T, B.T @ Q, sampled=sampled)
            again = _product_svd(own, other)[1]
        except ValueError:
            # a pole so close to the axis that the second Schur form has it on the other side
            again = np.zeros(n)
        difference = np.abs(values - again)
        window = np.max([np.roll(np.pad(difference, 2), k)[2:-2] for k in range(-2, 3)], axis=0)
        errors = 3 * window + EPS * np.sqrt(n) * values
    else:
        errors = np.full(n, n * EPS * np.linalg.norm(R, 2) * np.linalg.norm(L, 2))
    return HankelFactors(L, R, values, U, Z, errors)


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


def _signed(columns: Array, weights: Array) -> Array:
    """Return +1 or -1 per row of weights: the first of its large entries becomes positive."""
    sign = np.ones(columns.shape[1])
    for k, row in enumerate(weights):
        size = np.abs(row)
        if size.max(initial=0.0) > 0:
            sign[k] = np.sign(row[np.argmax(size >= 0.999 * size.max())])
    return sign


def truncation(
    T: Array, B: Array, C: Array, factors: HankelFactors, order: int, *, orthogonal: bool
) -> tuple[Array, Array]:
    """Return (W, V) with W'V = I that project a model on its `order` most significant balanced states.

    V = L Z1 S1^-1/2, W = R'U1 S1^-1/2 gives balanced coordinates [1]_; with `orthogonal` their column spaces are
    spanned by orthonormal bases first, which is better conditioned and not balanced [2]_. Signs: the first large entry
    of each row of W'B (of each column of C V, where that row is zero) is positive.

    Parameters
    ----------
    T, B, C : arrays
        The model in the coordinates of the factors.
    factors : HankelFactors
    order : int
        At most the number of values well above zero.
    orthogonal : bool

    Returns
    -------
    W, V : (n, order) arrays

    References
    ----------
    .. [1] Tombs & Postlethwaite 1987, as in `hankel_factors`.
    .. [2] A. Varga, Balancing-free square-root algorithm for computing singular perturbation approximations, Proc. 30th
           IEEE CDC (1991) 1062-1065.
    """
    root = np.sqrt(factors.values[:order])
    V = factors.controllability @ factors.right[:, :order]
    W = factors.observability.T @ factors.left[:, :order]
    if orthogonal and order:
        V, _ = np.linalg.qr(V)
        W, _ = np.linalg.qr(W)
        W = np.linalg.solve(W.T @ V, W.T).T
    else:
        V, W = V / root, W / root
    rows, columns = W.T @ B, (C @ V).T
    # a row of W'B that is rounding noise says nothing about the sign
    quiet = np.linalg.norm(rows, axis=1) <= 1e-8 * np.linalg.norm(columns, axis=1)
    sign = np.where(quiet, _signed(V, columns), _signed(V, rows))
    return W * sign, V * sign
