"""Values of exact rational functions at arbitrary complex points, correct to the last bits of a double.

Balls of growing precision until the value is known to VALUE_BITS of its modulus; a zero or pole that is hit exactly is
found by rational arithmetic, so that the loop ends. Points are doubles and count as they are.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from flint import acb, acb_poly, arb, fmpq, fmpq_poly
from numpy.typing import NDArray

from realize.kernels.exact.numbers import precision
from realize.kernels.exact.polynomials import Complex, product, quadratic, reduce_fraction

ComplexArray = NDArray[np.complex128]

#: First precision (bits), and the one from which an unresolved value is tested for an exact zero or pole.
FIRST_BITS, EXACT_BITS = 128, 512
#: Relative accuracy (bits) of the values.
VALUE_BITS = 60
POLE = complex(math.inf, 0.0)


def gaussian(point: complex) -> Complex:
    """Return a complex double as an exact complex rational."""
    return fmpq(*point.real.as_integer_ratio()), fmpq(*point.imag.as_integer_ratio())


def vanishes(p: fmpq_poly, at: Complex) -> bool:
    """Return whether a polynomial is exactly zero at a complex rational point."""
    if not at[1]:
        return p(at[0]) == 0
    return not p % quadratic(*at)


def products_at(
    gain: fmpq, above: Sequence[fmpq_poly], below: Sequence[fmpq_poly], points: ComplexArray
) -> ComplexArray:
    """Return gain * prod above / prod below at finite complex points.

    Real and imaginary part are those of the exact value to 2^-52 of its modulus (more where it is subnormal); infinite
    past the range of doubles and at poles. A point where numerator and denominator both vanish takes the value of the
    reduced fraction.

    Parameters
    ----------
    gain : rational
    above, below : sequences of polynomials
        Factors of numerator and denominator.
    points : complex array [k]
    """
    values = np.zeros(points.size, dtype=complex)
    if not gain or any(not p for p in above):
        return values
    known: dict[int, tuple[Any, list[acb_poly], list[acb_poly]]] = {}

    def at_precision(bits: int) -> tuple[Any, list[acb_poly], list[acb_poly]]:
        if bits not in known:
            known[bits] = (arb(gain), [acb_poly(p) for p in above], [acb_poly(p) for p in below])
        return known[bits]

    for k, point in enumerate(points.tolist()):
        bits = FIRST_BITS
        while True:
            with precision(bits):
                value, tops, bottoms = at_precision(bits)
                s = acb(point.real, point.imag)
                for p in tops:
                    value = value * p(s)
                for p in bottoms:
                    value = value / p(s)
                value = acb(value)
                if value.rel_accuracy_bits() >= VALUE_BITS:
                    values[k] = _rounded(value)
                    break
            if bits >= EXACT_BITS:
                exact = gaussian(point)
                zero = any(vanishes(p, exact) for p in above)
                pole = any(vanishes(p, exact) for p in below)
                if zero and pole:
                    n, d = reduce_fraction(product(above) * gain, product(below))
                    values[k] = products_at(fmpq(1), [n], [d], points[k : k + 1])[0]
                    break
                if zero or pole:
                    values[k] = POLE if pole else 0.0
                    break
            bits *= 2
    return values


def _rounded(value: acb) -> complex:
    return complex(float(value.real), float(value.imag))


def partial_fractions_at(
    poles: Sequence[Complex],
    residues: Sequence[Sequence[Sequence[Complex]]],
    powers: Sequence[int],
    direct: Sequence[Sequence[Sequence[fmpq]]],
    points: ComplexArray,
) -> ComplexArray:
    """Return sum residues / (s - pole)^power + polynomial part at finite complex points: [k][outputs][inputs].

    Accuracy as that of `products_at`. A channel is infinite at the poles where it has a residue.

    Parameters
    ----------
    poles : sequence of complex rationals, [n]
    residues : complex rationals, [n][outputs][inputs]
    powers : [n]
    direct : rationals, [power][outputs][inputs], highest power first
    points : complex array [k]
    """
    p, m = len(direct[0]), len(direct[0][0])
    values = np.zeros((points.size, p, m), dtype=complex)
    known: dict[int, Any] = {}

    def at_precision(bits: int) -> Any:
        if bits not in known:
            known[bits] = (
                [acb(arb(x), arb(y)) for x, y in poles],
                [[[acb(arb(x), arb(y)) for x, y in row] for row in residue] for residue in residues],
                [[[arb(c) for c in row] for row in matrix] for matrix in direct],
            )
        return known[bits]

    for k, point in enumerate(points.tolist()):
        at = gaussian(point)
        hit = [n for n, pole in enumerate(poles) if pole == at]
        waiting = []
        for i in range(p):
            for j in range(m):
                if any(residues[n][i][j] != (0, 0) for n in hit):
                    values[k, i, j] = POLE
                else:
                    waiting.append((i, j))
        bits = FIRST_BITS
        while waiting:
            with precision(bits):
                near, parts, whole = at_precision(bits)
                s = acb(point.real, point.imag)
                basis = [
                    acb(0) if n in hit else (s - pole) ** -power
                    for n, (pole, power) in enumerate(zip(near, powers, strict=True))
                ]
                again = []
                for i, j in waiting:
                    value = acb(0)
                    for matrix in whole:
                        value = value * s + matrix[i][j]
                    for factor, residue in zip(basis, parts, strict=True):
                        value += factor * residue[i][j]
                    if value.rel_accuracy_bits() >= VALUE_BITS:
                        values[k, i, j] = _rounded(value)
                    else:
                        again.append((i, j))
            if again and bits == EXACT_BITS:
                again = [
                    (i, j)
                    for i, j in again
                    if _exact_sum(
                        at,
                        [pole for n, pole in enumerate(poles) if n not in hit],
                        [residue[i][j] for n, residue in enumerate(residues) if n not in hit],
                        [power for n, power in enumerate(powers) if n not in hit],
                        [matrix[i][j] for matrix in direct],
                    )
                    != (0, 0)
                ]
            waiting = again
            bits *= 2
    return values


def _exact_sum(
    at: Complex, poles: Sequence[Complex], residues: Sequence[Complex], powers: Sequence[int], direct: Sequence[fmpq]
) -> Complex:
    """Return one channel of partial fractions in complex rational arithmetic."""
    re, im = fmpq(0), fmpq(0)
    for c in direct:
        re, im = re * at[0] - im * at[1] + c, re * at[1] + im * at[0]
    for (x, y), (u, v), power in zip(poles, residues, powers, strict=True):
        a, b = at[0] - x, at[1] - y
        size = a * a + b * b
        a, b = a / size, -b / size
        for _ in range(power):
            u, v = u * a - v * b, u * b + v * a
        re, im = re + u, im + v
    return re, im
