"""Smith-McMillan form of an exact transfer matrix, and decoupling zeros of exact state models.

With D the least common denominator of the entries and N = D G, the determinantal divisor Delta_k is the greatest
common divisor of all minors of N of order k; the invariant polynomials are Delta_k / Delta_(k-1), and each one over D,
reduced, is epsilon_k / psi_k. Poles are the roots of the psi_k, transmission zeros those of the epsilon_k. At infinity
the least relative degree v_k of the minors of order k takes the place of the divisor: the orders are v_k - v_(k-1), a
zero where positive, a pole where negative.

Where there are too many minors, determinants of a few random combinations of rows and columns (Cauchy and Binet) have
the same greatest common divisor unless the drawn integers satisfy an equation, which has a probability of about 1e-9.
"""

from __future__ import annotations

import random
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from itertools import combinations
from math import comb

from flint import fmpq, fmpq_mat, fmpq_poly

from realize.kernels.exact.numbers import fraction
from realize.kernels.exact.polynomials import ONE, ZERO, product, quotient, reduce_fraction
from realize.kernels.exact.states import Ratios, transfer_matrix

Grid = Sequence[Sequence[tuple[fmpq_poly, fmpq_poly]]]
#: Minors up to which all of them are formed.
MINORS = 700
#: Random combinations whose determinants are compared, and the size of the integers that are drawn.
DRAWS, DRAWN = 3, 1 << 30


@dataclass(frozen=True)
class SmithMcMillan:
    """Smith-McMillan form, diag(epsilon_k / psi_k), and the orders at infinity.

    Attributes
    ----------
    zeros, poles : tuple of monic polynomials
        epsilon_1 .. epsilon_r (each divides the next) and psi_1 .. psi_r (each divides the one before).
    infinite : tuple of int
        Orders at infinity, from the smallest: zeros positive, poles negative.
    proved : bool
        False where random combinations stood in for all minors.
    """

    zeros: tuple[fmpq_poly, ...]
    poles: tuple[fmpq_poly, ...]
    infinite: tuple[int, ...]
    proved: bool

    @property
    def normal_rank(self) -> int:
        """Rank for all s but finitely many."""
        return len(self.zeros)

    @cached_property
    def zero_polynomial(self) -> fmpq_poly:
        """Monic polynomial of the finite transmission zeros with their multiplicities."""
        return product(list(self.zeros))

    @cached_property
    def pole_polynomial(self) -> fmpq_poly:
        """Monic polynomial of the finite poles with their multiplicities."""
        return product(list(self.poles))

    @property
    def zeros_at_infinity(self) -> tuple[int, ...]:
        """Orders of the zeros at infinity."""
        return tuple(order for order in self.infinite if order > 0)

    @property
    def poles_at_infinity(self) -> tuple[int, ...]:
        """Orders of the poles at infinity."""
        return tuple(-order for order in self.infinite if order < 0)

    @property
    def degree(self) -> int:
        """McMillan degree, poles at infinity included."""
        return self.pole_polynomial.degree() + sum(self.poles_at_infinity)


def smith_mcmillan(grid: Grid) -> SmithMcMillan:
    """Return the Smith-McMillan form of a transfer matrix.

    Parameters
    ----------
    grid : p lists of m pairs (numerator, denominator)

    References
    ----------
    .. [1] B. McMillan, Introduction to formal realizability theory, Bell System Technical Journal 31 (1952) 217-279 and
           541-600.
    .. [2] T. Kailath, Linear Systems, Prentice-Hall 1980, sections 6.3.3 and 6.5 (from memory).
    """
    p, m = len(grid), len(grid[0]) if grid else 0
    pairs = [[reduce_fraction(n, d) for n, d in row] for row in grid]
    common = ONE
    for row in pairs:
        for _, d in row:
            common = common * quotient(d, common.gcd(d))
    N = [[n * quotient(common, d) for n, d in row] for row in pairs]
    smaller = min(p, m)
    proved = sum(comb(p, k) * comb(m, k) for k in range(1, smaller + 1)) <= MINORS
    divisors, degrees = _divisors(N) if proved else _drawn_divisors(N)
    zeros, poles, infinite = [], [], []
    last, v = ONE, 0
    for k, (divisor, degree) in enumerate(zip(divisors, degrees, strict=True), start=1):
        epsilon, psi = reduce_fraction(quotient(divisor, last), common)
        zeros.append(epsilon / epsilon.leading_coefficient())
        poles.append(psi)
        now = k * common.degree() - degree
        infinite.append(now - v)
        last, v = divisor, now
    return SmithMcMillan(tuple(zeros), tuple(poles), tuple(infinite), proved)


