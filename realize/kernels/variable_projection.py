"""Least squares over the poles alone: residues and direct terms are projected out.

The poles are parameters of second-order sections s^2 + a s + w^2 with ln w and ln a as unknowns (and ln a of one
s + a for odd orders): every value of the unknowns is stable, and a pair may become two real poles and back without a
corner.

Sources
-------
1. G. H. Golub, V. Pereyra, "The differentiation of pseudo-inverses and nonlinear least squares problems whose
   variables separate", SIAM Journal on Numerical Analysis 10(2), 1973.
2. L. Kaufman, "A variable projection method for solving separable nonlinear least squares problems", BIT 15, 1975.
3. J. J. More, "The Levenberg-Marquardt algorithm: implementation and theory", Lecture Notes in Mathematics 630, 1978.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from realize.kernels.vector_fitting import ordered_poles, stacked

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Logarithms of damping terms stay above minus this: a damping of 1e-13 in a band near 1 is none.
FARTHEST = 30.0
#: Sections stay this far (natural logarithm) from the band at most. A double integrator 1/s^2 stood in for by a pair at
#: a fraction d of the lowest frequency is d^2 off, and its residues cancel to eps/d: 2^-18 makes both alike.
BELOW, BELOW_SINGLE, ABOVE = 18 * np.log(2.0), 40 * np.log(2.0), 26 * np.log(2.0)


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
    """Basis functions of a set of sections at points jx, and their derivatives by the unknowns.

    Columns are w^2/q and w s/q with q = s^2 + a s + w^2, then a/(s + a); with a finite ``vanish`` each is lowered by
    its value at that real point.
    """

    def __init__(self, points: ComplexArray, unknowns: Array, pairs: int, vanish: float) -> None:
        at = points if not np.isfinite(vanish) else np.append(points, complex(vanish))
        self.finite = bool(np.isfinite(vanish))
        self.pairs = pairs
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

    def derivatives(self, coefficient: Array) -> ComplexArray:
        """Return the derivatives of columns @ coefficient by the unknowns [k][n]; w^2 and w are kept as constants.

        The factors w^2, w and a of the columns only scale the coefficients, so their derivatives lie in the span of
        the basis and vanish in the projection.
        """
        m = self.pairs
        value = (self.w**2 * coefficient[:m] + self.w * coefficient[m : 2 * m] * self.s) * self.inverse**2
        alone = self.single * coefficient[2 * m :] * self.alone**2
        return self._lowered(np.hstack([-2 * self.w**2 * value, -self.a * self.s * value, -self.single * alone]))

    def _lowered(self, matrix: ComplexArray) -> ComplexArray:
        return matrix[:-1] - matrix[-1].real if self.finite else matrix


class Projection:
    """The linear part solved: orthonormal basis, coefficients and residual of every channel for given unknowns."""

    def __init__(
        self,
        points: ComplexArray,
        unknowns: Array,
        pairs: int,
        values: ComplexArray,
        weights: Array,
        direct: bool,
        vanish: float,
    ) -> None:
        self.sections = Sections(points, unknowns, pairs, np.inf if direct else vanish)
        columns = self.sections.columns()
        if direct:
            columns = np.hstack([columns, np.ones((points.size, 1))])
        self.n = unknowns.size
        self.weights = weights
        self.orthonormal: list[Array] = []
        self.triangle: list[Array] = []
        self.residual: list[Array] = []
        self.target: list[Array] = []
        self.norms: list[Array] = []
        self.cost = 0.0
        for c in range(values.shape[1]):
            matrix = stacked(weights[:, c, None] * columns)
            norm = np.linalg.norm(matrix, axis=0)
            norm = np.where(norm > 0, norm, 1.0)
            q, r = np.linalg.qr(matrix / norm)
            y = stacked((weights[:, c] * values[:, c])[:, None])[:, 0]
            z = q.T @ y
            rest = y - q @ z
            rest -= q @ (q.T @ rest)
            self.orthonormal.append(q)
            self.triangle.append(r)
            self.residual.append(rest)
            self.target.append(z)
            self.norms.append(norm)
            self.cost += float(rest @ rest)

    def normal_equations(self) -> tuple[Array, Array]:
        """Return J^T J and J^T r over all channels, J in the approximation of reference 2."""
        square, right = np.zeros((self.n, self.n)), np.zeros(self.n)
        for c, (q, r, rest, z, norm) in enumerate(
            zip(self.orthonormal, self.triangle, self.residual, self.target, self.norms, strict=True)
        ):
            coefficient = np.linalg.lstsq(r, z, rcond=max(q.shape) * np.finfo(float).eps)[0] / norm
            slope = -stacked(self.weights[:, c, None] * self.sections.derivatives(coefficient[: self.n]))
            slope -= q @ (q.T @ slope)
            square += slope.T @ slope
            right += slope.T @ rest
        return square, right


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
    lower, upper = _bounds(points.imag, pairs, single.size)
    wanted = np.log(np.concatenate([w, a, single]))
    unknowns = np.clip(wanted, lower, upper)
    if np.any(unknowns != wanted):
        poles = _poles_at(unknowns, pairs)

    def at(theta: Array) -> Projection:
        return Projection(points, theta, pairs, values, weights, direct, vanish)

    here = at(unknowns)
    if unknowns.size == 0:
        return poles, here.cost
    start = here.cost
    total = float(np.sum(np.abs(weights * values) ** 2))
    floor = (4 * np.finfo(float).eps) ** 2 * total
    damping, growth = 1e-3, 2.0
    square, right = here.normal_equations()
    small = 0
    for _ in range(iterations):
        size = np.sqrt(np.diagonal(square))
        size = np.where(size > 0, size, 1.0)
        scaled, target = square / np.outer(size, size), right / size
        step = np.linalg.solve(scaled + damping * np.eye(size.size), -target)
        predicted = float(-2 * step @ target - step @ scaled @ step)
        step = step / size
        step *= min(1.0, 1.0 / max(np.max(np.abs(step)), 1e-300))
        # a logarithm of the damping below -2 FARTHEST is an undamped pole: it stops there
        trial = np.clip(unknowns + step, lower, upper)
        there = at(trial)
        gain = here.cost - there.cost
        if gain > 0:
            small = small + 1 if gain <= tolerance * here.cost else 0
            unknowns, here = trial, there
            if here.cost <= floor or small >= 2:
                break
            square, right = here.normal_equations()
            damping = max(damping * max(1 / 3, 1 - (2 * gain / max(predicted, gain * 1e-3) - 1) ** 3), 1e-12)
            growth = 2.0
        else:
            if predicted <= 0.01 * tolerance * here.cost or damping > 1e12:
                break
            damping *= growth
            growth *= 2
    if here.cost >= start:
        return poles, start
    return _poles_at(unknowns, pairs), here.cost


def _bounds(x: Array, pairs: int, singles: int) -> tuple[Array, Array]:
    low, high = np.log(np.min(x[x > 0])), np.log(np.max(x))
    lower = [low - BELOW] * pairs + [-FARTHEST] * pairs + [low - BELOW_SINGLE] * singles
    upper = [high + ABOVE] * pairs + [high + ABOVE] * pairs + [high + ABOVE] * singles
    return np.array(lower), np.array(upper)


def _poles_at(unknowns: Array, pairs: int) -> ComplexArray:
    w, a, single = np.exp(unknowns[:pairs]), np.exp(unknowns[pairs : 2 * pairs]), np.exp(unknowns[2 * pairs :])
    return poles_of(w, a, single)


def best_additions(
    points: ComplexArray,
    poles: ComplexArray,
    values: ComplexArray,
    weights: Array,
    direct: bool,
    vanish: float,
) -> tuple[ComplexArray, ComplexArray]:
    """Return the pair and the real pole that lower the cost most when they are added, all present poles kept.

    A list of candidates is tried: pairs at the lines of the largest misfit and at frequencies spread over the band,
    each with damping ratios from half the distance of the lines up to 0.7; real poles spread over the band and a
    decade beyond; a few of both far outside. The gain of each is exact (linear least squares by
    projection). Parameters as in ``polished``.
    """
    x = points.imag
    w, a, single = sections_of(poles)
    base = Projection(points, np.log(np.concatenate([w, a, single])), w.size, values, weights, direct, vanish)
    strength = np.sum([r[: x.size] ** 2 + r[x.size :] ** 2 for r in base.residual], axis=0)
    pair_w, pair_a, real = _addition_candidates(x, strength)
    trial = Sections(
        points, np.log(np.concatenate([pair_w, pair_a, real])), pair_w.size, np.inf if direct else vanish
    ).columns()
    gains = np.zeros(pair_w.size + real.size)
    for c, (q, rest) in enumerate(zip(base.orthonormal, base.residual, strict=True)):
        columns = stacked(weights[:, c, None] * trial)
        before = np.linalg.norm(columns, axis=0)
        columns -= q @ (q.T @ columns)
        inner = rest @ columns
        m = pair_w.size
        gains += _gains(columns, inner, before, m)
    best = int(np.argmax(gains[:m]))
    pair = poles_of(pair_w[best : best + 1], pair_a[best : best + 1], np.zeros(0))
    return pair, np.array([complex(-real[int(np.argmax(gains[m:]))])])


def _addition_candidates(x: Array, strength: Array) -> tuple[Array, Array, Array]:
    """Return w and a of pairs, and a of real poles, worth trying for the misfit power of each line."""
    positive = x[x > 0]
    low, high = positive[0], positive[-1]
    around = np.concatenate([strength[:1], strength, strength[-1:]])
    smooth = strength + 0.5 * (around[:-2] + around[2:])
    padded = np.concatenate([[-1.0], smooth, [-1.0]])
    peaks = np.flatnonzero((smooth >= padded[:-2]) & (smooth > padded[2:]) & (x > 0))
    peaks = peaks[np.argsort(-smooth[peaks], kind="stable")][:10]
    spread = np.unique(np.rint(np.linspace(0, x.size - 1, 14)).astype(int))
    lines = np.unique(np.concatenate([peaks, spread[x[spread] > 0]]))
    gap = np.gradient(x) if x.size > 1 else np.ones(1)
    frequency: list[float] = []
    damping: list[float] = []
    for k in lines:
        narrow = min(max(gap[k] / (2 * x[k]), 1e-9), 0.7)
        for zeta in np.geomspace(narrow, 0.7, 6):
            frequency.append(x[k])
            damping.append(zeta)
    # outside the band: what a double integrator below it, or a resonance above it, leaves within
    for place in [low * 2.0**-k for k in (1, 2, 4, 7, 12, 17)] + [high * 2.0**k for k in (0.5, 1.5, 4)]:
        frequency += [place, place]
        damping += [0.02, 0.7]
    real = [
        low * np.array([1e-9, 1e-6, 1e-4, 1e-2]),
        np.geomspace(low / 10, high * 10, 24),
        high * np.array([1e3, 1e6]),
    ]
    return np.array(frequency), 2 * np.array(frequency) * np.array(damping), np.concatenate(real)


def _gains(columns: Array, inner: Array, before: Array, m: int) -> Array:
    """Return what each candidate takes off the cost: pairs own columns i and m + i, real poles one column each."""
    square = np.sum(columns**2, axis=0)
    # a column that the present poles span already has nothing left but rounding
    kept = square > (1e-6 * before) ** 2
    first, second, rest = slice(0, m), slice(m, 2 * m), slice(2 * m, None)
    alone = np.where(kept, inner**2 / np.where(kept, square, 1.0), 0.0)
    cross = np.sum(columns[:, first] * columns[:, second], axis=0)
    e = square[first] * square[second] - cross**2
    both = kept[first] & kept[second] & (e > 1e-9 * square[first] * square[second])
    joint = square[second] * inner[first] ** 2 + square[first] * inner[second] ** 2
    joint -= 2 * cross * inner[first] * inner[second]
    pair = np.where(both, joint / np.where(both, e, 1.0), np.maximum(alone[first], alone[second]))
    return np.concatenate([pair, alone[rest]])
