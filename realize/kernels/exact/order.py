"""Exact minimal order of state models and transfer matrices: the rank of a Hankel matrix of Markov parameters."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any, NamedTuple

import numpy as np
from flint import fmpq, fmpq_poly, fmpz_mat, nmod_mat, nmod_poly

from realize.kernels.exact.cost import BUDGET, affordable, rank_operations
from realize.kernels.exact.integer_scaling import integer_states
from realize.kernels.exact.numbers import fraction, prime
from realize.kernels.exact.polynomials import ONE, reduce_fraction, reversed_polynomial, shifted
from realize.kernels.exact.states import transfer_matrix

Ratios = Sequence[Sequence[Any]]
#: Primes whose ranks are compared; the largest rank counts.
PRIMES = 2


class Order(NamedTuple):
    """Minimal order. If ``proved`` is False it is a lower bound.

    A rank modulo a prime near 2^62 never exceeds the true one, and is smaller only if the prime divides every largest
    nonzero minor; for a minor of b bits at most b / 61 of about 10^17 primes do.
    """

    order: int
    proved: bool


def minimal_order(A: Ratios, B: Ratios, C: Ratios, budget: float = BUDGET) -> Order:
    """Return the order of the minimal realization of C (sI - A)^-1 B, exactly on the numbers as given.

    The rank of the product of observability and controllability matrix, H = [C A^(i+j) B], modulo primes. A full
    rank proves itself; a smaller one is confirmed, if the predicted operations stay within the budget: with one input
    and output by the exact common factor of numerator and denominator, else by an exact rank of H. States that no path
    of nonzero entries joins to an input and to an output are left out first.

    Sources: Kalman, J. SIAM Control A 1, 1963; Ho & Kalman, Regelungstechnik 14, 1966.
    """
    n, p, m = len(A), len(C), len(B[0]) if B else 0
    if n == 0 or p == 0 or m == 0:
        return Order(0, True)
    A, B, C = _connected(A, B, C)
    n = len(A)
    if n == 0:
        return Order(0, True)
    integers = integer_states(A, B, C)

    def sequence(q: int) -> list[list[Any]]:
        a, v, c = (nmod_mat(matrix, q) for matrix in (integers.A, integers.B, integers.C))
        found = []
        for _ in range(2 * n - 1):
            found.append((c * v).entries())
            v = a * v
        return found

    rank = _modular_rank(sequence, n, p, m)
    if rank == n or (rank == 0 and not _any_path(integers.A, integers.B, integers.C, n)):
        return Order(rank, True)
    bits = max(_height(integers.A), 1)
    if p * m == 1:
        if affordable(rank_operations(n, bits), budget):
            numerators, d = transfer_matrix(A, B, C, [[fmpq(0)]])
            return Order(reduce_fraction(numerators[0][0], d)[1].degree(), True)
    elif affordable(rank_operations(n * max(p, m), 2 * n * bits), budget):
        v, exact = integers.B, []
        for _ in range(2 * n - 1):
            exact.append((integers.C * v).entries())
            v = integers.A * v
        return Order(fmpz_mat(_hankel(exact, n, p, m)).rank(), True)
    return Order(rank, False)


def mcmillan_degree(numerators: Sequence[Sequence[fmpq_poly]], denominators: Sequence[Sequence[fmpq_poly]]) -> Order:
    """Return the McMillan degree of a transfer matrix, poles at infinity of improper entries included.

    With s = a + 1 / x for a point a that is no pole every entry becomes proper, and the degree stays the same; then the
    rank of the Hankel matrix of the series in 1 / x modulo primes. One channel is proved by its common factor; a matrix
    is proved when the rank reaches the smaller of the orders of its row and column companion forms.
    """
    p, m = len(numerators), len(numerators[0]) if numerators else 0
    pairs = [[reduce_fraction(numerators[i][j], denominators[i][j]) for j in range(m)] for i in range(p)]
    if p == 0 or m == 0:
        return Order(0, True)
    if p * m == 1:
        return Order(max(pairs[0][0][0].degree(), pairs[0][0][1].degree()), True)
    a = 0
    while any(d(fmpq(a)) == 0 for row in pairs for _, d in row):
        a += 1
    proper: list[list[tuple[fmpq_poly, fmpq_poly]]] = []
    for row in pairs:
        moved = []
        for n, d in row:
            degree = max(n.degree(), d.degree())
            above, below = shifted(n, fmpq(a)), shifted(d, fmpq(a))
            moved.append((reversed_polynomial(above, degree), reversed_polynomial(below, degree)))
        proper.append(moved)
    bound = min(
        sum(_common_degree([proper[i][j][1] for i in range(p)]) for j in range(m)),
        sum(_common_degree([proper[i][j][1] for j in range(m)]) for i in range(p)),
    )
    if bound == 0:
        return Order(0, True)

    def sequence(q: int) -> list[list[int]]:
        channels = [series_modulo(n, d, 2 * bound, q)[1:] for row in proper for n, d in row]
        return [list(values) for values in zip(*channels, strict=True)]

    rank = _modular_rank(sequence, bound, p, m)
    return Order(rank, rank == bound)


def _common_degree(polynomials: list[fmpq_poly]) -> int:
    """Return the degree of the least common multiple."""
    whole = ONE
    for d in polynomials:
        whole = whole * divmod(d, whole.gcd(d))[0]
    return whole.degree()


def _residue(value: fmpq, q: int) -> int:
    return int(value.p % q) * pow(int(value.q % q), -1, q) % q


def series_modulo(n: fmpq_poly, d: fmpq_poly, count: int, q: int) -> list[int]:
    """Return the coefficients of n / d in powers 0, -1, -2, ... of the variable, modulo a prime; deg n <= deg d."""
    degree = d.degree()
    above = nmod_poly([_residue(c, q) for c in reversed_polynomial(n, degree).coeffs()], q)
    below = nmod_poly([_residue(c, q) for c in reversed_polynomial(d, degree).coeffs()], q)
    values = [int(c) for c in (above * below.inverse_series_trunc(count)).coeffs()[:count]]
    return values + [0] * (count - len(values))


def _hankel(sequence: list[list[Any]], count: int, p: int, m: int) -> list[list[Any]]:
    return [
        [sequence[i + j][a * m + b] for j in range(count) for b in range(m)] for i in range(count) for a in range(p)
    ]


def _modular_rank(sequence: Callable[[int], list[list[Any]]], count: int, p: int, m: int) -> int:
    best, k, done = 0, 0, 0
    while done < PRIMES and k < 64:
        q = prime(k)
        k += 1
        try:
            values = sequence(q)
        except (ValueError, ZeroDivisionError):  # the prime divides a denominator
            continue
        table = _hankel(values, count, p, m)
        flat = [entry if isinstance(entry, int) else int(entry) for row in table for entry in row]
        best = max(best, nmod_mat(count * p, count * m, flat, q).rank())
        if best == count:
            break
        done += 1
    return best


def _connected(A: Ratios, B: Ratios, C: Ratios) -> tuple[Ratios, Ratios, Ratios]:
    """Return the model without the states that no input reaches, or that reach no output, by their pattern of zeros."""
    a = np.array([[bool(fraction(entry)) for entry in row] for row in A], dtype=bool).reshape(len(A), len(A))
    reached = _closure(a, np.array([any(bool(fraction(entry)) for entry in row) for row in B], dtype=bool))
    seen = _closure(a.T, np.array([any(bool(fraction(row[k])) for row in C) for k in range(len(A))], dtype=bool))
    keep = np.flatnonzero(reached & seen).tolist()
    return [[A[i][j] for j in keep] for i in keep], [B[i] for i in keep], [[row[j] for j in keep] for row in C]


def _closure(pattern: np.ndarray, start: np.ndarray) -> np.ndarray:
    while True:
        more = start | (pattern[:, start].any(axis=1))
        if np.array_equal(more, start):
            return start
        start = more


def _height(matrix: fmpz_mat) -> int:
    return max((int(entry).bit_length() for entry in matrix.entries()), default=0)


def _any_path(A: fmpz_mat, B: fmpz_mat, C: fmpz_mat, n: int) -> bool:
    """Return whether any Markov parameter is nonzero, exactly."""
    v = B
    for _ in range(n):
        if any((C * v).entries()):
            return True
        v = A * v
    return False
