"""Proof that a polynomial is positive on an interval, by Descartes' rule of signs and bisection.

Vincent's theorem in the form of Collins & Akritas (1976, "Polynomial real root isolation using Descartes' rule of
signs"): the number of sign changes of the coefficients after mapping an interval to (0, inf) bounds the number of roots
inside it, and is zero on intervals that are small against the distance of the nearest complex roots.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from math import gcd
from typing import Literal, NamedTuple, TypeVar

from flint import fmpq, fmpq_poly, fmpz, fmpz_poly

Poly = TypeVar("Poly", fmpq_poly, fmpz_poly)

#: Intervals looked at before giving up: a proof needs a few for each nearby root.
MOST_INTERVALS = 4000
#: Up to this degree intervals are mapped by composing polynomials; past it the powers of denominators are kept.
COMPOSED = 10


def _integers(p: fmpq_poly) -> fmpz_poly:
    """Return a positive multiple with integer coefficients without common factor."""
    n = fmpz_poly(p.numer().coeffs())
    content = n.content()
    return n // fmpz_poly([content]) if content not in (0, 1) else n


def _changes(p: fmpz_poly) -> int:
    """Return the number of sign changes of the coefficients, 2 at the most."""
    count, last = 0, 0
    for c in p.coeffs():
        if c:
            sign = 1 if c > 0 else -1
            if last and sign != last:
                count += 1
                if count == 2:
                    return 2
            last = sign
    return count


_SHIFT = fmpz_poly([1, 1])


class _OnIntervals:
    """A polynomial seen on intervals whose ends are multiples of 1/q: q^n p(y/q) is kept for each q that is used."""

    def __init__(self, p: fmpz_poly) -> None:
        self.coefficients = p.coeffs()
        self._known = {1: p}
        self._rational = fmpq_poly(p) if p.degree() <= COMPOSED else None

    def _in_units(self, q: int) -> fmpz_poly:
        if q not in self._known:
            n = len(self.coefficients) - 1
            power, listed = 1, []
            for c in reversed(self.coefficients):
                listed.append(c * power)
                power *= q
            assert len(listed) == n + 1
            self._known[q] = fmpz_poly(listed[::-1])
        return self._known[q]

    def half_line(self, low: fmpq, high: fmpq | None) -> fmpz_poly:
        """Return a polynomial whose roots in (0, inf) are those of p in (low, high); infinite where high is None.

        x = low + t for an infinite interval; x = (low + high t) / (1 + t) otherwise.
        """
        q = int(low.q)
        if high is None:
            return self._in_units(q)(fmpz_poly([low.p, 1]))
        if self._rational is not None:
            c = self._rational(fmpq_poly([low, high - low])).numer().coeffs()
            c += [fmpz(0)] * (len(self.coefficients) - len(c))
            return fmpz_poly(c[::-1])(_SHIFT)
        q = q * int(high.q) // gcd(q, int(high.q))
        start = low.p * (q // int(low.q))
        # y = start + width u, u in (0, 1); then reverse and shift: u = 1 / (1 + t) covers the same interval
        c = self._in_units(q)(fmpz_poly([start, high.p * (q // int(high.q)) - start])).coeffs()
        c += [fmpz(0)] * (len(self.coefficients) - len(c))
        return fmpz_poly(c[::-1])(_SHIFT)


class Counterexample(NamedTuple):
    """A place where a polynomial is not positive; None stands for infinity."""

    x: fmpq | None


def positive(p: fmpq_poly, low: fmpq, high: fmpq | None, near: Sequence[fmpq] = ()) -> bool:
    """Return True if p(x) > 0 is proved for all low <= x <= high (high None: to infinity, the limit included).

    Parameters
    ----------
    p : polynomial with rational coefficients
    low : fmpq
        Not negative.
    high : fmpq or None
    near : sequence of fmpq, rising
        Places where p is small against its surroundings: an interval that ends at one needs no halving towards it,
        since the disc over the interval leaves out a pair of roots beside its own end (Obreschkoff's circle).

    Returns
    -------
    bool
        False where p is not positive or the proof was not found within `MOST_INTERVALS` intervals.
    """
    return examined(p, low, high, near=near) is True


def positive_whole(p: fmpz_poly, low: fmpq, high: fmpq | None, near: Sequence[fmpq] = ()) -> bool:
    """Return True if p(x) > 0 is proved for a polynomial over the integers; as `positive`."""
    return _examined(fmpq_poly(p), p, low, high, MOST_INTERVALS, near) is True


def examined(
    p: fmpq_poly, low: fmpq, high: fmpq | None, most: int = MOST_INTERVALS, near: Sequence[fmpq] = ()
) -> Literal[True] | Counterexample | None:
    """Return True if p > 0 is proved on an interval, a place where it is not, or None if neither was found.

    Parameters
    ----------
    p, low, high, near
        As for `positive`.
    most : int
        Intervals looked at before giving up.
    """
    return _examined(p, _integers(p) if p else fmpz_poly([]), low, high, most, near)


def _examined(
    p: fmpq_poly, f: fmpz_poly, low: fmpq, high: fmpq | None, most: int, near: Sequence[fmpq]
) -> Literal[True] | Counterexample | None:
    """Return the same for p and a positive multiple f of it over the integers."""
    if not f:
        return Counterexample(low)
    if f.degree() == 0:
        return True if f[0] > 0 else Counterexample(low)
    if high is None and f.leading_coefficient() <= 0:
        return Counterexample(None)
    if p(low) <= 0:
        return Counterexample(low)
    if high is not None and p(high) <= 0:
        return Counterexample(high)
    if low == high:
        return True
    ends: list[fmpq | None] = [low]
    for place in near:
        if low < place and (high is None or place < high):
            if p(place) <= 0:
                return Counterexample(place)
            ends.append(place)
    ends.append(high)
    waiting: list[tuple[fmpq, fmpq | None]] = list(pairwise(ends))  # type: ignore[arg-type]
    seen = _OnIntervals(f)
    for _ in range(most):
        if not waiting:
            return True
        a, b = waiting.pop()
        changes = _changes(seen.half_line(a, b))
        if changes == 0:
            # no root inside, and positive at the lower end
            continue
        middle = _middle(a, b)
        if p(middle) <= 0:
            return Counterexample(middle)
        # one change would be one root between two positive ends, which cannot be
        waiting += [(middle, b), (a, middle)]
    return None if waiting else True


def _middle(a: fmpq, b: fmpq | None) -> fmpq:
    """Return a power of two between the ends where there is one (near their geometric mean), else the middle."""
    low = _exponent(a) if a > 0 else None
    if b is None:
        return fmpq(2) ** (low + 4) if low is not None else fmpq(1)
    high = _exponent(b)
    if low is None:
        # towards zero in steps that grow: the lower end is zero itself
        return fmpq(2) ** (high - 8) if high > -(1 << 14) else b / 2
    if high - low >= 2:
        return fmpq(2) ** ((low + high) // 2)
    return (a + b) / 2


def _exponent(value: fmpq) -> int:
    """Return e with 2^(e-1) <= value < 2^(e+1)."""
    return int(value.p).bit_length() - int(value.q).bit_length()


def square_modulus(p: Poly) -> Poly:
    """Return |p(jw)|^2 as a polynomial in x = w^2 of the same kind: even part squared plus x times odd part squared."""
    kind = type(p)
    c = p.coeffs()
    c[2::4], c[3::4] = [-value for value in c[2::4]], [-value for value in c[3::4]]
    even, odd = kind(c[0::2]), kind(c[1::2])
    return even * even + (odd * odd).left_shift(1)
