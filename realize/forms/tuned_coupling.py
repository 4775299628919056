"""A coupling of two states for which a rounded constant term is right to several bits more, and exact doubles."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
from flint import fmpq
from numpy.typing import NDArray

from realize.kernels.exact.numbers import exact, nearest

Array = NDArray[np.float64]

#: The smallest double of full accuracy.
NORMAL = 2.0**-1022
#: Couplings tried, in 1024ths, from 1 away; each has an even chance to halve the smallest error so far.
_TRIED = 1024.0 + np.where(np.arange(1200) % 2, np.arange(1200), -(np.arange(1200) // 2))


class BeyondDoubles(ArithmeticError):
    """An entry of a form lies beyond the range of doubles."""


def to_double(value: fmpq | Fraction) -> float:
    """Return the nearest double; raises `BeyondDoubles` where there is none with full accuracy."""
    value = exact(value)
    try:
        number = int(value.p) / int(value.q)
    except OverflowError:
        raise BeyondDoubles from None
    if abs(number) < NORMAL and exact(number) != value:
        raise BeyondDoubles
    return number


def _product(a: Array | float, b: Array) -> tuple[Array, Array]:
    """Return a * b as the sum of two doubles (Dekker 1971; b has at most 26 bits)."""
    product = a * b
    t = a * 134217729.0
    high = t - (t - a)
    return product, (high * b - product) + (a - high) * b


def tuned(k: fmpq, d0: fmpq, n0: fmpq) -> fmpq:
    """Return a coupling k for which the rounded constant term of the numerator is nearly exact.

    That term is k (s + b c0) with s = d0/k and b c0 = n0/k - s both rounded: its error is a different fraction of a
    rounding for each double k, so that among some hundred one is found that is right to several bits more. The
    response then is what the numbers say it is, to more digits than each of them has.

    Parameters
    ----------
    k : fmpq
        A power of two.
    d0, n0 : fmpq
        Constant terms of denominator and numerator.
    """
    # k T/1024 in place of k, all T at once; n0 and d0 as sums of two doubles
    try:
        D, N = to_double(d0), to_double(n0)
        low_D, low_N = nearest(d0 - exact(D)), nearest(n0 - exact(N))
    except (BeyondDoubles, OverflowError):
        return k
    if not 2.0**-400 < min(abs(D), abs(N)) <= max(abs(D), abs(N)) < 2.0**400:
        return k
    p, q = _product(D / _TRIED, _TRIED)
    s = D / _TRIED + ((D - p) - q + low_D) / _TRIED
    p, q = _product(s, _TRIED)
    rest, low_rest = (N - p), low_N - q
    # what the difference N - p lost
    share = rest - N
    low_rest = low_rest + ((N - (rest - share)) - (p + share))
    c = rest / _TRIED
    p, q = _product(c, _TRIED)
    c = c + ((rest - p) - q + low_rest) / _TRIED
    p, q = _product(c, _TRIED)
    error = np.abs((rest - p) - q + low_rest)
    near = np.flatnonzero(error <= abs(N - D) * 2.0**-53 / 1024)
    return k * int(_TRIED[near[0] if near.size else error.argmin()]) / 1024
