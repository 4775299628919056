"""Least squares over poles, and dead times, of functions with structure: coefficients are projected out.

    min over poles, dead times and coefficients of sum |weights (exp(-s dead) H R coefficient - values)|^2

H R as in ``structured_basis``. A steady-state gain that is given is one linear equation on the coefficients of a
channel, solved by an orthonormal basis of its null space. The dead time stands on the side of the values, exp(s dead)
values, so that its derivative is exact and the basis does not depend on it.

Sources: those of ``variable_projection``; null-space method for equality constraints: C. L. Lawson, R. J. Hanson,
Solving Least Squares Problems, Prentice-Hall 1974, chapter 20.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.kernels.additions import addition_candidates, gains_of
from realize.kernels.separable import Projected, joined, minimised, triangular
from realize.kernels.structured_basis import Free, Known, StructuredBasis
from realize.kernels.variable_projection import bounds, poles_of, sections_of
from realize.kernels.vector_fitting import ordered_poles, relocated, relocating, stacked, weighted_cost

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class Task:
    """Responses to fit and what is known of them.

    Parameters
    ----------
    points : [k] complex
        Points jx, x near 1.
    values : [k][channels] complex
    weights : [k][channels] float
    known : Known
    gain : [channels] float or None
        Value of each channel at s = 0.
    groups : [channels][delays] float
        Which dead times act on which channel; no column where none is unknown.
    stable : bool
        False: poles of the start that are on the right stay there.
    """

    points: ComplexArray
    values: ComplexArray
    weights: Array
    known: Known
    gain: Array | None
    groups: Array
    stable: bool

    @property
    def beside(self) -> ComplexArray:
        """Functions 1/(s - p)^k over the fixed poles, k up to their multiplicity, real combinations of pairs."""
        known = Known(self.known.poles, np.zeros(0, complex), 0)
        nothing = Free(np.zeros(0), np.zeros(0), np.zeros(0))
        return StructuredBasis(self.points, nothing, known).rest(self.points)[:, :-1]

    def rotated(self, delays: Array) -> ComplexArray:
        """Return the values with dead times taken out of the channels."""
        if delays.size == 0:
            return self.values
        return self.values * np.exp(self.points[:, None] * (self.groups @ delays))


def signed_sections(poles: ComplexArray) -> tuple[Free, int]:
    """Return the sections of stable poles, then those of unstable ones with negative a, and the number of pairs."""
    left, right = poles[poles.real <= 0], poles[poles.real > 0]
    w, a, single = sections_of(left)
    v, b, other = sections_of(-right.conj())
    return Free(np.concatenate([w, v]), np.concatenate([a, -b]), np.concatenate([single, -other])), w.size + v.size


def free_sections(poles: ComplexArray) -> Free:
    """Return pairs as sections and every real pole by itself: the poles as they are, for the last solution."""
    upper = poles[poles.imag > 0]
    return Free(np.abs(upper), -2 * upper.real, -poles[poles.imag == 0].real)


def poles_at(free: Free) -> ComplexArray:
    """Return the poles of sections, those with negative a on the right."""
    left = poles_of(free.w[free.a > 0], free.a[free.a > 0], free.single[free.single > 0])
    right = poles_of(free.w[free.a <= 0], -free.a[free.a <= 0], -free.single[free.single <= 0])
    return ordered_poles(np.concatenate([left, -right.conj()]), reflect=False)


class StructuredProjection:
    """The linear part solved: orthonormal basis, coefficients and residual of every channel.

    Attributes
    ----------
    coefficients : [channels] of [columns] float
    orthonormal, residual : [channels] of arrays
        Of the columns that the equation for the gain leaves free, real parts above imaginary ones.
    """

    def __init__(self, task: Task, free: Free, delays: Array) -> None:
        self.task = task
        self.basis = StructuredBasis(task.points, free, task.known)
        self.values = task.rotated(delays)
        columns = self.basis.columns()
        row = None if task.gain is None else self.basis.columns(np.zeros(1, complex))[0].real
        self.orthonormal: list[Array] = []
        self.residual: list[Array] = []
        self.coefficients: list[Array] = []
        self.cost = 0.0
        for c in range(self.values.shape[1]):
            weight = task.weights[:, c]
            matrix = stacked(weight[:, None] * columns)
            norm = np.linalg.norm(matrix, axis=0)
            norm = np.where(norm > 0, norm, 1.0)
            matrix = matrix / norm
            y = stacked((weight * self.values[:, c])[:, None])[:, 0]
            if row is None or task.gain is None:
                q, solution, rest = _solved(matrix, y)
            else:
                start, null = null_space(row / norm, float(task.gain[c]))
                q, inner, rest = _solved(matrix @ null, y - matrix @ start)
                solution = start + null @ inner
            self.orthonormal.append(q)
            self.residual.append(rest)
            self.coefficients.append(solution / norm)
            self.cost += float(rest @ rest)

    def response(self) -> ComplexArray:
        """Return the fitted values without dead time [k][channels]."""
        return self.basis.columns() @ np.array(self.coefficients).T

    def projected(self) -> Projected:
        """Return residual and Jacobian by ln w, ln |a|, ln |single| and the dead times, Kaufman's approximation."""
        task = self.task
        free = self.basis.free
        size = 2 * free.w.size + free.single.size
        count = size + task.groups.shape[1]
        if count == 0:
            return Projected(self.cost, np.zeros((0, 0)), np.zeros(0))
        parts = []
        for c, (q, rest, coefficient) in enumerate(
            zip(self.orthonormal, self.residual, self.coefficients, strict=True)
        ):
            weight = task.weights[:, c, None]
            slope = np.empty((rest.size, count))
            slope[:, :size] = -stacked(weight * self.basis.derivatives(coefficient))
            turned = weight[:, 0] * task.points * self.values[:, c]
            slope[:, size:] = stacked(turned[:, None]) * task.groups[c]
            slope -= q @ (q.T @ slope)
            factor = triangular(np.hstack([slope, rest[:, None]]))[:count]
            parts.append(Projected(0.0, factor[:, :count], factor[:, count]))
        both = joined(parts)
        return Projected(self.cost, both.jacobian, both.residual)


