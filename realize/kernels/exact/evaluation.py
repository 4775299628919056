"""Frequency responses of exact rational functions, and differences of two of them, with rigorous error bounds."""

from __future__ import annotations

import math
import sys
from collections.abc import Callable, Iterable
from typing import Any, NamedTuple

import numpy as np
from flint import acb, acb_poly, arb, arb_poly, fmpq, fmpq_poly
from numpy.typing import NDArray

from realize.kernels.exact.numbers import precision, scaled_ball
from realize.kernels.exact.polynomials import even_odd, reduce_fraction

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: First precision (bits), and the one from which an unresolved value is tested for an exact zero or pole.
FIRST_BITS, EXACT_BITS = 128, 512
#: Relative accuracy (bits) asked of values, and of differences.
VALUE_BITS, DIFFERENCE_BITS = 62, 40
#: Bound on the relative error of a value: one rounding of each part and the radius of the ball.
ROUNDING = 2.0**-52
SMALLEST = 5e-324


class Curve:
    """A polynomial on the imaginary axis s = jw, or on the unit circle z = exp(jwT).

    On the axis p(jw) = e(-w^2) + j w o(-w^2), so that two real polynomials of half the degree are evaluated.
    """

    def __init__(self, p: fmpq_poly, period: fmpq | None) -> None:
        self.polynomial, self.period = p, period
        self.even, self.odd = even_odd(p) if period is None else (p, p)
        self.held: dict[int, Callable[[Any, Any], acb]] = {}

    def at_precision(self, bits: int) -> Callable[[Any, Any], acb]:
        """Return the function of (w, -w^2), or of (exp(jwT), None), in balls; to be called at that precision."""
        if bits not in self.held:
            self.held[bits] = self._function()
        return self.held[bits]

    def _function(self) -> Callable[[Any, Any], acb]:
        if self.period is not None:
            whole = acb_poly(self.polynomial)
            return lambda z, _: whole(z)
        even, odd = arb_poly(self.even), arb_poly(self.odd)
        if self.odd.degree() < 0:
            return lambda w, x: acb(even(x))
        if self.even.degree() < 0:
            return lambda w, x: acb(0, w * odd(x))
        if self.even.degree() == 0 and self.odd.degree() == 0:
            a, b = arb(self.even[0]), arb(self.odd[0])
            return lambda w, x: acb(a, w * b)
        return lambda w, x: acb(even(x), w * odd(x))

    def is_zero(self, frequency: float) -> bool:
        """Return whether the value is exactly zero.

        On the circle only z = 1 has to be looked at: exp(jwT) is transcendental for rational wT other than zero
        (Lindemann 1882).
        """
        if not self.polynomial:
            return True
        if self.period is not None:
            return frequency == 0 and self.polynomial(fmpq(1)) == 0
        w = fmpq(*frequency.as_integer_ratio())
        x = -w * w
        return self.even(x) == 0 and (not w or self.odd(x) == 0)


def _points(frequency: Iterable[float], period: fmpq | None) -> list[tuple[Any, Any]]:
    """Return (w, -w^2), or (exp(jwT), None), at the working precision."""
    if period is None:
        return [(w, -(w * w)) for w in map(arb, frequency)]
    T = arb(period)
    points: list[tuple[Any, Any]] = []
    for w in frequency:
        if w == 0:
            points.append((acb(1), None))
            continue
        sine, cosine = (T * arb(w)).sin_cos()
        points.append((acb(cosine, sine), None))
    return points


def response_balls(
    n: fmpq_poly, d: fmpq_poly, frequency: Array, period: fmpq | None, bits: int = VALUE_BITS
) -> list[acb | None]:
    """Return n / d at angular frequencies as complex balls of a given relative accuracy; None at an exact pole.

    The precision is doubled for the points that need it; zeros and poles that are hit exactly are found by an exact
    test, so that the loop ends.

    Parameters
    ----------
    n, d : polynomials
        In s, or in z if a period is given.
    frequency : ndarray, shape (k,)
        rad/s; the exact values of the doubles count.
    period : fmpq or None
        Sampling period, s.
    bits : int
        Accuracy relative to the modulus.
    """
    if not d:
        raise ZeroDivisionError("the denominator is identically zero")
    omega = np.asarray(frequency, dtype=float)
    if not np.all(np.isfinite(omega)):
        raise ValueError("a frequency that is not finite")
    values: list[acb | None] = [acb(0)] * omega.size
    if not n:
        return values
    above, below = Curve(n, period), Curve(d, period)
    waiting = list(enumerate(omega.tolist()))
    work = FIRST_BITS
    while waiting:
        if work >= EXACT_BITS:
            left = []
            for k, w in waiting:
                zero, pole = above.is_zero(w), below.is_zero(w)
                if zero and pole:
                    reduced = reduce_fraction(n, d)
                    values[k] = response_balls(*reduced, omega[k : k + 1], period, bits)[0]
                elif zero or pole:
                    values[k] = None if pole else acb(0)
                else:
                    left.append((k, w))
            waiting = left
        again = []
        with precision(work):
            top, bottom = above.at_precision(work), below.at_precision(work)
            for (k, w), (u, v) in zip(waiting, _points((w for _, w in waiting), period), strict=True):
                value = top(u, v) / bottom(u, v)
                if value.rel_accuracy_bits() >= bits:
                    values[k] = value
                else:
                    again.append((k, w))
        waiting = again
        work *= 2
    return values


