"""Basis functions of rational functions with structure: fixed poles and zeros, relative degree, unstable poles.

The functions with denominator d over all poles, numerator divisible by the fixed zeros, and a given relative degree are

    G(s) = H(s) R(s),  H = product of (1 - s/zero) / product of some factors of d,  R = partial fractions over the rest

where as many poles go into H as make R proper (or strictly proper). The coefficients of R are free: every one of them
gives a function with the structure, so nothing is left to a penalty or to rounding. The fastest poles go into H: at the
slower ones it is then near its value at 0, and the columns stay apart.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class Known:
    """What is known of a function before it is fitted.

    Parameters
    ----------
    poles : [f] complex
        Fixed poles, conjugate pairs adjacent with the positive imaginary part first; a repeated pole as often as it is.
    zeros : [z] complex
        Fixed zeros of every channel, ordered alike.
    excess : int
        Relative degree at least.
    """

    poles: ComplexArray
    zeros: ComplexArray
    excess: int

    @property
    def fewest(self) -> int:
        """Fewest free poles: with less there is no room for the zeros and the relative degree."""
        return max(0, self.excess + self.zeros.size - self.poles.size)

    def columns(self, order: int) -> int:
        """Coefficients of a channel with so many free poles."""
        return order + self.poles.size + 1 - self.excess - self.zeros.size


@dataclass(frozen=True, eq=False)
class Free:
    """Free sections s^2 + a s + w^2 and s + single; a and single are negative for poles on the right."""

    w: Array
    a: Array
    single: Array


@dataclass(frozen=True)
class _Unit:
    """One factor of the denominator: a section (w, a) or one real pole at -a, and its place among the free ones."""

    pair: bool
    w: float
    a: float
    place: int


class StructuredBasis:
    """The columns H phi of a set of sections at points, and their derivatives by ln w, ln |a| and ln |single|.

    Raises
    ------
    ValueError
        With fewer poles than relative degree and fixed zeros need.
    """

    def __init__(self, points: ComplexArray, free: Free, known: Known) -> None:
        self.points = points
        self.free = free
        self.known = known
        units = [_Unit(True, float(w), float(a), k) for k, (w, a) in enumerate(zip(free.w, free.a, strict=True))]
        units += [_Unit(False, abs(float(c)), float(c), k) for k, c in enumerate(free.single)]
        fixed = [
            _Unit(bool(p.imag > 0), abs(p), -2 * p.real if p.imag > 0 else -p.real, -1)
            for p in known.poles.tolist()
            if p.imag >= 0
        ]
        ranked = sorted(units + fixed, key=lambda u: -u.w)
        self.outer, self.strict = _taken(ranked, known.excess + known.zeros.size)
        rest = [u for u in ranked if not any(u is taken for taken in self.outer)]
        #: free sections and real poles in R, by their place
        self.pairs = np.array(sorted(u.place for u in rest if u.pair and u.place >= 0), dtype=int)
        self.singles = np.array(sorted(u.place for u in rest if not u.pair and u.place >= 0), dtype=int)
        self.inner = [u for u in rest if u.place < 0]

    def factor(self, points: ComplexArray) -> ComplexArray:
        """Return H at points: factors are 1 at s = 0, those of zeros and poles at 0 are s and 1/s."""
        result = np.ones(points.size, dtype=complex)
        for zero in self.known.zeros.tolist():
            if zero == 0:
                result = result * points
            elif zero.imag == 0:
                result = result * (1 - points / zero.real)
            elif zero.imag > 0:
                result = result * ((points - zero) / abs(zero)) * ((points - zero.conjugate()) / abs(zero))
        for unit in self.outer:
            result = result * _section(unit, points)
        return result

    def rest(self, points: ComplexArray) -> ComplexArray:
        """Return the columns of R at points: w^2/q and w s/q, c/(s + c), fixed ones, and 1 unless R vanishes at
        infinity."""
        parts = []
        w, a, c = self.free.w[self.pairs], self.free.a[self.pairs], self.free.single[self.singles]
        inverse = _inverse(points, w, a)
        parts += [w**2 * inverse, w * points[:, None] * inverse, c / (points[:, None] + c)]
        parts += [column[:, None] for column in self._fixed_columns(points)]
        if not self.strict:
            parts.append(np.ones((points.size, 1), dtype=complex))
        return np.hstack(parts)

    def _fixed_columns(self, points: ComplexArray) -> list[ComplexArray]:
        columns = []
        seen: dict[tuple[bool, float, float], int] = {}
        for unit in self.inner:
            key = (unit.pair, unit.w, unit.a)
            seen[key] = power = seen.get(key, 0) + 1
            section = _section(unit, points)
            if not unit.pair:
                columns.append(section**power)
            else:
                # the same span as the partial fractions of both members
                columns += [section**power, section**power * points / unit.w]
        return columns

    def columns(self, points: ComplexArray | None = None) -> ComplexArray:
        """Return the basis [k][columns]."""
        at = self.points if points is None else points
        return self.factor(at)[:, None] * self.rest(at)

    def derivatives(self, coefficient: Array) -> ComplexArray:
        """Return the derivatives of columns @ coefficient by ln w, ln |a|, ln |single|: [k][unknowns]."""
        s = self.points
        n = self.free.w.size
        result = np.zeros((s.size, 2 * n + self.free.single.size), dtype=complex)
        factor = self.factor(s)
        whole = factor * (self.rest(s) @ coefficient)
        for unit in self.outer:
            if unit.place < 0:
                continue
            if unit.pair:
                inverse = _inverse(s, np.array([unit.w]), np.array([unit.a]))[:, 0]
                result[:, unit.place] = 2 * (1 - unit.w**2 * inverse) * whole
                result[:, n + unit.place] = -unit.a * s * inverse * whole
            else:
                result[:, 2 * n + unit.place] = s / (s + unit.a) * whole
        w, a, c = self.free.w[self.pairs], self.free.a[self.pairs], self.free.single[self.singles]
        m = w.size
        inverse = _inverse(s, w, a)
        first = w**2 * inverse * coefficient[:m]
        second = w * s[:, None] * inverse * coefficient[m : 2 * m]
        share = w**2 * inverse
        result[:, self.pairs] = factor[:, None] * (2 * (1 - share) * first + (1 - 2 * share) * second)
        result[:, n + self.pairs] = -factor[:, None] * (a * s[:, None] * inverse * (first + second))
        alone = c / (s[:, None] + c)
        own = coefficient[2 * m : 2 * m + c.size]
        result[:, 2 * n + self.singles] = factor[:, None] * (alone * (1 - alone) * own)
        return result

    def rest_states(self) -> tuple[Array, Array, Array]:
        """Return A, b and rows C, one a column of R but for the constant: R = C (sI - A)^-1 b."""
        size = 2 * self.pairs.size + self.singles.size + sum(2 if u.pair else 1 for u in self.inner)
        A, b, rows = np.zeros((size, size)), np.zeros(size), []
        k = 0
        first, second = [], []
        for j in self.pairs:
            row, other = _place_section(A, b, k, float(self.free.w[j]), float(self.free.a[j]), None)
            first.append(row)
            second.append(other)
            k += 2
        rows += first + second
        for j in self.singles:
            c = float(self.free.single[j])
            A[k, k], b[k] = -c, 1.0
            rows.append(_unit_row(size, k, c))
            k += 1
        ends: dict[tuple[bool, float, float], Array] = {}
        for unit in self.inner:
            key = (unit.pair, unit.w, unit.a)
            if unit.pair:
                row, other = _place_section(A, b, k, unit.w, unit.a, ends.get(key))
                rows += [row, other]
                ends[key] = row
                k += 2
            else:
                if key in ends:
                    A[k] += ends[key]
                else:
                    b[k] = 1.0
                A[k, k] = -unit.a
                ends[key] = _unit_row(size, k, unit.a if unit.a != 0 else 1.0)
                rows.append(ends[key])
                k += 1
        return A, b, np.array(rows).reshape(len(rows), size)


def _taken(ranked: list[_Unit], wanted: int) -> tuple[list[_Unit], bool]:
    """Return the factors that go into H for a number of poles, and whether R must vanish at infinity to make it up."""
    taken: list[_Unit] = []
    left = wanted
    for unit in ranked:
        if left < (2 if unit.pair else 1):
            break
        taken.append(unit)
        left -= 2 if unit.pair else 1
    if left > 1 or (left == 1 and len(taken) == len(ranked)):
        raise ValueError(f"{left} pole(s) too few")
    return taken, left == 1


def _inverse(points: ComplexArray, w: Array, a: Array) -> ComplexArray:
    """Return 1/(s^2 + a s + w^2): (w - js)(w + js) + a s keeps the distance from resonance exact on the axis."""
    s = points[:, None]
    return 1 / ((w - 1j * s) * (w + 1j * s) + a * s)


def _section(unit: _Unit, points: ComplexArray) -> ComplexArray:
    if unit.pair:
        return unit.w**2 * _inverse(points, np.array([unit.w]), np.array([unit.a]))[:, 0]
    return unit.a / (points + unit.a) if unit.a != 0 else 1 / points


def _unit_row(size: int, k: int, value: float) -> Array:
    row = np.zeros(size)
    row[k] = value
    return row


def _place_section(A: Array, b: Array, k: int, w: float, a: float, source: Array | None) -> tuple[Array, Array]:
    """Write s^2 + a s + w^2 as x1' = w x2, x2' = -w x1 - a x2 + w u, and return the rows of w^2/q and w s/q."""
    A[k, k + 1] = w
    A[k + 1, k], A[k + 1, k + 1] = -w, -a
    if source is None:
        b[k + 1] = w
    else:
        A[k + 1] += w * source
    return _unit_row(b.size, k, 1.0), _unit_row(b.size, k + 1, 1.0)
