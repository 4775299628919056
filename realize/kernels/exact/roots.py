"""Roots of exact polynomials: multiplicities exact, values correctly rounded, axis membership decided exactly."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from functools import lru_cache

from flint import acb, arb, fmpq, fmpq_poly

from realize.kernels.exact.isolation import (
    ISOLATION_BITS,
    Isolated,
    Origin,
    RationalSearch,
    complex_roots,
    integer_polynomial,
    isolate,
)
from realize.kernels.exact.numbers import conjugate, nearest, nearest_ball, precision, scaled_ball, tie
from realize.kernels.exact.polynomials import bilinear_image, even_odd, quotient, shifted, squarefree

#: Relative accuracy (bits) from which a part of a root that has not rounded is tested for an exact tie.
TIE_BITS = 256
#: Past this precision (bits) a part that still does not round is a fault.
FAULT_BITS = 1 << 21


@dataclass(frozen=True)
class Root:
    """A root of an exact polynomial.

    Parameters
    ----------
    value : complex
        Real and imaginary part each correctly rounded; infinite past the range of doubles.
    multiplicity : int
    on_axis : bool
        The root is exactly on the imaginary axis.
    real : bool
        The root is exactly real.
    ball : acb
        Holds this root and no other one, relative accuracy at least 100 bits.
    exact : fmpq or None
        The root if it is rational.
    factor : fmpq_poly
        Squarefree polynomial whose roots all have this multiplicity, this root among them.
    """

    value: complex
    multiplicity: int
    on_axis: bool
    real: bool
    ball: acb
    exact: fmpq | None
    factor: fmpq_poly = field(repr=False, compare=False)
    origin: Origin | None = field(repr=False, compare=False)

    @property
    def scaled(self) -> tuple[tuple[float, int], tuple[float, int]]:
        """Mantissa in [0.5, 1) and binary exponent of real and imaginary part, for values past the range of doubles."""
        return scaled_ball(self.ball.real), scaled_ball(self.ball.imag)

    def at(self, bits: int) -> acb:
        """Return a ball around the root with a relative accuracy of at least so many bits."""
        if self.exact is not None:
            with precision(bits + 8):
                return acb(arb(self.exact))
        if self.ball.rel_accuracy_bits() >= bits or self.origin is None:
            return self.ball
        ball = self.origin.at(bits)
        return conjugate(ball) if self.ball.imag < 0 else ball


def roots(p: fmpq_poly) -> list[Root]:
    """Return the distinct roots of a polynomial, by magnitude, then real part; pairs adjacent, positive part first.

    Squarefree factors first, so that multiplicities are exact; zero, rational and imaginary roots by exact tests; the
    others isolated in balls, which are refined until both parts round to one double. A part exactly halfway between
    two doubles, where that never happens, is found by an exact test and rounded half to even.

    Raises
    ------
    ValueError
        If the polynomial is identically zero.
    """
    if not p:
        raise ValueError("every number is a root of the zero polynomial")
    return list(_known(tuple(int(c) for c in integer_polynomial(p).coeffs())))


@lru_cache(maxsize=32)
def _known(coefficients: tuple[int, ...]) -> tuple[Root, ...]:
    """Return the roots of a primitive integer polynomial, lowest power first; kept for the next who asks."""
    p = fmpq_poly(list(coefficients))
    groups: list[list[Root]] = []
    factors = squarefree(p)
    for factor, multiplicity in factors:
        f = factor
        if not f[0]:
            groups.append([Root(0j, multiplicity, True, True, acb(0), fmpq(0), factor, None)])
            f = fmpq_poly(f.coeffs()[1:])
        if f.degree() < 1:
            continue
        search = RationalSearch(integer_polynomial(f))
        for item in isolate(f):
            groups.append(_rounded(item, f, multiplicity, search))
    if len(factors) > 1:
        groups = _apart(groups)
    return tuple(root for group in sorted(groups, key=_order) for root in group)


def _apart(groups: list[list[Root]]) -> list[list[Root]]:
    """Return the roots with balls that do not meet those of another multiplicity."""
    bits = ISOLATION_BITS
    while True:
        met: set[int] = set()
        for k, first in enumerate(groups):
            for i in range(k):
                if first[0].multiplicity != groups[i][0].multiplicity and first[0].ball.overlaps(groups[i][0].ball):
                    met.update((k, i))
        if not met:
            return groups
        bits *= 2
        for k in met:
            groups[k] = [replace(root, ball=root.at(bits)) for root in groups[k]]


def _order(group: list[Root]) -> tuple[int, float, float, float]:
    first = group[0]
    with precision(ISOLATION_BITS):
        size = abs(first.ball)
    mantissa, exponent = scaled_ball(size)
    if mantissa == 0.0:
        exponent = -(1 << 62)
    return exponent, mantissa, first.value.real, first.value.imag


def _rounded(item: Isolated, f: fmpq_poly, multiplicity: int, search: RationalSearch) -> list[Root]:
    if item.real:
        exact = search.of(item.origin, item.ball)
        if exact is not None:
            with precision(ISOLATION_BITS):
                ball = acb(arb(exact))
            return [Root(complex(nearest(exact)), multiplicity, False, True, ball, exact, f, item.origin)]
    ball = item.ball
    re = 0.0 if item.on_axis else nearest_ball(ball.real)
    im = 0.0 if item.real else nearest_ball(ball.imag)
    bits = ISOLATION_BITS
    while re is None or im is None:
        bits *= 2
        if bits > FAULT_BITS:
            raise ArithmeticError("a root did not round")
        ball = item.origin.at(bits)
        if re is None:
            re = nearest_ball(ball.real)
            if re is None and bits >= TIE_BITS:
                point = tie(ball.real)
                if point is not None and _real_part_is(f, ball, point, item):
                    re = nearest(point)
        if im is None:
            im = nearest_ball(ball.imag)
            if im is None and bits >= TIE_BITS:
                point = tie(ball.imag)
                if point is not None and _imaginary_part_is(f, ball, point, item):
                    im = nearest(point)
    upper = Root(complex(re, im), multiplicity, item.on_axis, item.real, ball, None, f, item.origin)
    if item.real:
        return [upper]
    lower = Root(complex(re, -im), multiplicity, item.on_axis, False, conjugate(ball), None, f, item.origin)
    return [upper, lower]


def _holds_real_root(g: fmpq_poly, ball: arb) -> bool:
    """Return whether a polynomial has a real root inside a real ball."""
    bits = max(2 * ball.bits(), 256)
    for _ in range(3):
        with precision(bits):
            real = [root.real for root in complex_roots(integer_polynomial(g)) if root.imag.is_zero()]
            near = [root for root in real if root.overlaps(ball)]
            if any(ball.contains(root) for root in near):
                return True
            if not near:
                return False
        bits *= 2
    return False


def _real_part_is(f: fmpq_poly, ball: acb, point: fmpq, item: Isolated) -> bool:
    """Return whether the root in a ball has exactly this real part: f(point + jw) = 0 for real w."""
    if item.real:
        return f(point) == 0
    e, o = even_odd(shifted(f, point))
    h = e.gcd(o) if o else e
    # h(-w^2) as a polynomial in w
    c = h.coeffs()
    in_w = fmpq_poly([0 if k % 2 else c[k // 2] * (-1) ** (k // 2) for k in range(max(2 * len(c) - 1, 0))])
    return h.degree() > 0 and _holds_real_root(in_w, ball.imag)


def _imaginary_part_is(f: fmpq_poly, ball: acb, point: fmpq, item: Isolated) -> bool:
    """Return whether the root in a ball has exactly this imaginary part: f(t + j point) = 0 for real t."""
    re, im = fmpq_poly([]), fmpq_poly([])
    t = fmpq_poly([0, 1])
    for c in reversed(f.coeffs()):
        re, im = re * t - im * point + c, im * t + re * point
    h = re.gcd(im) if im else re
    if item.on_axis:
        return h(fmpq(0)) == 0
    return h.degree() > 0 and _holds_real_root(h, ball.real)


def inside_left_half_plane(p: fmpq_poly) -> int:
    """Return how many roots have a negative real part, counted with multiplicity, exactly."""
    return sum(root.multiplicity for root in roots(p) if not root.on_axis and root.ball.real < 0)


def inside_unit_circle(p: fmpq_poly) -> int:
    """Return how many roots have a modulus below one, counted with multiplicity, exactly.

    The roots exactly on the circle are known from `unit_circle`; the balls of the others are refined until the modulus
    is on one side.
    """
    found = roots(p)
    return sum(
        root.multiplicity for root, on in zip(found, unit_circle(p, found), strict=True) if not on and _is_inside(root)
    )


def _is_inside(root: Root) -> bool:
    bits = ISOLATION_BITS
    while True:
        ball = root.at(bits)
        with precision(bits + 16):
            size = abs(ball)
            if size < 1:
                return True
            if size > 1:
                return False
        bits *= 2


def unit_circle(p: fmpq_poly, found: Sequence[Root] | None = None) -> list[bool]:
    """Return for each root, in the order of `roots`, whether its modulus is exactly one.

    The roots z = (1 + jw) / (1 - jw) on the circle come from the roots on the axis of the bilinear image of
    gcd(p(z), z^n p(1/z)); they are matched with the isolating balls.

    Parameters
    ----------
    p : polynomial
    found : sequence of Root, optional
        What `roots` gave for it, if that is known already.
    """
    found = roots(p) if found is None else found
    flags = [root.exact is not None and abs(root.exact) == 1 for root in found]
    nonzero = fmpq_poly(p.coeffs()[next(k for k, c in enumerate(p.coeffs()) if c) :])
    common = nonzero.gcd(fmpq_poly(nonzero.coeffs()[::-1]))
    for z in (fmpq(1), fmpq(-1)):
        while common.degree() > 0 and common(z) == 0:
            common = quotient(common, fmpq_poly([-z, 1]))
    if common.degree() < 1:
        return flags
    candidates = [k for k, root in enumerate(found) if not root.real and root.ball.imag > 0]
    for axis in roots(bilinear_image(common)):
        if not axis.on_axis or not axis.ball.imag > 0:
            continue
        bits = ISOLATION_BITS
        while True:
            jw = axis.at(bits)
            with precision(bits + 16):
                on_circle = (1 + jw) / (1 - jw)
                near = [k for k in candidates if found[k].at(bits).overlaps(on_circle)]
            if len(near) == 1:
                flags[near[0]] = True
                partner = near[0] + 1
                flags[partner] = True
                break
            bits *= 2
    return flags
