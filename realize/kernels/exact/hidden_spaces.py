"""What inputs do not reach and outputs do not see, as subspaces, from exact numbers.

Ranks of Krylov matrices modulo primes near 2^62 say how much is hidden; where something is, the subspaces follow from
an exact echelon form of as many Krylov vectors, which proves itself, and get an orthonormal basis in ball arithmetic,
rounded once.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from flint import arb, arb_mat, fmpz, fmpz_mat, nmod_mat
from numpy.typing import NDArray

from realize.kernels.exact.cost import BUDGET, affordable, rank_operations
from realize.kernels.exact.dense_balls import orthonormal
from realize.kernels.exact.numbers import near_ball, precision, prime

Array = NDArray[np.float64]
#: Bits more than the entries of a basis have, for a basis that is orthonormal to the last digit.
GUARD = 128


class HiddenSpaces(NamedTuple):
    """Orthonormal bases, in columns: n rows each.

    ``unreachable`` are left vectors w with w' A^k B = 0 for all k; ``unobservable`` right vectors v with C A^k v = 0;
    ``reachable_only`` those of them that lie in the reachable subspace.
    """

    unreachable: Array
    reachable_only: Array
    unobservable: Array


def exact_hidden_spaces(A: Array, B: Array, C: Array, budget: float = BUDGET) -> HiddenSpaces | None:
    """Return the hidden subspaces of a model on the doubles as they are; None where that is beyond the budget.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
    budget : float
        Predicted operations that the echelon forms may take.

    References
    ----------
    .. [1] R. E. Kalman, Mathematical description of linear dynamical systems, SIAM J. Control 1 (1963) 152-192 (from
           memory).
    """
    n = A.shape[0]
    a, b, c = (_integers(matrix) for matrix in (A, B, C))
    reach, see = _independent(a, b), _independent(a.transpose(), c.transpose())
    none = np.zeros((n, 0))
    if len(reach) == len(see) == n:
        return HiddenSpaces(none, none, none)
    if not affordable(2 * rank_operations(n, n * _bits(a)), budget):
        return None
    at, ct = a.transpose(), c.transpose()
    O = _krylov(at, ct, see)
    unreachable = None if len(reach) == n else _proved(a, b, _krylov(a, b, reach))
    unobservable = None if len(see) == n else _proved(at, ct, O)
    if (len(reach) < n and unreachable is None) or (len(see) < n and unobservable is None):
        return None  # both primes divide a minor
    # unobservable and orthogonal to what is not reached
    inside = unobservable
    if unreachable is not None and unobservable is not None:
        inside = _orthogonal(_beside(O, unreachable.transpose()))
    made = tuple(none if rows is None else _orthonormal(rows) for rows in (unreachable, inside, unobservable))
    return HiddenSpaces(*made)


def exact_unreachable(A: Array, B: Array, budget: float = BUDGET) -> Array | None:
    """Return an orthonormal basis (columns) of what inputs do not reach, as in `exact_hidden_spaces`."""
    n = A.shape[0]
    a, b = _integers(A), _integers(B)
    reach = _independent(a, b)
    if len(reach) == n:
        return np.zeros((n, 0))
    if not affordable(rank_operations(n, n * _bits(a)), budget):
        return None
    null = _proved(a, b, _krylov(a, b, reach))
    return None if null is None else _orthonormal(null)


def _bits(matrix: fmpz_mat) -> int:
    return max((int(x).bit_length() for x in matrix.entries()), default=0)


def _proved(a: fmpz_mat, b: fmpz_mat, K: fmpz_mat) -> fmpz_mat | None:
    """Return rows orthogonal to Krylov vectors, proved to be orthogonal to all of them; None where they are not."""
    null = _orthogonal(K)
    parts = [b, a * K] if K.ncols() else [b]
    return None if null is None or any(any((null * part).entries()) for part in parts) else null


def _integers(matrix: Array) -> fmpz_mat:
    """Return a matrix of doubles times the power of two that makes all of them integers."""
    ratios = [x.as_integer_ratio() for x in matrix.ravel().tolist()]
    common = max((q for _, q in ratios), default=1)
    return fmpz_mat(matrix.shape[0], matrix.shape[1], [p * (common // q) for p, q in ratios])


def _independent(a: fmpz_mat, b: fmpz_mat) -> list[int]:
    """Return which columns of [b, a b, a^2 b, ...] are independent, modulo the better of two primes."""
    n, m = b.nrows(), b.ncols()
    best: list[int] = []
    for k in range(2):
        q = prime(k)
        step, v = nmod_mat(a, q), nmod_mat(b, q)
        blocks = []
        for _ in range(n):
            blocks.append(v.tolist())
            v = step * v
        flat = [int(x) for i in range(n) for block in blocks for x in block[i]]
        echelon, rank = nmod_mat(n, n * m, flat, q).rref()
        rows = echelon.tolist()[:rank]
        pivots: list[int] = []
        at = 0
        for row in rows:
            while not int(row[at]):
                at += 1
            pivots.append(at)
        best = max(best, pivots, key=len)
        if len(best) == n:
            break
    return best


def _krylov(a: fmpz_mat, b: fmpz_mat, chosen: list[int]) -> fmpz_mat:
    n, m = b.nrows(), b.ncols()
    columns, power, v = [], 0, b
    for index in chosen:
        while power < index // m:
            v, power = a * v, power + 1
        columns.append([v[i, index % m] for i in range(n)])
    return fmpz_mat(n, len(columns), [column[i] for i in range(n) for column in columns])


def _beside(first: fmpz_mat, second: fmpz_mat) -> fmpz_mat:
    rows = [x + y for x, y in zip(first.tolist(), second.tolist(), strict=True)]
    return fmpz_mat(first.nrows(), first.ncols() + second.ncols(), [x for row in rows for x in row])


def _orthogonal(columns: fmpz_mat) -> fmpz_mat | None:
    """Return integer rows that span what is orthogonal to the columns; None where there is nothing."""
    n = columns.nrows()
    if not columns.ncols():
        return fmpz_mat(n, n, [int(i == j) for i in range(n) for j in range(n)])
    echelon, den, rank = columns.transpose().rref()
    if rank == n:
        return None
    rows = echelon.tolist()[:rank]
    pivots = [next(j for j, x in enumerate(row) if x) for row in rows]
    free = [j for j in range(n) if j not in set(pivots)]
    entries: list[Any] = []
    for j in free:
        vector = [fmpz(0)] * n
        vector[j] = fmpz(den)
        for row, pivot in zip(rows, pivots, strict=True):
            vector[pivot] = -row[j]
        common = fmpz(0)
        for x in vector:
            common = common.gcd(x)
        entries += [x // common for x in vector]
    return fmpz_mat(len(free), n, entries)


def _orthonormal(rows: fmpz_mat) -> Array:
    k, n = rows.nrows(), rows.ncols()
    with precision(GUARD + 4 * _bits(rows)):
        basis = orthonormal(arb_mat([[arb(rows[i, j]) for i in range(k)] for j in range(n)]))
        return np.array([[near_ball(x) for x in line] for line in basis.tolist()]).reshape(n, k)
