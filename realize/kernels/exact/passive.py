"""Exact tests of positive real and bounded real rational matrices.

On the axis s = jw the matrices

    N d* + d N^*     (N/d positive real),        d d* I - N^* N     (N/d bounded real),

with x^*(s) = x(-s)^T, are Hermitian. Such a matrix has no negative eigenvalue if and only if the sum e_k of its
principal k x k minors is not negative for every k: det(t I + M) = sum e_k t^(p-k) has no positive root then. Each e_k
is a polynomial in x = w^2, whose sign is decided exactly.

Sources
-------
1. B. D. O. Anderson, S. Vongpanitlerd, Network Analysis and Synthesis, Prentice-Hall 1973, chapter 2 (positive real and
   bounded real matrices).
2. S. Boyd, V. Balakrishnan, P. Kabamba, A bisection method for computing the H-infinity norm of a transfer matrix,
   Math. Control Signals Systems 2 (1989) 207-219: det M is the characteristic polynomial of a Hamiltonian matrix.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import combinations
from typing import NamedTuple

from flint import fmpq, fmpq_mat, fmpq_poly

from realize.kernels.exact.graphs import Fractions
from realize.kernels.exact.polynomials import ONE, ZERO, quotient, squarefree
from realize.kernels.exact.positivity import positive
from realize.kernels.exact.roots import inside_left_half_plane

S = fmpq_poly([0, 1])


class Proper(NamedTuple):
    """A matrix N/d with all poles in the open left half-plane and none at infinity; what was split off is passive."""

    numerators: list[list[fmpq_poly]]
    denominator: fmpq_poly


def over_common(fractions: Fractions) -> Proper:
    """Return all channels over their least common denominator."""
    common = ONE
    for row in fractions:
        for n, d in row:
            if n and d != common:
                common = common * quotient(d, common.gcd(d))
    return Proper([[n * quotient(common, d) if n else ZERO for n, d in row] for row in fractions], common)


def split_lossless(matrix: Proper) -> tuple[Proper, str]:
    """Return the matrix without its poles at 0 and infinity, and words where they are not those of a passive network.

    A simple pole at 0 with a symmetric residue that is positive semidefinite, and the like at infinity, do not change
    the Hermitian part on the axis.
    """
    N, d = matrix
    if any(n.degree() > d.degree() + 1 for row in N for n in row):
        return matrix, "more than one pole at infinity in a channel"
    if any(n.degree() == d.degree() + 1 for row in N for n in row):
        lead = d.leading_coefficient()
        slope = [[_coefficient(n, d.degree() + 1) / lead for n in row] for row in N]
        if not _symmetric_semidefinite(slope):
            return matrix, "a pole at infinity whose residue is not positive semidefinite"
        N = [
            [n - S * d * value for n, value in zip(row, line, strict=True)] for row, line in zip(N, slope, strict=True)
        ]
    if not d[0]:
        rest = quotient(d, S)
        if not rest[0]:
            return matrix, "a pole at 0 that is not simple"
        residue = [[n[0] / rest[0] for n in row] for row in N]
        if not _symmetric_semidefinite(residue):
            return matrix, "a pole at 0 whose residue is not positive semidefinite"
        N = [
            [quotient(n - rest * value, S) if n - rest * value else ZERO for n, value in zip(row, line, strict=True)]
            for row, line in zip(N, residue, strict=True)
        ]
        d = rest
    return Proper(N, d), ""


def is_stable(denominator: fmpq_poly) -> bool:
    """Return whether all roots lie in the open left half-plane."""
    return denominator.degree() < 1 or inside_left_half_plane(denominator) == denominator.degree()


def minor_sums(matrix: Proper, kind: str, level: fmpq) -> list[fmpq_poly]:
    """Return e_1 to e_p in x = w^2 of the Hermitian matrix, shifted by a level.

    "positive-real": N d* + d N^* + 2 level d d* I; "bounded-real": level^2 d d* I - N^* N.
    """
    N, d = matrix
    p = len(N)
    other = _mirrored(d)
    square = d * other
    mirrored = [[_mirrored(N[j][i]) for j in range(p)] for i in range(p)]
    M = [[ZERO] * p for _ in range(p)]
    for i in range(p):
        for j in range(p):
            if kind == "positive-real":
                M[i][j] = N[i][j] * other + mirrored[i][j] * d
            else:
                total = ZERO
                for k in range(p):
                    total = total + mirrored[i][k] * N[k][j]
                M[i][j] = ZERO - total
        M[i][i] = M[i][i] + square * (2 * level if kind == "positive-real" else level * level)
    sums = []
    for k in range(1, p + 1):
        total = ZERO
        for rows in combinations(range(p), k):
            total = total + _determinant([[M[i][j] for j in rows] for i in rows])
        sums.append(_in_square(total))
    return sums


def never_negative(polynomial: fmpq_poly) -> bool:
    """Return True if p(x) >= 0 is proved for all x >= 0: roots of even multiplicity do not count."""
    if not polynomial:
        return True
    lead = polynomial.leading_coefficient()
    odd = fmpq_poly([1 if lead > 0 else -1])
    for factor, multiplicity in squarefree(polynomial):
        if multiplicity % 2:
            odd = odd * factor * (1 if factor.leading_coefficient() > 0 else -1)
    if not odd[0]:
        # x itself is not negative
        odd = quotient(odd, S)
    return positive(odd, fmpq(0), None)


def _coefficient(p: fmpq_poly, power: int) -> fmpq:
    return p[power] if power <= p.degree() else fmpq(0)


def _symmetric_semidefinite(matrix: Sequence[Sequence[fmpq]]) -> bool:
    p = len(matrix)
    if any(matrix[i][j] != matrix[j][i] for i in range(p) for j in range(i)):
        return False
    for k in range(1, p + 1):
        total = fmpq(0)
        for rows in combinations(range(p), k):
            total += fmpq_mat([[matrix[i][j] for j in rows] for i in rows]).det()
        if total < 0:
            return False
    return True


def _mirrored(p: fmpq_poly) -> fmpq_poly:
    """Return p(-s)."""
    return fmpq_poly([-c if k % 2 else c for k, c in enumerate(p.coeffs())])


def _in_square(p: fmpq_poly) -> fmpq_poly:
    """Return an even polynomial of s as one in x = -s^2; the odd part is zero."""
    return fmpq_poly([-c if k % 2 else c for k, c in enumerate(p.coeffs()[0::2])])


def _determinant(M: list[list[fmpq_poly]]) -> fmpq_poly:
    if len(M) == 1:
        return M[0][0]
    total = ZERO
    for j, entry in enumerate(M[0]):
        if entry:
            rest = _determinant([row[:j] + row[j + 1 :] for row in M[1:]])
            total = total - entry * rest if j % 2 else total + entry * rest
    return total
