"""Cascade of first- and second-order sections from poles, zeros and gain.

Each section is a scaled companion block ::

    x1' = k x2,   x2' = -(a0/k) x1 - a1 x2 + b u,   y = c0 x1 + c1 x2 + d u,   d in {0, 1}, k and b powers of two

so that the series connection needs no rounding: the off-diagonal blocks are products with powers of two. Zeros at the
origin and zeros on the axis stay exactly where they are, since c1 = -a1 and c0 = -a0/k are then exact.

A section with as many zeros as poles forms its numerator as (numerator - denominator) + denominator: the relative
rounding error near a zero is multiplied by |denominator| / |numerator's terms|. Zeros are therefore given to poles that
keep this amplification small, and to strictly proper sections where there are more poles than zeros (Jackson 1970 on
pairing and ordering for digital filters; the amplification argument is our own, docs/methods/cascade).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Section:
    """Poles and zeros of one section, one or two poles, at most as many zeros; closed under conjugation."""

    poles: tuple[complex, ...]
    zeros: tuple[complex, ...]


def monic(roots: tuple[complex, ...]) -> list[Fraction]:
    """Return the exact coefficients, highest power first, of the monic polynomial with one or two given roots."""
    if not roots:
        return [Fraction(1)]
    if len(roots) == 1:
        return [Fraction(1), -Fraction(roots[0].real)]
    first, second = roots
    if first.imag != 0:
        re, im = Fraction(first.real), Fraction(first.imag)
        return [Fraction(1), -2 * re, re * re + im * im]
    p, q = Fraction(first.real), Fraction(second.real)
    return [Fraction(1), -(p + q), p * q]


def _amplification(poles: tuple[complex, ...], zeros: tuple[complex, ...]) -> float:
    """Return by how much the rounding of numerator - denominator is magnified near the zeros."""
    worst = 1.0
    for zero in zeros:
        size = abs(zero)
        if size == 0:
            continue
        value = 1.0
        for pole in poles:
            # ratios first: 1e300 rad/s squared is no double
            value *= abs(1j - pole / size)
        worst = max(worst, value)
    return worst


def _pairs(roots: list[complex]) -> tuple[list[tuple[complex, complex]], list[complex]]:
    """Split a list closed under conjugation into conjugate pairs (positive imaginary part first) and reals."""
    upper = [root for root in roots if root.imag > 0]
    return [(root, root.conjugate()) for root in upper], [root for root in roots if root.imag == 0]


def group_roots(zeros: list[complex], poles: list[complex]) -> list[Section]:
    """Return sections with zeros given to poles, ordered from well to lightly damped.

    Parameters
    ----------
    zeros, poles : list of complex
        Closed under conjugation; no more zeros than poles.
    """
    pole_pairs, real_poles = _pairs(poles)
    zero_pairs, real_zeros = _pairs(zeros)
    slack = len(poles) - len(zeros)
    sections: list[Section] = []

    # complex zeros first, slowest first: they have the fewest poles at or below their own frequency
    for pair in sorted(zero_pairs, key=lambda z: (abs(z[0]), -abs(z[0].real))):
        candidates: list[tuple[float, int, tuple[complex, ...]]] = []
        for k, poles_k in enumerate(pole_pairs):
            candidates.append((_amplification(poles_k, pair) * abs(1j - poles_k[0] / abs(pair[0])), k, poles_k))
        if len(real_poles) >= 2:
            near = sorted(real_poles, key=lambda p: abs(p))[:2]
            candidates.append((_amplification(tuple(near), pair), -1, tuple(near)))
        cost, k, chosen = min(candidates, key=lambda c: (c[0], c[1]))
        if k >= 0:
            pole_pairs.pop(k)
        else:
            for pole in chosen:
                real_poles.remove(pole)
        sections.append(Section(chosen, pair))

    # real zeros: a strictly proper section of order two holds one zero without any amplification
    open_pairs: list[tuple[tuple[complex, complex], list[complex]]] = [(pair, []) for pair in pole_pairs]
    for zero in sorted(real_zeros, key=abs):
        options: list[tuple[float, int, str, int]] = []
        for k, pole in enumerate(real_poles):
            cost = 1.0 if zero == 0 else abs(1 - 1j * pole.real / abs(zero))
            if zero != 0 and pole == zero:
                cost = 0.0
            options.append((cost, 0, "single", k))
        for k, (pair, held) in enumerate(open_pairs):
            if not held:
                if slack > 0:
                    options.append((1.0, 1, "pair", k))
                else:
                    options.append((_amplification(pair, (zero,)), 2, "pair", k))
            elif len(held) == 1:
                options.append((_amplification(pair, (held[0], zero)), 3, "pair", k))
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
            near = sorted(real_poles, key=lambda p: abs(p))[:2]
            for pole in near:
                real_poles.remove(pole)
            open_pairs.append(((near[0], near[1]), [zero]))
            slack -= 1
    sections += [Section(pair, tuple(held)) for pair, held in open_pairs]
    sections += [Section((pole,), ()) for pole in real_poles]

    def damping(section: Section) -> tuple[float, float]:
        pole = section.poles[0]
        size = abs(pole)
        return (-min(1.0, abs(pole.real) / size) if size > 0 else -2.0, size)

    return sorted(sections, key=damping)


def cascade_states(sections: list[Section], gain: Fraction) -> tuple[Array, Array, Array, Array]:
    """Return A, B, C, D of gain times the product of the sections, continuous time.

    Parameters
    ----------
    sections : list of Section
        In the order of the signal.
    gain : Fraction
        Ratio of the leading coefficients of numerator and denominator.
    """
    n = sum(len(section.poles) for section in sections)
    A, B, C = np.zeros((n, n)), np.zeros((n, 1)), np.zeros((1, n))
    if gain == 0:
        A = _diagonal_only(sections, A)
        return A, B, C, np.zeros((1, 1))
    if not sections:
        return A, B, C, np.array([[to_double(gain)]])
    mantissa, exponent = split(gain)
    blocks = []
    for section in sections:
        block = _block(section)
        exponent -= block.gain_exponent
        blocks.append(block)
    shares = _spread_exponent(exponent, len(blocks))
    row = np.zeros((1, n))  # the signal between sections as a function of the states so far
    # the mantissa of the gain enters at the input, where it multiplies powers of two only: no second rounding, and what
    # cancels inside a section still cancels exactly
    through = to_double(mantissa)
    start = 0
    for block, share in zip(blocks, shares, strict=True):
        size = block.A.shape[0]
        part = slice(start, start + size)
        A[part, part] = block.A
        A[part, :] += block.B @ row
        B[part, 0] += block.B[:, 0] * through
        scale = math.ldexp(1.0, share)
        row = block.d * row * scale
        row[0, part] = block.C[0] * scale
        through = block.d * through * scale
        start += size
    return A, B, row, np.array([[through]])


@dataclass(frozen=True)
class _Block:
    A: Array
    B: Array
    C: Array
    d: float
    gain_exponent: int


def _block(section: Section) -> _Block:
    """Return the scaled companion block of a section, whose gain is 2^gain_exponent times the section's own."""
    below, above = monic(section.poles), monic(section.zeros)
    if len(section.poles) == 1:
        pole = section.poles[0].real
        proper = len(section.zeros) == 1
        size = abs(pole) if pole else 1.0
        e = math.frexp(size)[1]
        b = math.ldexp(1.0, e // 2)
        if proper:
            c = [(above[1] - below[1]) / Fraction(b)]
            return _Block(np.array([[pole]]), np.array([[b]]), _doubles(c), 1.0, 0)
        c = [Fraction(2) ** (e - e // 2)]
        return _Block(np.array([[pole]]), np.array([[b]]), _doubles(c), 0.0, e)
    a1, a0 = below[1], below[2]
    size = max(abs(pole) for pole in section.poles)
    e = math.frexp(size)[1] if size > 0 else 0
    k = Fraction(2) ** e
    stiffness, damping = to_double(a0 / k), to_double(a1)
    A = np.array([[0.0, to_double(k)], [-stiffness, -damping]])
    zeros = len(section.zeros)
    # the numerator is formed against the rounded denominator, so that exact cancellations are exact
    b = Fraction(2) ** (e // 2)
    if zeros == 2:
        c = [(above[2] / k - Fraction(stiffness)) / b, (above[1] - Fraction(damping)) / b]
        return _Block(A, np.array([[0.0], [to_double(b)]]), _doubles(c), 1.0, 0)
    rest = Fraction(2) ** (e - e // 2)
    if zeros == 1:
        c = [above[1] / k * rest, rest]
        return _Block(A, np.array([[0.0], [to_double(b)]]), _doubles(c), 0.0, e)
    c = [rest, Fraction(0)]
    return _Block(A, np.array([[0.0], [to_double(b)]]), _doubles(c), 0.0, 2 * e)


def _doubles(values: list[Fraction]) -> Array:
    return np.array([[to_double(value) for value in values]])


def _diagonal_only(sections: list[Section], A: Array) -> Array:
    start = 0
    for section in sections:
        block = _block(section)
        size = block.A.shape[0]
        A[start : start + size, start : start + size] = block.A
        start += size
    return A


def _spread_exponent(exponent: int, count: int) -> list[int]:
    """Return one power of two for each section, together the given one, none outside +-500 unless it must be."""
    if abs(exponent) <= 500:
        return [0] * (count - 1) + [exponent]
    share, rest = divmod(exponent, count)
    return [share + (1 if k < rest else 0) for k in range(count)]


def to_double(value: Fraction) -> float:
    """Return the nearest double; infinite past the range."""
    try:
        return value.numerator / value.denominator
    except OverflowError:
        return math.inf if value > 0 else -math.inf


def split(value: Fraction) -> tuple[Fraction, int]:
    """Return mantissa in [0.5, 2) and exponent with value = mantissa * 2^exponent."""
    exponent = abs(value.numerator).bit_length() - value.denominator.bit_length()
    return value / Fraction(2) ** exponent, exponent