def evaluate(n: fmpq_poly, d: fmpq_poly, frequency: Array, period: fmpq | None = None) -> tuple[ComplexArray, Array]:
    """Return n / d at s = jw, or z = exp(jwT), and a rigorous bound on the absolute error of each value.

    The bound is 2^-52 of the modulus (one rounding of each part), more where the value is subnormal or past the range
    of doubles (then infinite). An exact zero is 0 with bound 0, an exact pole inf + 0j with bound 0.
    """
    balls = response_balls(n, d, frequency, period)
    pole = complex(math.inf, 0.0)
    values = np.array(
        [pole if ball is None else complex(float(ball.real), float(ball.imag)) for ball in balls], dtype=complex
    )
    exact = np.array([ball is None or ball.is_zero() for ball in balls], dtype=bool)
    with np.errstate(over="ignore", invalid="ignore", under="ignore"):
        bound = np.hypot(values.real * ROUNDING, values.imag * ROUNDING)
        bound = np.where(bound < 2.0**-1000, bound + 2 * SMALLEST, bound)
    return values, np.where(exact, 0.0, bound)


def evaluate_scaled(
    n: fmpq_poly, d: fmpq_poly, frequency: Array, period: fmpq | None = None
) -> tuple[ComplexArray, NDArray[np.int64]]:
    """Return n / d as complex mantissas (larger part in [0.5, 1]) and binary exponents: values of any size.

    The error is at most 2^-52 of the modulus; zero is (0, 0), an exact pole (inf + 0j, 0).
    """
    balls = response_balls(n, d, frequency, period)
    values = np.zeros(len(balls), dtype=complex)
    exponents = np.zeros(len(balls), dtype=np.int64)
    for k, ball in enumerate(balls):
        if ball is None:
            values[k] = complex(math.inf, 0.0)
        elif not ball.is_zero():
            (re, up), (im, right) = scaled_ball(ball.real), scaled_ball(ball.imag)
            top = max(up if re else right, right if im else up)
            values[k] = complex(math.ldexp(re, max(up - top, -2000)), math.ldexp(im, max(right - top, -2000)))
            exponents[k] = top
    return values, exponents


class Difference(NamedTuple):
    """Size of the difference of two rational functions at each frequency.

    ``value`` is |G2 - G1|, ``upper`` a rigorous upper bound of it; ``reference`` is |G1|, ``reference_lower`` a
    rigorous lower bound; ``relative`` is the quotient |G2 - G1| / |G1|, ``relative_upper`` its upper bound (also where
    the two sizes leave the range of doubles). Exact zeros are 0; poles, and a difference over an exact zero, inf.
    """

    value: Array
    upper: Array
    reference: Array
    reference_lower: Array
    relative: Array
    relative_upper: Array


def difference(
    n1: fmpq_poly, d1: fmpq_poly, n2: fmpq_poly, d2: fmpq_poly, frequency: Array, period: fmpq | None = None
) -> Difference:
    """Return the size of n2 / d2 - n1 / d1 at s = jw or z = exp(jwT), however small it is.

    The numerator of the difference M = n2 d1 - n1 d2 is formed exactly once; then |dG| = |M| / |d1 d2|, and, where both
    leave the range of doubles, |dG| / |G1| = |M| / |n1 d2|, each to a relative 2^-36. A pole of either is a pole
    of the difference, unless both have it and it cancels exactly.
    """
    if not d1 or not d2:
        raise ZeroDivisionError("the denominator is identically zero")
    omega = np.asarray(frequency, dtype=float)
    numerator = n2 * d1 - n1 * d2
    value, _, upper = _sizes(response_balls(numerator, d1 * d2, omega, period, DIFFERENCE_BITS))
    reference, reference_lower, _ = _sizes(response_balls(n1, d1, omega, period, DIFFERENCE_BITS))
    with np.errstate(all="ignore"):
        relative = value / reference
        relative_upper = np.nextafter(upper / reference_lower, np.inf)
        usable = np.ones(omega.size, dtype=bool)
        for size in (value, reference, relative):
            usable &= (size > _LOW) & (size < _HIGH)
    if not np.all(usable):
        odd = ~usable
        if n1:
            relative[odd], _, relative_upper[odd] = _sizes(
                response_balls(numerator, n1 * d2, omega[odd], period, DIFFERENCE_BITS)
            )
        else:
            relative[odd] = relative_upper[odd] = np.where(value[odd] > 0, np.inf, 0.0)
    return Difference(value, upper, reference, reference_lower, relative, relative_upper)


#: Inside this range a double and its reciprocal carry their full relative accuracy.
_LOW, _HIGH = 2.0**-1000, 2.0**1000
#: Relative bound on a size whose ball has DIFFERENCE_BITS bits, with room for its own rounding.
_MARGIN = 2.0**-36


def _sizes(balls: list[acb | None]) -> tuple[Array, Array, Array]:
    """Return |ball|, a lower and an upper bound of it; inf for an exact pole, 0 for an exact zero."""
    with precision(64):
        value = np.array([math.inf if ball is None else float(abs(ball)) for ball in balls])
    known = np.array([ball is None or ball.is_zero() for ball in balls], dtype=bool)
    with np.errstate(over="ignore", under="ignore"):
        lower = np.nextafter(np.minimum(value, sys.float_info.max) * (1 - _MARGIN), 0.0)
        upper = np.nextafter(value * (1 + _MARGIN), np.inf)
    lower = np.maximum(np.where(known, value, lower - 2 * SMALLEST), 0.0)
    return value, lower, np.where(known, value, upper + 2 * SMALLEST)
