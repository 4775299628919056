"""The fitting problem in numbers near 1: what every method of this package works on."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from realize.kernels.vector_fitting import residues_of, weighted_cost

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Relative misfit below which a fit reproduces the data: rounding of basis, residues and sum (some hundred roundings).
ROUNDING = 2.0**-44


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
    """

    points: ComplexArray
    values: ComplexArray
    weights: Array
    known: bool
    estimated: bool
    direct: bool
    vanish: float

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
        active = int(np.sum(np.any(self.values != 0, axis=0)))
        return active * int(2 * self.points.size - np.sum(self.x == 0))

    def unknowns(self, order: int) -> int:
        """Real unknowns of a model: poles, residues and direct terms of the channels that are not all zero."""
        active = int(np.sum(np.any(self.values != 0, axis=0)))
        return order + active * (order + int(self.direct))

    @property
    def largest_order(self) -> int:
        """Largest order with no more unknowns than numbers in the data."""
        active = int(np.sum(np.any(self.values != 0, axis=0)))
        return max(0, (self.numbers - active * int(self.direct)) // (active + 1))

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

    def misfit(self, poles: ComplexArray) -> ComplexArray:
        """Fitted minus given values with the best residues for these poles."""
        return residues_of(self.points, poles, self.values, self.weights, self.direct, self.vanish)[2]

    def rounding(self, poles: ComplexArray) -> float:
        """Return the cost that rounding alone may cause in the sum of partial fractions over these poles.

        (16 eps)^2 sum |weights|^2 (sum_j |residue_j| / |s - pole_j| + |direct|)^2, and what rounding the poles does:
        large where residues cancel, as at nearly repeated poles, and where damping is light. A fit below it cannot be
        improved in this form.
        """
        residues, direct, _ = residues_of(self.points, poles, self.values, self.weights, self.direct, self.vanish)
        inverse = 1 / np.abs(self.points[:, None] - poles)
        # 1/8: the rounding of the poles themselves, 2 eps |pole|, moves a fraction by 2 eps |pole| / |s - pole|
        size = (inverse * (1 + 0.125 * np.abs(poles) * inverse)) @ np.abs(residues) + np.abs(direct)
        return max(self.floor, (16 * np.finfo(float).eps) ** 2 * float(np.sum((self.weights * size) ** 2)))

    def criterion(self, order: int, cost: float) -> float:
        """Bayesian information criterion of a fit (Schwarz 1978), complex data counted as two numbers a line.

        Known deviations: 2 sum |misfit/deviation|^2 + unknowns ln N. Unknown size of the noise: N ln(cost/N)
        + unknowns ln N. A cost below rounding counts as rounding.
        """
        count = self.numbers
        penalty = self.unknowns(order) * np.log(max(count, 2))
        cost = max(cost, self.floor, np.finfo(float).tiny)
        return float(2 * cost + penalty) if self.known else float(count * np.log(cost / count) + penalty)

    def with_weights(self, weights: Array) -> Problem:
        return replace(self, weights=weights)

    def with_direct(self, direct: bool) -> Problem:
        return replace(self, direct=direct)
