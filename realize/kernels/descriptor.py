"""Finite and infinite part of a descriptor model in doubles: orthogonal deflation of the infinite eigenvalues.

One step: the rows of E are compressed to full row rank by an orthogonal matrix, then the columns of A in the rows where
E is zero. What stands there is square and invertible, since the pencil is regular; it is set apart, and the rest goes
on until its E is invertible (the staircase of Van Dooren). The two parts are decoupled by a generalised Sylvester
equation, whose solution is reached after as many steps as the index, since the infinite part is nilpotent.

Source: P. Van Dooren, "The computation of Kronecker's canonical form of a singular pencil", Linear Algebra Appl. 27,
1979; P. Misra, P. Van Dooren, A. Varga, "Computation of structural invariants of generalized state-space systems",
Automatica 30, 1994 (both from memory).
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

#: Ratio of singular values above and below a cut from which the cut is clear.
CLEAR = 1e3


class Parts(NamedTuple):
    """The finite part E dx/dt = A x + B u, y = C x, and the polynomial part P_0 + P_1 s + ... ([power][p][m]).

    ``gap`` is the smallest ratio of the last singular value that was counted to the first that was not, over all rank
    decisions; ``rounding`` the size ([power][p][m]) that rounding can give an entry of the polynomial part.
    """

    E: Array
    A: Array
    B: Array
    C: Array
    polynomial: Array
    rounding: Array
    gap: float
    deflations: tuple[int, ...]


class RankDoubt(ValueError):
    """Doubles do not show the rank that was asked for, or none at all."""


def _scaled(E: Array, A: Array) -> tuple[Array, Array, NDArray[np.int64], NDArray[np.int64], int]:
    """Return E, A with rows, columns and time scaled by powers of two, and the exponents (rows, columns, time)."""
    top_e, top_a = np.abs(E).max(initial=0.0), np.abs(A).max(initial=0.0)
    time = int(np.frexp(top_a)[1] - np.frexp(top_e)[1]) if top_e > 0 and top_a > 0 else 0
    half = time // 2
    e, a = np.ldexp(np.ldexp(E, half), time - half), np.array(A)
    n = E.shape[0]
    rows, columns = np.zeros(n, dtype=np.int64), np.zeros(n, dtype=np.int64)
    for _ in range(10):
        pattern = np.maximum(np.abs(e), np.abs(a))
        moved = False
        for axis, total in ((1, rows), (0, columns)):
            top = pattern.max(axis=axis)
            shift = np.where(top > 0, -np.frexp(top)[1], 0).astype(np.int64)
            if np.any(np.abs(shift) > 0):
                moved = True
            grown = shift[:, None] if axis == 1 else shift[None, :]
            e, a, pattern = np.ldexp(e, grown), np.ldexp(a, grown), np.ldexp(pattern, grown)
            total += shift
        if not moved:
            break
    return e, a, rows, columns, time


def _decided(values: Array, wanted: int | None, size: int) -> tuple[int, float]:
    """Return the rank and the gap at it.

    Singular values above n eps of the largest count always; of the cuts below, the one with the widest gap is taken.
    """
    if values.size == 0 or values[0] == 0:
        return 0, np.inf
    eps = np.finfo(float).eps
    # what is smaller than a hundredth of a rounding of the largest is as good as zero
    padded = np.maximum(np.append(values, 0.0), 0.01 * eps * values[0])
    ratios = padded[:-1] / padded[1:]
    if wanted is not None:
        here = float(ratios[wanted - 1]) if 0 < wanted < values.size else np.inf
        if wanted and values[wanted - 1] <= size * eps * values[0] and here < CLEAR:
            raise RankDoubt(
                f"a rank of {wanted} rests on a singular value of {values[wanted - 1] / values[0]:.1e} of the largest, "
                "which is rounding"
            )
        return wanted, here
    first = int(np.sum(values > size * eps * values[0]))
    if first == values.size:
        return first, np.inf
    rank = first + int(np.argmax(ratios[first - 1 :])) if first else int(np.argmax(ratios)) + 1
    return rank, float(ratios[rank - 1]) if rank < values.size else np.inf


def split_infinite(E: Array, A: Array, B: Array, C: Array, deflations: Sequence[int] | None = None) -> Parts:
    """Return finite and polynomial part of C (sE - A)^-1 B for a regular pencil.

    Parameters
    ----------
    E, A : (n, n) arrays; B : (n, m); C : (p, n)
    deflations : sequence of int, optional
        How many infinite eigenvalues each step sets apart, where that is known exactly; else the ranks are decided by
        singular values above n eps of the largest.

    Raises
    ------
    RankDoubt
        If the singular values do not show the ranks that are known, or a block that must be invertible is not.
    """
    import scipy.linalg

    n, p, m = A.shape[0], C.shape[0], B.shape[1]
    e, a, rows, columns, time = _scaled(E, A)
    b, c = np.ldexp(B, rows[:, None]), np.ldexp(C, columns[None, :])
    size, gap, found = n, np.inf, []
    step = 0
    eps = np.finfo(float).eps
    while size:
        block = e[:size, :size]
        U, values, _ = scipy.linalg.svd(block)
        wanted = None
        if deflations is not None:
            wanted = size - (deflations[step] if step < len(deflations) else 0)
        rank, here = _decided(values, wanted, n)
        if rank == size:
            break
        gap = min(gap, here)
        # rows: those of full rank first
        e[:size] = U.T @ e[:size]
        a[:size] = U.T @ a[:size]
        b[:size] = U.T @ b[:size]
        e[rank:size, :size] = 0.0
        # columns: the last ones carry the rows where E is zero
        lower = a[rank:size, :size]
        _, sigma, Vt = scipy.linalg.svd(lower)
        if sigma[-1] <= n * eps * sigma[0]:
            raise RankDoubt("the pencil is singular within the rounding of doubles")
        V = np.vstack([Vt[size - rank :], Vt[: size - rank]]).T
        for matrix in (e, a, c):
            matrix[:, :size] = matrix[:, :size] @ V
        a[rank:size, :rank] = 0.0
        found.append(size - rank)
        size = rank
        step += 1
    f, i = slice(0, size), slice(size, n)
    width = max(len(found), 1)
    polynomial, rounding = np.zeros((width, p, m)), np.zeros((width, p, m))
    E_f, A_f, B_f, C_f = e[f, f], a[f, f], b[f], c[:, f]
    if size < n:
        A_i = a[i, i]
        N, b_i = np.linalg.solve(A_i, e[i, i]), np.linalg.solve(A_i, b[i])
        C_i = c[:, i]
        if size:
            factors = scipy.linalg.lu_factor(E_f)
            # R with E_f R + L E_i + E_x = 0, A_f R + L A_i + A_x = 0
            R = np.zeros((size, n - size))
            for _ in range(len(found) + 1):
                R = scipy.linalg.lu_solve(factors, (a[f, i] + A_f @ R) @ N - e[f, i])
            B_f = B_f - (a[f, i] + A_f @ R) @ b_i
            C_i = C_i + C_f @ R
        term, bound = b_i, np.abs(b_i)
        for k in range(width):
            polynomial[k] = -C_i @ term
            rounding[k] = n * eps * (np.abs(C_i) @ bound)
            term, bound = N @ term, np.abs(N) @ bound
        # sigma = s 2^-time
        for k in range(width):
            polynomial[k] = np.ldexp(polynomial[k], -time * k)
            rounding[k] = np.ldexp(rounding[k], -time * k)
    return Parts(np.ldexp(E_f, -time), A_f, B_f, C_f, polynomial, rounding, float(gap), tuple(found))