def _divisors(N: list[list[fmpq_poly]]) -> tuple[list[fmpq_poly], list[int]]:
    """Return the monic divisors of order 1, 2, ... up to the normal rank, and the largest degree of such a minor."""
    p, m = len(N), len(N[0]) if N else 0
    minors: dict[tuple[tuple[int, ...], tuple[int, ...]], fmpq_poly] = {((), ()): ONE}
    divisors, degrees = [], []
    for k in range(1, min(p, m) + 1):
        found = {}
        for rows in combinations(range(p), k):
            top, rest = rows[0], rows[1:]
            for columns in combinations(range(m), k):
                total, sign = ZERO, 1
                for c, column in enumerate(columns):
                    below = minors.get((rest, (*columns[:c], *columns[c + 1 :])))
                    if below is not None and N[top][column]:
                        total += sign * N[top][column] * below
                    sign = -sign
                if total:
                    found[rows, columns] = total
        if not found:
            break
        minors = found
        divisors.append(_common(list(found.values())))
        degrees.append(max(minor.degree() for minor in found.values()))
    return divisors, degrees


def _common(polynomials: list[fmpq_poly]) -> fmpq_poly:
    """Return the monic greatest common divisor."""
    whole = ZERO
    for polynomial in sorted(polynomials, key=lambda q: q.degree()):
        whole = whole.gcd(polynomial)
        if whole.degree() == 0:
            break
    return whole / whole.leading_coefficient() if whole else whole


def _drawn_divisors(N: list[list[fmpq_poly]]) -> tuple[list[fmpq_poly], list[int]]:
    """Return the same as `_divisors` from determinants of random combinations of rows and columns."""
    draw = random.Random(1952)
    p, m = len(N), len(N[0])
    divisors: list[fmpq_poly] = []
    degrees: list[int] = []
    for k in range(1, min(p, m) + 1):
        found = []
        for _ in range(DRAWS):
            left = [[draw.randint(1, DRAWN) for _ in range(p)] for _ in range(k)]
            right = [[draw.randint(1, DRAWN) for _ in range(k)] for _ in range(m)]
            half = [[sum((w * N[i][j] for i, w in enumerate(row)), ZERO) for j in range(m)] for row in left]
            mixed = [[sum((line[j] * right[j][c] for j in range(m)), ZERO) for c in range(k)] for line in half]
            found.append(determinant(mixed))
        if not any(found):
            break
        divisors.append(_common([minor for minor in found if minor]))
        degrees.append(max(minor.degree() for minor in found))
    return divisors, degrees


def determinant(matrix: list[list[fmpq_poly]]) -> fmpq_poly:
    """Return the determinant of a polynomial matrix by fraction-free elimination (Bareiss 1968)."""
    work = [list(row) for row in matrix]
    k, sign, last = len(work), 1, ONE
    for step in range(k):
        pivots = [i for i in range(step, k) if work[i][step]]
        if not pivots:
            return ZERO
        best = min(pivots, key=lambda i: work[i][step].degree())
        if best != step:
            work[step], work[best], sign = work[best], work[step], -sign
        for i in range(step + 1, k):
            for j in range(step + 1, k):
                value = work[step][step] * work[i][j] - work[i][step] * work[step][j]
                work[i][j] = quotient(value, last)
        last = work[step][step]
    return sign * last if k else ONE


@dataclass(frozen=True)
class Decoupling:
    """Monic polynomials of the modes that no input reaches, that no output sees, and of those that are both."""

    input: fmpq_poly
    output: fmpq_poly
    both: fmpq_poly


