"""Exact polynomials of transfer matrices over all frequencies: singular values, and angles between graphs.

For a transfer matrix P (p outputs, m inputs) let f be its pole polynomial, the least common denominator of all its
minors. f det(rows J of [P; I]), for every choice J of m of the p + m rows, are polynomials without common root: the
coordinates of the graph of P (Pluecker). Everything here is made of them, by the formula of Cauchy and Binet:

- S_k = sum over the k x k minors |f minor|^2, and det(t I - P*P) |f|^2 = sum (-1)^k t^(m-k) S_k: the characteristic
  polynomial of the Hamiltonian matrix of Boyd, Balakrishnan & Kabamba (1989), for all levels at once.
- For two matrices, the squared cosines c of the principal angles between their graphs: sum (-c)^j T_j = 0.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import combinations
from typing import Any, NamedTuple

from flint import fmpq, fmpq_poly

from realize.kernels.exact.polynomials import ONE, ZERO, bilinear_image, quotient, reduce_fraction, stretched
from realize.kernels.exact.positivity import square_modulus

#: [output][input] of (numerator, denominator).
Fractions = Sequence[Sequence[tuple[fmpq_poly, fmpq_poly]]]
Rows = tuple[int, ...]


class Minors(NamedTuple):
    """Pole polynomial f, and f times every minor by (rows, columns), the empty one included."""

    poles: fmpq_poly
    values: dict[tuple[Rows, Rows], fmpq_poly]
    shape: tuple[int, int]

    @property
    def degree(self) -> int:
        """The McMillan degree, poles at infinity included."""
        return max(p.degree() for p in self.values.values())


def minors_of(fractions: Fractions) -> Minors:
    """Return the pole polynomial of a transfer matrix and its multiples of all minors.

    Parameters
    ----------
    fractions : [p][m] of (numerator, denominator)
    """
    p, m = len(fractions), len(fractions[0])
    reduced = [[reduce_fraction(n, d) for n, d in row] for row in fractions]
    if (p, m) == (1, 1):
        n, d = reduced[0][0]
        return Minors(d, {((), ()): d, ((0,), (0,)): n}, (1, 1))
    common = ONE
    for row in reduced:
        for _, d in row:
            if d != common:
                common = common * quotient(d, common.gcd(d))
    N = [[n * quotient(common, d) for n, d in row] for row in reduced]
    raw: dict[tuple[Rows, Rows], fmpq_poly] = {((), ()): ONE}
    parts: dict[tuple[Rows, Rows], tuple[fmpq_poly, fmpq_poly]] = {((), ()): (ONE, ONE)}
    poles = ONE
    for k in range(1, min(p, m) + 1):
        for rows in combinations(range(p), k):
            for columns in combinations(range(m), k):
                value = ZERO
                for j, column in enumerate(columns):
                    rest = raw[rows[1:], columns[:j] + columns[j + 1 :]]
                    term = N[rows[0]][column] * rest
                    value = value - term if j % 2 else value + term
                raw[rows, columns] = value
                n, d = _lowest(value, common, k)
                parts[rows, columns] = (n, d)
                if d != poles:
                    poles = poles * quotient(d, poles.gcd(d))
    values = {key: n if d == poles else n * quotient(poles, d) for key, (n, d) in parts.items()}
    return Minors(poles, values, (p, m))


def _lowest(n: fmpq_poly, common: fmpq_poly, power: int) -> tuple[fmpq_poly, fmpq_poly]:
    """Return n / common^power in lowest terms; a minor of a matrix of order deg(common) has only one power."""
    if not n:
        return ZERO, ONE
    while power > 1:
        whole, rest = divmod(n, common)
        if rest:
            break
        n, power = whole, power - 1
    return reduce_fraction(n, common**power)


def continuous(fractions: Fractions) -> list[list[tuple[fmpq_poly, fmpq_poly]]]:
    """Return fractions in z = (1 + s) / (1 - s) as fractions in s."""
    result = []
    for row in fractions:
        images = []
        for n, d in row:
            degree = max(n.degree(), d.degree(), 0)
            images.append((bilinear_image(n, degree) if n else ZERO, bilinear_image(d, degree)))
        result.append(images)
    return result


def in_units(fractions: Fractions, unit: fmpq) -> list[list[tuple[fmpq_poly, fmpq_poly]]]:
    """Return fractions in s / unit."""
    return [[(stretched(n, unit), stretched(d, unit)) for n, d in row] for row in fractions]


def gain_squares(minors: Minors) -> list[fmpq_poly]:
    """Return S_0 to S_q in x = w^2."""
    q = min(minors.shape)
    totals = [ZERO] * (q + 1)
    for (rows, _), value in minors.values.items():
        if value:
            totals[len(rows)] = totals[len(rows)] + square_modulus(value)
    return totals


class Angles(NamedTuple):
    """The angles between two graphs.

    Attributes
    ----------
    cosines : list of polynomials
        T_0 to T_m in x: the squared cosines c of the m angles solve sum (-c)^j T_j = 0.
    closed : polynomial
        f_1 f_2 det(I + ...) of both: its roots are those of the closed loop.
    degrees : (int, int)
        McMillan degrees of both.
    """

    cosines: list[fmpq_poly]
    closed: fmpq_poly
    degrees: tuple[int, int]

    @property
    def sines(self) -> list[fmpq_poly]:
        """S_0 to S_m with sum (-1)^k t^(m-k) S_k = 0 for the squared sines t."""
        m = len(self.cosines) - 1
        # t = 1 - c: sum_j (t - 1)^j T_j, expanded
        totals = [ZERO] * (m + 1)
        for j, T in enumerate(self.cosines):
            power = fmpq_poly([-1, 1]) ** j
            for k, c in enumerate(power.coeffs()):
                totals[k] = totals[k] + T * c
        return [totals[m - k] * (-1) ** k for k in range(m + 1)]


def _parity(order: Sequence[int]) -> int:
    return (-1) ** sum(order[i] > order[j] for i in range(len(order)) for j in range(i + 1, len(order)))


def _graph(minors: Minors) -> dict[Rows, fmpq_poly]:
    """Return f det(rows J of [P; I]) for every J of m rows."""
    p, m = minors.shape
    found = {}
    for J in combinations(range(p + m), m):
        rows = tuple(j for j in J if j < p)
        kept = [j - p for j in J if j >= p]
        columns = tuple(c for c in range(m) if c not in kept)
        found[J] = minors.values[rows, columns] * _parity([*columns, *kept])
    return found


def _complement(minors: Minors) -> dict[Rows, fmpq_poly]:
    """Return f det(columns S of [I, -P]) for every S of p columns."""
    p, m = minors.shape
    found = {}
    for S in combinations(range(p + m), p):
        kept = [j for j in S if j < p]
        columns = tuple(j - p for j in S if j >= p)
        rows = tuple(i for i in range(p) if i not in kept)
        found[S] = minors.values[rows, columns] * (_parity([*kept, *rows]) * (-1) ** len(columns))
    return found


def _mirrored(p: fmpq_poly) -> fmpq_poly:
    return fmpq_poly([-c if k % 2 else c for k, c in enumerate(p.coeffs())])


def angles(first: Minors, second: Minors, *, adjoint: bool) -> Angles:
    """Return the angles between the graph of P1 and that of P2.

    With V = [P1; I] and U = [I, -P2]*, whose columns span what is perpendicular to the graph of P2, the sum over all
    choices of p + m rows of [V, U; a V, 0] of the squared determinants is that of its Gram matrix, a polynomial in
    a^2 = -c.

    Parameters
    ----------
    first, second : Minors
        Both of the same shape.
    adjoint : bool
        True: U as it is, for the gap between two plants. False: P2* is analytic, as the transpose of a controller
        K in u = -K y is given: U = [I, -K'].
    """
    (p, m), r = first.shape, sum(first.shape)
    a, b = _graph(first), _complement(second)
    if adjoint:
        b = {S: _mirrored(value) for S, value in b.items()}
    everything = range(r)
    cosines, closed = [], ZERO
    sum_a, sum_b = _total(a.values()), _total(b.values())
    for j in range(m + 1):
        if j == m:
            cosines.append(sum_a * sum_b)
            continue
        total = ZERO
        for lower in combinations(everything, j):
            for upper in combinations(everything, r - j):
                value = ZERO
                for S in combinations(range(r - j), p):
                    rest = [upper[k] for k in range(r - j) if k not in S] + list(lower)
                    if len(set(rest)) < m:
                        continue
                    one, two = a[tuple(sorted(rest))], b[tuple(upper[k] for k in S)]
                    if one and two:
                        value = value + one * two * (_parity(rest) * (-1) ** sum(S))
                if not value:
                    continue
                total = total + square_modulus(value)
                if j == 0:
                    closed = value
        cosines.append(total)
    return Angles(cosines, closed, (first.degree, second.degree))


def _total(values: Any) -> fmpq_poly:
    total = ZERO
    for value in values:
        if value:
            total = total + square_modulus(value)
    return total


def determinant_count(p: int, m: int) -> int:
    """Return how many polynomial products `angles` takes."""
    from math import comb

    r = p + m
    return sum(comb(r, j) * comb(r, r - j) * comb(r - j, p) for j in range(m))


def middle(p: fmpq_poly) -> int:
    """Return the exponent of a power of two near the geometric mean of the roots that are not zero."""
    from realize.kernels.exact.numbers import binary_exponent

    c = p.coeffs()
    low = next((k for k, value in enumerate(c) if value), 0)
    n = len(c) - 1
    return (binary_exponent(c[low]) - binary_exponent(c[n])) // (n - low) if n > low else 0


__all__ = [
    "Angles",
    "Fractions",
    "Minors",
    "angles",
    "continuous",
    "determinant_count",
    "gain_squares",
    "in_units",
    "middle",
    "minors_of",
]
