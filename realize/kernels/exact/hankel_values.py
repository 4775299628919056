"""Hankel singular values of exact rational matrices, every one enclosed to high relative accuracy, in ball arithmetic.

For g = n / d of degree v let p_v + p_(v-1) = d be its parts of even and odd powers and p_(k-1) = p_(k+1) - c_k s p_k
Routh's array. The functions p_k / d, k < v, are orthogonal on the imaginary axis, with squared norms lead(p_k) /
(2 lead(p_(k+1))) [1]_, so that they are input-normal coordinates without any equation being solved. In them the Hankel
operator, with the kernel

    g(t + r)  <->  (n(x) d(y) - n(y) d(x)) / (y - x) = sum M_kl p_k(x) p_l(y),

is a matrix that follows from the last column by the three-term recurrence: v^2 operations. Several inputs and outputs:
one such block a channel, over one common denominator. All that cancels costs bits, and the balls say how many.

The singular values of that matrix: a Cholesky factor of M'M with complete pivoting, in balls, is graded; one-sided
Jacobi rotations V of its columns, each column in a unit of its own, are found in doubles; and balls certify what
doubles have found. With Z = M V, S = diag(|z_j|), S^-1 Z'Z S^-1 = I + E and V'V = I + F every squared singular value is
that of S within (1 + e) / (1 - f), e and f the norms of E and F [2]_.

.. [1] K. J. Astrom, Introduction to Stochastic Control Theory, Academic Press, 1970, section 5.2 (from memory).
.. [2] A. M. Ostrowski, A quantitative formulation of Sylvester's law of inertia, Proc. Nat. Acad. Sci. 45 (1959)
       740-744; J. Demmel, K. Veselic, Jacobi's method is more accurate than QR, SIAM J. Matrix Anal. Appl. 13 (1992)
       1204-1245 (both from memory).
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np
from flint import arb, arb_mat, fmpq_poly

from realize.kernels.exact.numbers import precision, scaled_ball
from realize.kernels.exact.polynomials import ONE, quotient, reduce_fraction
from realize.kernels.jacobi import orthogonal_columns

#: [output][input] of (numerator, denominator).
Fractions = Sequence[Sequence[tuple[fmpq_poly, fmpq_poly]]]
Rows = list[list[arb]]

#: Relative error of the values that is asked for, and the most bits that are tried for it.
TARGET, MOST_BITS = 1e-13, 1 << 15
#: Bits of the products that certify what doubles have found: nothing cancels there.
CERTIFICATE_BITS = 192
#: Bits per degree that the recurrences were seen to lose, to start with.
BITS_PER_DEGREE = 12
#: How often rotations are repeated on what the certificate leaves.
ROUNDS = 3


class Values(NamedTuple):
    """Hankel singular values, decreasing, as balls; all of them within ``relative`` of their midpoints."""

    balls: list[arb]
    relative: float


class NotStable(ValueError):
    """A denominator has a root that is not in the open left half-plane."""


def common_parts(fractions: Fractions) -> tuple[list[list[fmpq_poly]], fmpq_poly]:
    """Return the numerators of the strictly proper parts over their least common denominator, and that one, monic."""
    reduced = [[reduce_fraction(n % d if d.degree() > 0 else fmpq_poly([]), d) for n, d in row] for row in fractions]
    common = ONE
    for row in reduced:
        for n, d in row:
            if n and d != common:
                common = common * quotient(d, common.gcd(d))
    lead = common.leading_coefficient()
    return [[n * quotient(common, d) / lead if n else n for n, d in row] for row in reduced], common / lead


def first_bits(degree: int) -> int:
    """Return the precision (bits) that is tried first for a common denominator of that degree."""
    return 128 + BITS_PER_DEGREE * degree


def hankel_values(fractions: Fractions, order: int, most_bits: int = MOST_BITS) -> Values | None:
    """Return the Hankel singular values of a stable rational matrix in s, all that are not zero.

    Parameters
    ----------
    fractions : [p][m] of (numerator, denominator)
        In s; the parts that are not strictly proper do not matter. For a sampled model the image under
        z = (1 + s) / (1 - s), which has the same values.
    order : int
        The McMillan degree of the strictly proper part: how many values are not zero. What a degree that is too small
        leaves out is added to the errors.
    most_bits : int
        Where to give up.

    Returns
    -------
    Values or None
        None if that many bits do not suffice.

    Raises
    ------
    NotStable
        If a pole has a real part that is positive or zero, as far as balls tell.
    """
    if order == 0:
        return Values([], 0.0)
    numerators, d = common_parts(fractions)
    bits = first_bits(d.degree())
    while bits <= most_bits:
        with precision(bits):
            found = _values(numerators, d, order)
        if found is not None:
            return found
        bits *= 2
    return None


def _values(numerators: list[list[fmpq_poly]], d: fmpq_poly, order: int) -> Values | None:
    basis = _routh(d)
    if basis is None:
        return None
    if len(numerators) < len(numerators[0]):
        numerators = [list(column) for column in zip(*numerators, strict=True)]
    blocks = [[_operator(n, basis) for n in row] for row in numerators]
    v, p, m = d.degree(), len(blocks), len(blocks[0])
    M = arb_mat([[blocks[i][j][k][x] for j in range(m) for x in range(v)] for i in range(p) for k in range(v)])
    first = _cholesky((M.transpose() * M).tolist(), order)
    if first is None:
        return None
    factor = arb_mat(first[0])
    second = _cholesky((factor * factor.transpose()).tolist(), order)
    if second is None:
        return None
    found = _certified(arb_mat(second[0]).transpose())
    if found is None or first[1].is_zero():
        return found
    # M'M = R'R + rest, the rest positive semidefinite: squares grow by at most its trace
    with precision(CERTIFICATE_BITS):
        balls = [ball.union((ball * ball + first[1]).sqrt()) for ball in found.balls]
    relative = max(_relative(ball) for ball in balls)
    return Values(balls, relative) if relative <= TARGET else None


class _Basis(NamedTuple):
    """Routh's array: polynomials as coefficient lists by steps of two, multipliers c, and norms of p_k / d."""

    polynomials: Rows
    multipliers: list[arb]
    norms: list[arb]


