"""Controllability and observability indices, and relative degrees, exactly on the numbers as given.

Ranks are taken modulo one prime near 2^62: a rank modulo a prime is never too large, and too
small only if the prime divides every largest minor that is not zero, which at most b / 61 of about 10^17 primes do for
minors of b bits.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from flint import nmod_mat

from realize.kernels.exact.integer_scaling import integer_states
from realize.kernels.exact.pencils import prime

Ratios = Sequence[Sequence[Any]]


def krylov_indices(A: Ratios, B: Ratios) -> list[int]:
    """Return how many of B_j, A B_j, A^2 B_j, ... are independent of all before them in the order B, A B, A^2 B, ...

    The controllability indices, one an input, in the order of the inputs; their sum is the dimension of what the inputs
    reach. Of (A', C'): the observability indices.

    Parameters
    ----------
    A : (n, n), B : (n, m) nested lists of integer ratios
    """
    n, m = len(A), len(B[0]) if B else 0
    if n == 0 or m == 0:
        return [0] * m
    integers = integer_states(A, B, None)
    q = prime(0)
    a, v = nmod_mat(integers.A, q), nmod_mat(integers.B, q)
    return _indices(lambda: v, lambda block: a * block, n, m, q)


def _indices(first: Any, following: Any, n: int, m: int, q: int) -> list[int]:
    """Take independent columns block by block; all that is known of earlier ones is their reduced row echelon form."""
    counts = [0] * m
    block = first()
    kept: list[list[Any]] = []
    live = list(range(m))
    while live and len(kept) < n:
        columns = [list(column) for column in zip(*block.tolist(), strict=True)]
        table = kept + [columns[j] for j in live]
        pivots = _pivots(table, n, q)
        held = set(pivots)
        fresh = [j for k, j in enumerate(live) if len(kept) + k in held]
        kept = [table[k] for k in pivots]
        for j in fresh:
            counts[j] += 1
        live = fresh
        block = following(block)
    return counts


def _pivots(columns: list[list[Any]], n: int, q: int) -> list[int]:
    """Return the indices of the columns that are independent of those before them."""
    table = nmod_mat(n, len(columns), [int(column[i]) for i in range(n) for column in columns], q)
    reduced, rank = table.rref()
    rows = reduced.tolist()
    found = []
    j = 0
    for i in range(rank):
        while not int(rows[i][j]):
            j += 1
        found.append(j)
        j += 1
    return found


def markov_indices(sequence: list[list[int]], count: int, p: int, m: int, q: int) -> tuple[list[int], list[int]]:
    """Return controllability and observability indices of a minimal realization of Markov parameters modulo a prime.

    The independent columns of the block Hankel matrix in their order, and its independent rows.

    Parameters
    ----------
    sequence : 2 count - 1 lists of p m residues
    count : int
        At least the degree of the least common denominator.
    """
    table = [
        [sequence[i + j][a * m + b] for j in range(count) for b in range(m)] for i in range(count) for a in range(p)
    ]
    found = []
    for width, rows in ((m, table), (p, [list(row) for row in zip(*table, strict=True)])):
        columns = [list(column) for column in zip(*rows, strict=True)]
        counts = [0] * width
        for pivot in _pivots(columns, len(rows), q):
            counts[pivot % width] += 1
        found.append(counts)
    return found[0], found[1]


def state_relative_degrees(A: Ratios, B: Ratios, C: Ratios, D: Ratios) -> list[list[int | None]]:
    """Return the relative degree of each channel of a state model: the first Markov parameter that is not zero.

    None for a channel that is identically zero, as far as one prime tells.
    """
    n, p, m = len(A), len(D), len(D[0]) if D else 0
    found: list[list[int | None]] = [[0 if _nonzero(D[i][j]) else None for j in range(m)] for i in range(p)]
    if n == 0 or p == 0 or m == 0:
        return found
    integers = integer_states(A, B, C)
    q = prime(0)
    a, v, c = (nmod_mat(matrix, q) for matrix in (integers.A, integers.B, integers.C))
    for k in range(1, n + 1):
        if all(entry is not None for row in found for entry in row):
            break
        values = (c * v).tolist()
        for i in range(p):
            for j in range(m):
                if found[i][j] is None and int(values[i][j]):
                    found[i][j] = k
        v = a * v
    return found


def _nonzero(entry: Any) -> bool:
    return bool(entry[0]) if isinstance(entry, tuple) else bool(entry)


__all__ = ["krylov_indices", "markov_indices", "state_relative_degrees"]
