"""Orthogonal staircase and block Hessenberg forms: what inputs reach, in steps, with each rank decision on record."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import scipy.linalg
import scipy.linalg.blas
import scipy.linalg.lapack
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Staircase:
    """A reachability staircase: x = Q z with A = Q'A Q, B = Q'B.

    Attributes
    ----------
    A : (n, n) array
        Block Hessenberg in the reachable part: exact zeros below the blocks, and in all that leads from the reachable
        to the other states, which stand last.
    B : (n, m) array
        Zero below the first ``sizes[0]`` rows.
    Q : (n, n) array, orthogonal
    sizes : tuple of int
        Sizes of the steps, not increasing; their sum is the number of reachable states.
    kept, dropped : tuples of arrays
        For each rank decision, the singular values above and below the threshold, divided by it, decreasing. There is
        one decision more than steps where states remain unreachable.
    """

    A: Array
    B: Array
    Q: Array
    sizes: tuple[int, ...]
    kept: tuple[Array, ...]
    dropped: tuple[Array, ...]

    @property
    def order(self) -> int:
        """Number of reachable states."""
        return sum(self.sizes)

    @property
    def smallest_kept(self) -> float:
        """The smallest singular value that was kept, over its threshold; infinite if none was."""
        return min((float(values[-1]) for values in self.kept if values.size), default=np.inf)

    @property
    def largest_dropped(self) -> float:
        """The largest singular value that was dropped, over its threshold; 0 if none was."""
        return max((float(values[0]) for values in self.dropped if values.size), default=0.0)


class _Rotations:
    """Matrices A and Q that blocks of reflections are applied to, column by column in memory."""

    def __init__(self, A: Array) -> None:
        self.A = np.array(A, dtype=float, order="F")
        self.Q = np.eye(A.shape[0], order="F")

    def reflect(self, V: Array, T: Array, row: int, column: int) -> None:
        """Apply H = I - V T V' on the states from `row` on: A becomes H'A H, Q becomes Q H.

        The rows from `row` on are zero left of `column`, and left alone there.
        """
        n = self.A.shape[0]
        full = np.zeros((n, V.shape[1]), order="F")
        full[row:] = V
        gemm = scipy.linalg.blas.dgemm
        right = self.A[:, column:]
        W = gemm(1.0, T, gemm(1.0, full, right, trans_a=1), trans_a=1)
        self.A[:, column:] = gemm(-1.0, full, W, 1.0, right, overwrite_c=1)
        V = np.asfortranarray(V)
        for name in ("A", "Q"):
            part = getattr(self, name)[:, row:]
            W = gemm(1.0, gemm(1.0, part, V), T)
            getattr(self, name)[:, row:] = gemm(-1.0, W, V, 1.0, part, trans_b=1, overwrite_c=1)

    def rotate(self, U: Array, row: int) -> None:
        """Apply an orthogonal U on the states from `row` on."""
        part = slice(row, row + U.shape[0])
        self.A[part] = U.T @ self.A[part]
        self.A[:, part] = self.A[:, part] @ U
        self.Q[:, part] = self.Q[:, part] @ U


def _reflections(packed: Array, tau: Array) -> tuple[Array, Array]:
    """Return V and T with the product of reflections I - V T V' [1]_, those with tau = 0 left out.

    T^-1 is the strict upper part of V'V with 1/tau on the diagonal.

    .. [1] R. Schreiber, C. Van Loan, A storage-efficient WY representation for products of Householder transformations,
           SIAM J. Sci. Stat. Comput. 10 (1989) 53-57; here with the inverse of T, from memory.
    """
    k = tau.size
    V = np.tril(packed[:, :k], -1)
    V[np.arange(k), np.arange(k)] = 1.0
    V, tau = V[:, tau != 0], tau[tau != 0]
    if not tau.size:
        return V, np.zeros((0, 0))
    inverse = np.triu(V.T @ V, 1) + np.diag(1.0 / tau)
    return V, scipy.linalg.solve_triangular(inverse, np.eye(tau.size), check_finite=False)


def _single_input(A: Array, B: Array) -> tuple[Array, Array, Array]:
    """Return A, B, Q with B on the first unit vector and A upper Hessenberg, by LAPACK's blocked reduction."""
    n = A.shape[0]
    packed, tau, _, _ = scipy.linalg.lapack.dgeqrf(B)
    work = _Rotations(A)
    V, T = _reflections(packed, tau)
    if T.size:
        work.reflect(V, T, 0, 0)
    b = np.zeros((n, 1))
    b[0] = packed[0]
    size = int(scipy.linalg.lapack.dgehrd_lwork(n, 0, n - 1)[0])
    packed, tau, _ = scipy.linalg.lapack.dgehrd(work.A, lo=0, hi=n - 1, lwork=size)
    H = np.triu(packed, -1)
    size = int(scipy.linalg.lapack.dorghr_lwork(n, 0, n - 1)[0])
    inner, _ = scipy.linalg.lapack.dorghr(packed, tau, lo=0, hi=n - 1, lwork=size)
    return H, b, work.Q @ inner