def null_space(row: Array, value: float) -> tuple[Array, Array]:
    """Return the smallest solution of row @ x = value and an orthonormal basis of what may be added to it.

    Raises
    ------
    ValueError
        If the row is zero and the value is not.
    """
    size = float(np.linalg.norm(row))
    if size == 0:
        if value != 0:
            raise ValueError("no coefficient acts on the gain")
        return np.zeros(row.size), np.eye(row.size)
    whole = np.linalg.qr(row[:, None], mode="complete")[0]
    return row * (value / size**2), whole[:, 1:]


def _solved(matrix: Array, y: Array) -> tuple[Array, Array, Array]:
    """Return orthonormal columns, the least squares solution and the residual (orthogonalised twice)."""
    if matrix.shape[1] == 0:
        return np.zeros((y.size, 0)), np.zeros(0), y
    q, r = np.linalg.qr(matrix)
    z = q.T @ y
    rest = y - q @ z
    rest -= q @ (q.T @ rest)
    return q, np.linalg.lstsq(r, z, rcond=max(matrix.shape) * np.finfo(float).eps)[0], rest


def structured_polish(
    task: Task, poles: ComplexArray, delays: Array, iterations: int, tolerance: float
) -> tuple[ComplexArray, Array, float]:
    """Return poles and dead times of no higher cost, and that cost: Levenberg-Marquardt with coefficients projected.

    Parameters
    ----------
    task : Task
    poles : [n] complex
        Start of the free poles, ordered as ``vector_fitting.ordered_poles`` returns them.
    delays : [delays] float
        Start of the dead times, in the unit of 1/points; they stay at zero or above.
    iterations : int
        Largest number of accepted or rejected steps.
    tolerance : float
        Two steps in a row that lower the cost by less than this fraction are the last.
    """
    free, pairs = signed_sections(poles)
    theta = np.log(np.abs(np.concatenate([free.w, free.a, free.single])))
    signs = np.sign(np.concatenate([free.w, free.a, free.single]))
    lower, upper = bounds(task.points.imag, pairs, free.single.size)
    lower, upper = np.append(lower, np.zeros(delays.size)), np.append(upper, np.full(delays.size, np.inf))
    wanted = np.concatenate([theta, delays])
    unknowns = np.clip(wanted, lower, upper)

    def sections(u: Array) -> Free:
        value = signs * np.exp(u[: theta.size])
        return Free(value[:pairs], value[pairs : 2 * pairs], value[2 * pairs :])

    def at(u: Array) -> Projected:
        return StructuredProjection(task, sections(u), u[theta.size :]).projected()

    total = weighted_cost(task.values, task.weights)
    moved = bool(np.any(unknowns != wanted))
    unknowns, cost, first = minimised(unknowns, lower, upper, at, total, iterations, tolerance)
    if unknowns.size == 0 or (cost >= first and not moved):
        return poles, delays, first
    return poles_at(sections(unknowns)), unknowns[theta.size :], cost


