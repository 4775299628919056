"""Moduli of exact polynomials on the axis in double arithmetic, with a rounding bound: where to look, no claim."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

#: Bits kept of each coefficient.
_KEPT = 64


def _doubles(polynomial: Any) -> tuple[list[float], float]:
    """Return coefficients (lowest power first) divided by a power of two near the largest, and log2 of the divisor."""
    mantissas, exponents = [], []
    for c in polynomial.numer().coeffs():
        value = int(c)
        shift = max(value.bit_length() - _KEPT, 0)
        mantissas.append(float(value >> shift))
        exponents.append(shift)
    below = int(polynomial.denom())
    shift = max(below.bit_length() - _KEPT, 0)
    if not mantissas:
        return [0.0], 0.0
    m, e = np.frexp(np.array(mantissas))
    e = e.astype(np.int64) + np.array(exponents, dtype=np.int64)
    top = int(e[m != 0].max())
    return np.ldexp(m, e - top).tolist(), top - float(np.log2(float(below >> shift)) + shift)


def against_largest(coefficients: Sequence[Any]) -> list[float]:
    """Return whole numbers over a power of two above the largest.

    What is 2^-1000 of the largest counts as zero.
    """
    whole = [int(c) for c in coefficients] or [0]
    top = max(abs(c) for c in whole).bit_length()
    shift = max(top - 1000, 0)
    return [math.ldexp(float(c >> shift), shift - top) for c in whole]


class Moduli:
    """log2 |p(jw)| of several exact polynomials at once, by Horner's rule for even and odd part.

    Parameters
    ----------
    polynomials : sequence of exact polynomials
        In s; of a sampled model, images under z = (1 + s)/(1 - s), all homogenised as the caller needs.
    unit : float
        Frequencies are counted in this (rad/s), a power of two near the middle of the dynamics.
    """

    def __init__(self, polynomials: Sequence[Any], unit: float) -> None:
        from realize.kernels.exact.numbers import fraction
        from realize.kernels.exact.polynomials import stretched

        self.unit = unit
        factor = fraction(unit.as_integer_ratio())
        lists = [_doubles(stretched(p, factor) if unit != 1.0 else p) for p in polynomials]
        length = max(len(c) for c, _ in lists)
        self.degree = length - 1
        table = np.zeros((len(lists), length))
        for k, (c, _) in enumerate(lists):
            table[k, : len(c)] = c
        self.exponent = np.array([e for _, e in lists])
        # p(jx): even powers alternate in sign in the real part, odd ones in the imaginary part
        sign = np.where(np.arange(length) % 4 < 2, 1.0, -1.0)
        self._low = _halves(table * sign)
        reverse = (table * sign)[:, ::-1]
        self._high = _halves(reverse)

    def __call__(self, x: Array, rows: NDArray[np.int64] | None = None) -> tuple[Array, Array]:
        """Return log2 |p| and a bound on its relative error, arrays [polynomial][k], at x = w / unit >= 0.

        Parameters
        ----------
        x : (k,) array
        rows : int array, optional
            Which polynomials, all unless given.
        """
        chosen = slice(None) if rows is None else rows
        exponent = self.exponent[chosen]
        logarithm = np.empty((exponent.size, x.size))
        bound = np.empty_like(logarithm)
        small = x <= 1
        with np.errstate(divide="ignore", invalid="ignore", over="ignore", under="ignore"):
            for here, halves in ((small, self._low), (~small, self._high)):
                if not here.any():
                    continue
                y = x[here] if halves is self._low else 1 / x[here]
                value, total = _horner(tuple(part[chosen] for part in halves), y)
                logarithm[:, here] = np.log2(value)
                bound[:, here] = total / value
            logarithm += exponent[:, None]
            logarithm[:, ~small] += self.degree * np.log2(x[~small])
        bound *= 8 * (self.degree + 2) * np.finfo(float).eps
        return logarithm, np.where(np.isnan(bound), np.inf, bound)


def _halves(table: Array) -> tuple[Array, Array, Array, Array]:
    even, odd = np.ascontiguousarray(table[:, 0::2]), np.ascontiguousarray(table[:, 1::2])
    return even, odd, np.abs(even), np.abs(odd)


def _horner(halves: tuple[Array, ...], y: Array) -> tuple[Array, Array]:
    """Return |even + j y odd| and the sum of the moduli of the terms."""
    square = y * y
    sums = []
    for coefficients in halves:
        value = np.zeros((coefficients.shape[0], y.size))
        for k in range(coefficients.shape[1] - 1, -1, -1):
            value = value * square + coefficients[:, k : k + 1]
        sums.append(value)
    return np.hypot(sums[0], y * sums[1]), sums[2] + y * sums[3]


#: Binary exponents of values and powers of x beyond which no quick look is taken.
_RANGE = 900


class Squares:
    """Several exact polynomials in x = w^2 >= 0 at once, by Horner's rule in doubles: where to look, no claim.

    Parameters
    ----------
    polynomials : sequence of exact polynomials
        Each is divided by a power of two near its largest coefficient: quotients of two are right up to a factor.
    """

    def __init__(self, polynomials: Sequence[Any]) -> None:
        lists = [against_largest(p.numer().coeffs()) for p in polynomials]
        self.degree = max(len(c) for c in lists) - 1
        self.columns = [np.array([[c[k] if k < len(c) else 0.0] for c in lists]) for k in range(self.degree, -1, -1)]
        self.count = len(lists)

    def reach(self, x: Array) -> bool:
        """Return whether no power of x leaves the range of doubles."""
        top, bottom = float(x.max(initial=1.0)), float(x[x > 0].min(initial=1.0))
        return bool(max(np.log2(top), -np.log2(bottom)) * self.degree < _RANGE)

    def __call__(self, x: Array) -> Array:
        """Return the values [polynomial][k] at x [k]."""
        value = np.zeros((self.count, x.size))
        for column in self.columns:
            value = value * x + column
        return value

    def root_of_quotient(self, values: Array, above: int, below: int) -> Array:
        """Return the square root of the quotient of two of the polynomials, up to a constant factor."""
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            return np.sqrt(np.abs(values[above] / values[below]))