def _routh(d: fmpq_poly) -> _Basis | None:
    """Return Routh's array of a monic d for p_0 .. p_(v-1); None where balls cannot tell signs."""
    v = d.degree()
    c = [arb(value) for value in d.coeffs()]
    # p_k as coefficients of s^k, s^(k-2), ...
    upper, lower = c[v::-2], c[v - 1 :: -2] if v else []
    polynomials: Rows = []
    multipliers: list[arb] = []
    norms: list[arb] = []
    for k in range(v - 1, -1, -1):
        pivot = lower[0]
        if not pivot > 0:
            if pivot < 0 or pivot.is_zero():
                raise NotStable("a root that is not in the open left half-plane")
            return None
        factor = upper[0] / pivot
        polynomials.append(lower)
        multipliers.append(factor)
        norms.append((1 / (2 * factor)).sqrt())
        if k:
            rest = [upper[i] - factor * lower[i] if i < len(lower) else upper[i] for i in range(1, len(upper))]
            upper, lower = lower, rest
    return _Basis(polynomials[::-1], multipliers[::-1], norms[::-1])


def _operator(n: fmpq_poly, basis: _Basis) -> Rows:
    """Return the matrix of the Hankel operator of n / d in the orthonormal functions of Routh's array."""
    v = len(basis.norms)
    zero = arb(0)
    if not n:
        return [[zero] * v for _ in range(v)]
    rest = [arb(c) for c in n.coeffs()] + [zero] * (v - len(n.coeffs()))
    share = [zero] * v
    for k in range(v - 1, -1, -1):
        p = basis.polynomials[k]
        share[k] = rest[k] / p[0]
        for i in range(1, len(p)):
            rest[k - 2 * i] -= share[k] * p[i]
    c = basis.multipliers
    columns: list[list[arb]] = [[]] * v
    # entries divided by the multiplier of their column: T_kl = M_kl / c_l
    columns[v - 1] = share
    after = [zero] * v
    for col in range(v - 1, 0, -1):
        here = columns[col]
        fresh = []
        for k in range(v):
            value = after[k]
            if k:
                value = value + here[k - 1] * (c[col] / c[k - 1])
            if k + 1 < v:
                value = value - here[k + 1] * (c[col] / c[k + 1])
            fresh.append(value)
        if col == v - 1:
            fresh = [value + share[k] for k, value in enumerate(fresh)]
        fresh[v - 1] -= share[col]
        columns[col - 1], after = fresh, here
    return [[columns[x][k] * c[x] * basis.norms[k] * basis.norms[x] for x in range(v)] for k in range(v)]


