"""Polynomials and partial fractions from roots, and roots from coefficients, in doubles that cannot overflow."""

from __future__ import annotations

import itertools
import math

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
#: Mantissas in [0.5, 1) and binary exponents.
Scaled = tuple[Array, NDArray[np.int64]]

#: Bits between the sizes of two groups of roots from which each group has a polynomial of its own.
FAR_APART = 64
#: Largest shift that still says something to a double.
_FAR = 3000


def _hull(heights: list[int | None]) -> list[float]:
    """Return the upper convex hull over 0..n of the points (i, heights[i]); None is minus infinity."""
    corners: list[tuple[int, int]] = []
    for i, height in enumerate(heights):
        if height is None:
            continue
        while len(corners) > 1:
            (i1, h1), (i2, h2) = corners[-2:]
            if (h2 - h1) * (i - i1) > (height - h1) * (i2 - i1):
                break
            corners.pop()
        corners.append((i, height))
    places = [i for i, _ in corners]
    return np.interp(np.arange(len(heights)), places, [h for _, h in corners]).tolist()


def polynomial_roots(polynomial: Scaled) -> ComplexArray:
    """Return all roots: those at the origin exactly, others as eigenvalues of a companion matrix balanced beforehand.

    The states of the companion matrix are scaled by the Newton polygon of the coefficients, so that its entries are of
    the size of the roots, large ones first. Degree two by the quadratic formula.

    Parameters
    ----------
    polynomial : mantissas and binary exponents, highest power first, the first not zero

    Raises
    ------
    OverflowError
        If a root is too small or too large for a double.
    """
    mantissa, exponent = polynomial
    last = int(np.flatnonzero(mantissa)[-1])
    at_origin = np.zeros(mantissa.size - 1 - last, dtype=complex)
    m, e = mantissa[: last + 1] / mantissa[0], exponent[: last + 1] - exponent[0]
    n = last
    if n == 0:
        return at_origin
    hull = np.rint(_hull([int(k) if v != 0 else None for v, k in zip(m, e, strict=True)])).astype(np.int64)
    slopes = np.diff(hull)
    # groups of roots so far apart in size that neither moves the other by a rounding
    cuts = [0, *(1 + np.flatnonzero(-np.diff(slopes) > FAR_APART + 2 * n.bit_length())).tolist(), n]
    pieces = [
        _group(m[i : j + 1] / m[i], e[i : j + 1] - e[i], hull[i : j + 1] - hull[i]) for i, j in itertools.pairwise(cuts)
    ]
    found = np.concatenate(pieces)
    if np.any(found == 0):
        raise OverflowError
    return np.concatenate([found, at_origin])


def _group(m: Array, e: NDArray[np.int64], hull: NDArray[np.int64]) -> ComplexArray:
    """Return the roots of a monic polynomial that does not vanish at the origin, in units of their mean size."""
    if m.size <= 3:
        return _few(m, e)
    n = m.size - 1
    k = int(hull[-1]) // n
    down = np.arange(n + 1) * k
    e, hull = e - down, hull - down
    matrix = np.diag(np.ldexp(1.0, np.diff(hull)[:-1]), -1)
    matrix[0] = -np.ldexp(m[1:], np.maximum(e[1:] - hull[:-1], -_FAR))
    found = np.linalg.eigvals(matrix).astype(complex)
    return np.ldexp(found.real, k) + 1j * np.ldexp(found.imag, k)


