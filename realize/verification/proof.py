"""Proofs of error bounds over all frequencies, by exact polynomial inequalities on the axis or unit circle.

For single channels, with G1 = N1/D1, G2 = N2/D2 and M = N2 D1 - N1 D2, |dG| <= e |G1| on an interval of w is ::

    e^2 |N1 D2|^2 - |M|^2 > 0,      and |dG| <= e c is      e^2 c^2 |D1 D2|^2 - |M|^2 > 0,

polynomials in x = w^2 that are shown to be positive by Descartes' rule (realize.kernels.exact.positivity). Several
channels: over common denominators, with the squares summed. Sampled models: z = (1 + s)/(1 - s), w -> tan(wT/2).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import cached_property
from typing import Any

from realize.verification.views import tell

Grid = list[list[Any]]

#: Factors by which the value found is raised until the inequality is proved.
STEPS = (1 + 2**-9, 1.008, 1.02, 1.1, 1.5, 3.0, 30.0, 1e3, 1e6)
#: A value that is this far below one rounding is raised to it first: nobody needs a proof of less.
SMALLEST = 2.0**-60
#: Largest degree of the inequality that is tried by default.
LARGEST_DEGREE = 500


class Proof:
    """The exact polynomials of a pair of models, over common denominators.

    Parameters
    ----------
    source, result : [outputs][inputs] of (numerator, denominator)
        Exact fractions.
    period : fmpq or None
        Sampling period, s.
    channel : (output, input), optional
        Only this channel.
    """

    def __init__(self, source: Grid, result: Grid, period: Any, channel: tuple[int, int] | None = None) -> None:
        from realize.kernels.exact import polynomials

        self.period = period
        grids = [source, result]
        if channel is not None:
            grids = [[[grid[channel[0]][channel[1]]]] for grid in grids]
        lists, commons = [], []
        for grid in grids:
            flat = [pair for row in grid for pair in row]
            common = flat[0][1]
            for _, d in flat[1:]:
                if d != common:
                    common = common * polynomials.quotient(d, common.gcd(d))
            lists.append([n if d == common else n * polynomials.quotient(common, d) for n, d in flat])
            commons.append(common)
        # frequencies are counted in a power of two near the middle of the dynamics
        self.unit = self._middle(commons[0])
        if self.unit != 1:
            commons = [polynomials.stretched(p, self.unit) for p in commons]
            lists = [[polynomials.stretched(p, self.unit) for p in listed] for listed in lists]
        self.d1, self.d2 = commons
        self.n1, self.n2 = lists

    @cached_property
    def difference(self) -> list[Any]:
        """M of each channel."""
        return [b * self.d1 - a * self.d2 for a, b in zip(self.n1, self.n2, strict=True)]

    @property
    def identical(self) -> bool:
        """True where source and result are the same rational functions."""
        return not any(self.difference)

    def _modulus(self, polynomial: Any, degree: int) -> Any:
        from realize.kernels.exact.polynomials import bilinear_image
        from realize.kernels.exact.positivity import square_modulus

        if self.period is not None:
            polynomial = bilinear_image(polynomial, degree)
        return square_modulus(polynomial)

    def _middle(self, denominator: Any) -> Any:
        """Return a power of two near the middle of the poles, 1 for sampled models."""
        from realize.kernels.exact.numbers import binary_exponent, power_of_two

        if self.period is not None:
            return power_of_two(0)
        c = denominator.coeffs()
        low = next((k for k, value in enumerate(c) if value), 0)
        n = len(c) - 1
        if n == low:
            return power_of_two(0)
        return power_of_two((binary_exponent(c[low]) - binary_exponent(c[n])) // (n - low))

    @cached_property
    def degree(self) -> int:
        """Degree that all terms of the inequalities are homogenised to (sampled models)."""
        lengths = [p.degree() for p in (*self.n1, *self.n2)]
        return max(0, *lengths, self.d1.degree(), self.d2.degree())

    @cached_property
    def error_square(self) -> Any:
        """Sum of |M|^2 over the channels, in x."""
        return self._sum(self.difference, 2 * self.degree)

    @cached_property
    def source_square(self) -> Any:
        """Sum of |N1 D2|^2 over the channels, in x."""
        return self._sum([n * self.d2 for n in self.n1], 2 * self.degree)

    @cached_property
    def denominator_square(self) -> Any:
        """|D1 D2|^2 in x."""
        return self._modulus(self.d1 * self.d2, 2 * self.degree)

    def _sum(self, polynomials: Sequence[Any], degree: int) -> Any:
        total = None
        for p in polynomials:
            if p:
                square = self._modulus(p, degree)
                total = square if total is None else total + square
        from realize.kernels.exact.polynomials import ZERO

        return ZERO if total is None else total

    @property
    def size(self) -> int:
        """Degree of the inequalities in w."""
        return 2 * (self.d1.degree() + self.d2.degree())

    def place(self, frequency: float, up: bool, bits: int = 120) -> Any:
        """Return x for an angular frequency, rounded up or down if it is not exact; None for infinity.

        Sampled models: to so many bits.
        """
        from realize.kernels.exact.numbers import fraction

        if not math.isfinite(frequency):
            return None
        if self.period is None:
            w = fraction(float(frequency).as_integer_ratio()) / self.unit
            return w * w
        return self._tangent(frequency, up, bits)

    def _tangent(self, frequency: float, up: bool, bits: int) -> Any:
        from flint import arb

        from realize.kernels.exact.numbers import exact_value, fraction, precision

        if frequency == 0:
            return fraction(0)
        with precision(120):
            half = arb(frequency) * arb(self.period) / 2
            if not half < arb.pi() / 2:
                return None
            tangent = half.tan()
            value = tangent * tangent
        with precision(bits):
            value = +value
            return exact_value(value.upper() if up else value.lower())

    def value_at(self, frequency: float, reference: float | None) -> float:
        """Return the error at a frequency, relative to |G1| or to a reference gain, rounded once or twice.

        Sampled models: at a frequency within a rounding of the one given.
        """
        x = self.place(frequency, up=False)
        value = _root_at(self.error_square, self.source_square if reference is None else self.denominator_square, x)
        if value is None:
            # both vanish: a zero or pole on the axis that was kept exactly
            value = _root_at(*(self.relative_pair if reference is None else self.absolute_pair), x)
        if value is None:
            return 0.0
        return value if reference is None else value / reference

    def gain_at(self, frequency: float) -> float:
        """Return the gain of the source at a frequency, infinite at a pole; rounded once or twice."""
        value = _root_at(*self.gain_squares, self.place(frequency, up=False))
        return math.inf if value is None else value

    @cached_property
    def gain_squares(self) -> tuple[Any, Any]:
        """Sum of |N1|^2 over the channels and |D1|^2, in x."""
        return self._sum(self.n1, self.degree), self._modulus(self.d1, self.degree)

    def within(self, error: float, low: float, high: float, reference: float | None, near: Sequence[Any] = ()) -> bool:
        """Return True if the error is proved on [low, high] (rad/s): relative to |G1|, or to a reference gain.

        The ends are moved outwards to short numbers. ``near`` are places where the error is almost as large.
        """
        from realize.kernels.exact.numbers import fraction
        from realize.kernels.exact.positivity import positive

        if reference is None:
            difference, bound = self.relative_pair
        else:
            difference, bound = self.absolute_pair
            error = error * reference
        error = shortened(error, up=False)
        if not (0 < error < math.inf):
            return False
        e = fraction(error.as_integer_ratio())
        ends = (low, high) if self.period is not None or low == high else (shortened(low, False), shortened(high, True))
        left = self.place(ends[0], up=False, bits=END_BITS)
        if left is None:
            return True
        right = self.place(ends[1], up=True, bits=END_BITS)
        return positive(bound * (e * e) - difference, left, right, near)

    @cached_property
    def relative_pair(self) -> tuple[Any, Any]:
        """|M|^2 and |N1 D2|^2 without what they have in common."""
        return _without_common(self.error_square, self.source_square)

    @cached_property
    def absolute_pair(self) -> tuple[Any, Any]:
        """|M|^2 and |D1 D2|^2 without what they have in common."""
        return _without_common(self.error_square, self.denominator_square)

    def bound(
        self, value: float, intervals: Sequence[tuple[float, float, float | None]], near: Sequence[Any] = ()
    ) -> float | None:
        """Return the smallest tried bound, at least the value, that holds on all intervals; None if none was proved.

        Parameters
        ----------
        value : float
            The largest value found.
        intervals : sequence of (low, high, reference)
            rad/s; reference None for the relative error, else the gain to divide by (a lower bound of it).
        near : sequence of fmpq, rising
            Values of the variable x where the error is almost as large as it gets, if known: the proof is shorter.
        """
        start = max(value, SMALLEST)
        position = 0
        for factor in STEPS:
            error = math.nextafter(start * factor, math.inf)
            while position < len(intervals):
                tell(f"degree {self.size // 2}: interval {position + 1} of {len(intervals)}, bound {error:.3g}")
                if not self.within(error, *intervals[position], near=near):
                    break
                position += 1
            else:
                return error
            # what was proved with less holds with more: only the rest is left
        return None


#: Bits of the ends of intervals and of bounds: short numbers make short proofs.
END_BITS = 30


def shortened(value: float, up: bool) -> float:
    """Return a positive double of few bits just above or just below; zero, infinity and the smallest stay."""
    if not 1e-300 < value < math.inf:
        return value
    mantissa, exponent = math.frexp(value)
    whole = math.ldexp(mantissa, END_BITS)
    return math.ldexp(math.ceil(whole) if up else math.floor(whole), exponent - END_BITS)


def _root_at(above: Any, below: Any, x: Any) -> float | None:
    """Return the square root of above(x) / below(x), at infinity for None; None where both vanish."""
    if x is None:
        degree = max(above.degree(), below.degree())
        top, bottom = above[degree], below[degree]
    else:
        top, bottom = above(x), below(x)
    if not bottom:
        return math.inf if top else None
    return square_root(top / bottom) if top else 0.0


def square_root(square: Any) -> float:
    """Return the square root of an exact rational; infinite or zero past the range of doubles."""
    from realize.kernels.exact.numbers import nearest, scaled

    value = nearest(square)
    if 1e-290 < value < 1e290:
        return math.sqrt(value)
    mantissa, exponent = scaled(square)
    odd = exponent % 2
    try:
        return math.ldexp(math.sqrt(mantissa * (2.0 if odd else 1.0)), (exponent - odd) // 2)
    except OverflowError:
        return math.inf


def _without_common(first: Any, second: Any) -> tuple[Any, Any]:
    """Cancel common factors: zeros and poles on the axis that were kept exactly.

    Both are sums of squares on x >= 0, so that a common root x > 0 has even multiplicity, and one at x = 0 is at the
    edge: what is cancelled is not negative.
    """
    from realize.kernels.exact.polynomials import coprime, quotient

    if coprime(first, second):
        return first, second
    common = first.gcd(second)
    if common.degree() < 1:
        return first, second
    return quotient(first, common), quotient(second, common)
