"""Exact rationals, balls and their correctly rounded doubles and decimals.

Rounding is to nearest, ties to even, with subnormal numbers and overflow to infinity (IEEE 754-2019, section 4.3.1).
"""

from __future__ import annotations

import math
import sys
from collections.abc import Sequence
from fractions import Fraction
from typing import Any

import flint
from flint import acb, arb, fmpq, fmpz

#: An integer ratio (p, q) with q > 0, or the same number as python-flint holds it.
Ratio = Sequence[int] | fmpq | int
#: Results of at most this binary exponent may be nonzero doubles; below it everything rounds to zero.
_TINY = -1200


_PRIMES: list[int] = []


def prime(k: int) -> int:
    """Return the k-th prime below 2^62, counted downwards from 0."""
    while len(_PRIMES) <= k:
        candidate = (_PRIMES[-1] if _PRIMES else (1 << 62) + 1) - 2
        while not fmpz(candidate).is_prime():
            candidate -= 2
        _PRIMES.append(candidate)
    return _PRIMES[k]


class precision:
    """Set the working precision of ball arithmetic (bits) for a block, and restore it whatever happens."""

    __slots__ = ("before", "bits")

    def __init__(self, bits: int) -> None:
        self.bits = int(bits)

    def __enter__(self) -> None:
        self.before = flint.ctx.prec
        flint.ctx.prec = self.bits

    def __exit__(self, *_: object) -> None:
        flint.ctx.prec = self.before


def fraction(ratio: Ratio) -> fmpq:
    """Return an exact rational from an integer ratio (p, q), an integer, or a rational."""
    if isinstance(ratio, fmpq):
        return ratio
    if isinstance(ratio, (int, fmpz)):
        return fmpq(ratio)
    p, q = ratio
    return fmpq(p, q)


def exact(value: float | Fraction | fmpq | fmpz) -> fmpq:
    """Return the rational that a number is: a double, an integer, a fraction of either library."""
    if isinstance(value, fmpq):
        return value
    if isinstance(value, float):
        return fmpq(*value.as_integer_ratio())
    if isinstance(value, Fraction):
        return fmpq(value.numerator, value.denominator)
    return fmpq(value)


def complex_fraction(value: Any) -> tuple[fmpq, fmpq]:
    """Return an exact complex rational from a pair of ratios, or from one real ratio."""
    if isinstance(value, (fmpq, int, fmpz)) or isinstance(value[0], (int, fmpz)):
        return fraction(value), fmpq(0)
    return fraction(value[0]), fraction(value[1])


def power_of_two(exponent: int) -> fmpq:
    """Return 2^exponent exactly."""
    return fmpq(1 << exponent) if exponent >= 0 else fmpq(1, 1 << -exponent)


def binary_exponent(value: fmpq) -> int:
    """Return e with 2^(e-1) <= |value| < 2^e; 0 for zero."""
    p, q = abs(int(value.p)), int(value.q)
    if not p:
        return 0
    e = p.bit_length() - q.bit_length()
    below = p >= q << e if e >= 0 else p << -e >= q
    return e + 1 if below else e


def nearest(value: fmpq) -> float:
    """Return the double nearest to a rational; infinite past the range."""
    p, q = int(value.p), int(value.q)
    try:
        return p / q
    except OverflowError:
        return math.inf if p > 0 else -math.inf


def _dyadic(mantissa: int, exponent: int) -> float:
    """Return the double nearest to mantissa * 2^exponent."""
    top = mantissa.bit_length() + exponent
    if top > 1100:
        return math.inf if mantissa > 0 else -math.inf
    if top < _TINY:
        return 0.0 if mantissa >= 0 else -0.0
    if exponent >= 0:
        mantissa, exponent = mantissa << exponent, 0
    try:
        return mantissa / (1 << -exponent)
    except OverflowError:
        return math.inf if mantissa > 0 else -math.inf


def exact_value(number: arb) -> fmpq:
    """Return the midpoint of a ball as a rational."""
    mantissa, exponent = number.mid().man_exp()
    return fmpq(mantissa) * power_of_two(int(exponent))


def nearest_ball(ball: arb) -> float | None:
    """Return the double that all real numbers of a ball round to, or None if there is no such double.

    A ball that reaches over zero has none, the exact zero aside: the sign of a result is never a guess.
    """
    if not ball.is_finite():
        return None
    if ball.is_exact():
        mantissa, exponent = ball.man_exp()
        return _dyadic(int(mantissa), int(exponent))
    if ball.contains(0):
        return None
    middle, high = ball.mid().man_exp()
    radius, low = ball.rad().man_exp()
    m, r, k = int(middle), int(radius), int(high - low)
    if abs(k) > 1 << 22:
        return None
    m, r, e = (m << k, r, int(low)) if k >= 0 else (m, r << -k, int(high))
    value = _dyadic(m - r, e)
    return value if value == _dyadic(m + r, e) else None


