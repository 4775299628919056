"""Exact polynomials: from coefficients, roots, sections and partial fractions; common factors cancelled."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

from flint import fmpq, fmpq_poly, fmpz_poly, nmod_poly

from realize.kernels.exact.numbers import Ratio, complex_fraction, fraction, prime

#: The polynomials 0, 1 and the variable.
ZERO = fmpq_poly([])
ONE = fmpq_poly([1])
VARIABLE = fmpq_poly([0, 1])
#: A complex rational: (real part, imaginary part).
Complex = tuple[fmpq, fmpq]


def polynomial(ratios: Sequence[Ratio]) -> fmpq_poly:
    """Return the polynomial with coefficients given as integer ratios, highest power first; [] is zero."""
    return fmpq_poly([fraction(ratio) for ratio in reversed(ratios)])


def coefficients(p: fmpq_poly) -> list[fmpq]:
    """Return the coefficients, highest power first, leading zeros left out; [0] for the zero polynomial."""
    return list(reversed(p.coeffs())) or [fmpq(0)]


def quotient(p: fmpq_poly, q: fmpq_poly) -> fmpq_poly:
    """Return p / q where q divides p."""
    whole, rest = divmod(p, q)
    if rest:
        raise ArithmeticError("the division leaves a rest")
    return whole


def monic(p: fmpq_poly) -> fmpq_poly:
    """Return a polynomial divided by its leading coefficient; zero stays zero."""
    return p / p.leading_coefficient() if p else p


def gcd(p: fmpq_poly, q: fmpq_poly) -> fmpq_poly:
    """Return the monic greatest common divisor; of 0 and 0 it is 0."""
    return p.gcd(q)


def coprime(p: fmpq_poly, q: fmpq_poly) -> bool:
    """Return True only if two polynomials have no common factor: they have none modulo a prime that divides no leader.

    False where a factor in common was not ruled out that way.
    """
    modulus = prime(0)
    images = []
    for one in (p, q):
        c = [int(value) % modulus for value in one.numer().coeffs()]
        if not c or not c[-1]:
            return False
        images.append(nmod_poly(c, modulus))
    return bool(images[0].gcd(images[1]).degree() == 0)


def reduce_fraction(n: fmpq_poly, d: fmpq_poly) -> tuple[fmpq_poly, fmpq_poly]:
    """Return the same fraction with the common factors cancelled and a monic denominator; zero is 0 / 1.

    Raises
    ------
    ZeroDivisionError
        If the denominator is zero.
    """
    if not d:
        raise ZeroDivisionError("the denominator is identically zero")
    if not n:
        return ZERO, ONE
    if not coprime(n, d):
        common = n.gcd(d)
        if common.degree() > 0:
            n, d = quotient(n, common), quotient(d, common)
    lead = d.leading_coefficient()
    return n / lead, d / lead


def squarefree(p: fmpq_poly) -> list[tuple[fmpq_poly, int]]:
    """Return the monic squarefree factors with their multiplicities, p = lead * prod f^m, by rising multiplicity.

    Factors of equal multiplicity are one polynomial; constants have none. Yun's algorithm over the integers.
    """
    if p.degree() < 1:
        return []
    _, factors = fmpz_poly(p.numer().coeffs()).factor_squarefree()
    if len(factors) == 1:
        return [(monic(fmpq_poly(factors[0][0])), factors[0][1])]
    found: dict[int, fmpq_poly] = {}
    for f, m in factors:
        found[m] = found.get(m, ONE) * monic(fmpq_poly(f))
    return [(found[m], m) for m in sorted(found) if found[m].degree() > 0]


def derivative(p: fmpq_poly) -> fmpq_poly:
    """Return the derivative."""
    return p.derivative()


def even_odd(p: fmpq_poly) -> tuple[fmpq_poly, fmpq_poly]:
    """Return e, o with p(s) = e(s^2) + s o(s^2)."""
    c = p.coeffs()
    return fmpq_poly(c[0::2]), fmpq_poly(c[1::2])


def in_square(h: fmpq_poly) -> fmpq_poly:
    """Return h(s^2)."""
    c = [fmpq(0)] * max(2 * h.length() - 1, 0)
    c[0::2] = h.coeffs()
    return fmpq_poly(c)


def shifted(p: fmpq_poly, by: fmpq) -> fmpq_poly:
    """Return p(s + by)."""
    return p(fmpq_poly([by, 1])) if by else p


def stretched(p: fmpq_poly, by: fmpq) -> fmpq_poly:
    """Return p(by * s)."""
    power, scaled_coefficients = fmpq(1), []
    for c in p.coeffs():
        scaled_coefficients.append(c * power)
        power *= by
    return fmpq_poly(scaled_coefficients)


def reversed_polynomial(p: fmpq_poly, degree: int | None = None) -> fmpq_poly:
    """Return s^degree p(1/s); the degree is the polynomial's own unless given."""
    c = p.coeffs()
    degree = len(c) - 1 if degree is None else degree
    return fmpq_poly([fmpq(0)] * (degree + 1 - len(c)) + list(reversed(c)))


def bilinear_image(p: fmpq_poly, degree: int | None = None) -> fmpq_poly:
    """Return (1 - s)^degree p((1 + s) / (1 - s)): the unit disk becomes the left half-plane.

    The degree is the polynomial's own unless given; roots at z = -1 go to infinity (the degree drops).
    """
    c = p.coeffs()
    degree = len(c) - 1 if degree is None else degree
    c = c + [fmpq(0)] * (degree + 1 - len(c))
    minus = fmpq_poly([1, -1])
    # with z = -1 + 2 / (1 - s): a Taylor shift to z = -1, then the reversed polynomial in (1 - s) / 2
    taylor = shifted(fmpq_poly(c), fmpq(-1)).coeffs()
    taylor = taylor + [fmpq(0)] * (degree + 1 - len(taylor))
    power = 1
    for k in range(degree + 1):
        taylor[k] *= power
        power *= 2
    return fmpq_poly(list(reversed(taylor)))(minus)