def _few(m: Array, e: NDArray[np.int64]) -> ComplexArray:
    """Return the roots of a monic polynomial of degree one or two that does not vanish at the origin."""
    if m.size == 2:
        return np.array([complex(-math.ldexp(m[1], int(e[1])))])
    # s = 2^k t: t^2 + 2 h t + q
    k = max(int(e[2]) // 2, int(e[1]) if m[1] else -(2**40))
    h, q = math.ldexp(m[1], max(int(e[1]) - k, -_FAR)) / 2, math.ldexp(m[2], max(int(e[2]) - 2 * k, -_FAR))
    square = h * h - q
    if square < 0:
        root = complex(-h, math.sqrt(-square))
        found = np.array([root, root.conjugate()])
    else:
        first = -h - math.copysign(math.sqrt(square), h)
        if q == 0.0:
            # the smaller root lies below what doubles can hold beside the larger one
            return np.array([complex(math.ldexp(first, k)), complex(-_quotient(m[2], int(e[2]), m[1], int(e[1])))])
        found = np.array([complex(first), complex(q / first)])
    return np.ldexp(found.real, k) + 1j * np.ldexp(found.imag, k)


def _quotient(a: float, e: int, b: float, f: int) -> float:
    return math.ldexp(a / b, e - f)


def _added(terms: list[Scaled]) -> Scaled:
    """Return the sum of arrays of scaled numbers."""
    top = np.max([np.where(m != 0, e, -(2**40)) for m, e in terms], axis=0)
    total = np.zeros(top.shape)
    for m, e in terms:
        total = total + np.where(m != 0, np.ldexp(m, np.clip(e - top, -_FAR, 0)), 0.0)
    mantissa, shift = np.frexp(total)
    return mantissa, np.where(mantissa != 0, top + shift, 0).astype(np.int64)


def _spread(roots: ComplexArray) -> ComplexArray:
    """Return real roots and upper members, each as far as can be from those before it (Leja order; Reichel 1990)."""
    left = list(roots[(roots.imag >= 0)])
    if not left:
        return np.zeros(0, dtype=complex)
    values = np.array(left)
    order = [int(np.argmax(np.abs(values)))]
    with np.errstate(divide="ignore"):
        score = np.zeros(values.size)
        for _ in range(values.size - 1):
            chosen = values[order[-1]]
            size = np.maximum(np.abs(values), abs(chosen))
            near = np.abs(values / np.where(size > 0, size, 1) - chosen / np.where(size > 0, size, 1))
            score = score + np.log(np.maximum(near, 1e-300))
            score[order] = -np.inf
            order.append(int(np.argmax(score)))
    return values[order]


def multiplied_out(roots: ComplexArray) -> Scaled:
    """Return the coefficients of prod (s - root), highest power first, each with its own exponent.

    Parameters
    ----------
    roots : (n,) complex array, closed under conjugation
    """
    mantissa, exponent = np.array([0.5]), np.array([1], dtype=np.int64)
    nothing = np.zeros(1), np.zeros(1, dtype=np.int64)

    def moved(count: int, after: int, factor: float, shift: int) -> Scaled:
        m = np.concatenate([*([nothing[0]] * count), mantissa * factor, *([nothing[0]] * after)])
        e = np.concatenate([*([nothing[1]] * count), exponent + shift, *([nothing[1]] * after)])
        return m, e

    for root in _spread(np.asarray(roots, dtype=complex)).tolist():
        k = math.frexp(max(abs(root.real), abs(root.imag)))[1]
        re, im = math.ldexp(root.real, -k), math.ldexp(root.imag, -k)
        if root.imag == 0:
            terms = [moved(0, 1, 1.0, 0), moved(1, 0, -re, k)]
        else:
            terms = [moved(0, 2, 1.0, 0), moved(1, 1, -2 * re, k), moved(2, 0, re * re + im * im, 2 * k)]
        mantissa, exponent = _added(terms)
    return mantissa, exponent


def product(factors: ComplexArray) -> tuple[ComplexArray, NDArray[np.int64]]:
    """Return products along the last axis as mantissa and exponent."""
    value = np.ones(factors.shape[:-1], dtype=complex)
    total = np.zeros(factors.shape[:-1], dtype=np.int64)
    for j in range(factors.shape[-1]):
        value, own = normalised(value * normalised(factors[..., j])[0])
        total = total + own + normalised(factors[..., j])[1]
    return value, total


def normalised(values: ComplexArray) -> tuple[ComplexArray, NDArray[np.int64]]:
    """Return values / 2^k with the larger part in [0.5, 1), and k."""
    size = np.maximum(np.abs(values.real), np.abs(values.imag))
    k = np.where(size > 0, np.frexp(size)[1], 0).astype(np.int64)
    return np.ldexp(values.real, -k) + 1j * np.ldexp(values.imag, -k), k


def local_series(
    zeros: ComplexArray, poles: ComplexArray, at: complex, terms: int
) -> tuple[ComplexArray, NDArray[np.int64]]:
    """Return Taylor coefficients about a point of prod(s - zeros) / prod(s - poles), as mantissas and exponents.

    With q_k = (-1)^k (sum (at - zero)^-(k+1) - sum (at - pole)^-(k+1)) from the logarithmic derivative,
    n f_n = sum_k q_k f_(n-1-k). Neither zeros nor poles are at the point.
    """
    above, top = product((at - zeros)[None, :])
    below, bottom = product((at - poles)[None, :])
    first, more = normalised(above / below)
    series = [complex(1.0)]
    slopes = [
        (-1) ** k * complex(np.sum((at - zeros) ** -(k + 1.0)) - np.sum((at - poles) ** -(k + 1.0)))
        for k in range(terms - 1)
    ]
    for n in range(1, terms):
        series.append(sum(slopes[k] * series[n - 1 - k] for k in range(n)) / n)
    mantissas, exponents = normalised(np.array(series))
    mantissas, again = normalised(mantissas * first[0])
    return mantissas, exponents + again + more[0] + top[0] - bottom[0]


def series_at_infinity(zeros: ComplexArray, poles: ComplexArray, terms: int) -> Array:
    """Return h_0.. of prod(1 - zero/s) / prod(1 - pole/s) = sum h_n s^-n: n h_n = sum_k (power sums) h_(n-k)."""
    sums = [float(np.sum((poles**k).real) - np.sum((zeros**k).real)) for k in range(1, terms)]
    h = [1.0]
    for n in range(1, terms):
        h.append(sum(sums[k - 1] * h[n - k] for k in range(1, n + 1)) / n)
    return np.array(h)


def gain_from_responses(
    zeros: ComplexArray, poles: ComplexArray, points: ComplexArray, responses: ComplexArray
) -> tuple[float, int]:
    """Return mantissa and exponent of the real gain for which gain * prod(s - zeros) / prod(s - poles) fits best.

    The median over the points that are away from all poles and zeros by a tenth of their size, or over the one that is
    farthest away.

    Parameters
    ----------
    points, responses : (k,) complex arrays
        Finite; not empty.
    """
    roots = np.concatenate([zeros, poles])
    size = np.maximum(np.abs(points)[:, None], np.abs(roots)[None, :])
    near = np.abs(points[:, None] - roots[None, :]) / np.where(size > 0, size, 1.0)
    distance = near.min(axis=1, initial=1.0)
    chosen = distance >= 0.1
    if not chosen.any():
        chosen = distance == distance.max()
    above, top = product(points[chosen][:, None] - zeros[None, :])
    below, bottom = product(points[chosen][:, None] - poles[None, :])
    own, more = normalised(responses[chosen])
    values = (own * below / above).real
    exponents = more + bottom - top
    mantissas, again = np.frexp(values)
    exponents = exponents + again
    reference = int(np.median(exponents))
    relative = np.ldexp(mantissas, np.clip(exponents - reference, -_FAR, 1000))
    mantissa, shift = math.frexp(float(np.sort(relative)[(relative.size - 1) // 2]))
    return mantissa, reference + shift