def structured_relocation(task: Task, poles: ComplexArray, iterations: int) -> tuple[ComplexArray, float]:
    """Return the best free poles met while relocating, and their cost.

    The fixed poles are columns beside those of the free ones: sigma times a fixed partial fraction is that fraction
    times sigma at the fixed pole, plus fractions over the free poles. Zeros and relative degree do not enter the
    relocation, only the cost by which the best poles are chosen.
    """
    beside = task.beside
    nothing = np.zeros(task.groups.shape[1])
    direct = task.known.excess == 0

    def cost(moved: ComplexArray) -> float:
        return StructuredProjection(task, signed_sections(moved)[0], nothing).cost

    def move(old: ComplexArray) -> ComplexArray:
        return relocated(task.points, old, task.values, task.weights, direct, np.inf, task.stable, beside)

    return relocating(poles, move, cost, weighted_cost(task.values, task.weights), iterations)


def structured_additions(task: Task, poles: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
    """Return the stable pair and the stable real pole that lower the cost most when they are added to the free poles.

    As ``additions.best_additions``; the functions tried carry the factor H of the present basis.
    """
    x = task.points.imag
    base = StructuredProjection(task, signed_sections(poles)[0], np.zeros(task.groups.shape[1]))
    strength = np.sum([r[: x.size] ** 2 + r[x.size :] ** 2 for r in base.residual], axis=0)
    w, a, real = addition_candidates(x, strength)
    nothing = Known(np.zeros(0, complex), np.zeros(0, complex), 1)
    # R without the constant: one pole more than the columns asked for stays out of H
    pair = StructuredBasis(task.points, Free(w, a, np.zeros(0)), nothing).rest(task.points)
    single = real / (task.points[:, None] + real)
    trial = base.basis.factor(task.points)[:, None] * np.hstack([pair, single])
    gains = np.zeros(w.size + real.size)
    for c, (q, rest) in enumerate(zip(base.orthonormal, base.residual, strict=True)):
        columns = stacked(task.weights[:, c, None] * trial)
        before = np.linalg.norm(columns, axis=0)
        columns -= q @ (q.T @ columns)
        gains += gains_of(columns, (rest @ columns)[None], before, w.size)
    best = int(np.argmax(gains[: w.size]))
    added = poles_of(w[best : best + 1], a[best : best + 1], np.zeros(0))
    return added, np.array([complex(-real[int(np.argmax(gains[w.size :]))])])


def delay_covariance(task: Task, poles: ComplexArray, delays: Array) -> Array:
    """Return the covariance [delays][delays] of the dead times of a fit, poles and coefficients free as well.

    Weights are 1/deviation of the complex values, half of the variance in each real part: (J^T J)^-1 / 2.
    """
    jacobian = StructuredProjection(task, signed_sections(poles)[0], delays).projected().jacobian
    size = np.linalg.norm(jacobian, axis=0)
    size = np.where(size > 0, size, 1.0)
    factor = np.linalg.pinv(jacobian / size, rcond=jacobian.shape[1] * float(np.finfo(float).eps)) / size[:, None]
    last = factor[factor.shape[0] - delays.size :]
    return np.asarray(last @ last.T / 2)
