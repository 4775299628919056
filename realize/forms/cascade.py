"""Cascade of first- and second-order sections from poles, zeros and gain.

Each section is a scaled companion block about a centre c (0 in continuous time; 1 or -1, whichever is nearer to the
poles, for sampled models, so that t = z - c does not cancel near the unit circle) ::

    x1' = c x1 + k x2,   x2' = -(d0/k) x1 + (c - d1) x2 + b u,   y = c0 x1 + c1 x2 + u,   k and b powers of two

with t^2 + d1 t + d0 the denominator: the series connection then multiplies by powers of two only and needs no rounding.
Zeros at the origin and on the axis stay exactly where they are, since c1 = -d1 and c0 = -d0/k are then exact.
Sampled sections with a zero at z = -1 or 1 beside another real zero r use B = (A - r I) b, D = C b instead, for which
the numerator is (z - r) C adj(zI - A) b: with C made of powers of two the zero at -1 or 1 is exact, however near to
each other the poles and 1 are. Such sections come first, and the mantissa of the gain enters after them; every product
in the assembled matrices is exact.

A section with as many zeros as poles forms its numerator as (numerator - denominator) + denominator: the relative
rounding error near a zero is multiplied by |denominator| / |numerator's terms|. Zeros are therefore given to poles that
keep this amplification small, and to strictly proper sections where there are more poles than zeros (Jackson 1970 on
pairing and ordering for digital filters; the amplification argument is our own, docs/methods).
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Collection, Mapping
from dataclasses import dataclass
from fractions import Fraction
from itertools import accumulate, pairwise

import numpy as np
from flint import fmpq
from numpy.typing import NDArray

from realize.forms.tuned_coupling import NORMAL, BeyondDoubles, to_double, tuned
from realize.kernels.exact.numbers import exact, power_of_two

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Section:
    """Poles and zeros of one section, one or two poles, at most as many zeros; closed under conjugation."""

    poles: tuple[complex, ...]
    zeros: tuple[complex, ...]


#: Roots to more digits than their doubles have: real and imaginary part.
Precise = Mapping[complex, tuple[fmpq, fmpq]]


def monic(roots: tuple[complex, ...], circle: Collection[complex] = (), precise: Precise | None = None) -> list[fmpq]:
    """Return the coefficients, highest power first, of the monic polynomial with one or two given roots.

    Parameters
    ----------
    circle : collection of complex
        Roots that stand for numbers exactly on the unit circle.
    precise : mapping, optional
        What roots stand for to more digits; the doubles themselves where they are not listed.
    """
    if not roots:
        return [exact(1)]

    def parts(root: complex) -> tuple[fmpq, fmpq]:
        known = None if precise is None else precise.get(root)
        return (exact(root.real), exact(root.imag)) if known is None else known

    if len(roots) == 1:
        return [exact(1), -parts(roots[0])[0]]
    first, second = roots
    re, im = parts(first)
    if first.imag != 0:
        return [exact(1), -2 * re, exact(1) if first in circle else re * re + im * im]
    q = parts(second)[0]
    return [exact(1), -(re + q), re * q]


def _size(root: complex, sampled: bool) -> float:
    """Return |s| of a root, |ln z| for sampled models (infinite at z = 0)."""
    if not sampled:
        return abs(root)
    if root == 0:
        return math.inf
    return abs(cmath.log(root)) if root != 1 else 0.0


def _amplification(poles: tuple[complex, ...], zeros: tuple[complex, ...], sampled: bool) -> float:
    """Return by how much the rounding of numerator - denominator is magnified near the zeros."""
    worst = 1.0
    for zero in zeros:
        size = _size(zero, sampled)
        if size == 0 or (sampled and zero in (1, -1)):
            continue
        value = 1.0
        for pole in poles:
            # ratios first: 1e300 rad/s squared is no double
            value *= (
                abs(1j - pole / size)
                if not sampled
                else abs(cmath.exp(1j * min(size, math.pi)) - pole) / min(size, 1.0)
            )
        worst = max(worst, value)
    return worst


def _pairs(roots: list[complex]) -> tuple[list[tuple[complex, complex]], list[complex]]:
    """Split a list closed under conjugation into conjugate pairs (positive imaginary part first) and reals."""
    upper = [root for root in roots if root.imag > 0]
    return [(root, root.conjugate()) for root in upper], [root for root in roots if root.imag == 0]


def group_roots(zeros: list[complex], poles: list[complex], sampled: bool = False) -> list[Section]:
    """Return sections with zeros given to poles, ordered from well to lightly damped.

    Parameters
    ----------
    zeros, poles : list of complex
        Closed under conjugation; no more zeros than poles.
    sampled : bool
        The roots are those of a polynomial in z.
    """
    pole_pairs, real_poles = _pairs(poles)
    zero_pairs, real_zeros = _pairs(zeros)
    slack = len(poles) - len(zeros)
    sections: list[Section] = []

    def size(root: complex) -> float:
        return _size(root, sampled)

    # complex zeros first, slowest first: they have the fewest poles at or below their own frequency
    for pair in sorted(zero_pairs, key=lambda z: (size(z[0]), z[0].imag)):
        candidates = [
            (0.0 if poles_k == pair else _amplification(poles_k, pair, sampled), k, poles_k)
            for k, poles_k in enumerate(pole_pairs)
        ]
        if len(real_poles) >= 2:
            near = sorted(real_poles, key=size)[:2]
            candidates.append((_amplification((near[0], near[1]), pair, sampled), -1, (near[0], near[1])))
        _, k, chosen = min(candidates, key=lambda c: (c[0], c[1]))
        if k >= 0:
            pole_pairs.pop(k)
        else:
            for pole in chosen:
                real_poles.remove(pole)
        sections.append(Section(chosen, pair))

    # real zeros: a strictly proper section of order two holds one zero without any amplification
    open_pairs: list[tuple[tuple[complex, complex], list[complex]]] = [(pair, []) for pair in pole_pairs]
    for zero in sorted(real_zeros, key=lambda z: (size(z), z.real)):
        options: list[tuple[float, int, str, int]] = []
        for k, pole in enumerate(real_poles):
            cost = 0.0 if pole == zero else _amplification((pole,), (zero,), sampled)
            options.append((cost, 0, "single", k))
        for k, (pair, held) in enumerate(open_pairs):
            if not held:
                free = slack > 0
                options.append((1.0 if free else _amplification(pair, (zero,), sampled), 1 if free else 2, "pair", k))
            elif len(held) == 1:
                options.append((_amplification(pair, (held[0], zero), sampled), 3, "pair", k))
        if slack > 0 and len(real_poles) >= 2:
            options.append((1.5, 4, "merge", -1))
        best = min(options, key=lambda o: (o[0] > 4, o[0] if o[0] > 4 else 0, o[1], o[0], o[3]))
        if best[2] == "single":
            sections.append(Section((real_poles.pop(best[3]),), (zero,)))
        elif best[2] == "pair":
            held = open_pairs[best[3]][1]
            slack += 1 if held else -1
            held.append(zero)
        else:
            near = sorted(real_poles, key=size)[:2]
            for pole in near:
                real_poles.remove(pole)
            open_pairs.append(((near[0], near[1]), [zero]))
            slack -= 1
    sections += [Section(pair, tuple(held)) for pair, held in open_pairs]
    sections += [Section((pole,), ()) for pole in real_poles]

    def damping(section: Section) -> tuple[float, float]:
        pole = section.poles[0]
        if sampled:
            if pole == 0:
                return -1.0, math.inf
            pole = cmath.log(pole)
        magnitude = abs(pole)
        return (-min(1.0, abs(pole.real) / magnitude) if magnitude > 0 else -2.0, magnitude)

    return sorted(sections, key=damping)


def cascade_states(
    sections: list[Section],
    gain: fmpq | Fraction,
    sampled: bool = False,
    circle: Collection[complex] = (),
    precise: Precise | None = None,
) -> tuple[Array, Array, Array, Array]:
    """Return A, B, C, D of gain times the product of the sections.

    Parameters
    ----------
    sections : list of Section
        In the order of the signal, apart from those that have to come first.
    gain : fmpq or Fraction
        Ratio of the leading coefficients of numerator and denominator.
    sampled : bool
        The roots are those of polynomials in z.
    circle : collection of complex
        Roots that stand for numbers exactly on the unit circle.
    precise : mapping, optional
        What roots stand for to more digits.
    """
    gain = exact(gain)
    blocks = [_block(section, sampled, circle, precise) for section in sections]
    if gain == 0:
        n = sum(len(block.column) for block in blocks)
        A, start = np.zeros((n, n)), 0
        for block in blocks:
            part = slice(start, start + len(block.column))
            A[part, part] = block.A
            start = part.stop
        return A, np.zeros((n, 1)), np.zeros((1, n)), np.zeros((1, 1))
    if not blocks:
        return np.zeros((0, 0)), np.zeros((0, 1)), np.zeros((1, 0)), np.array([[to_double(gain)]])
    fraction, exponent = split(gain)
    mantissa = to_double(fraction)
    # blocks whose input column is no power of two come first: their output rows are powers of two
    blocks.sort(key=lambda block: not block.first)
    shares = _spread_exponent(exponent - sum(block.gain_exponent for block in blocks), len(blocks))
    B: list[float] = []
    rows: list[list[float]] = []  # of A, as far as its blocks reach
    row: list[float] = []  # the signal between sections as a function of the states so far
    through, entered = 1.0, False
    for block, share in zip(blocks, shares, strict=True):
        if not entered and not block.first:
            # here the mantissa meets powers of two on both sides: no second rounding, and what cancels still cancels
            row, through, entered = [_times(x, mantissa) for x in row], _times(through, mantissa), True
        for entry, own in zip(block.column, block.A, strict=True):
            rows.append([_times(entry, x) if entry and x else 0.0 for x in row] + own)
        B += [_times(entry, through) for entry in block.column]
        row = [_times(x, 1.0, share) if x else 0.0 for x in row] if block.d else [0.0] * len(row)
        row += [_times(x, 1.0, share) for x in block.row]
        through = _times(through, block.d, share)
    if not entered:
        row, through = [_times(x, mantissa) for x in row], _times(through, mantissa)
    rows, B, row = _graded(rows, B, row, [len(block.column) for block in blocks], sampled)
    A = np.zeros((len(rows), len(rows)))
    for k, line in enumerate(rows):
        A[k, : len(line)] = line
    return A, np.array(B)[:, None], np.array(row)[None, :], np.array([[through]])


#: Matrix rows of a cascade as far as its blocks reach, input column, output row.
Lists = tuple[list[list[float]], list[float], list[float]]


def _graded(rows: list[list[float]], B: list[float], C: list[float], sizes: list[int], sampled: bool) -> Lists:
    """Return the states of each section scaled by a power of two so that no coupling exceeds the pole it comes from.

    Elimination with row exchanges, as any library solves (sI - A) x = B, then keeps to the order of the sections: time
    scales twelve decades apart do not mix.
    """
    ends = [0, *accumulate(sizes)]
    powers: list[int] = []
    speed: list[int] = []
    for k, (start, stop) in enumerate(pairwise(ends)):
        # what counts is the distance from the axis: from z = 1 or -1 in sampled time
        shift = round(rows[start][start]) if sampled else 0
        own = [abs(rows[i][j] - shift * (i == j)) for i in range(start, stop) for j in range(start, stop)]
        speed.append(math.frexp(max(own) or 1.0)[1])
        power = 0
        for j in range(k):
            coupling = max(abs(x) for row in rows[start:stop] for x in row[ends[j] : ends[j + 1]])
            if coupling:
                power = max(power, math.frexp(coupling)[1] + powers[j] - speed[j] + 1)
        powers.append(power)
    if not any(powers) or max(abs(power) for power in powers) > 400:
        return rows, B, C
    scale = [power for power, size in zip(powers, sizes, strict=True) for _ in range(size)]
    try:
        made = (
            [
                [_times(x, 1.0, e - own) for x, e in zip(row, scale, strict=False)]
                for row, own in zip(rows, scale, strict=True)
            ],
            [_times(x, 1.0, -own) for x, own in zip(B, scale, strict=True)],
            [_times(x, 1.0, own) for x, own in zip(C, scale, strict=True)],
        )
    except BeyondDoubles:
        return rows, B, C
    return made


@dataclass(frozen=True)
class _Block:
    A: list[list[float]]
    column: list[float]
    row: list[float]
    d: float
    gain_exponent: int
    first: bool = False


#: Diagonal entries of sampled sections with a zero at -1 or 1 are multiples of this, so that entry +- 1 is exact.
_GRID = power_of_two(-52)


def _on_grid(value: fmpq) -> fmpq:
    return (value / _GRID + exact(0.5)).floor() * _GRID


def _block(section: Section, sampled: bool, circle: Collection[complex], precise: Precise | None) -> _Block:
    """Return the scaled companion block of a section, whose gain is 2^gain_exponent times the section's own."""
    exact_zeros = sampled and any(zero in (1, -1) for zero in section.zeros)
    if len(section.poles) == 1:
        return _first_order(section, exact_zeros)
    centre = exact(0)
    if sampled:
        centre = exact(1 if section.poles[0].real + section.poles[1].real >= 0 else -1)
    below = _shifted(monic(section.poles, circle, precise), centre)
    above = _shifted(monic(section.zeros, circle, precise), centre)
    d1, d0 = below[1], below[2]
    size = math.sqrt(abs(to_double(d0))) or abs(to_double(d1)) if sampled else max(abs(p) for p in section.poles)
    e = math.frexp(size)[1] if size > 0 else 0
    k = power_of_two(e)
    corner = centre - d1
    corner = _on_grid(corner) if exact_zeros else exact(to_double(corner))
    damping = centre - corner
    stiffness = exact(to_double(d0 / k))
    if sampled and section.poles[0].imag and (section.poles[0] in circle or _on_circle(section.poles[0])):
        # |p| = 1: with t = z - c the denominator is t^2 + d t + c d, whatever d is
        d0 = damping * centre
        stiffness = exact(to_double(d0 / k))
    A = [[to_double(centre), to_double(k)], [-to_double(stiffness), to_double(corner)]]
    zeros = len(section.zeros)
    b = power_of_two(e // 2)
    if zeros == 2 and sorted_alike(section.zeros, section.poles):
        # zeros on the poles themselves: nothing is left of the section but two states that no output sees
        return _Block(A, [0.0, to_double(b)], [0.0, 0.0], 1.0, 0)
    if zeros == 2 and exact_zeros and section.zeros[0].imag == 0:
        kept, other = sorted(section.zeros, key=lambda z: z not in (1, -1))
        column = [k * b, (corner - exact(other.real)) * b]
        row = [(centre - exact(kept.real)) / (k * b), 1 / b]
        return _Block(A, _doubles(column), _doubles(row), 1.0, 0, True)
    # the numerator is formed against the rounded denominator, so that exact cancellations are exact
    column = [exact(0), b]
    if zeros == 2:
        constant = above[2]
        if _amplification(section.poles, section.zeros, sampled) > TUNE_FROM or _near_end(section, sampled):
            # what rounding does to the linear term is made good, at the zero, by the constant term
            missed = damping + exact(to_double(above[1] - damping)) - above[1]
            constant -= missed * (exact(section.zeros[0].real) - centre)
            k = tuned(k, d0, constant)
            stiffness = exact(to_double(d0 / k))
            A = [[to_double(centre), to_double(k)], [-to_double(stiffness), to_double(corner)]]
        row = [(constant / k - stiffness) / b, (above[1] - damping) / b]
        return _Block(A, _doubles(column), _doubles(row), 1.0, 0)
    rest = power_of_two(e - e // 2)
    if zeros == 1:
        return _Block(A, _doubles(column), _doubles([above[1] / k * rest, rest]), 0.0, e)
    return _Block(A, _doubles(column), _doubles([rest, exact(0)]), 0.0, 2 * e)


#: From this amplification of rounding near a zero the coupling of the two states is tuned.
TUNE_FROM = 4.0


def _near_end(section: Section, sampled: bool) -> bool:
    """True for zeros near z = -1 while the poles are not: what is left of the numerator there is a small difference."""
    zero = section.zeros[0]
    return sampled and abs(zero + 1) < 0.5


def _first_order(section: Section, exact_zeros: bool) -> _Block:
    pole = exact(section.poles[0].real)
    if exact_zeros:
        pole = _on_grid(pole)
    size = abs(section.poles[0])
    e = math.frexp(size)[1] if size > 0 else 0
    b = power_of_two(e // 2)
    A = [[to_double(pole)]]
    if section.zeros:
        return _Block(A, _doubles([b]), _doubles([(pole - exact(section.zeros[0].real)) / b]), 1.0, 0)
    return _Block(A, _doubles([b]), _doubles([power_of_two(e - e // 2)]), 0.0, e)


def _shifted(polynomial: list[fmpq], centre: fmpq) -> list[fmpq]:
    """Return the coefficients of p(t + centre) for degree at most two."""
    if centre == 0 or len(polynomial) == 1:
        return polynomial
    if len(polynomial) == 2:
        return [exact(1), polynomial[1] + centre]
    return [exact(1), polynomial[1] + 2 * centre, polynomial[2] + polynomial[1] * centre + centre * centre]


def sorted_alike(first: tuple[complex, ...], second: tuple[complex, ...]) -> bool:
    """True where two lists hold the same numbers equally often."""

    def order(root: complex) -> tuple[float, float]:
        return root.real, root.imag

    return sorted(first, key=order) == sorted(second, key=order)


def _on_circle(pole: complex) -> bool:
    """True where |p| of the doubles is exactly 1."""
    re, im = exact(pole.real), exact(pole.imag)
    return re * re + im * im == 1


def _doubles(values: list[fmpq]) -> list[float]:
    return [to_double(value) for value in values]


def _spread_exponent(exponent: int, count: int) -> list[int]:
    """Return one power of two for each section, together the given one, none outside +-500 unless it must be."""
    if abs(exponent) <= 500:
        return [0] * (count - 1) + [exponent]
    share, rest = divmod(exponent, count)
    return [share + (1 if k < rest else 0) for k in range(count)]


def _times(value: float, factor: float, exponent: int = 0) -> float:
    """Return value * factor * 2^exponent, exact by construction; raises `BeyondDoubles` past the range."""
    if value == 0 or factor == 0:
        return 0.0
    try:
        result = math.ldexp(value * factor, exponent) if exponent else value * factor
    except OverflowError:
        raise BeyondDoubles from None
    if not NORMAL <= abs(result) < math.inf:
        raise BeyondDoubles
    return result


def split(value: fmpq) -> tuple[fmpq, int]:
    """Return mantissa in [0.5, 2) and exponent with value = mantissa * 2^exponent."""
    exponent = abs(int(value.p)).bit_length() - int(value.q).bit_length()
    return value / power_of_two(exponent), exponent