def reachability_staircase(A: Array, B: Array, thresholds: tuple[float, float]) -> Staircase:
    """Return the reachability staircase of (A, B) by orthogonal transformations [1]_ [2]_.

    Each step finds what the states of the step before reach: a QR factorization with column pivoting of the block
    below them, the singular values of its triangle, and reflections applied in blocks. One input: a Hessenberg
    reduction whose subdiagonal is read.

    Parameters
    ----------
    A : (n, n) array
        Scaled.
    B : (n, m) array
        Scaled, column by column.
    thresholds : (float, float)
        Singular values of B, and of blocks of A, up to these count as zero. What is dropped is set to zero, which
        changes B and A by no more in norm at each decision.

    Returns
    -------
    Staircase

    References
    ----------
    .. [1] A. Varga, Numerically stable algorithm for standard controllability form determination, Electronics Letters
           17 (1981) 74-75 (from memory).
    .. [2] P. Van Dooren, The generalized eigenstructure problem in linear system theory, IEEE Trans. Autom. Control 26
           (1981) 111-129 (from memory).
    """
    n, m = B.shape
    if n == 0:
        return Staircase(A.copy(), B.copy(), np.zeros((0, 0)), (), (), ())
    if m == 1 and n > 1:
        return _read_hessenberg(*_single_input(A, B), thresholds)
    work = _Rotations(A)
    start, row = 0, 0
    block, new = np.array(B, dtype=float), np.zeros((n, m))
    sizes: list[int] = []
    kept: list[Array] = []
    dropped: list[Array] = []
    while row < n:
        limit = thresholds[bool(sizes)]
        packed, pivots, tau, _, _ = scipy.linalg.lapack.dgeqp3(block)
        triangle = np.triu(packed[: tau.size])
        U, values, Wt = scipy.linalg.svd(triangle, check_finite=False)
        rank = int(np.sum(values > limit))
        kept.append(_over(values[:rank], limit))
        dropped.append(_over(values[rank:], limit))
        order = np.argsort(pivots)
        if rank:
            V, T = _reflections(packed, tau)
            if T.size:
                work.reflect(V, T, row, start)
            if rank < values.size:
                # the triangle's own left singular vectors: what is dropped are its smallest singular values
                work.rotate(U, row)
                triangle = values[:rank, None] * Wt[:rank]
        own = np.zeros((n - row, block.shape[1]))
        own[:rank] = triangle[:rank][:, order]
        if sizes:
            work.A[row:, start:row] = own
        else:
            new = own
        if not rank:
            break
        sizes.append(rank)
        start, row = row, row + rank
        block = work.A[row:, start:row]
    return Staircase(
        np.ascontiguousarray(work.A), new, np.ascontiguousarray(work.Q), tuple(sizes), tuple(kept), tuple(dropped)
    )


