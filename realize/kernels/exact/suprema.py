"""Largest value of a singular value that is a root of an exact polynomial, proved over all frequencies.

The squared singular values at x = w^2 are the roots of ::

    P(x, t) = S_0(x) t^q - S_1(x) t^(q-1) + ... + (-1)^q S_q(x),      S_k(x) >= 0,

all of them real and not negative. They stay below t on an interval where P(x, t) > 0, if they do so at one of its
points: none can pass t without a zero of P, and S_0 has none that is not a pole. One singular value: P = S_0 t - S_1.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from flint import acb_poly, arb, arb_poly, fmpq, fmpq_poly

from realize.kernels.exact.numbers import exact_value, precision, scaled_ball
from realize.kernels.exact.polynomials import shifted
from realize.kernels.exact.positivity import Counterexample, examined

#: Relative distances above the largest value found at which a bound is tried, squares of gains.
STEPS = (2.0**-40, 2.0**-26, 2.0**-12, 2.0**-8, 0.02, 0.2, 1.0, 4.0)
#: How often a place that exceeds the level starts the search again, and intervals a proof may look at.
ROUNDS, INTERVALS = 40, 600
#: First precision (bits) of values, accuracy asked of them, and the precision past which they are taken as they are.
FIRST_BITS, VALUE_BITS, CAP_BITS = 128, 60, 1 << 14
#: Degrees up to which approximate roots say where to look; further up, the proof itself has to.
SEEDED_DEGREE = 120

#: A closed interval of x; an upper end of None is infinity.
Interval = tuple[fmpq, fmpq | None]


@dataclass(frozen=True)
class Supremum:
    """The largest squared singular value found, where, and a proved bound.

    Attributes
    ----------
    square : fmpq or None
        Attained at `x` to a relative 2^-60; None for infinity.
    x : fmpq or None
        None at infinity.
    bound : fmpq or None
        No squared singular value exceeds it on the intervals; None if nothing was proved.
    """

    square: fmpq | None
    x: fmpq | None
    bound: fmpq | None


class Curve:
    """The largest root of P(x, t) as a function of x.

    Parameters
    ----------
    squares : sequence of polynomials
        S_0 to S_q in x.
    degree : int, optional
        Degree whose coefficients give the limit at infinity; the largest one unless given.
    """

    def __init__(self, squares: Sequence[fmpq_poly], degree: int | None = None) -> None:
        top = len(squares)
        while top > 2 and not squares[top - 1]:
            top -= 1
        self.squares = list(squares[:top])
        self.degree = max(p.degree() for p in self.squares) if degree is None else degree
        self._held: dict[int, list[arb_poly]] = {}

    def level(self, t: fmpq) -> fmpq_poly:
        """Return P(x, t) for a fixed t."""
        total = self.squares[0]
        sign = 1
        for p in self.squares[1:]:
            sign = -sign
            total = total * t + p * sign
        return total

    def below(self, x: fmpq | None, t: fmpq) -> bool:
        """Return whether all squared singular values are below t at one place (exactly)."""
        c = [p[self.degree] if x is None else p(x) for p in self.squares]
        if c[0] <= 0:
            return False
        in_t = fmpq_poly([(-1) ** k * value for k, value in enumerate(c)][::-1])
        # all roots are real: all are below t if the coefficients in t + u are positive
        return all(value > 0 for value in shifted(in_t, t).coeffs())

    def _values(self, x: fmpq | None) -> list[arb]:
        if x is None:
            return [arb(p[self.degree]) for p in self.squares]
        bits = FIRST_BITS
        while True:
            with precision(bits):
                if bits not in self._held:
                    self._held[bits] = [arb_poly(p) for p in self.squares]
                at = arb(x)
                found = [p(at) for p in self._held[bits]]
                if all(v.rel_accuracy_bits() >= VALUE_BITS for v in found) or bits >= CAP_BITS:
                    return found
            if bits >= 1024:
                exact = [p(x) for p in self.squares]
                with precision(FIRST_BITS):
                    return [arb(value) for value in exact]
            bits *= 2

    def square(self, x: fmpq | None) -> fmpq | None:
        """Return the largest squared singular value at a place, to a relative 2^-60 (its square root's 2^-30 where two
        of them meet); None where it is infinite."""
        values = self._values(x)
        with precision(FIRST_BITS):
            s0, s1 = values[0].mid(), values[1].mid()
            if not s0 > 0:
                return None if any(value.mid() > 0 for value in values[1:]) else fmpq(0)
            if not s1 > 0:
                return fmpq(0)
            if len(values) == 2:
                return exact_value(s1 / s0)
            # t = (S_1 / S_0) u with u between 1/q and 1, from above: Newton's method is monotonic there
            c, power = [arb(1), arb(-1)], s0 / s1
            factor = power
            for k, value in enumerate(values[2:], start=2):
                c.append((-1) ** k * (value.mid() / s1 * factor).mid())
                factor = factor * power
            u = arb(1)
            for _ in range(200):
                f, slope = arb(0), arb(0)
                for a in c:
                    slope, f = slope * u + f, f * u + a
                if not f.mid() > 0 or not slope.mid() > 0:
                    break
                step = (f.mid() / slope.mid()).mid()
                u = (u - step).mid()
                if step < u * arb(2) ** -80:
                    break
            return exact_value(u * s1 / s0)

    def logarithm(self, x: float) -> float:
        """Return the binary logarithm of the largest squared singular value, for a search; -inf for zero."""
        found = self.square(None if math.isinf(x) else fmpq(*x.as_integer_ratio()))
        if found is None:
            return math.inf
        if not found:
            return -math.inf
        mantissa, exponent = scaled_ball(arb(found))
        return math.log2(mantissa) + exponent

    def seeds(self) -> list[float]:
        """Return places where the largest value may be: near the roots of S_0 and between them."""
        found: set[float] = set()
        p = self.squares[0]
        low = next((k for k, c in enumerate(p.coeffs()) if c), 0)
        if low:
            p = fmpq_poly(p.coeffs()[low:])
        if 0 < p.degree() <= SEEDED_DEGREE:
            with precision(4 * p.degree() + 64):
                try:
                    roots = acb_poly(p).roots()
                except (ValueError, ZeroDivisionError):
                    roots = []
            for root in roots:
                re, size = float(root.real), float(abs(root))
                found.update(v for v in (re, size) if math.isfinite(v) and v > 0)
        found = {v for v in found if 1e-290 < v < 1e290}
        ends = [min(found, default=1.0), max(found, default=1.0)]
        a, b = math.log2(ends[0]) - 8, math.log2(ends[1]) + 8
        count = int(min(max(2 * (b - a), 20), 160))
        found.update(2.0 ** (a + (b - a) * k / count) for k in range(count + 1))
        return sorted(found)


def _climb(curve: Curve, low: float, x: float, high: float, value: float) -> tuple[float, float]:
    """Return (value, place) after zooms into an interval around a local maximum, on a logarithmic scale."""
    if low <= 0:
        low = x * 2.0**-20 if x > 0 else high * 2.0**-20
    if math.isinf(high):
        high = x * 2.0**20
    a, b = math.log2(low), math.log2(high)
    best = x
    for _ in range(40):
        if not b - a > 1e-14 * max(abs(a), abs(b), 1e-3):
            break
        points = [2.0 ** (a + (b - a) * k / 6) for k in range(7)]
        values = [curve.logarithm(p) for p in points]
        k = max(range(7), key=values.__getitem__)
        if values[k] > value:
            value, best = values[k], points[k]
        elif math.isclose(values[k], value, rel_tol=0, abs_tol=1e-14):
            break
        a, b = math.log2(points[max(k - 1, 0)]), math.log2(points[min(k + 1, 6)])
    return value, best


def _search(curve: Curve, points: list[float], low: float, high: float) -> tuple[float, float]:
    points = sorted({p for p in points if low <= p <= high} | {low, high})
    values = [curve.logarithm(p) for p in points]
    k = max(range(len(points)), key=values.__getitem__)
    value, best = values[k], points[k]
    if math.isinf(value):
        return value, best
    tops = [
        k
        for k in range(len(points))
        if (k == 0 or values[k] >= values[k - 1]) and (k + 1 == len(points) or values[k] >= values[k + 1])
    ]
    tops = sorted(tops, key=lambda k: -values[k])[:4]
    for k in tops:
        if values[k] < value - 4 or points[k] == 0 or math.isinf(points[k]):
            continue
        left, right = points[max(k - 1, 0)], points[min(k + 1, len(points) - 1)]
        found, where = _climb(curve, left, points[k], right, values[k])
        if found > value:
            value, best = found, where
    return value, best


def supremum(curve: Curve, intervals: Sequence[Interval] = ((fmpq(0), None),)) -> Supremum:
    """Return the largest squared singular value over intervals of x, with a proved bound.

    Samples near the roots of S_0, the best of them refined; then P(x, t) > 0 is tried for a t just above. What refutes
    it is a better place, where the search goes on, so that no peak is missed for want of a sample.

    Parameters
    ----------
    curve : Curve
    intervals : sequence of (low, high)
        high None is infinity.
    """
    square: fmpq | None = fmpq(0)
    place: fmpq | None = intervals[0][0] if intervals else fmpq(0)
    points = curve.seeds()

    def take(x: fmpq | None) -> bool:
        nonlocal square, place
        found = curve.square(x)
        if found is None:
            square, place = None, x
        elif square is not None and found > square:
            square, place = found, x
        else:
            return False
        return True

    def exact_place(x: float) -> fmpq | None:
        return None if math.isinf(x) else fmpq(*x.as_integer_ratio())

    for low, high in intervals:
        take(low)
        take(high)
        if square is None:
            return Supremum(None, place, None)
        a, b = float(low), math.inf if high is None else float(high)
        take(exact_place(_search(curve, points, a, b)[1]))
    if square is None:
        return Supremum(None, place, None)
    if not any(p for p in curve.squares[1:]):
        return Supremum(fmpq(0), place, fmpq(0))
    if not square:
        return Supremum(square, place, None)
    if len(curve.squares) > 2 and any(examined(curve.squares[0], *ends, INTERVALS) is not True for ends in intervals):
        # a pole between the ends, where two singular values could pass any level at once
        return Supremum(square, place, None)
    step = 0
    for _ in range(ROUNDS):
        assert square is not None
        level = square * (1 + fmpq(*STEPS[step].as_integer_ratio()))
        p = curve.level(level)
        verdicts: list[Counterexample | bool | None] = []
        for low, high in intervals:
            verdict: Counterexample | bool | None = examined(p, low, high, INTERVALS)
            if verdict is True and len(curve.squares) > 2 and not curve.below(low, level):
                verdict = None if not take(low) else Counterexample(low)
            verdicts.append(verdict)
            if verdict is not True:
                break
        if all(verdict is True for verdict in verdicts):
            return Supremum(square, place, level)
        last = verdicts[-1]
        if isinstance(last, Counterexample):
            before = square
            take(last.x)
            if square is None:
                return Supremum(None, place, None)
            if last.x is not None and last.x:
                x = float(last.x)
                low, high = intervals[len(verdicts) - 1]
                a, b = max(float(low), x / 16), min(math.inf if high is None else float(high), x * 16)
                near = [x * (1 + d) for d in (-0.5, -0.1, -1e-2, -1e-3, -1e-5, 0.0, 1e-5, 1e-3, 1e-2, 0.1, 1.0)]
                take(exact_place(_search(curve, near, a, b)[1]))
            if square is None:
                return Supremum(None, place, None)
            if square > before:
                continue
        step += 1
        if step == len(STEPS):
            break
    return Supremum(square, place, None)
