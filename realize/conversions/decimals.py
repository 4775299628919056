"""Numbers that can be rounded to any number of decimal digits: rationals, and balls that can be made narrower.

A number is rounded when both ends of its ball round to the same decimal; a decimal tie, where that never happens, is a
rational with one digit more, found as the simplest rational in the ball, and rounded half to even.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from realize.errors import Refused
from realize.models.checks import MAX_DIGITS, MAX_EXPONENT

#: From this number of digits on, a number that is a double already stays one: it is exact.
DOUBLE_DIGITS = 17
#: Bits beyond the digits at the first try, and the most that are spent before a tie is taken for granted.
GUARD_BITS, MOST_BITS = 64, 1 << 17
_SMALLEST = 2.0**-1022


@dataclass(frozen=True)
class Number:
    """A real number: a rational, or a function of a precision (bits) that gives a ball around it."""

    exact: Any = None
    at: Callable[[int], Any] | None = None


@dataclass(frozen=True)
class ExactRoot:
    """A pole or zero: its nearest double, and both parts to any precision."""

    value: complex
    real: Number
    imag: Number


def decimal_text(number: Number, digits: int) -> str:
    """Return a number correctly rounded to significant decimal digits.

    Raises
    ------
    Refused
        If it lies beyond the exponents of a model file.
    """
    from realize.kernels.exact.numbers import decimal_string, exact_value, simplest

    if number.exact is not None or number.at is None:
        return _checked(decimal_string(number.exact, digits), digits)
    bits = int(3.33 * digits) + GUARD_BITS
    while True:
        ball = number.at(bits)
        if ball.is_finite() and not ball.contains(0):
            middle, radius = exact_value(ball), exact_value(ball.rad())
            low, high = (decimal_string(end, digits) for end in (middle - radius, middle + radius))
            if low == high:
                return _checked(low, digits)
            between = simplest(middle - radius, middle + radius)
            # a rational this short in a ball this narrow is the number itself
            if 2 * _size(between) + GUARD_BITS < bits or bits >= MOST_BITS:
                return _checked(decimal_string(between, digits), digits)
        elif bits >= MOST_BITS:
            raise Refused("a number of the result could not be told from zero; ask for fewer digits")
        bits *= 2


def _size(value: Any) -> int:
    return int(value.p).bit_length() + int(value.q).bit_length()


def _checked(text: str, digits: int) -> str:
    """Return the text within the digits and exponents that a model file takes."""
    if sum(c.isdigit() for c in text.partition("e")[0]) > MAX_DIGITS:
        # leading zeros count as digits in a file
        sign, body = ("-", text[1:]) if text.startswith("-") else ("", text)
        fractional = body.partition(".")[2]
        significant = fractional.lstrip("0")
        tail = f".{significant[1:]}" if len(significant) > 1 else ""
        text = f"{sign}{significant[0]}{tail}e-{len(fractional) - len(significant) + 1}"
    if abs(int(text.partition("e")[2] or 0)) > MAX_EXPONENT:
        raise Refused(
            f"a number of the result would be {text[:6]}e{text.partition('e')[2]}, beyond what a model file can hold; "
            "keep state space, zero-pole-gain or sections, or scale time and gain first"
        )
    return text


def written(number: Number, digits: int) -> tuple[float, str | None]:
    """Return the nearest double of a number's decimal, and the decimal, or None where the double is exact."""
    from flint import fmpq

    from realize.kernels.exact.numbers import nearest

    if number.exact is not None and not number.exact:
        return 0.0, None
    if number.exact is not None and digits >= DOUBLE_DIGITS and _is_double(number.exact):
        return nearest(number.exact), None
    text = decimal_text(number, digits)
    mantissa, _, exponent = text.partition("e")
    whole, _, part = mantissa.partition(".")
    power = int(exponent or 0) - len(part)
    value = fmpq(int(whole + part)) * fmpq(10) ** power
    if number.exact is not None and value == number.exact and _is_double(value):
        return nearest(value), None
    return nearest(value), text


def _is_double(value: Any) -> bool:
    from flint import fmpq

    from realize.kernels.exact.numbers import nearest

    double = nearest(value)
    return bool(np.isfinite(double)) and abs(double) >= _SMALLEST and fmpq(*double.as_integer_ratio()) == value