def decided_staircase(A: Array, B: Array, thresholds: tuple[float, float], band: float, gap: float) -> Staircase:
    """Return the reachability staircase, doubtful decisions taken by the gap.

    Singular values above a threshold by less than a factor `band` may be rounding as well as not. They are dropped if
    the smallest one beyond the band is larger by `gap` times the band; otherwise the thresholds alone decide.

    Parameters
    ----------
    A, B, thresholds
        As in `reachability_staircase`.
    band, gap : float

    Returns
    -------
    Staircase
        ``kept`` and ``dropped`` over the thresholds given, so that a value above 1 among those dropped, or below the
        band among those kept, shows that the decision was doubtful.
    """
    strict = reachability_staircase(A, B, thresholds)
    if strict.smallest_kept >= band:
        return strict
    wide = reachability_staircase(A, B, (band * thresholds[0], band * thresholds[1]))
    if wide.smallest_kept < gap or wide.order == 0:
        return strict
    kept, dropped = (tuple(band * values for values in part) for part in (wide.kept, wide.dropped))
    return Staircase(wide.A, wide.B, wide.Q, wide.sizes, kept, dropped)


def _over(values: Array, limit: float) -> Array:
    """Return values over a threshold; over one of zero they are infinite, or 0 where they are zero too."""
    if limit > 0:
        return values / limit
    return np.where(values > 0, np.inf, 0.0)


def _read_hessenberg(H: Array, b: Array, Q: Array, thresholds: tuple[float, float]) -> Staircase:
    n = H.shape[0]
    steps = np.abs(np.concatenate([b[0], np.diagonal(H, -1)]))
    limits = np.full(n, thresholds[1])
    limits[0] = thresholds[0]
    below = np.flatnonzero(steps <= limits)
    order = int(below[0]) if below.size else n
    kept = [_over(steps[k : k + 1], float(limits[k])) for k in range(order)]
    dropped = [np.zeros(0)] * order
    if order < n:
        kept.append(np.zeros(0))
        dropped.append(_over(steps[order : order + 1], float(limits[order])))
        if order:
            H[order, order - 1] = 0.0
        else:
            b[0] = 0.0
    return Staircase(H, b, Q, (1,) * order, tuple(kept), tuple(dropped))


def controller_hessenberg(A: Array, B: Array) -> tuple[Array, Array, Array]:
    """Return A, B, Q with B upper triangular on top of zeros and A with as many subdiagonals as there are inputs.

    No rank is decided; x = Q z with orthogonal Q [1]_.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array

    Returns
    -------
    A, B, Q : arrays
        Exact zeros below the subdiagonals of A and below the diagonal of B.

    References
    ----------
    .. [1] P. Van Dooren, M. Verhaegen, On the use of unitary state-space transformations, in Linear Algebra and Its
           Role in Systems Theory, AMS Contemp. Math. 47 (1985) 447-463 (from memory).
    """
    n, m = B.shape
    if n < 2:
        return A.copy(), B.copy(), np.eye(n)
    if m == 1:
        return _single_input(A, B)
    work = _Rotations(A)
    row = 0
    new = np.zeros((n, m))
    while row < n - 1:
        start = max(row - m, 0)
        block = work.A[row:, start:row] if row else B
        packed, tau, _, _ = scipy.linalg.lapack.dgeqrf(block)
        V, T = _reflections(packed, tau)
        if T.size:
            work.reflect(V, T, row, start)
        own = np.zeros((n - row, block.shape[1]))
        own[: tau.size] = np.triu(packed[: tau.size])
        if row:
            work.A[row:, start:row] = own
        else:
            new = own
        row += m
    return np.ascontiguousarray(work.A), new, np.ascontiguousarray(work.Q)


def controllability_indices(sizes: Sequence[int], inputs: int) -> tuple[int, ...]:
    """Return the controllability (Kronecker) indices of staircase steps, decreasing, one for each input.

    Index i counts the steps of size i or more; their sum is the number of reachable states [1]_.

    Parameters
    ----------
    sizes : sequence of int
        Sizes of the steps of a reachability staircase, not increasing.
    inputs : int

    References
    ----------
    .. [1] D. G. Luenberger, Canonical forms for linear multivariable systems, IEEE Trans. Autom. Control 12 (1967)
           290-293 (from memory).
    """
    return tuple(sum(size > k for size in sizes) for k in range(inputs))


def observability_indices(sizes: Sequence[int], outputs: int) -> tuple[int, ...]:
    """Return the observability indices of the steps of the dual's staircase, decreasing, one for each output."""
    return controllability_indices(sizes, outputs)
