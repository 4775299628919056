"""Sums of exponentials fitted to samples: values, linear coefficients, and the least squares over the poles alone.

Sample k of a channel is sum_j c_j z_j^k. The poles are z = (1 + s)/(1 - s) with s the roots of second-order sections
s^2 + a s + w^2 (and of one s + a for odd orders) and ln w, ln a as unknowns: |z| < 1 for every value of them.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from realize.kernels.separable import Projected, chunks, groups_of, joined, minimised, projected, triangular
from realize.kernels.variable_projection import poles_of, sections_of
from realize.kernels.vector_fitting import least_squares, ordered_poles

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Distance of the two poles of a section, relative to their size, below which their derivatives are taken there: both
#: grow as 1/distance and cancel, and half of the digits are left.
SMALLEST_GAP = 2.0**-26
#: Bounds of the logarithms of w and a: s from 2^-52 (a pole within a rounding of the circle) to 2^52.
LARGEST_LOG = 52 * np.log(2.0)


def to_plane(z: ComplexArray) -> ComplexArray:
    """Return s = (z - 1)/(z + 1) for poles inside of the circle or mirrored into it, z = -1 next to it."""
    outside = np.abs(z) > 1
    z = np.where(outside, 1 / np.where(outside, z.conj(), 1.0), z)
    edge = np.abs(z + 1) < 2.0**-50
    return np.where(edge, -(2.0**51), (z - 1) / np.where(edge, 1.0, z + 1)).astype(complex)


def to_circle(s: ComplexArray) -> ComplexArray:
    """Return z = (1 + s)/(1 - s), drawn inside of the circle where rounding puts it on it."""
    z = (1 + s) / (1 - s)
    size = np.abs(z)
    return np.where(size >= 1, z / np.where(size > 0, size, 1.0) * (1 - 2.0**-52), z)


def powers(z: ComplexArray, first: int, count: int) -> ComplexArray:
    """Return z^k for k = first, ..., first + count - 1: [count][n], each within some roundings.

    Powers of two of z are squared in the longest arithmetic there is, because each squaring doubles the relative error.
    """
    step = np.asarray(z).astype(np.clongdouble)
    result = np.empty((count, step.size), dtype=complex)
    start = np.ones(step.size, dtype=np.clongdouble)
    bits, square = first, step.copy()
    while bits:
        if bits & 1:
            start = start * square
        bits >>= 1
        square = square * square
    if count == 0:
        return result
    result[0] = start.astype(complex)
    length, square = 1, step
    while length < count:
        more = min(length, count - length)
        result[length : length + more] = result[:more] * square.astype(complex)
        length, square = 2 * length, square * square
    return result


def real_columns(z: ComplexArray, first: int, count: int) -> Array:
    """Return columns [count][n] of real coefficients: z^k for a real pole, 2 Re z^k and -2 Im z^k for a pair."""
    upper = np.flatnonzero(z.imag >= 0)
    pair = z[upper].imag > 0
    values = powers(z[upper], first, count)
    result = np.empty((count, z.size))
    result[:, upper] = np.where(pair, 2.0, 1.0) * values.real
    result[:, upper[pair] + 1] = -2.0 * values[:, pair].imag
    return result


def real_slopes(z: ComplexArray, coefficients: ComplexArray, first: int, count: int) -> Array:
    """Return the derivatives of sum c_j z_j^k by the poles: [count][n], a pair by its real and its imaginary part.

    c k z^(k - 1); for a pair 2 Re(c k z^(k - 1)) and 2 Re(i c k z^(k - 1)).

    Parameters
    ----------
    z, coefficients : [n] complex
        Pairs adjacent, positive imaginary part first.
    first, count : int
        k from first to first + count - 1.
    """
    upper = np.flatnonzero(z.imag >= 0)
    pair = z[upper].imag > 0
    lowered = powers(z[upper], max(first - 1, 0), count if first > 0 else max(count - 1, 0))
    if first == 0:
        lowered = np.concatenate([np.zeros((1, upper.size)), lowered])
    values = np.arange(first, first + count)[:, None] * lowered * coefficients[upper]
    result = np.empty((count, z.size))
    result[:, upper] = np.where(pair, 2.0, 1.0) * values.real
    result[:, upper[pair] + 1] = -2.0 * values[:, pair].imag
    return result


def coefficients_of(z: ComplexArray, samples: Array, weights: Array) -> tuple[ComplexArray, Array]:
    """Return the coefficients [n][channels] that fit samples best with the given poles, and the misfit.

    Parameters
    ----------
    z : [n] complex
        Pairs adjacent, positive imaginary part first.
    samples : [k][channels] float
        Values at k = 0, 1, ...
    weights : [k][channels] float

    Returns
    -------
    coefficients : [n][channels] complex
    misfit : [k][channels] float
        Fitted minus given.
    """
    count, channels = samples.shape
    if z.size == 0:
        return np.zeros((0, channels), complex), -samples
    basis = real_columns(z, 0, count)
    real = np.empty((z.size, channels))
    for members, common, factor in groups_of(weights):
        right = samples[:, members] * factor * common[:, None]
        real[:, members] = least_squares(common[:, None] * basis, right) / factor
    misfit = basis @ real - samples
    result = real.astype(complex)
    first = np.flatnonzero(z.imag > 0)
    result[first] += 1j * real[first + 1]
    result[first + 1] = result[first].conj()
    return result, misfit


class Sequences:
    """Powers of the poles of sections, k times those powers, and the derivatives by the unknowns."""

    def __init__(self, unknowns: Array, pairs: int) -> None:
        w, a, single = np.exp(unknowns[:pairs]), np.exp(unknowns[pairs : 2 * pairs]), np.exp(unknowns[2 * pairs :])
        self.pairs, self.size = pairs, unknowns.size
        self.bent = a < 2 * w
        gap = np.sqrt(np.abs(w - a / 2)) * np.sqrt(w + a / 2)
        large = a / 2 + gap
        upper = np.where(self.bent, -a / 2 + 1j * gap, -large + 0j)
        lower = np.where(self.bent, upper.conj(), -(w * (w / large)) + 0j)
        self.s = np.concatenate([upper, lower, -single])
        safe = np.where(self.bent, 1j, -1.0) * np.maximum(gap, SMALLEST_GAP * w)
        # ds/d ln w = -w^2/(s + a/2) and ds/d ln a = -a s/(2 (s + a/2)), s + a/2 = +-gap
        self.by_size = np.concatenate([-(w**2) / safe, w**2 / safe, np.zeros(single.size)])
        self.by_damping = np.concatenate([-a * upper / (2 * safe), a * lower / (2 * safe), -single])
        self.slope = 2 / (1 - self.s) ** 2

    def columns(self, first: int, count: int) -> tuple[Array, Array]:
        """Return basis and tangents, [count][n] each: for a bent pair real and imaginary parts of one member."""
        m = self.pairs
        z = (1 + self.s) / (1 - self.s)
        value = powers(z, max(first - 1, 0), count + 1 if first > 0 else count)
        k = np.arange(first, first + count)[:, None]
        if first == 0:
            slope = k * np.concatenate([np.zeros((1, z.size)), value[:-1]])
        else:
            slope, value = k * value[:-1], value[1:]
        parts = []
        for matrix in (value, slope):
            real = matrix.real.copy()
            real[:, m : 2 * m][:, self.bent] = matrix[:, :m][:, self.bent].imag
            parts.append(real)
        return parts[0], parts[1]

    def mixing(self, coefficient: Array) -> Array:
        """Return K [channels][n][n]: the derivative of basis @ coefficient by unknown j is tangents @ K[:, :, j]."""
        m, n = self.pairs, self.size
        result = np.zeros((coefficient.shape[1], n, n))
        one, two = coefficient[:m].T, coefficient[m : 2 * m].T
        pair, single = np.arange(m), np.arange(2 * m, n)
        for place, change in ((pair, self.by_size * self.slope), (m + pair, self.by_damping * self.slope)):
            turned = (one - 1j * two) * change[:m]
            result[:, pair, place] = np.where(self.bent, turned.real, one * change[:m].real)
            result[:, m + pair, place] = np.where(self.bent, -turned.imag, two * change[m : 2 * m].real)
        result[:, single, single] = coefficient[2 * m : n].T * (self.by_damping * self.slope)[2 * m :].real
        return result


def polished(
    z: ComplexArray, samples: Array, weights: Array, iterations: int, tolerance: float
) -> tuple[ComplexArray, float]:
    """Return poles of no higher cost sum (weights misfit)^2, and that cost: Levenberg-Marquardt over the poles alone.

    Parameters
    ----------
    z : [n] complex
        Start; poles outside of the circle are mirrored into it.
    samples, weights : [k][channels] float
    iterations : int
        Largest number of accepted or rejected steps.
    tolerance : float
        Two steps in a row that lower the cost by less than this fraction are the last.
    """
    w, a, single = sections_of(ordered_poles(to_plane(z)))
    pairs = w.size
    unknowns = np.clip(np.log(np.concatenate([w, a, single])), -LARGEST_LOG, LARGEST_LOG)
    groups = groups_of(weights)
    count, channels = samples.shape
    n = unknowns.size

    def at(theta: Array) -> Projected:
        sequences = Sequences(theta, pairs)
        factors: list[Array | None] = [None] * len(groups)
        for part in chunks(count, 2 * n + channels):
            basis, tangents = sequences.columns(part.start, part.stop - part.start)
            whole = np.hstack([basis, tangents])
            for g, (members, common, factor) in enumerate(groups):
                lines = np.hstack([whole, samples[part][:, members] * factor]) * common[part, None]
                factors[g] = triangular(lines, factors[g])
        done = [projected(factor, n, n, sequences.mixing) for factor in factors if factor is not None]
        return done[0] if len(done) == 1 else joined(done)

    total = float(np.sum((weights * samples) ** 2))
    bound = np.full(n, LARGEST_LOG)
    unknowns, cost, _ = minimised(unknowns, -bound, bound, at, total, iterations, tolerance)
    return to_circle(poles_of(*_parts(unknowns, pairs))), cost


def _parts(unknowns: Array, pairs: int) -> tuple[Array, Array, Array]:
    return np.exp(unknowns[:pairs]), np.exp(unknowns[pairs : 2 * pairs]), np.exp(unknowns[2 * pairs :])
