"""Partial fractions of exact rational functions, repeated poles included, with correctly rounded residues."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from flint import acb, acb_poly, arb, fmpq, fmpq_poly

from realize.kernels.exact.numbers import near_ball, nearest, nearest_ball, precision, simplest_in, tie
from realize.kernels.exact.polynomials import (
    Complex,
    coefficients,
    even_odd,
    in_square,
    quadratic,
    quotient,
    reduce_fraction,
    shifted,
)
from realize.kernels.exact.roots import Root, roots

#: First precision (bits); the one from which exact zero tests are made; the one past which a part that has no exact
#: test is taken as zero, or rounded from its midpoint (faithful).
FIRST_BITS, TEST_BITS, CAP_BITS = 128, 512, 8192
#: Rational parts of poles are recognised up to this size of the denominator (bits).
SHORT_BITS = 100


def residues(n: fmpq_poly, d: fmpq_poly) -> tuple[list[tuple[Root, list[complex]]], list[fmpq]]:
    """Return the partial fractions n / d = sum_r sum_k residue_k / (s - r)^k + polynomial part.

    With n(r + t) / d(r + t) = sum_j q_j t^(j - m) at a pole of multiplicity m, the residue of power k is q_(m - k).
    Rational poles (real or complex) are done in rational arithmetic, the others in balls of doubling precision.
    Parts that are exactly zero are recognised exactly when the pole is real or has a rational real part (all poles
    on the imaginary axis have); elsewhere a part below 2^-8000 of the residue counts as zero.

    Parameters
    ----------
    n, d : polynomials
        Common factors are cancelled first.

    Returns
    -------
    terms : list of (root, [residue of power 1, ..., residue of power multiplicity])
        In the order of `roots`; residues of real poles have imaginary part 0.0, conjugate poles conjugate ones.
    direct : list of rationals
        Polynomial part, highest power first; [0] if there is none.
    """
    n, d = reduce_fraction(n, d)
    direct, n = divmod(n, d)
    poles = roots(d)
    expansions: dict[int, _Expansion] = {}
    terms: list[tuple[Root, list[complex]]] = []
    for k, pole in enumerate(poles):
        if not pole.real and k and _is_conjugate(poles[k - 1], pole):
            terms.append((pole, [complex(v.real, 0.0 - v.imag) for v in terms[-1][1]]))
            continue
        m = pole.multiplicity
        if m not in expansions:
            expansions[m] = _Expansion(n, d, m)
        terms.append((pole, expansions[m].at(pole)))
    return terms, coefficients(direct)


def _is_conjugate(first: Root, second: Root) -> bool:
    return (
        first.origin is second.origin
        and first.origin is not None
        and bool(first.ball.imag > 0)
        and bool(second.ball.imag < 0)
    )


class _Expansion:
    """Laurent expansions of n / d at the poles of one multiplicity."""

    def __init__(self, n: fmpq_poly, d: fmpq_poly, multiplicity: int) -> None:
        self.m = multiplicity
        self.above = _taylor(n, multiplicity)
        self.below = _taylor(d, 2 * multiplicity)[multiplicity:]
        self.balls: dict[int, tuple[list[acb_poly], list[acb_poly]]] = {}
        self.algebraic: dict[str, list[fmpq_poly]] = {}
        self.lines: dict[int, list[tuple[fmpq, fmpq_poly]]] = {}

    def at(self, pole: Root) -> list[complex]:
        """Return the residues of power 1..m at a pole."""
        if pole.exact is not None:
            q = _divided(
                [p(pole.exact) for p in self.above],
                [p(pole.exact) for p in self.below],
                lambda a, b: a * b,
                lambda a: 1 / a,
            )
            return [complex(nearest(value)) for value in reversed(q)]
        exact = _rational_pair(pole)
        if exact is not None:
            pairs = _divided(
                [Pair.value(p, exact) for p in self.above],
                [Pair.value(p, exact) for p in self.below],
                lambda a, b: a * b,
                lambda a: a.inverse(),
            )
            return [complex(nearest(value.re), nearest(value.im)) for value in reversed(pairs)]
        found: list[list[float | None]] = [[None, 0.0 if pole.real else None] for _ in range(self.m)]
        bits = FIRST_BITS
        while True:
            values = self._in_balls(pole, bits)
            for k, value in enumerate(values):
                for part in (0, 1):
                    if found[k][part] is None:
                        found[k][part] = self._decide(pole, k, part, value, bits)
            if all(entry is not None for pair in found for entry in pair):
                return [complex(pair[0] or 0.0, pair[1] or 0.0) for pair in reversed(found)]
            bits *= 2

    def _in_balls(self, pole: Root, bits: int) -> list[acb]:
        with precision(bits + 32):
            if bits not in self.balls:
                self.balls[bits] = ([acb_poly(p) for p in self.above], [acb_poly(p) for p in self.below])
            above, below = self.balls[bits]
            r = pole.at(bits)
            bottom = [p(r) for p in below]
            if bottom[0].contains(0):
                return [acb("nan") for _ in above]
            return _divided([p(r) for p in above], bottom, lambda a, b: a * b, lambda a: 1 / a)

    def _decide(self, pole: Root, k: int, part: int, value: acb, bits: int) -> float | None:
        ball: arb = value.imag if part else value.real
        rounded = nearest_ball(ball)
        if rounded is not None or bits < TEST_BITS or not ball.is_finite():
            return rounded
        if ball.contains(0):
            if (bits == TEST_BITS and self._is_zero(pole, k, part, value, bits)) or bits >= CAP_BITS:
                return 0.0
            return None
        if bits >= CAP_BITS:
            point = tie(ball)
            return near_ball(ball) if point is None else nearest(point)
        return None

    def _is_zero(self, pole: Root, k: int, part: int, value: acb, bits: int) -> bool:
        """Return whether a part of q_k is exactly zero, as far as that can be decided exactly."""
        if not pole.real:
            line = self.lines.get(id(pole))
            if line is None:
                line = self.lines[id(pole)] = _vertical_line(pole, bits)
            if line:
                center, h = line[0]
                local = shifted(in_square(h), -center)
                c = self._algebraic(local)[k]
                even, odd = even_odd(shifted(c, center))
                with precision(bits + 32):
                    x = acb(-(pole.at(bits).imag ** 2))
                return _vanishes(odd if part else even, h, x, bits)
        if not (value.real.contains(0) and value.imag.contains(0)):
            return False
        return _vanishes(self._algebraic(pole.factor)[k], pole.factor, pole.at(bits), bits)

    def _algebraic(self, f: fmpq_poly) -> list[fmpq_poly]:
        """Return the q_k as polynomials in the pole, modulo a polynomial of poles."""
        key = str(f)
        if key not in self.algebraic:
            self.algebraic[key] = _modulo(self.above, self.below, f)
        return self.algebraic[key]


def _vertical_line(pole: Root, bits: int) -> list[tuple[fmpq, fmpq_poly]]:
    """Return [(a, h)] if the real part of a complex pole is a short rational a, else [].

    h((s - a)^2) is the factor of those roots that come with their mirror images in the line Re s = a.
    """
    ball = pole.at(bits)
    center = fmpq(0) if pole.on_axis else simplest_in(ball.real, bits)
    if 2 * int(center.q).bit_length() > bits - 32:
        return []
    moved = shifted(pole.factor, center)
    e, o = even_odd(moved)
    h = e.gcd(o) if o else e
    if h.degree() < 1:
        return []
    with precision(bits + 32):
        # if the mirror image of this narrow ball stays in the isolating ball, the root is its own mirror image
        mirror = acb(2 * arb(center) - ball.real, ball.imag)
        if not pole.on_axis and not (pole.ball.real.contains(mirror.real) and pole.ball.imag.contains(mirror.imag)):
            return []
        root = acb(0, ball.imag)
    return [(center, h)] if _vanishes(in_square(h), moved, root, bits) else []


def _vanishes(c: fmpq_poly, f: fmpq_poly, root: acb, bits: int) -> bool:
    """Return whether c is exactly zero at a root of the squarefree f: then the root is one of gcd(c, f)."""
    if not c:
        return True
    g = c.gcd(f)
    if g.degree() < 1:
        return False
    with precision(bits + 32):
        return not acb_poly(quotient(f, g))(root).contains(0)


def _taylor(p: fmpq_poly, count: int) -> list[fmpq_poly]:
    """Return p^(k) / k! for k = 0..count-1."""
    result = [p]
    for k in range(1, count):
        result.append(result[-1].derivative() / k)
    return result


def _divided(above: Sequence[Any], below: Sequence[Any], times: Any, inverse: Any) -> list[Any]:
    """Return the coefficients of the quotient of two power series, lowest power first."""
    lead = inverse(below[0])
    q: list[Any] = []
    for k, value in enumerate(above):
        rest = value
        for i in range(1, k + 1):
            rest = rest - times(below[i], q[k - i])
        q.append(times(rest, lead))
    return q


def _modulo(above: list[fmpq_poly], below: list[fmpq_poly], f: fmpq_poly) -> list[fmpq_poly]:
    """Return the q_k as polynomials in the pole, modulo the polynomial f of the poles."""

    def inverse(p: fmpq_poly) -> fmpq_poly:
        common, u, _ = p.xgcd(f)
        return u / common[0]

    return _divided([p % f for p in above], [p % f for p in below], lambda a, b: a * b % f, inverse)


class Pair:
    """A complex rational number."""

    def __init__(self, re: fmpq, im: fmpq) -> None:
        self.re, self.im = re, im

    @classmethod
    def value(cls, p: fmpq_poly, at: Complex) -> Pair:
        """Return a polynomial at a complex rational point, from its rest after division by (s - r)(s - conjugate)."""
        rest = p % quadratic(*at)
        return cls(rest[0] + rest[1] * at[0], rest[1] * at[1])

    def __mul__(self, other: Pair) -> Pair:
        return Pair(self.re * other.re - self.im * other.im, self.re * other.im + self.im * other.re)

    def __sub__(self, other: Pair) -> Pair:
        return Pair(self.re - other.re, self.im - other.im)

    def inverse(self) -> Pair:
        """Return 1 / z."""
        size = self.re * self.re + self.im * self.im
        return Pair(self.re / size, -self.im / size)


def _rational_pair(pole: Root) -> Complex | None:
    """Return a complex pole whose real and imaginary part are short rationals, or None."""
    if pole.real:
        return None
    parts = []
    for ball in (pole.ball.real, pole.ball.imag):
        value = simplest_in(ball, FIRST_BITS)
        if int(value.q).bit_length() > SHORT_BITS:
            return None
        parts.append(value)
    if pole.on_axis:
        parts[0] = fmpq(0)
    if pole.factor % quadratic(*parts):
        return None
    return parts[0], parts[1]