def exact_root(root: Any) -> ExactRoot:
    """Return a root of `realize.kernels.exact.roots` with both parts as numbers."""
    from flint import fmpq

    zero = Number(fmpq(0))
    value = complex(root.value.real, root.value.imag + 0.0)
    if root.exact is not None:
        return ExactRoot(value, Number(root.exact), zero)
    real = zero if root.on_axis else Number(at=lambda bits: _part(root, bits, 0))
    return ExactRoot(value, real, zero if root.real else Number(at=lambda bits: _part(root, bits, 1)))


def _part(root: Any, bits: int, part: int) -> Any:
    """Return real or imaginary part as a ball with a relative accuracy of so many bits of its own."""
    work = bits
    while True:
        ball = root.at(work)
        value = ball.imag if part else ball.real
        if value.rel_accuracy_bits() >= bits or work > MOST_BITS:
            return value
        work += max(bits - value.rel_accuracy_bits(), 32) if work < 4 * bits else work


def negative(number: tuple[float, str | None]) -> tuple[float, str | None]:
    double, text = number
    if text is not None:
        text = text[1:] if text.startswith("-") else f"-{text}"
    return 0.0 - double, text


class Laurent:
    """Residues of n / d at one root of d, to any precision.

    With n(r + t) / d(r + t) = sum_j q_j t^(j - m) at a pole of multiplicity m, the residue of power k is q_(m - k).
    """

    def __init__(self, n: Any, d: Any, root: Any) -> None:
        self.root, m = root, root.multiplicity
        above, below = [n], [d]
        for k in range(1, 2 * m):
            above.append(above[-1].derivative() / k)
            below.append(below[-1].derivative() / k)
        self.above, self.below = above[:m], below[m:]
        self.known: dict[int, list[Any]] = {}

    def series(self, bits: int) -> list[Any]:
        """Return q_0 .. q_(m-1): rationals at a rational pole, complex balls elsewhere."""
        if bits not in self.known:
            from flint import acb_poly

            from realize.kernels.exact.numbers import precision

            with precision(bits + 32):
                if self.root.exact is not None:
                    above, below = ([p(self.root.exact) for p in side] for side in (self.above, self.below))
                else:
                    r = self.root.at(bits + 32)
                    above, below = ([acb_poly(p)(r) for p in side] for side in (self.above, self.below))
                q: list[Any] = []
                for k, value in enumerate(above):
                    rest = value
                    for i in range(1, k + 1):
                        rest = rest - below[i] * q[k - i]
                    q.append(rest / below[0])
            self.known[bits] = q
        return self.known[bits]

    def parts(self, power: int, rough: complex) -> list[Number]:
        """Return real and imaginary part of the residue of a power; those that are exactly zero from the rough one."""
        from flint import fmpq

        k = self.root.multiplicity - power
        if self.root.exact is not None:
            return [Number(self.series(0)[k]), Number(fmpq(0))]

        def ball(part: int) -> Callable[[int], Any]:
            return lambda bits: self.series(bits)[k].imag if part else self.series(bits)[k].real

        numbers = []
        for part, double in enumerate((rough.real, rough.imag)):
            zero = double == 0.0 and ball(part)(2 * GUARD_BITS).contains(0)
            numbers.append(Number(fmpq(0)) if zero or (part and self.root.real) else Number(at=ball(part)))
        return numbers


def monic(roots: list[ExactRoot]) -> list[Number]:
    """Return the coefficients of the monic polynomial of a conjugate pair (given by one member) or one or two reals."""
    from flint import fmpq

    one = Number(fmpq(1))
    if not roots:
        return [one]
    if roots[0].value.imag != 0:
        x, y = roots[0].real, roots[0].imag
        return [one, _combined(lambda a: -2 * a, x), _combined(lambda a, b: a * a + b * b, x, y)]
    if len(roots) == 1:
        return [one, _combined(lambda a: -a, roots[0].real)]
    x, y = roots[0].real, roots[1].real
    return [one, _combined(lambda a, b: -(a + b), x, y), _combined(lambda a, b: a * b, x, y)]


def _combined(join: Callable[..., Any], *numbers: Number) -> Number:
    """Return a function of numbers, exact where all are rational."""
    if all(number.exact is not None for number in numbers):
        return Number(join(*(number.exact for number in numbers)))

    def at(bits: int) -> Any:
        from flint import arb

        from realize.kernels.exact.numbers import precision

        with precision(bits + 32):
            balls = [arb(n.exact) if n.at is None else n.at(bits + 32) for n in numbers]
            return join(*balls)

    return Number(at=at)