def _cholesky(H: Rows, order: int) -> tuple[Rows, arb] | None:
    """Return the first rows R of H = R'R with complete pivoting, columns in their old places, and what is left over.

    The trace of H - R'R, from above. None where the balls have no digits left.
    """
    size = len(H)
    rest = [H[k][k] for k in range(size)]
    left = list(range(size))
    rows: Rows = []
    zero = arb(0)
    for _ in range(order):
        j = max(left, key=lambda k: _size(rest[k]))
        pivot = rest[j]
        if not pivot > 0 or pivot.rel_accuracy_bits() < 80:
            return None
        root = pivot.sqrt()
        left.remove(j)
        row = [zero] * size
        row[j] = root
        column = H[j]
        weights = [(r, r[j]) for r in rows if not r[j].is_zero()]
        for k in left:
            value = column[k]
            for r, w in weights:
                value = value - r[k] * w
            value = value / root
            row[k] = value
            rest[k] = rest[k] - value * value
        rows.append(row)
    over = arb(0)
    for k in left:
        if rest[k] > 0 and rest[k].rel_accuracy_bits() > 2:
            return None
        over += abs(rest[k]).upper()
    return rows, over.upper()


def _size(ball: arb) -> tuple[int, float]:
    m, e = scaled_ball(ball)
    return (e, m) if m > 0 else (-(1 << 62), m)


def _certified(M: arb_mat) -> Values | None:
    """Return the singular values of a square matrix with graded columns, certified, or None."""
    n = M.ncols()
    with precision(CERTIFICATE_BITS):
        Z, V = M, None
        best: Values | None = None
        for _ in range(ROUNDS):
            pairs = [[scaled_ball(entry) for entry in row] for row in Z.tolist()]
            mantissa = np.array([[m for m, _ in row] for row in pairs])
            exponent = np.array([[e for _, e in row] for row in pairs], dtype=np.int64)
            exponent[mantissa == 0] = -(1 << 40)
            units = exponent.max(axis=0)
            columns = np.ldexp(mantissa, np.clip(exponent - units, -1100, 0).astype(np.int32))
            turned = orthogonal_columns(columns, units)
            own = arb_mat(
                [[arb(float(turned[i, j])) * arb(2) ** int(units[j] - units[i]) for j in range(n)] for i in range(n)]
            )
            Z, V = Z * own, own if V is None else V * own
            found = _bound(Z, V)
            if found is not None and (best is None or found.relative < best.relative):
                best = found
            if best is not None and best.relative <= TARGET / 4:
                break
        return best if best is not None and best.relative <= TARGET else None


def _bound(Z: arb_mat, V: arb_mat) -> Values | None:
    n = Z.ncols()
    gram, plain = (Z.transpose() * Z).tolist(), (V.transpose() * V).tolist()
    squares = [gram[k][k] for k in range(n)]
    if not all(square > 0 for square in squares):
        return None
    sizes = [square.sqrt() for square in squares]
    e = f = arb(0)
    for i in range(n):
        row = turn = arb(0)
        for j in range(n):
            if i != j:
                row += abs(gram[i][j] / (sizes[i] * sizes[j]))
            turn += abs(plain[i][j] - (1 if i == j else 0))
        e, f = e.max(row.abs_upper()), f.max(turn.abs_upper())
    if not (e < 0.5 and f < 0.5):
        return None
    high, low = ((1 + e) / (1 - f)).sqrt().abs_upper(), ((1 - e) / (1 + f)).sqrt().abs_lower()
    ordered = sorted(sizes, key=_size, reverse=True)
    balls = [_hull(size * low, size * high) for size in ordered]
    relative = max(_relative(ball) for ball in balls)
    return Values(balls, relative)


def _hull(low: arb, high: arb) -> arb:
    return low.union(high)


def _relative(ball: arb) -> float:
    ratio: Any = (ball.rad() / abs(ball).abs_lower()).abs_upper()
    return float(ratio) * (1 + 2.0**-40)