def simplest(low: fmpq, high: fmpq) -> fmpq:
    """Return the rational of least denominator in a closed interval (continued fractions)."""
    if low <= 0 <= high:
        return fmpq(0)
    if high < 0:
        return -simplest(-high, -low)
    a, b, c, d = int(low.p), int(low.q), int(high.p), int(high.q)
    # convergents p1 / q1 and p0 / q0 of the terms that both ends share
    p1, q1, p0, q0 = 1, 0, 0, 1
    while True:
        whole, rest = divmod(a, b)
        if not rest or (whole + 1) * d <= c:
            last = whole + 1 if rest else whole
            return fmpq(last * p1 + p0, last * q1 + q0)
        p1, q1, p0, q0 = whole * p1 + p0, whole * q1 + q0, p1, q1
        a, b, c, d = d, c - whole * d, b, rest


def simplest_in(ball: arb, bits: int) -> fmpq:
    """Return the rational of least denominator in a ball, after it was rounded to so many bits."""
    with precision(bits):
        rounded = +ball
    middle, radius = exact_value(rounded), exact_value(rounded.rad())
    return simplest(middle - radius, middle + radius)


def tie(ball: arb) -> fmpq | None:
    """Return the point halfway between two neighbouring doubles that lies in a narrow ball, or None."""
    value = near_ball(ball)
    if math.isinf(value):
        value = math.copysign(sys.float_info.max, value)
    with precision(max(flint.ctx.prec, 128)):
        for point in midpoints(value):
            if ball.contains(arb(point)):
                return point
    return None


def near_ball(ball: arb) -> float:
    """Return the double nearest to the midpoint of a ball."""
    mantissa, exponent = ball.mid().man_exp()
    return _dyadic(int(mantissa), int(exponent))


def scaled(value: fmpq) -> tuple[float, int]:
    """Return mantissa in [0.5, 1) with sign, and binary exponent, of a rational of any size: value = m * 2^e.

    The mantissa is correctly rounded to 53 bits; zero gives (0.0, 0).
    """
    if not value:
        return 0.0, 0
    e = binary_exponent(value)
    mantissa = nearest(value * power_of_two(-e))
    return (mantissa / 2, e + 1) if abs(mantissa) == 1.0 else (mantissa, e)


def scaled_ball(ball: arb) -> tuple[float, int]:
    """Return mantissa in [0.5, 1) with sign, and binary exponent, of the midpoint of a ball."""
    mantissa, exponent = ball.mid().man_exp()
    m, e = int(mantissa), int(exponent)
    if not m:
        return 0.0, 0
    bits = m.bit_length()
    value = _dyadic(m, -bits)
    return (value / 2, e + bits + 1) if abs(value) == 1.0 else (value, e + bits)


def midpoints(value: float) -> tuple[fmpq, fmpq]:
    """Return the two rationals halfway to the neighbouring doubles of a finite double; past the range at 2^1024."""
    pair = []
    for direction in (-math.inf, math.inf):
        other = math.nextafter(value, direction)
        far = fmpq(*other.as_integer_ratio()) if math.isfinite(other) else power_of_two(1024) * (1 if other > 0 else -1)
        pair.append((fmpq(*value.as_integer_ratio()) + far) / 2)
    return pair[0], pair[1]


def decimal_string(value: fmpq, digits: int) -> str:
    """Return a rational rounded to a number of significant decimal digits, half to even, trailing zeros left out."""
    if digits < 1:
        raise ValueError(f"{digits} digits")
    p, q = abs(value.p), value.q
    if not p:
        return "0"
    # log10 from the bit lengths is right within one
    exponent = math.floor((int(p).bit_length() - int(q).bit_length()) * 0.30102999566398120)
    while True:
        shift = digits - 1 - exponent
        top = p * fmpz(10) ** shift if shift >= 0 else p
        bottom = q if shift >= 0 else q * fmpz(10) ** -shift
        whole, rest = divmod(top, bottom)
        length = len(whole.str()) if whole else 0
        if length == digits:
            break
        exponent += 1 if length > digits else -1
    twice = 2 * rest
    if twice > bottom or (twice == bottom and whole % 2 == 1):
        whole += 1
    text = whole.str()
    exponent += len(text) - digits
    text = text.rstrip("0")
    sign = "-" if value < 0 else ""
    if -5 <= exponent < 17:
        if exponent < 0:
            return f"{sign}0.{'0' * (-exponent - 1)}{text}"
        if len(text) <= exponent + 1:
            return sign + text + "0" * (exponent + 1 - len(text))
        return f"{sign}{text[: exponent + 1]}.{text[exponent + 1 :]}"
    head = text[0] + ("." + text[1:] if len(text) > 1 else "")
    return f"{sign}{head}e{exponent}"


def conjugate(number: acb) -> acb:
    """Return the complex conjugate with all its bits: python-flint rounds even that to the working precision."""
    with precision(max(number.real.bits(), number.imag.bits()) + 64):
        return number.conjugate()


def ball(value: fmpq) -> arb:
    """Return a real ball of the working precision around a rational."""
    return arb(value)