def product(factors: Sequence[fmpq_poly]) -> fmpq_poly:
    """Return the product of polynomials, by a balanced tree; 1 for none."""
    return _tree(list(factors), lambda a, b: a * b, ONE)


def _tree(items: list[Any], join: Callable[[Any, Any], Any], none: Any) -> Any:
    if not items:
        return none
    while len(items) > 1:
        joined = [join(items[k], items[k + 1]) for k in range(0, len(items) - 1, 2)]
        items = joined + items[len(items) - len(items) % 2 :]
    return items[0]


def quadratic(real: fmpq, imaginary: fmpq) -> fmpq_poly:
    """Return (s - r)(s - conjugate(r)) = s^2 - 2 Re(r) s + |r|^2."""
    return fmpq_poly([real * real + imaginary * imaginary, -2 * real, 1])


def conjugate_pairs(roots: Sequence[Complex]) -> tuple[list[int], list[tuple[int, int]]]:
    """Return the indices of the real members, and the pairs of indices (positive, negative imaginary part).

    Raises
    ------
    ValueError
        If the list is not closed under conjugation.
    """
    real = [k for k, (_, y) in enumerate(roots) if not y]
    waiting: dict[tuple[int, int, int, int], list[int]] = {}
    for k, (x, y) in enumerate(roots):
        if y < 0:
            waiting.setdefault((int(x.p), int(x.q), -int(y.p), int(y.q)), []).append(k)
    pairs = []
    for k, (x, y) in enumerate(roots):
        if y > 0:
            partners = waiting.get((int(x.p), int(x.q), int(y.p), int(y.q)))
            if not partners:
                raise ValueError(f"root {k} lacks its conjugate")
            pairs.append((k, partners.pop(0)))
    left = sorted(k for partners in waiting.values() for k in partners)
    if left:
        raise ValueError(f"root {left[0]} lacks its conjugate")
    return real, pairs


def from_roots(roots: Sequence[Any]) -> fmpq_poly:
    """Return the monic polynomial with exact complex roots, a list closed under conjugation.

    Parameters
    ----------
    roots : sequence of (real, imaginary)
        Each part a rational or an integer ratio; a bare real ratio is accepted.
    """
    values = [complex_fraction(root) for root in roots]
    real, pairs = conjugate_pairs(values)
    factors = [fmpq_poly([-values[k][0], 1]) for k in real]
    return product(factors + [quadratic(*values[k]) for k, _ in pairs])


def from_sections(sections: Sequence[Any], gain: Ratio) -> tuple[fmpq_poly, fmpq_poly]:
    """Return numerator and denominator of gain * prod n_k / d_k, common factors kept.

    Parameters
    ----------
    sections : sequence of (numerator, denominator)
        Coefficients as integer ratios, highest power first.
    """
    n = product([polynomial(section[0]) for section in sections])
    return n * fraction(gain), product([polynomial(section[1]) for section in sections])


def from_partial_fractions(
    poles: Sequence[Any], residues: Sequence[Any], powers: Sequence[int], direct: Sequence[Ratio]
) -> tuple[fmpq_poly, fmpq_poly]:
    """Return n, d with n / d = sum residue_k / (s - pole_k)^power_k + direct(s), exactly, common factors cancelled.

    Parameters
    ----------
    poles, residues : sequence of (real, imaginary)
        Exact complex rationals, closed under conjugation together.
    powers : sequence of int
    direct : sequence of ratios
        Polynomial part, highest power first.

    Raises
    ------
    ValueError
        If conjugate poles do not carry conjugate residues.
    """
    terms: dict[tuple[int, ...], tuple[Complex, dict[int, Complex]]] = {}
    for pole, residue, power in zip(poles, residues, powers, strict=True):
        (x, y), (u, v) = complex_fraction(pole), complex_fraction(residue)
        key = (int(x.p), int(x.q), int(y.p), int(y.q))
        held = terms.setdefault(key, ((x, y), {}))[1]
        a, b = held.get(power, (fmpq(0), fmpq(0)))
        held[power] = (a + u, b + v)
    parts = []
    for (xp, xq, yp, yq), ((x, y), held) in terms.items():
        partner = terms.get((xp, xq, -yp, yq))
        if partner is None or any(partner[1].get(k) != (u, -v) for k, (u, v) in held.items()):
            if any(u or v for u, v in held.values()):
                raise ValueError(f"the term at pole {x} + {y}j lacks its conjugate")
            continue
        if y < 0:
            continue
        top = max(held)
        # Horner's rule in (s - pole): sum residue_k (s - pole)^(top - k), real and imaginary part apart
        re, im = ZERO, ZERO
        for k in range(1, top + 1):
            u, v = held.get(k, (fmpq(0), fmpq(0)))
            re, im = re * (VARIABLE - x) + im * y + u, im * (VARIABLE - x) - re * y + v
        if not y:
            parts.append((re, (VARIABLE - x) ** top))
            continue
        cre, cim = ONE, ZERO
        for _ in range(top):
            cre, cim = cre * (VARIABLE - x) - cim * y, cim * (VARIABLE - x) + cre * y
        # N / (s - r)^top + conjugate = 2 Re(N (s - conj r)^top) / |.|^2 with real s
        parts.append((2 * (re * cre - im * cim), quadratic(x, y) ** top))
    n, d = _tree(parts, lambda a, b: (a[0] * b[1] + b[0] * a[1], a[1] * b[1]), (ZERO, ONE))
    return reduce_fraction(n + polynomial(direct) * d, d)
