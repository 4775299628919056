"""Derivatives of the fitted channels by their unknowns: partial fractions, functions with a structure, exponentials."""

from __future__ import annotations

from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from realize.fitting.problem import Problem
from realize.fitting.sample_problem import Measured, SampleProblem
from realize.kernels.exponentials import real_columns, real_slopes
from realize.kernels.information import channel_slopes
from realize.kernels.structured_basis import StructuredBasis
from realize.kernels.structured_fit import StructuredProjection, free_sections
from realize.kernels.structured_solution import CIRCLE, Solution

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


class Slopes(Protocol):
    """Derivatives of a channel by its unknowns: first the coordinates of the free poles, then what is its own."""

    #: free poles [n]
    poles: ComplexArray

    def at(self, points: ComplexArray, channel: int) -> ComplexArray:
        """Return the derivatives of the response at points, or of samples, [k][unknowns]."""

    def residue(self, index: int, channel: int) -> ComplexArray:
        """Return the derivatives of one pole's residue (any pole of the solution) [unknowns]."""

    def infinity(self, channel: int) -> Array:
        """Return the derivatives of the value at infinity [unknowns]."""


class PlainSlopes:
    """Of sum residues/(s - poles) + direct with free residues."""

    def __init__(self, problem: Problem, solution: Solution) -> None:
        self.poles = solution.poles
        self.residues = solution.residues
        self.direct, self.vanish = problem.direct, problem.vanish

    def at(self, points: ComplexArray, channel: int) -> ComplexArray:
        return channel_slopes(points, self.poles, self.residues[:, channel], self.direct, self.vanish)

    def residue(self, index: int, channel: int) -> ComplexArray:
        return _own(self.poles, index, 2 * self.poles.size + int(self.direct))

    def infinity(self, channel: int) -> Array:
        row = np.zeros(2 * self.poles.size + int(self.direct))
        if self.direct:
            row[-1] = 1
        elif np.isfinite(self.vanish):
            row = -channel_slopes(
                np.array([complex(self.vanish)]), self.poles, self.residues[:, channel], False, np.inf
            )[0].real
        return row


class StructuredSlopes:
    """Of functions with fixed poles and zeros, relative degree, and a steady-state gain that may be given.

    Residues are means over a circle around the pole, and so are their derivatives. A given gain ties the unknowns by
    one equation, which is solved for the channel's own ones.
    """

    def __init__(self, problem: Problem, solution: Solution, free: int) -> None:
        task = problem.task()
        self.poles = solution.poles[:free]
        self.every, self.powers = solution.poles, solution.powers
        self.known = task.known
        projection = StructuredProjection(task, free_sections(self.poles), np.zeros(task.groups.shape[1]))
        self.coefficients = projection.coefficients
        self.gained = task.gain is not None
        self.top = float(np.max(np.abs(problem.points)))
        self._ties: dict[int, Array] = {}

    def at(self, points: ComplexArray, channel: int) -> ComplexArray:
        free = self._free(points, channel)
        if not self.gained:
            return free
        if channel not in self._ties:
            self._ties[channel] = _tie(self._free(np.zeros(1, complex), channel)[0].real, self.poles.size)
        return free @ self._ties[channel]

    def _free(self, points: ComplexArray, channel: int) -> ComplexArray:
        basis = StructuredBasis(points, free_sections(self.poles), self.known)
        by_sections = basis.derivatives(self.coefficients[channel])
        pairs = np.flatnonzero(self.poles.imag > 0)
        singles = np.flatnonzero(self.poles.imag == 0)
        m = pairs.size
        by_poles = np.empty((points.size, self.poles.size), dtype=complex)
        x, y = self.poles[pairs].real, self.poles[pairs].imag
        square = x**2 + y**2
        by_poles[:, pairs] = by_sections[:, :m] * (x / square) + by_sections[:, m : 2 * m] / x
        by_poles[:, pairs + 1] = by_sections[:, :m] * (y / square)
        by_poles[:, singles] = by_sections[:, 2 * m :] / self.poles[singles].real
        return np.hstack([by_poles, basis.columns()])

    def residue(self, index: int, channel: int) -> ComplexArray:
        pole = self.every[index]
        distance = np.abs(self.every - pole)
        others = distance[distance > 0]
        radius = 0.5 * float(np.min(others)) if others.size else max(abs(pole), 1.0)
        turn = radius * np.exp(2j * np.pi * (np.arange(CIRCLE) + 0.5) / CIRCLE)
        row: ComplexArray = np.mean(self.at(pole + turn, channel) * turn[:, None] ** self.powers[index], axis=0)
        return row if pole.imag else row.real.astype(complex)

    def infinity(self, channel: int) -> Array:
        # 2^60: what is left of partial fractions there is below rounding of the value at infinity
        return np.asarray(self.at(np.array([complex(self.top * 2.0**60)]), channel)[0].real)


class SampleSlopes:
    """Of samples sum residues poles^k with free residues; points are a run of k."""

    def __init__(self, solution: Solution) -> None:
        self.poles, self.residues = solution.poles, solution.residues

    def at(self, points: ComplexArray, channel: int) -> ComplexArray:
        first, count = int(points[0].real) if points.size else 0, points.size
        by_poles = real_slopes(self.poles, self.residues[:, channel], first, count)
        # real, whatever the type says
        result: ComplexArray = np.hstack([by_poles, real_columns(self.poles, first, count)])
        return result

    def residue(self, index: int, channel: int) -> ComplexArray:
        return _own(self.poles, index, 2 * self.poles.size)

    def infinity(self, channel: int) -> Array:
        return np.zeros(2 * self.poles.size)


def slopes_of(problem: Measured, solution: Solution, free: int) -> Slopes:
    """Return the derivatives of a solution with so many free poles."""
    if isinstance(problem, SampleProblem):
        return SampleSlopes(solution)
    return PlainSlopes(problem, solution) if problem.structure is None else StructuredSlopes(problem, solution, free)


def _own(poles: ComplexArray, index: int, unknowns: int) -> ComplexArray:
    """Return the derivatives of one residue that is among the unknowns itself."""
    row = np.zeros(unknowns, dtype=complex)
    row[poles.size + index] = 1
    if poles[index].imag > 0:
        row[poles.size + index + 1] = 1j
    return row


def _tie(row: Array, poles: int) -> Array:
    """Return the matrix from (poles, what is left of the channel's own unknowns) to all, on which row is zero."""
    own = row[poles:]
    square = float(own @ own)
    if square == 0:
        return np.eye(row.size)
    _, _, vt = np.linalg.svd(own[None, :], full_matrices=True)
    result = np.zeros((row.size, row.size - 1))
    result[:poles, :poles] = np.eye(poles)
    result[poles:, :poles] = -np.outer(own, row[:poles]) / square
    result[poles:, poles:] = vt[1:].T
    return result
