"""The fitting problem in numbers near 1: what every method of this package works on."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.fitting.structure import Inside
from realize.kernels.additions import best_additions
from realize.kernels.structured_basis import Known
from realize.kernels.structured_fit import Task, structured_additions, structured_polish, structured_relocation
from realize.kernels.structured_solution import Solution, structured_solution
from realize.kernels.variable_projection import polished
from realize.kernels.vector_fitting import (
    real_basis,
    relocated,
    residues_of,
    separated_poles,
    vector_fit,
    weighted_cost,
)

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Relative misfit below which a fit reproduces the data: rounding of basis, residues and sum (some hundred roundings).
ROUNDING = 2.0**-44
#: Poles beyond so many times the highest line are far above it.
FAR = 10.0


@dataclass(frozen=True, eq=False)
class Problem:
    """Responses at points of the s plane, scaled by powers of two.

    Parameters
    ----------
    points : [k] complex
        s = jx with x near 1, increasing; sampled data are mapped there by s = c (z - 1)/(z + 1).
    values : [k][channels] complex
        Each channel at most 1.
    weights : [k][channels] float
        1/deviation, up to one common factor where ``known`` is false.
    known : bool
        Whether the deviations are known with their size.
    estimated : bool
        Whether the shape of the deviations was estimated from the data, so that it may be estimated again from a fit.
    direct : bool
        Whether the model has a direct term.
    vanish : float
        Where a model without direct term is zero: infinity, or c for sampled data (z = infinity).
    structure : Inside, optional
        What the model must keep beyond that: poles of this problem are then the free ones, and ``direct`` and
        ``vanish`` do not count.
    outputs : int
        Rows of the matrix that the channels are, row by row.
    trust : [k][channels] float, optional
        By what the weights of single lines were lowered, at most 1.
    """

    points: ComplexArray
    values: ComplexArray
    weights: Array
    known: bool
    estimated: bool
    direct: bool
    vanish: float
    structure: Inside | None = None
    outputs: int = 1
    trust: Array | None = None

    @property
    def x(self) -> Array:
        """Scaled frequency."""
        return self.points.imag

    @property
    def channels(self) -> int:
        return self.values.shape[1]

    @property
    def numbers(self) -> int:
        """Real numbers in the data: two a line and channel that is not all zero, one at frequency 0."""
        return self.active * int(2 * self.points.size - np.sum(self.x == 0))

    @property
    def real(self) -> NDArray[np.bool_]:
        """Lines that are real."""
        return np.asarray(self.points == 0)

    @property
    def parts(self) -> int:
        """Real numbers in one value."""
        return 2

    @property
    def active(self) -> int:
        """Channels that are not all zero."""
        return int(np.sum(np.any(self.values != 0, axis=0)))

    @property
    def given(self) -> int:
        """Poles that are fixed, beside the free ones that orders of this problem count."""
        return 0 if self.structure is None else self.structure.known.poles.size

    @property
    def fewest(self) -> int:
        """Fewest free poles that leave room for the structure."""
        return 0 if self.structure is None else self.structure.known.fewest

    def coefficients(self, order: int) -> int:
        """Real coefficients of a channel with so many free poles, those that equations fix left out."""
        if self.structure is None:
            return order + int(self.direct)
        return self.structure.known.columns(order) - int(self.structure.gain is not None)

    def unknowns(self, order: int) -> int:
        """Real unknowns of a model: free poles, and coefficients of the channels that are not all zero."""
        return order + self.active * self.coefficients(order)

    def lean_unknowns(self, order: int) -> int:
        """Real unknowns where every residue has rank one: outputs + inputs numbers for each pole."""
        inputs = self.channels // self.outputs
        if min(self.outputs, inputs) == 1 or self.structure is not None:
            return self.unknowns(order)
        return min(self.unknowns(order), order * (self.outputs + inputs) + self.active * int(self.direct))

    @property
    def largest_order(self) -> int:
        """Largest number of free poles with no more unknowns than numbers in the data."""
        rest = self.numbers - self.active * self.coefficients(0)
        return max(0, rest // (self.active + 1))

    @property
    def total(self) -> float:
        """Weighted sum of squares of the data."""
        return weighted_cost(self.values, self.weights)

    @property
    def floor(self) -> float:
        """Cost below which the data are reproduced to rounding."""
        return ROUNDING**2 * self.total

    def band(self) -> tuple[float, float]:
        """Lowest positive and highest frequency."""
        positive = self.x[self.x > 0]
        return float(positive[0]), float(positive[-1])

    def structured(self) -> Problem:
        """Return the same problem with its direct term, or the lack of one, as a structure."""
        if self.structure is not None:
            return self
        nothing = np.zeros(0, complex)
        zeros = np.array([complex(self.vanish)]) if np.isfinite(self.vanish) and not self.direct else nothing
        excess = int(not self.direct and not np.isfinite(self.vanish))
        return replace(self, structure=Inside(Known(nothing, zeros, excess)))

    def task(self) -> Task:
        """The problem as the kernels of structured fits take it."""
        assert self.structure is not None
        nothing = np.zeros((self.channels, 0))
        kept = self.structure
        return Task(self.points, self.values, self.weights, kept.known, kept.gain, nothing, kept.stable)

    def misfit(self, poles: ComplexArray) -> ComplexArray:
        """Fitted minus given values with the best residues for these poles."""
        return self.solved(poles).misfit

    def solved(self, poles: ComplexArray) -> Solution:
        """Return the best function with these free poles, fixed ones put in."""
        if self.structure is not None:
            return structured_solution(self.task(), poles)
        residues, direct, misfit = residues_of(self.points, poles, self.values, self.weights, self.direct, self.vanish)
        return Solution(poles, np.ones(poles.size, dtype=np.int64), residues, direct, misfit)

    def polished(self, poles: ComplexArray, iterations: int, tolerance: float) -> tuple[ComplexArray, float]:
        """Return free poles of no higher cost by variable projection, and that cost."""
        if self.structure is not None:
            better, _, cost = structured_polish(self.task(), poles, np.zeros(0), iterations, tolerance)
            return better, cost
        return polished(self.points, poles, self.values, self.weights, self.direct, self.vanish, iterations, tolerance)

    def relocated(self, poles: ComplexArray, iterations: int) -> tuple[ComplexArray, float]:
        """Return the best poles of vector fitting from a start, and their cost."""
        if self.structure is not None:
            return structured_relocation(self.task(), poles, iterations)
        return vector_fit(self.points, poles, self.values, self.weights, self.direct, self.vanish, iterations)

    def additions(self, poles: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
        """Return the pair and the real pole that lower the cost most when they are added."""
        if self.structure is not None:
            return structured_additions(self.task(), poles)
        return best_additions(self.points, poles, self.values, self.weights, self.direct, self.vanish)

    def free_relocation(self, poles: ComplexArray) -> ComplexArray:
        """Return the poles after one relocation that leaves those on the right where they are."""
        beside = None if self.structure is None else self.task().beside
        direct = self.direct if self.structure is None else self.structure.known.excess == 0
        vanish = self.vanish if self.structure is None else np.inf
        return relocated(self.points, poles, self.values, self.weights, direct, vanish, False, beside)

    def apart(self, poles: ComplexArray) -> ComplexArray:
        """Return the poles with members that nearly coincide set apart."""
        return separated_poles(poles, self.structure is None or self.structure.stable)

    def rounding(self, poles: ComplexArray) -> float:
        """Return the cost that rounding alone may cause in the sum of partial fractions over these poles.

        (16 eps)^2 sum |weights|^2 (sum_j |residue_j| / |s - pole_j| + |direct|)^2, and what rounding the poles does:
        large where residues cancel, as at nearly repeated poles, and where damping is light. A fit below it cannot be
        improved in this form.
        """
        solved = self.solved(poles)
        poles, residues, direct = solved.poles, solved.residues, solved.direct
        inverse = (1 / np.abs(self.points[:, None] - poles)) ** solved.powers
        # 1/8: the rounding of the poles themselves, 2 eps |pole|, moves a fraction by 2 eps |pole| / |s - pole|
        spread = 1 + 0.125 * np.abs(poles) / np.abs(self.points[:, None] - poles)
        size = (inverse * spread) @ np.abs(residues) + np.abs(direct)
        return max(self.floor, (16 * np.finfo(float).eps) ** 2 * float(np.sum((self.weights * size) ** 2)))

    def unlikelihood(self, misfit: NDArray[Any]) -> float:
        """Return sum |misfit weight|^2: minus the logarithm of the likelihood with circular complex errors 1/weight."""
        return weighted_cost(misfit, self.weights)

    def evaluated(self, poles: ComplexArray, coefficients: Array, direct: Array) -> ComplexArray:
        """Return the misfit of given coefficients of the real basis [n][channels] and direct terms."""
        basis = real_basis(self.points, poles, np.inf if self.direct else self.vanish)
        misfit: ComplexArray = basis @ coefficients - self.values
        return misfit + direct if self.direct else misfit

    def margin(self, poles: ComplexArray) -> Array:
        """Return the distance of poles from the border of stability, positive inside."""
        return -poles.real

    def far(self, poles: ComplexArray) -> NDArray[np.bool_]:
        """Return which poles lie far above the lines, where residues trade off with the direct term."""
        return np.asarray(np.abs(poles) > FAR * np.max(np.abs(self.points)))

    def criterion(self, order: int, cost: float) -> float:
        """Bayesian information criterion of a fit (Schwarz 1978), complex data counted as two numbers a line.

        Known deviations: 2 sum |misfit/deviation|^2 + unknowns ln N. Unknown size of the noise: N ln(cost/N)
        + unknowns ln N. A cost below rounding counts as rounding. Unknowns are those of residues of rank one; what full
        residues have beyond them costs 2 each, the misfit that they take off by chance and as much again (Akaike 1974).
        """
        count = self.numbers
        lean = self.lean_unknowns(order)
        penalty = lean * np.log(max(count, 2)) + 2 * (self.unknowns(order) - lean)
        cost = max(cost, self.floor, np.finfo(float).tiny)
        return float(2 * cost + penalty) if self.known else float(count * np.log(cost / count) + penalty)

    def with_weights(self, weights: Array) -> Problem:
        return replace(self, weights=weights)

    def with_direct(self, direct: bool) -> Problem:
        return replace(self, direct=direct)
