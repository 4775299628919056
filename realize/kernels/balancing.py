"""Balancing by square roots of the Gramians, with every unit taken out first in powers of two."""

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
from realize.kernels.response import balancing_scale

Array = NDArray[np.float64]

EPS = float(np.finfo(float).eps)
#: Up to this order the Hankel singular values come from one-sided Jacobi rotations, accurate far below the largest.
JACOBI_ORDER = 200
#: Binary digits that A must lose in size before its loops alone scale the states.
WORTH_IT = 3
#: Binary digits that couplings must stand above the loops before chains are scaled by themselves, and how often.
FAR, REPEATED = 40, 40
#: How many frequencies, those of the poles nearest to the axis, tell what rounding in A does to the response.
SENSITIVE_FREQUENCIES = 24


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
    least, most = (int(np.min(exponents)), int(np.max(exponents))) if np.size(exponents) else (0, 0)
    if least == most == 0:
        return np.array(matrix)
    if least >= -1000 and most <= 1000:
        # a product with a power of two rounds as ldexp does, and is many times as quick
        return np.asarray(matrix * np.ldexp(1.0, exponents), dtype=float)
    return np.ldexp(matrix, np.clip(exponents, -5000, 5000).astype(np.int64) if np.ndim(exponents) else exponents)


def _exponents(factors: Array) -> NDArray[np.int64]:
    return np.frexp(factors)[1].astype(np.int64) - 1


def _size(A: Array, states: NDArray[np.int64]) -> int:
    """Return the exponent of the largest entry of A with its states in units 2^states."""
    if not np.any(states):
        return _top(A) if np.any(A) else -5000
    mantissa, exponent = np.frexp(np.abs(A))
    return int(np.max((exponent + states[None, :] - states[:, None])[mantissa > 0], initial=-5000))


def _size_of_loops(A: Array) -> int:
    """Return an exponent that the largest entry of A has in any units of the states: that of its shortest loops."""
    root = np.sqrt(np.abs(A))
    return _top(root * root.T)


def _scale_of_loops(pattern: Array, n: int) -> NDArray[np.int64] | None:
    """Return exponents of states that are balanced by their loops alone; None where there is no loop of two states.

    What inputs reach and outputs see scales the states of a strongly connected part by one common factor: where it had
    a say inside, a chain between a large B and a small C could pull loops apart, with A far larger than its
    eigenvalues.

    Parameters
    ----------
    pattern : (N, N) array
        Sizes of the entries of [A B 0; 0 0 0; C 0 0].
    n : int
        Number of states.
    """
    from scipy.sparse.csgraph import connected_components

    count, label = connected_components(pattern[:n, :n] > 0, directed=True, connection="strong")
    if count == n:
        return None
    same = label[:, None] == label[None, :]
    inner = balancing_scale(np.where(same, pattern[:n, :n], 0.0))
    states = _exponents(inner)
    whole = np.concatenate([states, np.zeros(pattern.shape[0] - n, dtype=np.int64)])
    even = np.ldexp(pattern, whole[None, :] - whole[:, None])
    if not np.all(np.isfinite(even)):
        return None
    # the parts, then inputs and outputs, each as one
    parts = np.concatenate([label, count + np.arange(pattern.shape[0] - n)])
    outer = np.zeros((parts.max() + 1, parts.max() + 1))
    np.maximum.at(outer, (parts[:, None], parts[None, :]), even)
    return states + _exponents(balancing_scale(outer)[:count])[label]


def far_apart(A: Array) -> bool:
    """Say whether couplings that are part of no loop stand far above everything that is part of one."""
    return bool(np.any(A) and np.all(np.isfinite(A))) and _size_of_loops(A) + FAR < _top(A)


