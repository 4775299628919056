"""Exact transfer matrix of a state or descriptor model, and its exact response at one point by another road.

The transfer matrix comes from characteristic polynomials and Krylov sequences of integer matrices; the response at
a point comes from one linear solve. The two share no code, so that one can check the other.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import lcm
from typing import Any

import numpy as np
from flint import acb, acb_mat, arb, fmpq, fmpq_mat, fmpq_poly, fmpz_mat

from realize.kernels.exact.integer_scaling import Integers, integer_states, pair
from realize.kernels.exact.numbers import fraction, precision
from realize.kernels.exact.pencils import SingularPencil, pencil_transfer
from realize.kernels.exact.polynomials import ONE, Complex, product

__all__ = ["SingularPencil", "characteristic_polynomial", "response_at", "response_ball", "transfer_matrix"]

#: Up to this order the integers are not made short first.
SMALL_ORDER = 8
#: A matrix as nested lists of integer ratios (p, q).
Ratios = Sequence[Sequence[Any]]


def transfer_matrix(
    A: Ratios, B: Ratios, C: Ratios, D: Ratios, E: Ratios | None = None
) -> tuple[list[list[fmpq_poly]], fmpq_poly]:
    """Return C adj(sE - A) B + D det(sE - A), one polynomial a channel, and det(sE - A); common factors kept.

    The characteristic polynomial is the product of those of the strongly connected blocks of A. The numerators are
    the polynomial part of det(sI - A) times the series of the Markov parameters D + C B / s + C A B / s^2 + ..., from
    the shorter side (inputs or outputs). A descriptor pencil is treated modulo primes, with a rigorous bound.

    Parameters
    ----------
    A, E : n x n; B : n x m; C : p x n; D : p x m, nested lists of integer ratios
        ``E`` may be singular, as long as the pencil is regular.

    Returns
    -------
    numerators : p lists of m polynomials
    denominator : polynomial
        Monic if ``E`` is None.

    Raises
    ------
    SingularPencil
        If det(sE - A) is identically zero.
    """
    p, m, n = len(D), len(D[0]) if D else 0, len(A)
    direct = [[fraction(entry) for entry in row] for row in D]
    if n == 0:
        return [[fmpq_poly([entry]) for entry in row] for row in direct], ONE
    if E is not None and not _is_identity(E):
        return pencil_transfer(A, B, C, direct, E)
    if n <= SMALL_ORDER:
        return _small_transfer(A, B, C, direct)
    if p == 0 or m == 0:
        return [[] for _ in range(p)], characteristic_polynomial(A)
    integers = integer_states(A, B, C)
    denominator = characteristic_polynomial(A, integers)
    markov = _markov(integers, n)
    # coefficient j of the numerator: sum over k of a_(j + 1 + k) h_k
    upper = fmpq_poly(denominator.coeffs()[1:][::-1])
    numerators = []
    for i in range(p):
        row = []
        for j in range(m):
            series = fmpq_poly(markov[i][j])
            c = (upper * series).coeffs()[:n]
            c = c + [fmpq(0)] * (n - len(c))
            row.append(fmpq_poly(c[::-1]) + direct[i][j] * denominator if direct[i][j] else fmpq_poly(c[::-1]))
        numerators.append(row)
    return numerators, denominator


def _over_common(matrix: Ratios) -> tuple[fmpz_mat, int]:
    """Return integers and the common denominator that they stand over."""
    pairs = [[pair(entry) for entry in row] for row in matrix]
    common = lcm(*{q for row in pairs for _, q in row})
    return fmpz_mat([[p * (common // q) for p, q in row] for row in pairs]), common


def _small_transfer(
    A: Ratios, B: Ratios, C: Ratios, direct: list[list[fmpq]]
) -> tuple[list[list[fmpq_poly]], fmpq_poly]:
    """Return the same for few states: one common denominator for each matrix, no scaling and no blocks."""
    n, p, m = len(A), len(direct), len(direct[0]) if direct else 0
    a, below = _over_common(A)
    denominator = _unscaled(a.charpoly().coeffs(), fmpq(below))
    if p == 0 or m == 0:
        return [[] for _ in range(p)], denominator
    b, b_below = _over_common(B)
    c, c_below = _over_common(C)
    upper = fmpq_poly(denominator.coeffs()[1:][::-1])
    series, power = [], b_below * c_below
    for k in range(n):
        values = c * b
        series.append([[fmpq(values[i, j], power) for j in range(m)] for i in range(p)])
        if k < n - 1:
            b = a * b
            power *= below
    numerators = []
    for i in range(p):
        row = []
        for j in range(m):
            found = (upper * fmpq_poly([entry[i][j] for entry in series])).coeffs()[:n]
            found += [fmpq(0)] * (n - len(found))
            numerator = fmpq_poly(found[::-1])
            row.append(numerator + direct[i][j] * denominator if direct[i][j] else numerator)
        numerators.append(row)
    return numerators, denominator


def characteristic_polynomial(A: Ratios, known: Integers | None = None) -> fmpq_poly:
    """Return det(sI - A) as the product over the strongly connected blocks of A.

    Parameters
    ----------
    A : n x n
    known : Integers, optional
        The integers that stand for A: they serve where all states are in one block.
    """
    n = len(A)
    factors: dict[tuple[int, ...], fmpq_poly] = {}
    for block in strong_blocks(A):
        if len(block) == 1:
            factors[block] = fmpq_poly([-fraction(A[block[0]][block[0]]), 1])
            continue
        part = [[A[i][j] for j in block] for i in block] if len(block) < n else A
        integers = known if known is not None and len(block) == n else integer_states(part, None, None)
        c = integers.A.charpoly().coeffs()
        factors[block] = _unscaled(c, integers.scale)
    return product([factors[block] for block in sorted(factors, key=lambda key: factors[key].degree())])


def _unscaled(c: list[Any], scale: fmpq) -> fmpq_poly:
    """Return det(sI - A) from the coefficients of det(sI - scale A), lowest power first."""
    power, coefficients = fmpq(1), []
    for value in reversed(c):
        coefficients.append(value * power)
        power /= scale
    return fmpq_poly(coefficients[::-1])


def strong_blocks(A: Ratios) -> list[tuple[int, ...]]:
    """Return the strongly connected components of the pattern of a square matrix, as sorted tuples of indices."""
    n = len(A)
    reach = np.array([[bool(fraction(entry)) for entry in row] for row in A], dtype=float).reshape(n, n)
    reach = np.minimum(reach + np.eye(n), 1.0)
    length = 1
    while length < n:
        reach = np.minimum(reach @ reach, 1.0)
        length *= 2
    both = (reach > 0) & (reach.T > 0)
    first = both.argmax(axis=1)
    blocks: dict[int, list[int]] = {}
    for k in range(n):
        blocks.setdefault(int(first[k]), []).append(k)
    return [tuple(block) for block in blocks.values()]


def _is_identity(E: Ratios) -> bool:
    return all(fraction(entry) == (1 if i == j else 0) for i, row in enumerate(E) for j, entry in enumerate(row))


def _markov(integers: Integers, count: int) -> list[list[list[fmpq]]]:
    """Return the Markov parameters C A^k B, k = 0..count-1, as [output][input][k]."""
    A, B, C = integers.A, integers.B, integers.C
    p, m = C.nrows(), B.ncols()
    transpose = p < m
    if transpose:
        A, B, C = A.transpose(), C.transpose(), B.transpose()
    rows, columns = C.nrows(), B.ncols()
    result: list[list[list[fmpq]]] = [[[] for _ in range(m)] for _ in range(p)]
    vector = B
    power = fmpq(1)
    for k in range(count):
        values = C * vector
        for a in range(rows):
            for b in range(columns):
                i, j = (b, a) if transpose else (a, b)
                result[i][j].append(values[a, b] * power / (integers.output_scales[i] * integers.input_scales[j]))
        if k < count - 1:
            vector = A * vector
            power /= integers.scale
    return result


def response_at(
    A: Ratios, B: Ratios, C: Ratios, D: Ratios, E: Ratios | None, real: fmpq, imaginary: fmpq
) -> list[list[Complex]]:
    """Return C (sE - A)^-1 B + D at s = real + j imaginary as exact complex rationals [output][input].

    One rational solve of the real form [[P, -Q], [Q, P]] with sE - A = P + jQ.

    Raises
    ------
    ZeroDivisionError
        If the point is a pole of the pencil.
    """
    n, m = len(A), len(D[0]) if D else 0
    direct = [[fraction(entry) for entry in row] for row in D]
    if n == 0 or m == 0 or not direct:
        return [[(entry, fmpq(0)) for entry in row] for row in direct]
    zero = fmpq(0)
    a = [[fraction(entry) for entry in row] for row in A]
    e = [[fraction(entry) for entry in row] for row in E] if E is not None else None
    b = [[fraction(entry) for entry in row] for row in B]

    def pencil(weight: fmpq, minus: int) -> list[list[fmpq]]:
        rows = [[minus * entry for entry in row] for row in a]
        for i in range(n):
            if e is None:
                rows[i][i] += weight
            else:
                rows[i] = [x + weight * y for x, y in zip(rows[i], e[i], strict=True)]
        return rows

    P = pencil(real, -1)
    if not imaginary:
        x = fmpq_mat(P).solve(fmpq_mat(b))
    else:
        Q = pencil(imaginary, 0)
        top = [P[i] + [-entry for entry in Q[i]] for i in range(n)]
        bottom = [Q[i] + P[i] for i in range(n)]
        x = fmpq_mat(top + bottom).solve(fmpq_mat(b + [[zero] * m for _ in range(n)]))
    c = fmpq_mat([[fraction(entry) for entry in row] for row in C])
    table = x.tolist()
    re = (c * fmpq_mat(table[:n])).tolist()
    im = (c * fmpq_mat(table[n:])).tolist() if imaginary else [[zero] * m for _ in direct]
    return [[(re[i][j] + direct[i][j], im[i][j]) for j in range(m)] for i in range(len(direct))]


#: Relative accuracy (bits) that `response_ball` asks for, and the precision (bits) at which it stops asking.
RESPONSE_BITS, RESPONSE_CAP = 60, 8192


def response_ball(
    A: Ratios, B: Ratios, C: Ratios, D: Ratios, E: Ratios | None, real: fmpq, imaginary: fmpq
) -> list[list[acb]]:
    """Return C (sE - A)^-1 B + D at s = real + j imaginary as rigorous complex balls [output][input].

    A solve in ball arithmetic; the precision is doubled until every entry has a relative accuracy of 2^-60, up to
    8192 bits: a ball that still contains zero then stands for a response that is zero, or below what that resolves.

    Raises
    ------
    ZeroDivisionError
        If the point is a pole of the pencil, or so near to one that 8192 bits do not tell.
    """
    n, p, m = len(A), len(D), len(D[0]) if D else 0
    bits = 128
    while True:
        last = bits >= RESPONSE_CAP
        with precision(bits):
            direct = acb_mat(p, m, [arb(fraction(entry)) for row in D for entry in row])
            if n == 0 or m == 0 or p == 0:
                return direct.tolist() if p and m else [[] for _ in range(p)]
            s = acb(arb(real), arb(imaginary))
            a = [[acb(arb(fraction(entry))) for entry in row] for row in A]
            if E is None:
                pencil = [[(s - a[i][j]) if i == j else -a[i][j] for j in range(n)] for i in range(n)]
            else:
                pencil = [[s * arb(fraction(E[i][j])) - a[i][j] for j in range(n)] for i in range(n)]
            b = acb_mat(n, m, [arb(fraction(entry)) for row in B for entry in row])
            c = acb_mat(p, n, [arb(fraction(entry)) for row in C for entry in row])
            try:
                value = c * acb_mat(pencil).solve(b) + direct
            except ZeroDivisionError:
                if last:
                    raise
                bits *= 2
                continue
            entries = value.tolist()
            enough = all(z.is_finite() and z.rel_accuracy_bits() >= RESPONSE_BITS for row in entries for z in row)
            if enough or last:
                return entries
        bits *= 2
