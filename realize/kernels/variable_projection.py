"""Least squares over the poles alone: residues and direct terms are projected out.

The poles are parameters of second-order sections s^2 + a s + w^2 with ln w and ln a as unknowns (and ln a of one
s + a for odd orders): every value of the unknowns is stable, and a pair may become two real poles and back without a
corner.

Sources
-------
See ``realize.kernels.separable``.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from realize.kernels.separable import Projected, chunks, groups_of, joined, minimised, projected, triangular
from realize.kernels.vector_fitting import ordered_poles, stacked

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
IntArray = NDArray[np.int64]

#: Logarithms of damping terms stay above minus this: a damping of 1e-13 in a band near 1 is none.
FARTHEST = 30.0
#: Sections stay this far (natural logarithm) from the band at most. A double integrator 1/s^2 stood in for by a pair at
#: a fraction d of the lowest frequency is d^2 off, and its residues cancel to eps/d: 2^-18 makes both alike. One real
#: pole for 1/s is d off, and nothing cancels: 2^-60 is less than a rounding.
BELOW, BELOW_SINGLE, ABOVE = 18 * np.log(2.0), 60 * np.log(2.0), 26 * np.log(2.0)


def sections_of(poles: ComplexArray) -> tuple[Array, Array, Array]:
    """Return (w, a) of the second-order sections and a of the first-order ones (none or one) that hold the poles.

    Real poles are joined with the neighbour in size; the largest stays alone when their number is odd.
    """
    pairs = poles[poles.imag > 0]
    single = np.sort(-poles[poles.imag == 0].real)
    even = single.size - single.size % 2
    w = np.concatenate([np.abs(pairs), np.sqrt(single[0:even:2]) * np.sqrt(single[1:even:2])])
    a = np.concatenate([-2 * pairs.real, single[0:even:2] + single[1:even:2]])
    return w, a, single[even:]


def poles_of(w: Array, a: Array, single: Array) -> ComplexArray:
    """Return the roots of the sections s^2 + a s + w^2 and s + single."""
    half = a / 2
    below = half < w
    gap = np.sqrt(np.abs(w - half)) * np.sqrt(w + half)
    upper = -half[below] + 1j * gap[below]
    large = half[~below] + gap[~below]
    small = w[~below] * (w[~below] / large)
    real = -np.concatenate([large, small, single]).astype(complex)
    return ordered_poles(np.concatenate([upper, upper.conj(), real]))


class Sections:
    """Basis functions of a set of sections at points jx, and the functions that their derivatives are made of.

    Columns are w^2/q and w s/q with q = s^2 + a s + w^2, then a/(s + a); with a finite ``vanish`` each is lowered by
    its value at that real point.
    """

    def __init__(self, points: ComplexArray, unknowns: Array, pairs: int, vanish: float) -> None:
        at = points if not np.isfinite(vanish) else np.append(points, complex(vanish))
        self.finite = bool(np.isfinite(vanish))
        self.pairs, self.unknowns = pairs, unknowns.size
        w, a, single = np.exp(unknowns[:pairs]), np.exp(unknowns[pairs : 2 * pairs]), np.exp(unknowns[2 * pairs :])
        self.w, self.a, self.single = w, a, single
        s = at[:, None]
        # (w - x)(w + x) keeps the distance from resonance exact; the last point is real if there is a vanishing point
        self.inverse = 1 / ((w - 1j * s) * (w + 1j * s) + a * s)
        if self.finite:
            c = at[-1].real
            self.inverse[-1] = 1 / (c * c + a * c + w * w)
        self.s = s
        self.alone = 1 / (s + single)

    def columns(self) -> ComplexArray:
        """Return the basis [k][n]."""
        return self._lowered(
            np.hstack([self.w**2 * self.inverse, self.w * self.s * self.inverse, self.single * self.alone])
        )

    def tangents(self) -> ComplexArray:
        """Return the functions [k][n] whose combinations are the derivatives, apart from what the basis spans.

        w^4/q^2 and w^3 s/q^2 of each pair, a^2/(s + a)^2: s^2/q^2 = 1/q - a s/q^2 - w^2/q^2 is one of them then. The
        factors w^2, w and a of the basis only scale coefficients, so their derivatives lie in its span.
        """
        square = (self.w**2 * self.inverse) ** 2
        return self._lowered(np.hstack([square, square * (self.s / self.w), (self.single * self.alone) ** 2]))

    def mixing(self, coefficient: Array) -> Array:
        """Return K [channels][n][n]: the derivative of columns @ coefficient by unknown j is tangents @ K[:, :, j]."""
        m, n = self.pairs, self.unknowns
        first, second, third = coefficient[:m].T, coefficient[m : 2 * m].T, coefficient[2 * m : n].T
        result = np.zeros((first.shape[0], n, n))
        pair, single = np.arange(m), np.arange(2 * m, n)
        ratio = self.a / self.w
        result[:, pair, pair] = -2 * first
        result[:, m + pair, pair] = -2 * second
        result[:, pair, m + pair] = ratio * second
        result[:, m + pair, m + pair] = ratio * (ratio * second - first)
        result[:, single, single] = -third
        return result

    def _lowered(self, matrix: ComplexArray) -> ComplexArray:
        return matrix[:-1] - matrix[-1].real if self.finite else matrix


def projection(
    points: ComplexArray,
    unknowns: Array,
    pairs: int,
    values: ComplexArray,
    groups: list[tuple[IntArray, Array, Array]],
    direct: bool,
    vanish: float,
) -> Projected:
    """Return residual and Jacobian of all channels, their linear coefficients projected out.

    Parameters
    ----------
    points : [k] complex
    unknowns : [n] float
        Logarithms of w and a of the pairs, then of a of the single sections.
    pairs : int
    values : [k][channels] complex
    groups : list
        Channels by weights, as ``separable.groups_of`` returns them.
    direct, vanish
        As in ``polished``.
    """
    n = unknowns.size
    linear = n + int(direct)
    factors: list[Array | None] = [None] * len(groups)
    sections = None
    for part in chunks(points.size, 2 * (2 * n + 1 + values.shape[1])):
        sections = Sections(points[part], unknowns, pairs, np.inf if direct else vanish)
        one = [np.ones((points[part].size, 1))] if direct else []
        whole = np.hstack([sections.columns(), *one, sections.tangents()])
        for g, (members, weights, factor) in enumerate(groups):
            lines = np.hstack([whole, values[part][:, members] * factor])
            factors[g] = triangular(stacked(weights[part, None] * lines), factors[g])
    assert sections is not None
    done = [projected(factor, linear, n, sections.mixing) for factor in factors if factor is not None]
    return done[0] if len(done) == 1 else joined(done)


def polished(
    points: ComplexArray,
    poles: ComplexArray,
    values: ComplexArray,
    weights: Array,
    direct: bool,
    vanish: float,
    iterations: int,
    tolerance: float,
) -> tuple[ComplexArray, float]:
    """Return poles of no higher cost sum |weights misfit|^2, and that cost: Levenberg-Marquardt over the poles alone.

    Parameters
    ----------
    points : [k] complex
        Points jx, x near 1.
    poles : [n] complex
        Stable start, ordered as ``vector_fitting.ordered_poles`` returns it.
    values : [k][channels] complex
    weights : [k][channels] float
    direct : bool
    vanish : float
        Real point at which a response without direct term is zero; infinite for continuous time.
    iterations : int
        Largest number of accepted or rejected steps.
    tolerance : float
        Two steps in a row that lower the cost by less than this fraction are the last.
    """
    w, a, single = sections_of(poles)
    pairs = w.size
    lower, upper = bounds(points.imag, pairs, single.size)
    wanted = np.log(np.concatenate([w, a, single]))
    unknowns = np.clip(wanted, lower, upper)
    if np.any(unknowns != wanted):
        poles = _poles_at(unknowns, pairs)

    groups = groups_of(weights)

    def at(theta: Array) -> Projected:
        return projection(points, theta, pairs, values, groups, direct, vanish)

    total = float(np.sum(np.abs(weights * values) ** 2))
    unknowns, cost, start = minimised(unknowns, lower, upper, at, total, iterations, tolerance)
    return (_poles_at(unknowns, pairs), cost) if cost < start else (poles, start)


def bounds(x: Array, pairs: int, singles: int) -> tuple[Array, Array]:
    """Return the smallest and largest values of the unknowns for frequencies x, of which one at least is positive."""
    low, high = np.log(np.min(x[x > 0])), np.log(np.max(x))
    lower = [low - BELOW] * pairs + [-FARTHEST] * pairs + [low - BELOW_SINGLE] * singles
    upper = [high + ABOVE] * pairs + [high + ABOVE] * pairs + [high + ABOVE] * singles
    return np.array(lower), np.array(upper)


def _poles_at(unknowns: Array, pairs: int) -> ComplexArray:
    w, a, single = np.exp(unknowns[:pairs]), np.exp(unknowns[pairs : 2 * pairs]), np.exp(unknowns[2 * pairs :])
    return poles_of(w, a, single)