def decoupling_polynomials(
    A: Ratios, B: Ratios, C: Ratios, D: Ratios, E: Ratios | None, form: SmithMcMillan
) -> tuple[Decoupling, fmpq_poly]:
    """Return the finite decoupling zeros of a state model, and the polynomial of its finite invariant zeros.

    Modes that no input reaches stay where they are under any state feedback: they are the common divisor of
    det(sE - A - B K) for a few K; output injection does the same for modes that no output sees. The number that are
    both follows from det(sE - A) = psi id od / iod with the pole polynomial psi of the transfer matrix. Invariant zeros
    are the common divisor of the largest nonzero minors of [A - sE, B; C, D], taken from random combinations of its
    rows and columns where it is not square and regular.

    Parameters
    ----------
    A, E : n x n; B : n x m; C : p x n; D : p x m, nested lists of integer ratios
    form : SmithMcMillan
        Of the transfer matrix.

    References
    ----------
    .. [1] H. H. Rosenbrock, State-space and Multivariable Theory, Nelson 1970 (from memory).
    .. [2] A. G. J. MacFarlane, N. Karcanias, Poles and zeros of linear multivariable systems, International Journal of
           Control 24 (1976) 33-74 (from memory).
    """
    system = _System(_rational(A), _rational(B), _rational(C), _rational(D), E)
    modes = system.characteristic()
    if modes.degree() == form.pole_polynomial.degree():
        return Decoupling(ONE, ONE, ONE), form.zero_polynomial
    draw = random.Random(1970)
    unreached = _common([modes, *(system.closed(draw, True, False).characteristic() for _ in range(DRAWS - 1))])
    unseen = _common([modes, *(system.closed(draw, False, True).characteristic() for _ in range(DRAWS - 1))])
    both = quotient(form.pole_polynomial * unreached * unseen, modes)
    r, p, m = form.normal_rank, len(D), len(D[0]) if D else 0
    if p == m == r:
        invariant = quotient(modes * form.zero_polynomial, form.pole_polynomial)
    else:
        invariant = _common([system.reduced(draw, r).determinant() for _ in range(DRAWS)])
    return Decoupling(unreached, unseen, both / both.leading_coefficient()), invariant


@dataclass(frozen=True)
class _System:
    """A state model over the rationals, with random feedback and combinations of its signals."""

    A: list[list[fmpq]]
    B: list[list[fmpq]]
    C: list[list[fmpq]]
    D: list[list[fmpq]]
    E: Ratios | None

    def characteristic(self) -> fmpq_poly:
        """Return the monic det(sE - A)."""
        found = transfer_matrix(self.A, [[] for _ in self.A], [], [], self.E)[1]
        return found / found.leading_coefficient()

    def closed(self, draw: random.Random, inputs: bool, outputs: bool) -> _System:
        """Return the system with A + B K + L C in place of A, K and L drawn."""
        n = len(self.A)
        A = fmpq_mat(n, n, [x for row in self.A for x in row])
        if inputs and self.B and self.B[0]:
            A += _matrix(self.B) * _drawn(draw, len(self.B[0]), n)
        if outputs and self.C:
            A += _drawn(draw, n, len(self.C)) * _matrix(self.C)
        return _System(A.tolist(), self.B, self.C, self.D, self.E)

    def reduced(self, draw: random.Random, r: int) -> _System:
        """Return r inputs and outputs, the others added to states and signals with drawn weights."""
        n = len(self.A)
        rows = [a + b for a, b in zip(self.A, self.B, strict=True)]
        rows += [c + d for c, d in zip(self.C, self.D, strict=True)]
        P = _matrix(rows)
        for _ in range(2):
            # rows first, then columns of the transpose
            kept = n + r
            if P.nrows() > kept:
                table = P.tolist()
                mixed = _matrix(table[:kept]) + _drawn(draw, kept, P.nrows() - kept) * _matrix(table[kept:])
                P = mixed
            P = P.transpose()
        table = P.tolist()
        return _System(
            [row[:n] for row in table[:n]],
            [row[n:] for row in table[:n]],
            [row[:n] for row in table[n:]],
            [row[n:] for row in table[n:]],
            self.E,
        )

    def determinant(self) -> fmpq_poly:
        """Return det [sE - A, -B; C, D] of a square system, as det(sE - A) det G."""
        if not self.D:
            return self.characteristic()
        numerators, modes = transfer_matrix(self.A, self.B, self.C, self.D, self.E)
        found = determinant(numerators)
        for _ in range(len(self.D) - 1):
            found = quotient(found, modes)
        return found


def _rational(rows: Ratios) -> list[list[fmpq]]:
    return [[fraction(x) for x in row] for row in rows]


def _matrix(rows: list[list[fmpq]]) -> fmpq_mat:
    return fmpq_mat(len(rows), len(rows[0]) if rows else 0, [x for row in rows for x in row])


def _drawn(draw: random.Random, rows: int, columns: int) -> fmpq_mat:
    return fmpq_mat(rows, columns, [fmpq(draw.randint(1, DRAWN)) for _ in range(rows * columns)])