def _scale_of_chains(A: Array, B: Array, C: Array, states: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return exponents of states in whose units couplings that are part of no loop come near to the loops in size.

    The border counts in units of the loops, inputs and outputs are brought to size 1 again and again: each time a
    coupling gives a share of its size to them.
    """
    n, m, p = A.shape[0], B.shape[1], C.shape[0]
    time, size = _size_of_loops(A) - 1, _size(A, states)
    border = np.zeros((n + m + p, n + m + p))
    for _ in range(REPEATED):
        inner = _exponent_table(A, states[None, :] - states[:, None] - time)
        first, last = _exponent_table(B, -states[:, None]), _exponent_table(C, states[None, :])
        border[:n, :n] = np.exp2(np.clip(inner, -900, 900))
        border[:n, n : n + m] = np.exp2(np.clip(first - first.max(), -900, 0))
        border[n + m :, :n] = np.exp2(np.clip(last - last.max(), -900, 0))
        more = _exponents(balancing_scale(border)[:n])
        smaller = _size(A, states + more)
        if smaller >= size:
            break
        states, size = states + more, smaller
    return states


def _exponent_table(matrix: Array, more: NDArray[np.int64]) -> Array:
    """Return log2 of the sizes of the entries, rounded up, after a scaling; minus infinity for zeros."""
    mantissa, exponent = np.frexp(np.abs(matrix))
    return np.where(mantissa > 0, exponent + more, -np.inf)


def scale_model(A: Array, B: Array, C: Array, *, sampled: bool) -> Scaled:
    """Take units of time, inputs, outputs and states out of a model in powers of two.

    The states are balanced on the bordered matrix [A B; C 0], so that inputs and outputs count too; all inputs share
    one factor and all outputs another, because balanced truncation depends on the weights between them. Where that
    makes A larger by more than a factor of eight than balancing by its loops does, strongly connected parts are
    balanced by themselves first (a companion form with coefficients far from 1).

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
    # the states on their own first: units that are far off would hide what counts at inputs and outputs
    alone, A, B, C = _balanced_alone(A, B, C)
    states = np.zeros(n, dtype=np.int64)
    time = 0 if sampled else _top(A)
    inputs, outputs = _top(B), _top(C)
    with np.errstate(under="ignore"):
        if n:
            border = np.zeros((n + m + p, n + m + p))
            border[:n, :n], border[:n, n : n + m] = np.ldexp(A, -time), np.ldexp(B, -inputs)
            border[n + m :, :n] = np.ldexp(C, -outputs)
            # inputs have no row and outputs no column, so they are left alone
            pattern = np.abs(border)
            states = _exponents(balancing_scale(pattern)[:n])
            size = _size(A, states)
            # where loops of one or two states are about as large already nothing could be gained
            by_loops = _scale_of_loops(pattern, n) if _size_of_loops(A) - 1 + WORTH_IT < size else None
            if by_loops is not None and _size(A, by_loops) + WORTH_IT < size:
                states = by_loops
            elif _size_of_loops(A) + FAR < size:
                states = _scale_of_chains(A, B, C, states)
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
    return Scaled(A, B, C, states + alone, time, inputs, outputs)


def _balanced_alone(A: Array, B: Array, C: Array) -> tuple[NDArray[np.int64], Array, Array, Array]:
    """Return exponents of states that balance A by itself, and the model in them; zeros where numbers would be lost."""
    n = A.shape[0]
    nothing = np.zeros(n, dtype=np.int64)
    if n == 0 or not np.all(np.isfinite(A)):
        return nothing, A, B, C
    with np.errstate(under="ignore", over="ignore"):
        states = np.frexp(balancing_scale(np.ldexp(np.abs(A), -_top(A))))[1].astype(np.int64) - 1
        made = (
            _power(A, states[None, :] - states[:, None]),
            _power(B, np.broadcast_to(-states[:, None], B.shape)),
            _power(C, np.broadcast_to(states[None, :], C.shape)),
        )
    for before, after in zip((A, B, C), made, strict=True):
        if not np.all(np.isfinite(after)) or np.any((after == 0) != (before == 0)):
            return nothing, A, B, C
    return states, *made


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
