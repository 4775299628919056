"""H2 norm and Hankel norm of exact rational functions."""

from __future__ import annotations

import math
from collections.abc import Sequence

from flint import arb, fmpq, fmpq_poly

from realize.kernels.exact.numbers import binary_exponent, power_of_two, precision
from realize.kernels.exact.polynomials import reduce_fraction, stretched
from realize.kernels.exact.roots import inside_left_half_plane


def _mirrored(p: fmpq_poly) -> fmpq_poly:
    """Return p(-s)."""
    return fmpq_poly([-c if k % 2 else c for k, c in enumerate(p.coeffs())])


def _inverse(p: fmpq_poly, modulus: fmpq_poly) -> fmpq_poly:
    """Return the inverse of p modulo a polynomial without common root."""
    g, u, _ = (p % modulus).xgcd(modulus)
    if g.degree() != 0:
        raise ZeroDivisionError("a common root")
    return u / g[0]


#: First precision (bits), accuracy asked of the norm, and the precision from which roots are counted for stability.
FIRST_BITS, NORM_BITS, COUNT_BITS = 128, 64, 1 << 14


def squared_h2(numerators: Sequence[fmpq_poly], denominator: fmpq_poly) -> arb | None:
    """Return the sum over the channels of (1 / 2 pi) times the integral over all w of |n(jw) / d(jw)|^2, as a ball.

    The recursion of [1]_: Routh's array of d, with n reduced along by its odd rows; the integral is
    sum b_k^2 / (2 a_k), and the denominator is stable if and only if all a_k are positive. In ball arithmetic of rising
    precision. None if a root of d is not in the open left half-plane.

    Parameters
    ----------
    numerators : sequence of polynomials
        Of lower degree than the denominator.
    denominator : polynomial

    References
    ----------
    .. [1] K. J. Astrom, Introduction to Stochastic Control Theory, Academic Press, 1970, section 5.2.
    """
    degree = denominator.degree()
    if degree < 1:
        return arb(0)
    bits, counted = FIRST_BITS, False
    while True:
        with precision(bits):
            total, stable = _recursion(numerators, denominator)
        if stable is False:
            return None
        if stable and (total.is_zero() or total.rel_accuracy_bits() >= NORM_BITS):
            return total
        bits *= 2
        if bits >= COUNT_BITS and not stable and not counted:
            if inside_left_half_plane(denominator) < degree:
                return None
            counted = True


def _recursion(numerators: Sequence[fmpq_poly], denominator: fmpq_poly) -> tuple[arb, bool | None]:
    """Return the integral, and whether the denominator is stable (None where the balls do not tell)."""
    degree = denominator.degree()
    lead = denominator.leading_coefficient()
    a = [arb(c / lead) for c in reversed(denominator.coeffs())]
    rows = []
    for n in numerators:
        c = n.coeffs()
        rows.append([arb(value / lead) for value in reversed(c + [fmpq(0)] * (degree - len(c)))])
    total = arb(0)
    for k in range(degree, 0, -1):
        pivot = a[1]
        if not pivot > 0:
            return total, False if pivot < 0 or pivot.is_zero() else None
        ratio = a[0] / pivot
        for b in rows:
            if not b[0].is_zero():
                share = b[0] / pivot
                total += share * share / (2 * ratio)
                for i in range(2, k, 2):
                    b[i] = b[i] - share * a[i + 1]
            del b[0]
        a = [a[1]] + [
            (a[i + 1] - ratio * a[i + 2] if i + 2 <= k else a[i + 1]) if i % 2 else a[i + 1] for i in range(1, k)
        ]
    return total, True


def hankel_polynomial(n: fmpq_poly, d: fmpq_poly) -> fmpq_poly:
    """Return the polynomial whose roots are plus or minus the Hankel singular values of n / d.

    n(s) p(s) = t d(-s) p(-s) + d(s) q(s) has a solution p of lower degree than d for each of these numbers t [1]_: they
    are the eigenvalues of p -> (n / d(-s)) p modulo d followed by s -> -s, a rational matrix.

    Parameters
    ----------
    n, d : polynomials
        Coprime; d with all roots in the open left half-plane; the direct term does not matter.

    References
    ----------
    .. [1] P. A. Fuhrmann, A polynomial approach to Hankel norm and balanced approximations, Linear Algebra and its
           Applications 146 (1991) 133-220.
    """
    from flint import fmpq_mat

    degree = d.degree()
    u = (n % d) * _inverse(_mirrored(d), d) % d
    rows = []
    column = u
    for _ in range(degree):
        c = column.coeffs()
        c = c + [fmpq(0)] * (degree - len(c))
        rows.append([-value if k % 2 else value for k, value in enumerate(c)])
        column = column * fmpq_poly([0, 1]) % d
    return fmpq_mat(rows).transpose().charpoly()


def hankel_norm(n: fmpq_poly, d: fmpq_poly) -> tuple[float, float]:
    """Return the largest Hankel singular value of a stable n / d, rounded down, and the distance to the next double.

    All roots t of the `hankel_polynomial` are real: they are below g if all coefficients in t - g are positive.
    Bisection between the root mean square of the roots and its multiple by the root of their number.
    """
    n, d = reduce_fraction(n, d)
    if d.degree() < 1 or not n % d:
        return 0.0, 0.0
    p = hankel_polynomial(n, d)
    degree = p.degree()
    mirrored = _mirrored(p) * (-1) ** degree

    def all_below(g: float) -> bool:
        level = fmpq_poly([fmpq(*g.as_integer_ratio()), 1])
        return all(c > 0 for q in (p, mirrored) for c in q(level).coeffs())

    # in units of a power of two, so that every trial is a double near 1
    second = p[degree - 2] if degree > 1 else fmpq(0)
    squares = p[degree - 1] * p[degree - 1] - 2 * second
    unit = binary_exponent(squares) // 2
    p, mirrored = (stretched(q, power_of_two(unit)) for q in (p, mirrored))
    low, high = 0.25 / degree**0.5, 2.5
    while math.nextafter(low, high) < high:
        middle = (low + high) / 2
        if all_below(middle):
            high = middle
        else:
            low = middle
    try:
        return math.ldexp(low, unit), math.ldexp(high - low, unit)
    except OverflowError:
        return math.inf, 0.0
