"""Structure of a pencil sE - A: regular or not, finite and infinite eigenvalues, index; exact polynomial parts.

With a point a that is no eigenvalue and X = (aE - A)^-1 E, the finite eigenvalues are the nonzero ones of X, and an
infinite elementary divisor of degree k is a Jordan block of X at zero of size k. So the ranks of X^0, X^1, X^2, ...
hold all counts.
"""

from __future__ import annotations

import random
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple

from flint import fmpq, fmpq_mat, nmod_mat

from realize.kernels.exact.numbers import prime
from realize.kernels.exact.pencils import SingularPencil

Ratios = Sequence[Sequence[Any]]
Rational = list[list[fmpq]]
#: Primes whose ranks are compared; the largest rank counts.
PRIMES = 2


@dataclass(frozen=True)
class Structure:
    """Counts of a regular pencil.

    ``ranks`` are those of X^0, X^1, ... until they stay; ``ranks[k - 1] - ranks[k]`` infinite elementary divisors have
    degree k or more.
    """

    ranks: tuple[int, ...]

    @property
    def size(self) -> int:
        """Number of states."""
        return self.ranks[0]

    @property
    def index(self) -> int:
        """Largest degree of an infinite elementary divisor; 0 for a nonsingular E."""
        return len(self.ranks) - 1

    @property
    def finite(self) -> int:
        """Number of finite eigenvalues: the degree of det(sE - A)."""
        return self.ranks[-1]

    @property
    def infinite(self) -> int:
        """Number of infinite eigenvalues, algebraic states included."""
        return self.size - self.finite

    @property
    def impulsive(self) -> int:
        """Rank of E less the finite eigenvalues: modes that answer with impulses, beyond index 1."""
        return self.ranks[min(1, self.index)] - self.finite

    @property
    def deflations(self) -> tuple[int, ...]:
        """Number of infinite elementary divisors of degree at least 1, 2, ..."""
        return tuple(a - b for a, b in zip(self.ranks, self.ranks[1:], strict=False))


def _residues(matrix: Ratios, q: int) -> list[list[int]]:
    inverses: dict[int, int] = {1: 1}

    def residue(entry: Any) -> int:
        p, below = int(entry[0]), int(entry[1])
        if below not in inverses:
            inverses[below] = pow(below, -1, q)
        return p % q * inverses[below] % q

    return [[residue(entry) if entry[0] else 0 for entry in row] for row in matrix]


def structure(A: Ratios, E: Ratios) -> Structure:
    """Return the counts of a pencil from ranks modulo two primes near 2^62, at random points.

    A rank modulo a prime is too small only if the prime divides every largest nonzero minor, or the point is an
    eigenvalue modulo the prime: of about 10^17 primes and 2^62 points at most a few thousand are such.

    Parameters
    ----------
    A, E : n x n, nested lists of integer ratios (p, q)

    Raises
    ------
    SingularPencil
        If det(sE - A) is identically zero.
    """
    n = len(A)
    if n == 0:
        return Structure((0,))
    rng = random.Random(n)
    found: list[list[int]] = []
    for k in range(PRIMES):
        q = prime(k)
        a, e = nmod_mat(_residues(A, q), q), nmod_mat(_residues(E, q), q)
        pencil = e * rng.randrange(q) - a
        if pencil.rank() < n:
            continue
        x = pencil.solve(e)
        ranks, power = [n], x
        while True:
            rank = power.rank()
            if rank == ranks[-1]:
                break
            ranks.append(rank)
            if rank == 0:
                break
            power = x * power
        found.append(ranks)
    if not found:
        raise SingularPencil("det(sE - A) is identically zero")
    length = max(len(ranks) for ranks in found)
    joined = [max(ranks[min(k, len(ranks) - 1)] for ranks in found) for k in range(length)]
    while len(joined) > 1 and joined[-1] == joined[-2]:
        joined.pop()
    return Structure(tuple(joined))


class Nilpotent(NamedTuple):
    """N in Jordan form (ones beside the diagonal), B and C with C N^k B = -P_k for k = 1, 2, ...; and -C B."""

    blocks: tuple[int, ...]
    B: list[list[fmpq]]
    C: list[list[fmpq]]
    constant: list[list[fmpq]]


