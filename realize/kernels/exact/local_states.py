"""Minimal realizations of an exact transfer matrix pole by pole, in high precision.

Around a pole r of multiplicity at most k, G = sum R_j / (s - r)^j + regular part. The block Hankel matrix
H = [R_(i+j-1)], i, j = 1..k, has as its rank the McMillan degree of the pole [2]_ [3]_. With rows I and columns J of H
such that M = H[I, J] is invertible and of that rank (complete pivoting), the states that belong to columns J have ::

    N = M^-1 H'[I, J],   B = M^-1 H[I, first block],   C = H[first block, J],   A = r I + N,

H' = [R_(i+j)] the shifted matrix; a simple pole has N = 0 and C B = R_1 [1]_. Selected columns or rows stand in C or B
as they are, so that what is zero or small stays so. N is nilpotent: orthonormal vectors of the images of N^(k-1), ..,
N in this order make it strictly triangular with exact zeros, and the pole keeps its multiplicity in doubles.

.. [1] E. G. Gilbert, Controllability and observability in multivariable control systems, J. SIAM Control A 1 (1963)
       128-151.
.. [2] B. L. Ho, R. E. Kalman, Effective construction of linear state-variable models from input/output functions,
       Regelungstechnik 14 (1966) 545-548.
.. [3] L. M. Silverman, Realization of linear dynamical systems, IEEE Transactions on Automatic Control 16 (1971)
       554-567 (from memory).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from flint import acb, acb_mat, acb_poly, arb, fmpq, fmpq_mat, fmpq_poly
from numpy.typing import NDArray

from realize.kernels.exact.dense_balls import NOTHING, exponent
from realize.kernels.exact.numbers import complex_fraction, exact_value, near_ball, nearest, power_of_two, precision
from realize.kernels.exact.polynomials import ONE, quotient
from realize.kernels.exact.roots import Root, roots

Array = NDArray[np.float64]
Table = list[list[acb]]

#: Working precision (bits).
BITS = 640
#: A vector whose part outside a span is smaller than this, relative to its length, lies in the span.
SPAN = -200
#: Doubles that are tried for the frequency of an oscillation: its error falls by as much.
TRIALS = 200


@dataclass(frozen=True)
class Block:
    """The states of one real pole, or of one member of a conjugate pair: A = pole I + N.

    Attributes
    ----------
    pole : acb
    real : bool
    N, B, C : nested lists of acb, r x r strictly upper triangular, r x m, p x r
    """

    pole: acb
    real: bool
    N: Table
    B: Table
    C: Table

    @property
    def order(self) -> int:
        """Number of real states."""
        return len(self.N) * (1 if self.real else 2)


@dataclass(frozen=True)
class Expansion:
    """Laurent coefficients R_1 .. R_k of a matrix at one pole, each p x m."""

    pole: acb
    real: bool
    multiplicity: int
    terms: list[Table]

    @property
    def rough(self) -> complex:
        """The pole in doubles."""
        return complex(near_ball(self.pole.real), near_ball(self.pole.imag))


def expansions(grid: Sequence[Sequence[tuple[fmpq_poly, fmpq_poly]]]) -> list[tuple[Root, Expansion]]:
    """Return the Laurent coefficients of a transfer matrix at its poles, of each conjugate pair at the upper one.

    Parameters
    ----------
    grid : p lists of m pairs (numerator, denominator), reduced
    """
    common = ONE
    for row in grid:
        for _, d in row:
            common = common * quotient(d, common.gcd(d))
    if common.degree() < 1:
        return []
    numerators = [[n % d * quotient(common, d) for n, d in row] for row in grid]
    found = []
    tables: dict[int, tuple[list[acb_poly], list[list[list[acb_poly]]]]] = {}
    with precision(BITS):
        for root in roots(common):
            k = root.multiplicity
            if not root.real and bool(root.ball.imag < 0):
                continue
            if k not in tables:
                tables[k] = (
                    [acb_poly(q) for q in _taylor(common, 2 * k)[k:]],
                    [[[acb_poly(q) for q in _taylor(n, k)] for n in row] for row in numerators],
                )
            below, above = tables[k]
            at = root.at(BITS)
            bottom = [q(at) for q in below]
            series = [[_quotient_series([q(at) for q in entry], bottom) for entry in row] for row in above]
            terms = [[[_clean(entry[k - j]) for entry in row] for row in series] for j in range(1, k + 1)]
            found.append((root, Expansion(at.mid(), root.real, k, terms)))
    return found


def _taylor(polynomial: fmpq_poly, count: int) -> list[fmpq_poly]:
    terms = [polynomial]
    for k in range(1, count):
        terms.append(terms[-1].derivative() / k)
    return terms


def _quotient_series(above: list[acb], below: list[acb]) -> list[acb]:
    series: list[acb] = []
    for k, value in enumerate(above):
        rest = value
        for i in range(1, k + 1):
            rest = rest - below[i] * series[k - i]
        series.append(rest / below[0])
    return series


def _clean(value: acb) -> acb:
    """Return the midpoint, parts that reach over zero as zero."""
    real, imaginary = value.real, value.imag
    return acb(arb(0) if real.contains(0) else real.mid(), arb(0) if imaginary.contains(0) else imaginary.mid())


def size(value: acb) -> int:
    """Return the binary exponent of the larger part; a very small number for zero."""
    return max(exponent(value.real), exponent(value.imag))


def local_block(expansion: Expansion, rank: int) -> Block:
    """Return the minimal states of one pole.

    Parameters
    ----------
    rank : int
        Rank of the block Hankel matrix, at least 1; a smaller one leaves the least terms out.
    """
    k, terms = expansion.multiplicity, expansion.terms
    p, m = len(terms[0]), len(terms[0][0])
    zero = acb(0)

    def hankel(shift: int) -> Table:
        return [
            [terms[a + b + shift][i][j] if a + b + shift < k else zero for b in range(k) for j in range(m)]
            for a in range(k)
            for i in range(p)
        ]

    with precision(BITS):
        H, moved = hankel(0), hankel(1)
        rows, columns = _pivots(H, rank)
        M = acb_mat([[H[i][j] for j in columns] for i in rows])
        right = [H[i][:m] + [moved[i][j] for j in columns] for i in rows]
        solved = [[_clean(entry) for entry in row] for row in M.solve(acb_mat(right)).tolist()]
        B, N = [row[:m] for row in solved], [row[m:] for row in solved]
        C = [[H[i][j] for j in columns] for i in range(p)]
        B, C, N = _even(B, C, N)
        if k > 1 and any(entry for row in N for entry in row):
            B, C, N = _even(*_triangular(B, C, N, k))
        elif k > 1:
            N = [[zero] * rank for _ in range(rank)]
    return Block(expansion.pole, expansion.real, N, B, C)


def _pivots(H: Table, rank: int) -> tuple[list[int], list[int]]:
    """Return rows and columns of the largest pivots of elimination with complete pivoting, units taken out."""
    r, c = _units(H)
    rest = [list(row) for row in H]
    rows, columns = list(range(len(H))), list(range(len(H[0])))
    chosen: tuple[list[int], list[int]] = ([], [])
    for _ in range(rank):
        # the larger part decides in steps of a factor two; within it, the modulus
        i, j = max(((a, b) for a in rows for b in columns), key=lambda at: _weight(rest, r, c, at))
        pivot = rest[i][j]
        chosen[0].append(i)
        chosen[1].append(j)
        rows.remove(i)
        columns.remove(j)
        for a in rows:
            if rest[a][j]:
                factor = rest[a][j] / pivot
                for b in columns:
                    if rest[i][b]:
                        rest[a][b] = _clean(rest[a][b] - factor * rest[i][b])
    return chosen


def _weight(rest: Table, r: NDArray[np.int64], c: NDArray[np.int64], at: tuple[int, int]) -> float:
    value = rest[at[0]][at[1]]
    e = size(value)
    if e == NOTHING:
        return float(NOTHING)
    scale = arb(power_of_two(-e))
    modulus = abs(complex(near_ball(value.real * scale), near_ball(value.imag * scale)))
    return float(np.log2(modulus)) + e - int(r[at[0]]) - int(c[at[1]])


def _even(B: Table, C: Table, N: Table) -> tuple[Table, Table, Table]:
    """Return states scaled by powers of two so that rows of B and columns of C are of the same size."""
    r = len(N)
    shift = []
    for i in range(r):
        into = max((size(x) for x in B[i]), default=NOTHING)
        out = max((size(row[i]) for row in C), default=NOTHING)
        shift.append((into - out) // 2 if into > NOTHING and out > NOTHING else 0)
    down = [arb(power_of_two(-e)) for e in shift]
    up = [arb(power_of_two(e)) for e in shift]
    return (
        [[x * down[i] for x in row] for i, row in enumerate(B)],
        [[x * up[i] for i, x in enumerate(row)] for row in C],
        [[x * down[i] * up[j] for j, x in enumerate(row)] for i, row in enumerate(N)],
    )


def _triangular(B: Table, C: Table, N: Table, index: int) -> tuple[Table, Table, Table]:
    """Return unitarily similar matrices with N strictly upper triangular, entries below exactly zero."""
    r = len(N)
    n = acb_mat(N)
    powers = [acb_mat([[acb(int(i == j)) for j in range(r)] for i in range(r)])]
    for _ in range(index - 1):
        powers.append((powers[-1] * n).mid())
    basis: list[list[acb]] = []
    edges = []
    for power in reversed(powers):
        floor = max(size(x) for x in power.entries()) + SPAN
        for column in power.transpose().tolist():
            # what should be zero is the rounding of the working precision
            grown = _outside(column, basis) if max(size(x) for x in column) > floor else None
            if grown is not None and len(basis) < r:
                basis.append(grown)
        edges.append(len(basis))
    Q = acb_mat([[vector[i] for vector in basis] for i in range(r)])
    back = acb_mat([[entry.conjugate() for entry in vector] for vector in basis])
    table = (back * n * Q).mid().tolist()
    # an image is mapped into the next smaller one
    before = [0, *edges[:-1]]
    for low, high in zip(before, edges, strict=True):
        for j in range(low, high):
            for i in range(low, r):
                table[i][j] = acb(0)
    return (back * acb_mat(B)).mid().tolist(), (acb_mat(C) * Q).mid().tolist(), table


def _outside(vector: list[acb], basis: list[list[acb]]) -> list[acb] | None:
    """Return the normalised part of a vector outside a span, or None where it lies inside."""
    top = max(size(x) for x in vector)
    if top == NOTHING:
        return None
    scale = arb(power_of_two(-top))
    rest = [(x * scale).mid() for x in vector]
    for _ in range(2):
        for other in basis:
            share = sum((x * y.conjugate() for x, y in zip(rest, other, strict=True)), acb(0))
            rest = [(x - share * y).mid() for x, y in zip(rest, other, strict=True)]
        if max(size(x) for x in rest) < SPAN:
            return None
    norm = sum((x.real * x.real + x.imag * x.imag for x in rest), arb(0)).sqrt()
    return [(x / norm).mid() for x in rest]


def _real_parts(blocks: Sequence[Block], p: int, m: int) -> tuple[list[list[arb]], list[list[arb]], list[list[arb]]]:
    """Return A, B, C with one real block a pole or pair: x = [Re, Im] of twice the complex states, interleaved."""
    n = sum(block.order for block in blocks)
    zero = arb(0)
    A = [[zero] * n for _ in range(n)]
    B = [[zero] * m for _ in range(n)]
    C = [[zero] * n for _ in range(p)]
    start = 0
    for block in blocks:
        step = 1 if block.real else 2
        up, down = (arb(1), arb(1)) if block.real else _even_product(block.pole.imag)
        for i in range(len(block.N)):
            for k in range(len(block.N)):
                value = block.N[i][k] + (block.pole if i == k else 0)
                a, b = start + step * i, start + step * k
                A[a][b] = value.real
                if step == 2:
                    A[a][b + 1], A[a + 1][b], A[a + 1][b + 1] = -value.imag * up, value.imag * down, value.real
            for j in range(m):
                B[start + step * i][j] = block.B[i][j].real
                if step == 2:
                    B[start + step * i + 1][j] = block.B[i][j].imag * down
            for o in range(p):
                C[o][start + step * i] = block.C[o][i].real * step
                if step == 2:
                    C[o][start + step * i + 1] = -block.C[o][i].imag * 2 * up
        start += block.order
    return A, B, C


def _even_product(omega: arb) -> tuple[arb, arb]:
    """Return t and 1 / t such that omega t and omega / t round to doubles whose product is nearly omega^2.

    One rounding of omega moves a resonance by eps / 2, which is eps / (2 damping) of its peak. Of some doubles between
    omega and 5/4 omega, the one is taken for which the other factor is nearest to a double.
    """
    middle = near_ball(omega)
    if not 1e-300 < middle < 1e300:
        return arb(1), arb(1)
    square = exact_value(omega) ** 2
    best, chosen = None, middle
    for k in range(TRIALS):
        # steps of a unit in the last place would move both factors alike
        first = middle * (1 + k / (4 * TRIALS))
        other = square / fmpq(*first.as_integer_ratio())
        rounded = fmpq(*nearest(other).as_integer_ratio())
        away = abs(rounded / other - 1)
        if best is None or away < best:
            best, chosen = away, first
    t = arb(fmpq(*chosen.as_integer_ratio())) / omega
    return t.mid(), (1 / t).mid()


def modal_matrices(blocks: Sequence[Block], p: int, m: int) -> tuple[Array, Array, Array]:
    """Return A, B, C of the blocks side by side, each entry rounded once."""
    with precision(BITS):
        parts = _real_parts(blocks, p, m)
    n = len(parts[0])
    return tuple(  # type: ignore[return-value]
        np.array([[near_ball(x) for x in row] for row in part]).reshape(shape)
        for part, shape in zip(parts, ((n, n), (n, m), (p, n)), strict=True)
    )


def rational_matrices(blocks: Sequence[Block], p: int, m: int) -> tuple[list[list[fmpq]], ...]:
    """Return A, B, C of the blocks as rationals of the working precision."""
    with precision(BITS):
        parts = _real_parts(blocks, p, m)
        return tuple([[exact_value(x) for x in row] for row in part] for part in parts)


def infinite_block(terms: Mapping[int, Any]) -> tuple[tuple[Array, Array, Array], int]:
    """Return N, B, C with sum s^k P_k = C (I - s N)^-1 B for k >= 1, and the McMillan degree of the pole at infinity.

    The coefficients stand for Laurent terms at the origin of 1 / s: P_k of power k + 1, the one of power 1 being zero.

    Parameters
    ----------
    terms : mapping from k to exact [output][input]
    """
    degree = hankel_rank(terms)
    expansion = expansion_of(fmpq(0), {k + 1: matrix for k, matrix in terms.items()})
    block = local_block(expansion, hankel_rank({k + 1: matrix for k, matrix in terms.items()}))
    p, m = len(block.C), len(block.B[0])
    return modal_matrices([block], p, m), degree


def multiplicities(found: Sequence[Root], polynomials: Sequence[fmpq_poly]) -> list[int]:
    """Return how often each root occurs in the product of polynomials, decided exactly.

    Parameters
    ----------
    found : sequence of `Root`
        Roots of one polynomial, each with its squarefree factor.
    """
    counts = []
    shared: dict[tuple[int, int, int], fmpq_poly] = {}
    for root in found:
        at, total = root.at(BITS), 0
        for k, polynomial in enumerate(polynomials):
            order, derived = 0, polynomial
            while derived.degree() > 0:
                key = (id(root.factor), k, order)
                if key not in shared:
                    shared[key] = quotient(root.factor, derived.gcd(root.factor))
                # a root of the squarefree factor is one of the common part unless it is one of the rest
                with precision(BITS):
                    if acb_poly(shared[key])(at).contains(0):
                        break
                total, order, derived = total + 1, order + 1, derived.derivative()
        counts.append(total)
    return counts


def expansion_of(pole: Any, terms: Mapping[int, Any]) -> Expansion:
    """Return the expansion of given residues: [output][input] of exact complex numbers by power."""
    with precision(BITS):
        x, y = complex_fraction(pole)
        k = max(terms)
        some = next(iter(terms.values()))
        zero = [[acb(0) for _ in row] for row in some]
        listed = [
            [[_ball(*complex_fraction(entry)) for entry in row] for row in terms[j]] if j in terms else zero
            for j in range(1, k + 1)
        ]
        return Expansion(_ball(x, y), not y, k, listed)


def _ball(real: fmpq, imaginary: fmpq) -> acb:
    return acb(arb(real).mid(), arb(imaginary).mid())


def hankel_rank(terms: Mapping[int, Any]) -> int:
    """Return the exact rank of the block Hankel matrix of residues given as exact complex numbers."""
    k = max(terms)
    some = next(iter(terms.values()))
    p, m = len(some), len(some[0])
    zero = (fmpq(0), fmpq(0))
    H = [
        [complex_fraction(terms[a + b + 1][i][j]) if a + b + 1 in terms else zero for b in range(k) for j in range(m)]
        for a in range(k)
        for i in range(p)
    ]
    # a complex matrix X + jY as the real [[X, -Y], [Y, X]] of twice the rank
    rows = [[x for x, _ in row] + [-y for _, y in row] for row in H]
    rows += [[y for _, y in row] + [x for x, _ in row] for row in H]
    return int(fmpq_mat(rows).rref()[1]) // 2


def scaled_residue(expansion: Expansion) -> tuple[NDArray[np.complex128], Array]:
    """Return R_1 in doubles with rows and columns divided by powers of two, and the sizes of its entries."""
    table = expansion.terms[0]
    r, c = _units(table)
    values = np.zeros((len(table), len(table[0])), dtype=complex)
    for i, row in enumerate(table):
        for j, entry in enumerate(row):
            scale = arb(power_of_two(-int(r[i] + c[j])))
            values[i, j] = complex(near_ball(entry.real * scale), near_ball(entry.imag * scale))
    return values, np.abs(values)


def _units(table: Table) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return exponents of rows and columns that bring the entries of a matrix near one."""
    sizes = np.array([[size(entry) for entry in row] for row in table], dtype=np.int64)
    present = sizes > NOTHING
    r, c = np.zeros(len(table), dtype=np.int64), np.zeros(len(table[0]), dtype=np.int64)
    for _ in range(3):
        for axis, shift in ((1, r), (0, c)):
            now = np.where(present, sizes - r[:, None] - c[None, :], NOTHING).max(axis=axis)
            shift += np.where(now > NOTHING // 2, now, 0)
    return r, c
