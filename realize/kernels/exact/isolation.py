"""Certified isolation of the roots of a squarefree polynomial, with what is exactly on an axis decided exactly."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from flint import acb, acb_poly, arb, arb_poly, fmpq, fmpq_poly, fmpz_poly, nmod_poly

from realize.kernels.exact.numbers import conjugate, precision, prime, scaled_ball, simplest_in
from realize.kernels.exact.polynomials import even_odd, in_square, monic, quotient

#: Relative accuracy (bits) of the balls that isolation returns.
ISOLATION_BITS = 128
#: Largest degree for which rough roots and this many steps of Newton's iteration are tried first.
SIMPLE_DEGREE, NEWTON_STEPS = 12, 2
#: Rational roots are looked for completely up to this size (bits) of leading coefficient and root.
RATIONAL_CAP = 20_000
#: From this size on, primes are asked first whether a rational root is possible.
RATIONAL_FILTER = 400


@dataclass(frozen=True)
class Origin:
    """Where an isolated root comes from: a root of ``polynomial`` itself, or a square root of one.

    ``signs`` are those of the square root taken (real part, imaginary part); (0, 0) for the root itself.
    """

    polynomial: fmpz_poly
    ball: acb
    signs: tuple[int, int]

    def at(self, bits: int) -> acb:
        """Return a ball around the root with a relative accuracy of at least so many bits."""
        if not any(self.signs):
            return refined(self.polynomial, self.ball, bits)
        square = refined(self.polynomial, self.ball, bits + 4)
        with precision(bits + 32):
            return _square_root(square, self.signs)


@dataclass(frozen=True)
class Isolated:
    """One root of the upper half-plane or the real axis: ball, exact flags, origin."""

    origin: Origin
    ball: acb
    on_axis: bool
    real: bool


def integer_polynomial(p: fmpq_poly) -> fmpz_poly:
    """Return the primitive integer polynomial with the same roots, leading coefficient positive."""
    f = p.numer()
    content = f.content()
    f = fmpz_poly([c // content for c in f.coeffs()]) if content > 1 else f
    return -f if f.leading_coefficient() < 0 else f


def complex_roots(f: Any) -> list[acb]:
    """Return disjoint balls around the roots of a squarefree integer polynomial; real ones have no imaginary part."""
    return [root for root, _ in f.complex_roots()]


def _separated(f: fmpz_poly) -> list[acb]:
    """Return the same with about `ISOLATION_BITS` bits, by the shortest way."""
    found = None
    if f.degree() == 2:
        found = _two_roots(f)
    elif 2 < f.degree() <= SIMPLE_DEGREE:
        found = _simple_roots(f)
    if found is not None:
        return found
    with precision(ISOLATION_BITS + 8):
        return complex_roots(f)


def _two_roots(f: fmpz_poly) -> list[acb] | None:
    """Return the roots of a polynomial of degree two by the quadratic formula, or None where the balls meet."""
    c, b, a = (int(value) for value in f.coeffs())
    square = b * b - 4 * a * c
    with precision(ISOLATION_BITS + 32):
        if square < 0:
            upper = acb(arb(-b) / (2 * a), arb(-square).sqrt() / abs(2 * a))
            return [upper, conjugate(upper)]
        if not c:
            return None
        larger = -(b + (arb(square).sqrt() if b >= 0 else -arb(square).sqrt())) / 2
        first, second = acb(larger / a), acb(c / larger)
        return None if first.overlaps(second) else [first, second]


def _simple_roots(f: fmpz_poly) -> list[acb] | None:
    """Return the same from rough balls and Newton's iteration, or None where that is no proof.

    A disc of radius n |f / f'| holds a root (Henrici, Applied and Computational Complex Analysis 1, 1974, theorem
    6.4g), so n disjoint discs hold one each. One around a real point holds a real root, since it is its own mirror
    image.
    """
    n = f.degree()
    c = [int(value) for value in f.coeffs()]
    if not c[0]:
        return None
    # in a unit in which the roots are about one
    step = (abs(c[0]).bit_length() - abs(c[n]).bit_length()) // n
    real: list[acb] = []
    upper: list[acb] = []
    with precision(ISOLATION_BITS + 32):
        whole = [value << k * step if step >= 0 else value << (k - n) * step for k, value in enumerate(c)]
        starts = _eigenvalues(whole)
        if starts is None:
            return None
        scaled = arb_poly(whole)
        slope = scaled.derivative()
        complex_value, complex_rate = acb_poly(scaled), acb_poly(slope)
        tiny = arb(2) ** (-ISOLATION_BITS - 16)
        for start in starts:
            if start.imag < 0:
                continue
            on_line = not start.imag > 0
            value, rate = (scaled, slope) if on_line else (complex_value, complex_rate)
            x: Any = arb(start.real) if on_line else acb(start.real, start.imag)
            for _ in range(NEWTON_STEPS):
                x = (x - value(x) / rate(x)).mid()
            disc = _disc(x, (n * (value(x) / rate(x))).abs_upper() + abs(x) * tiny, on_line)
            # a division by zero leaves no accuracy
            if disc.rel_accuracy_bits() < ISOLATION_BITS - 16 or not (on_line or disc.imag > 0):
                return None
            (real if on_line else upper).append(disc * arb(2) ** step)
    apart = real + upper
    if len(real) + 2 * len(upper) != n or any(
        ball.overlaps(other) for k, ball in enumerate(apart) for other in apart[:k]
    ):
        return None
    # balls of the upper half-plane and their mirror images do not meet
    return real + [each for ball in upper for each in (ball, conjugate(ball))]


def _eigenvalues(c: list[int]) -> list[complex] | None:
    """Return the roots of a polynomial (lowest power first) of like coefficients in doubles, None without any."""
    n = len(c) - 1
    companion = np.eye(n, k=-1)
    try:
        companion[:, -1] = [-(value / c[n]) for value in c[:n]]
        return np.linalg.eigvals(companion).tolist()  # type: ignore[no-any-return]
    except (OverflowError, np.linalg.LinAlgError):
        return None


def _square_root(square: acb, signs: tuple[int, int]) -> acb:
    re, im = signs
    if im == 0:
        size = square.real.sqrt()
        return acb(size if re > 0 else -size)
    if re == 0:
        return acb(0, (-square.real).sqrt())
    root = square.sqrt()
    return acb(root.real if re > 0 else -root.real, root.imag)


def isolate(f: fmpq_poly) -> list[Isolated]:
    """Return the roots of a squarefree polynomial with imaginary part >= 0; zero must not be a root.

    With f(s) = e(s^2) + s o(s^2) and h = gcd(e, o), the roots of h(s^2) are those that come with their negatives, so
    that all roots on the imaginary axis are square roots of the negative roots of h, and no others are.
    """
    e, o = even_odd(f)
    found = []
    h = (e.gcd(o) if o else monic(e)) if f.degree() > 1 else fmpq_poly([1])
    if h.degree() > 0:
        f = quotient(f, in_square(h))
        whole = integer_polynomial(h)
        with precision(ISOLATION_BITS + 32):
            squares = complex_roots(whole)
            for x in squares:
                if x.imag.is_zero():
                    if x.real > 0:
                        for sign in (1, -1):
                            found.append(Isolated(Origin(whole, x, (sign, 0)), _square_root(x, (sign, 0)), False, True))
                    else:
                        found.append(Isolated(Origin(whole, x, (0, 1)), _square_root(x, (0, 1)), True, False))
                elif x.imag > 0:
                    for sign in (1, -1):
                        ball = _square_root(x, (sign, 1))
                        found.append(Isolated(Origin(whole, x, (sign, 1)), ball, False, False))
    if f.degree() > 0:
        whole = integer_polynomial(f)
        for root in _separated(whole):
            real = root.imag.is_zero()
            if real or root.imag > 0:
                found.append(Isolated(Origin(whole, root, (0, 0)), root, False, real))
    return found


def refined(f: fmpz_poly, ball: acb, bits: int) -> acb:
    """Return the root in an isolating ball with a relative accuracy of at least so many bits.

    Newton's iteration from the midpoint, then a certificate that does not depend on the width of the ball: the disc of
    radius n |f / f'| around any point holds a root (Henrici, Applied and Computational Complex Analysis 1, 1974,
    theorem 6.4g), so a disc inside the isolating ball holds this one; on the real axis a change of sign.
    """
    if ball.rel_accuracy_bits() >= bits:
        return ball
    real = ball.imag.is_zero()
    slope, n = f.derivative(), f.degree()
    work = bits + 64
    for _ in range(6):
        with precision(work):
            value, rate = (arb_poly(f), arb_poly(slope)) if real else (acb_poly(f), acb_poly(slope))
            x: Any = ball.real.mid() if real else acb(ball.real.mid(), ball.imag.mid())
            for _ in range(4 + bits.bit_length()):
                height = value(x)
                if height.is_zero() and ball.contains(x):
                    return acb(x)
                step = height / rate(x)
                if not step.is_finite():
                    break
                # the last step of an exact hit is zero; any radius then serves
                radius = (n * step).abs_upper() + abs(x) * arb(2) ** (-work)
                disc = _disc(x, radius, real)
                if disc.rel_accuracy_bits() >= bits:
                    inside = _inside(disc, ball, value, real)
                    if inside:
                        return disc
                    break
                x = (x - step).mid()
        work *= 2
    with precision(bits + 32):
        again = [root for root in complex_roots(f) if root.overlaps(ball)]
    if len(again) != 1:
        raise ArithmeticError("a root could not be told from its neighbours")
    return again[0]


def _disc(x: Any, radius: arb, real: bool) -> acb:
    reach = arb(0, radius.upper())
    return acb(x + reach) if real else acb(x.real + reach, x.imag + reach)


def _inside(disc: acb, ball: acb, value: Any, real: bool) -> bool:
    """Return whether the new ball holds the root of the old one for certain."""
    if not real:
        return bool(ball.real.contains(disc.real) and ball.imag.contains(disc.imag))
    low, high = disc.real.lower(), disc.real.upper()
    return bool(ball.real.contains(low) and ball.real.contains(high) and value(low) * value(high) < 0)


class RationalSearch:
    """Exact test whether the real roots of one polynomial are rational.

    L times a rational root is an integer, L the leading coefficient: once the ball is narrow enough, one candidate is
    left. Primes are asked first when L is long: a rational root is a root modulo every prime that does not divide L.
    """

    def __init__(self, f: fmpz_poly) -> None:
        self.polynomial = f
        self.lead = f.leading_coefficient()
        self.possible: bool | None = None
        self.residue: nmod_poly | None = None

    def of(self, origin: Origin, ball: acb) -> fmpq | None:
        """Return the root as a rational, or None if it is irrational (or longer than RATIONAL_CAP bits)."""
        size = int(self.lead).bit_length() + max(scaled_ball(ball.real)[1], 0) + 8
        if size > ball.rel_accuracy_bits():
            candidate = self._short(ball.real)
            if candidate is not None:
                return candidate
        if size > RATIONAL_CAP or (size > RATIONAL_FILTER and not self._possible()):
            return None
        if ball.rel_accuracy_bits() < size:
            ball = origin.at(size)
        with precision(size + 64):
            whole = (ball.real * arb(self.lead)).unique_fmpz()
        if whole is None:
            return None
        value = fmpq(whole, self.lead)
        return value if self.polynomial(value) == 0 else None

    def _short(self, ball: arb) -> fmpq | None:
        """Return the simplest rational in the ball if it is a root."""
        value = simplest_in(ball, ISOLATION_BITS)
        q = prime(0)
        if value.q % q == 0:
            return None
        if self.residue is None:
            self.residue = nmod_poly([int(c % q) for c in self.polynomial.coeffs()], q)
        if self.residue(int(value.p % q) * pow(int(value.q), -1, q)):
            return None
        return value if self.polynomial(value) == 0 else None

    def _possible(self) -> bool:
        if self.possible is None:
            self.possible = True
            for k in range(4):
                q = prime(k)
                if self.lead % q and not nmod_poly([int(c % q) for c in self.polynomial.coeffs()], q).roots():
                    self.possible = False
                    break
        return self.possible


#: Bits beside those of the degree with which a polynomial is evaluated near approximate roots.
NEAR_BITS = 128
#: Largest radius of such a disc, relative to its root: what is found is the square of it off.
NEAR = 1e-5


def roots_near(p: fmpq_poly, starts: Sequence[complex]) -> list[complex] | None:
    """Return all roots of a polynomial in doubles, one Newton step from approximate ones; None without a certificate.

    A disc of radius n |p / p'| holds a root (Henrici 1974, theorem 6.4g), so n disjoint discs hold one each: none is
    missing, and none is wrong by more than its disc.

    Parameters
    ----------
    p : polynomial of degree n
    starts : n complex
        Closed under conjugation.
    """
    n = p.degree()
    if len(starts) != n:
        return None
    centres, radii, found = [], [], []
    with precision(NEAR_BITS + 2 * n):
        value, slope = acb_poly(p), acb_poly(p.derivative())
        for start in starts:
            if start.imag < 0:
                continue
            x = acb(start.real, start.imag)
            step = value(x) / slope(x)
            radius = float((n * step).abs_upper()) * (1 + 1e-9) if step.is_finite() else math.inf
            moved = complex(start.real - float(step.real), start.imag - float(step.imag) if start.imag else 0.0)
            for sign in (1, -1) if start.imag else (1,):
                centres.append(complex(start.real, sign * start.imag))
                radii.append(radius)
                found.append(complex(moved.real, sign * moved.imag))
    if len(found) != n or not all(map(math.isfinite, radii)):
        return None
    centre, reach = np.array(centres), np.array(radii)
    apart = np.abs(centre[:, None] - centre[None, :]) * (1 - 1e-9) > reach[:, None] + reach[None, :]
    np.fill_diagonal(apart, True)
    near = bool((reach <= NEAR * np.abs(centre)).all())
    return found if near and apart.all() else None
