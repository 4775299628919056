"""Finite poles and zeros of state models in double arithmetic, after every unit has been taken out in powers of two."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from realize.kernels.response import balancing_scale

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
#: Row exchanges and reflections: (first row, exchanged with, vector of the reflection or None).
Steps = list[tuple[int, int, Array | None]]

EPS = float(np.finfo(float).eps)
#: Largest shift that still says something to a double.
_FAR = 3000
#: A - B D^-1 C is formed where the second term is not larger than the first by more: one digit at most is lost.
HARMLESS = 10.0


class NormalRank(ValueError):
    """The determinant of the system pencil is zero for every s."""


def _top(*matrices: Array) -> int:
    """Return e with 2^(e-1) <= largest entry < 2^e, 0 without any."""
    largest = max((float(np.max(np.abs(matrix), initial=0.0)) for matrix in matrices), default=0.0)
    return math.frexp(largest)[1] if largest > 0 else 0


def components(pattern: NDArray[np.bool_]) -> list[NDArray[np.int64]]:
    """Return the strongly connected components of a pattern: the diagonal blocks of its block triangular form."""
    n = pattern.shape[0]
    if n == 0:
        return []
    if n <= 48:
        reach = pattern | np.eye(n, dtype=bool)
        for _ in range(max(1, math.ceil(math.log2(n)))):
            reach = (reach.astype(np.float32) @ reach.astype(np.float32)) > 0
        label = np.argmax(reach & reach.T, axis=1)
    else:
        from scipy.sparse import csr_array
        from scipy.sparse.csgraph import connected_components

        label = connected_components(csr_array(pattern), directed=True, connection="strong")[1]
    return [np.flatnonzero(label == k) for k in np.unique(label)]


def connected_states(A: Array, b: Array, c: Array) -> NDArray[np.int64]:
    """Return the states on some path from the input to the output: all others are hidden by zero entries alone.

    Parameters
    ----------
    A : (n, n) array
    b, c : (n,) arrays
    """

    def reached(pattern: NDArray[np.bool_], start: NDArray[np.bool_]) -> NDArray[np.bool_]:
        seen, front = start.copy(), start
        while front.any():
            front = pattern[:, front].any(axis=1) & ~seen
            seen |= front
        return seen

    pattern = A != 0
    return np.flatnonzero(reached(pattern, b != 0) & reached(pattern.T, c != 0))


def eigenvalues(A: Array) -> ComplexArray:
    """Return the eigenvalues of a real matrix, block by block of its block triangular form, balanced by powers of two.

    Blocks coupled in one direction only, as in a cascade, do not disturb each other: repeated poles stay together.
    Conjugate pairs are equal to the last bit.
    """
    if A.shape[0] == 0:
        return np.zeros(0, dtype=complex)
    parts = []
    for members in components(A != 0):
        block = A[np.ix_(members, members)]
        if members.size == 1:
            parts.append(block[0].astype(complex))
            continue
        time = _top(block)
        block = np.ldexp(block, -time)
        scale = balancing_scale(np.abs(block))
        even = block / scale[:, None] * scale
        if not np.all(np.isfinite(even)) or np.any((even == 0) != (block == 0)):
            even = block
        values = np.linalg.eigvals(even).astype(complex)
        parts.append(np.ldexp(values.real, time) + 1j * np.ldexp(values.imag, time))
    return paired(np.concatenate(parts))


def paired(values: ComplexArray) -> ComplexArray:
    """Return a list closed under conjugation, pairs side by side: each pair is given by its upper member."""
    upper = values[values.imag > 0]
    pairs = np.stack([upper, upper.conj()], axis=1).reshape(-1)
    return np.concatenate([pairs, values[values.imag == 0].real.astype(complex)])


def _compress(matrix: Array, tolerance: float) -> tuple[Steps, Array]:
    """Return the row operations that bring a matrix to [R; 0], R of full row rank, and R's rows with the rest zero.

    Householder reflections with the largest column first; a column with one entry needs an exchange only, so that
    structural zeros survive.
    """
    work = np.array(matrix, dtype=float)
    steps: Steps = []
    for k in range(min(work.shape)):
        norms = np.linalg.norm(work[k:], axis=0)
        j = int(np.argmax(norms))
        if not norms[j] > tolerance:
            break
        i = k + int(np.argmax(np.abs(work[k:, j])))
        vector = None
        work[[k, i]] = work[[i, k]]
        if np.any(work[k + 1 :, j]):
            vector = work[k:, j].copy()
            vector[0] += math.copysign(float(norms[j]), vector[0])
            vector /= np.linalg.norm(vector)
        steps.append((k, i, vector))
        if vector is not None:
            work[k:] -= 2 * np.outer(vector, vector @ work[k:])
            work[k + 1 :, j] = 0.0
    work[len(steps) :] = 0.0
    return steps, work


def _apply(steps: Steps, matrix: Array) -> None:
    """Apply row operations in place."""
    for k, i, vector in steps:
        if i != k:
            matrix[[k, i]] = matrix[[i, k]]
        if vector is not None:
            matrix[k:] -= 2 * np.outer(vector, vector @ matrix[k:])


def _deflate(
    A: Array, B: Array, C: Array, D: Array, tolerance: float, ranks: list[int] | None = None
) -> tuple[Array, Array, Array, Array]:
    """Remove zeros at infinity until D has full row rank (Emami-Naeini & Van Dooren 1982, algorithm REDUCE).

    The rank of D at each step goes to the end of ``ranks``.
    """
    A, B, C = A.copy(), B.copy(), C.copy()
    ranks = [] if ranks is None else ranks
    while A.shape[0] and C.shape[0]:
        steps, D = _compress(D, tolerance)
        rank = len(steps)
        ranks.append(rank)
        _apply(steps, C)
        if rank == C.shape[0]:
            break
        steps, _ = _compress(C[rank:].T, tolerance)
        gone = len(steps)
        if gone == 0:
            return A, B, C[:rank], D[:rank]
        _apply(steps, A)
        _apply(steps, A.T)
        _apply(steps, B)
        _apply(steps, C.T)
        C = np.vstack([C[:rank, gone:], A[:gone, gone:]])
        D = np.vstack([D[:rank], B[:gone]])
        A, B = A[gone:, gone:], B[gone:]
    return A, B, C, D


def _drop_rows(D: Array, tolerance: float) -> Array:
    steps, work = _compress(D, tolerance)
    return work[: len(steps)]


def invariant_zeros(A: Array, B: Array, C: Array, D: Array) -> ComplexArray:
    """Return the finite s for which [A - sI, B; C, D] loses rank, hidden modes included.

    Zeros at infinity are deflated by orthogonal transforms that decide ranks at (n + m + p) eps of the norm of the
    system matrix, first from the rows, then from the columns [1]_; what is left has an invertible D and is an
    eigenvalue problem: A - B D^-1 C where that loses no digits, else by the QZ algorithm.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
    D : (p, m) array
        Scaled, so that small entries do matter less than large ones; see `scaled_system`.

    Returns
    -------
    (k,) complex array, closed under conjugation

    Raises
    ------
    NormalRank
        Square system whose determinant vanishes for every s.

    References
    ----------
    .. [1] A. Emami-Naeini, P. Van Dooren, Computation of zeros of linear multivariable systems, Automatica 18 (1982)
           415-430.
    """
    square = B.shape[1] == C.shape[0]
    size = float(np.sqrt(sum(np.sum(part * part) for part in (A, B, C, D))))
    tolerance = (A.shape[0] + B.shape[1] + C.shape[0]) * EPS * size
    rows = C.shape[0]
    A, B, C, D = _deflate(A, B, C, D, tolerance)
    if not A.shape[0]:
        D = _drop_rows(D, tolerance)
    if square and D.shape[0] < D.shape[1]:
        raise NormalRank(f"normal rank {D.shape[0]} instead of {rows}")
    if D.shape[0] < D.shape[1] and A.shape[0]:
        a, c, b, d = _deflate(A.T, C.T, B.T, D.T, tolerance)
        A, B, C, D = a.T, b.T, c.T, d.T
    return _of_invertible(A, B, C, D)


def infinite_structure(A: Array, B: Array, C: Array, D: Array) -> tuple[int, list[int]]:
    """Return the normal rank of the transfer matrix, and the orders of its zeros at infinity from the smallest.

    With sigma_k the rank of D after k steps of the deflation from the rows, sigma_k - sigma_(k-1) zeros at infinity
    have order k [1]_. Ranks are decided as in `invariant_zeros`; the system is scaled as there.

    References
    ----------
    .. [1] L. M. Silverman, Inversion of multivariable linear systems, IEEE Transactions on Automatic Control 14 (1969)
           270-276 (from memory).
    """
    size = float(np.sqrt(sum(np.sum(part * part) for part in (A, B, C, D))))
    tolerance = (A.shape[0] + B.shape[1] + C.shape[0]) * EPS * size
    ranks: list[int] = []
    D = _deflate(A, B, C, D, tolerance, ranks)[3]
    ranks.append(_drop_rows(D, tolerance).shape[0])
    return ranks[-1], [k for k in range(1, len(ranks)) for _ in range(ranks[k] - ranks[k - 1])]


def _of_invertible(A: Array, B: Array, C: Array, D: Array) -> ComplexArray:
    n, m = B.shape
    if n == 0:
        return np.zeros(0, dtype=complex)
    if m == 0:
        return eigenvalues(A)
    try:
        change = B @ np.linalg.solve(D, C)
    except np.linalg.LinAlgError:
        change = np.full((n, n), np.inf)
    if np.all(np.isfinite(change)) and np.linalg.norm(change) <= HARMLESS * np.linalg.norm(A):
        return eigenvalues(A - change)
    import scipy.linalg

    # [C D] Z = 0: the pencil [A B] Z - s [I 0] Z
    null = np.linalg.qr(np.hstack([C, D]).T, mode="complete")[0][:, D.shape[0] :]
    alpha, beta = scipy.linalg.eigvals(np.hstack([A, B]) @ null, null[:n], homogeneous_eigvals=True, check_finite=False)
    values = (alpha / np.where(beta == 0, 1.0, beta))[beta != 0]
    return paired(values[np.isfinite(values)])


def scaled_system(
    A: Array, B: Array, C: Array, D: Array, E: Array | None
) -> tuple[Array, Array, Array, Array, Array | None, int]:
    """Return the system in units of its own, powers of two taken out of states, inputs, outputs and time.

    States are balanced on the bordered matrix [A B; C D], one factor for all inputs and outputs; columns of B and
    rows of [C D] are then brought near one. Zeros and poles are 2^time times those of the scaled system.

    Returns
    -------
    A, B, C, D, E, time
    """
    n, m, p = A.shape[0], B.shape[1], C.shape[0]
    time = _top(A) - (1 if E is None else _top(E))
    A, down = np.ldexp(A, -time), 0
    if E is not None:
        down = _top(E)
        A, E = np.ldexp(A, -down), np.ldexp(E, -down)
    if n:
        pattern = np.zeros((n + 1, n + 1))
        pattern[:n, :n] = np.abs(A) if E is None else np.abs(A) + np.abs(E)
        pattern[:n, n] = np.ldexp(np.max(np.abs(B), axis=1, initial=0.0), -_top(B))
        pattern[n, :n] = np.ldexp(np.max(np.abs(C), axis=0, initial=0.0), -_top(C))
        exponent = np.frexp(balancing_scale(pattern))[1].astype(np.int64)[:n]
        between = exponent[None, :] - exponent[:, None]
        parts = [(A, between), (B, -exponent[:, None]), (C, exponent[None, :])]
        parts += [] if E is None else [(E, between)]
        moved = [np.ldexp(part, np.clip(shift, -3000, 3000)) for part, shift in parts]
        if all(
            np.all(np.isfinite(after)) and not np.any((after == 0) != (before == 0))
            for (before, _), after in zip(parts, moved, strict=True)
        ):
            A, B, C = moved[:3]
            E = moved[3] if E is not None else None
            more = 0 if E is not None else _top(A)
            A, time = np.ldexp(A, -more), time + more
    # the rows of A and B were divided by 2^(time + down): B takes its part of that together with D
    inputs = np.array([_top(B[:, j]) for j in range(m)], dtype=np.int64)
    outputs = np.array([_top(C[i]) for i in range(p)], dtype=np.int64)
    mantissa, exponent = np.frexp(D)
    height = np.where(mantissa != 0, exponent.astype(np.int64) + time + down - inputs - outputs[:, None], -_FAR)
    outputs += (more := np.maximum(height.max(axis=1, initial=0), 0))
    height = np.clip(height - more[:, None], -_FAR, 0)
    return A, np.ldexp(B, -inputs), np.ldexp(C, -outputs[:, None]), np.ldexp(mantissa, height), E, time


def without_descriptor(A: Array, B: Array, C: Array, D: Array, E: Array) -> tuple[Array, Array, Array, Array]:
    """Return a system with E = I and the same pencil: states without dynamics become inputs, their equations outputs.

    The rank of E is that of its singular values above n eps of the largest; a diagonal E keeps what is not zero.
    """
    n = A.shape[0]
    if not np.any(E - np.diag(np.diagonal(E))):
        sizes = np.diagonal(E)
        order = np.argsort(sizes == 0, kind="stable")
        rank = int(np.sum(sizes != 0))
        left, right = np.eye(n)[order] * np.where(sizes[order] < 0, -1.0, 1.0)[:, None], np.eye(n)[order]
        sizes = np.abs(sizes[order])
    else:
        u, sizes, right = np.linalg.svd(E)
        left = u.T
        rank = int(np.sum(sizes > n * EPS * sizes[0])) if sizes[0] > 0 else 0
    scale = np.ones(n)
    scale[:rank] = np.sqrt(sizes[:rank])
    a = left @ A @ right.T / scale[:, None] / scale
    b, c = left @ B / scale[:, None], C @ right.T / scale
    k = rank
    return (
        a[:k, :k],
        np.hstack([a[:k, k:], b[:k]]),
        np.vstack([a[k:, :k], c[:, :k]]),
        np.block([[a[k:, k:], b[k:]], [c[:, k:], D]]),
    )


def _moved(values: ComplexArray, time: int) -> ComplexArray:
    return np.ldexp(values.real, time) + 1j * np.ldexp(values.imag, time)


def at_origin(values: ComplexArray, matrix: Array) -> ComplexArray:
    """Return poles or zeros with the smallest put at the origin where a matrix is singular within n eps.

    Parameters
    ----------
    values : (k,) complex array
    matrix : (n, n) array
        A, or the system matrix [A B; C D]. Rows and columns are brought near one first, in powers of two, so that slow
        dynamics beside fast ones are not taken for an integrator.
    """
    if values.size == 0 or np.any(values == 0) or not np.all(np.isfinite(matrix)):
        return values
    work = np.array(matrix)
    for _ in range(4):
        for part in (work, work.T):
            size = np.max(np.abs(part), axis=1)
            part[:] = np.ldexp(part, -np.where(size > 0, np.frexp(size)[1], 0)[:, None])
    singular = np.linalg.svd(work, compute_uv=False)
    if singular[-1] > work.shape[0] * EPS * singular[0]:
        return values
    size = np.abs(values)
    return np.where(size == size.min(), 0.0, values)


def poles(A: Array, E: Array | None) -> ComplexArray:
    """Return the finite poles: eigenvalues of A, or of the pencil sE - A without those at infinity.

    Raises
    ------
    NormalRank
        det(sE - A) is zero for every s.
    """
    if E is None:
        return eigenvalues(A)
    n = A.shape[0]
    return zeros(A, np.zeros((n, 0)), np.zeros((0, n)), np.zeros((0, 0)), E)


def structure_at_infinity(A: Array, B: Array, C: Array, D: Array) -> tuple[int, list[int]]:
    """Return `infinite_structure` of a system in any units."""
    with np.errstate(all="ignore"):
        return infinite_structure(*scaled_system(A, B, C, D, None)[:4])


def zeros(A: Array, B: Array, C: Array, D: Array, E: Array | None = None) -> ComplexArray:
    """Return the finite zeros of a system in any units; see `invariant_zeros`.

    Raises
    ------
    NormalRank
        Square system whose determinant (one channel: the transfer function) vanishes for every s.
    """
    with np.errstate(all="ignore"):
        A, B, C, D, E, time = scaled_system(A, B, C, D, E)
        if E is not None:
            A, B, C, D = without_descriptor(A, B, C, D, E)
        return _moved(invariant_zeros(A, B, C, D), time)