def smallest_nilpotent(parts: Sequence[Sequence[Sequence[fmpq]]]) -> Nilpotent:
    """Return the smallest C (sN - I)^-1 B, N nilpotent, with the terms P_1 s + P_2 s^2 + ... of a polynomial matrix.

    A chain of one state for each power and input is reduced to what inputs reach and outputs see, the Jordan chains of
    what is left are found in rational arithmetic, and chains of length 1, which hold no power of s, are left out. The
    constant term is free: ``constant`` is what C (sN - I)^-1 B has, to be taken off a feed-through.

    Parameters
    ----------
    parts : [power][output][input]
        P_1, P_2, ..., the last one not zero.
    """
    q, p, m = len(parts), len(parts[0]), len(parts[0][0])
    zero, one = fmpq(0), fmpq(1)
    size = m * (q + 1)
    # state k m + j is s^k u_j: shift chains, C N^k B = P_k with B into the chain's start
    N = [[zero] * size for _ in range(size)]
    for k in range(q):
        for j in range(m):
            N[(k + 1) * m + j][k * m + j] = one
    B = [[one if i == j else zero for j in range(m)] for i in range(m)] + [[zero] * m for _ in range(size - m)]
    C = [[zero] * m + [parts[k][i][j] for k in range(q) for j in range(m)] for i in range(p)]
    N, B, C = _seen(N, B, C)
    N, B, C = _transposed(*_seen(*_transposed(N, B, C)))
    T, blocks = _jordan(N)
    change = fmpq_mat(T)
    b = change.solve(fmpq_mat(B)).tolist() if T else []
    c = (fmpq_mat(C) * change).tolist() if T else [[] for _ in range(p)]
    keep: list[int] = []
    start = 0
    for length in blocks:
        if length > 1:
            keep += range(start, start + length)
        start += length
    kept_b, kept_c = [b[k] for k in keep], [[row[k] for k in keep] for row in c]
    constant = [[sum((x * y[j] for x, y in zip(row, kept_b, strict=True)), zero) for j in range(m)] for row in kept_c]
    # C (sN - I)^-1 B = -(C B + s C N B + ...)
    return Nilpotent(
        tuple(length for length in blocks if length > 1),
        kept_b,
        [[-entry for entry in row] for row in kept_c],
        constant,
    )


def _transposed(N: Rational, B: Rational, C: Rational) -> tuple[Rational, Rational, Rational]:
    def flip(matrix: Rational, width: int) -> Rational:
        return [list(column) for column in zip(*matrix, strict=True)] if matrix else [[] for _ in range(width)]

    return flip(N, 0), flip(C, len(N)), flip(B, len(B[0]) if B else 0)


def _seen(N: Rational, B: Rational, C: Rational) -> tuple[Rational, Rational, Rational]:
    """Return the model without the states that C N^k does not see, k = 0, 1, ...: rows of the observability matrix."""
    size = len(N)
    if size == 0:
        return N, B, C
    n = fmpq_mat(N)
    rows, layer = [], fmpq_mat(C)
    while any(any(row) for row in layer.tolist()):
        rows += layer.tolist()
        layer = layer * n
    if not rows:
        return [], [], [[] for _ in C]
    reduced, rank = fmpq_mat(rows).rref()
    if rank == size:
        return N, B, C
    table = reduced.tolist()[:rank]
    pivots = [next(k for k, entry in enumerate(row) if entry) for row in table]
    # new states z = R x with R in reduced echelon form: x = Q z + (unseen), Q the unit columns of the pivots
    r = fmpq_mat(table)
    n_new = (r * n).tolist()
    return (
        [[row[k] for k in pivots] for row in n_new],
        (r * fmpq_mat(B)).tolist(),
        [[row[k] for k in pivots] for row in C],
    )


def _jordan(N: Rational) -> tuple[Rational, tuple[int, ...]]:
    """Return T and block sizes, falling, with T^-1 N T of ones above the diagonal, for a nilpotent matrix."""
    size = len(N)
    if size == 0:
        return [], ()
    n = fmpq_mat(N)
    powers = [fmpq_mat([[fmpq(int(i == j)) for j in range(size)] for i in range(size)])]
    while any(any(row) for row in powers[-1].tolist()):
        powers.append(n * powers[-1])
    chains: list[list[list[fmpq]]] = []
    for length in range(len(powers) - 1, 0, -1):
        # tops of chains of this length: kernel of N^length beyond the kernel of N^(length - 1) and longer chains
        inside = _kernel(powers[length - 1]) if length > 1 else []
        inside += [chain[length - 1] for chain in chains]
        for vector in _kernel(powers[length]):
            if _rank([*inside, vector]) > _rank(inside):
                inside.append(vector)
                chain = [vector]
                for _ in range(length - 1):
                    chain.append([row[0] for row in (n * fmpq_mat([[entry] for entry in chain[-1]])).tolist()])
                # chain[k] is the member that N^(k + 1) kills
                chains.append(chain[::-1])
    columns = [vector for chain in chains for vector in chain]
    T = [[column[i] for column in columns] for i in range(size)]
    return T, tuple(len(chain) for chain in chains)


def _rank(vectors: list[list[fmpq]]) -> int:
    return int(fmpq_mat(vectors).rank()) if vectors else 0


def _kernel(matrix: fmpq_mat) -> list[list[fmpq]]:
    """Return a basis of the kernel, as columns, from the reduced echelon form."""
    size = matrix.ncols()
    reduced, rank = matrix.rref()
    table = reduced.tolist()[:rank]
    pivots = [next(k for k, entry in enumerate(row) if entry) for row in table]
    basis = []
    for free in range(size):
        if free in pivots:
            continue
        vector = [fmpq(0)] * size
        vector[free] = fmpq(1)
        for row, pivot in zip(table, pivots, strict=True):
            vector[pivot] = -row[free]
        basis.append(vector)
    return basis
