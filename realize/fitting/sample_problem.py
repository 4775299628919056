"""The fitting problem of an impulse response: samples near 1 that a sum of decaying exponentials is fitted to."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from realize.fitting.noise import unpredicted
from realize.fitting.problem import ROUNDING
from realize.kernels.exponentials import coefficients_of, polished, to_circle, to_plane
from realize.kernels.vector_fitting import separated_poles

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Median of |x| for normal x of deviation 1.
MEDIAN = 0.6744897501960817
#: Fewer samples than this tell nothing about noise by their neighbours.
FEWEST = 24


@dataclass(frozen=True, eq=False)
class SampleProblem:
    """Samples h[0], h[1], ... of several channels, h[k] = sum_j residues_j poles_j^k, |poles| < 1.

    Parameters
    ----------
    samples : [k][outputs][inputs] float
        Each channel at most 1.
    weights : [k][outputs inputs] float
        1/deviation, up to one common factor where ``known`` is false.
    known : bool
        Whether the deviations are known with their size.
    """

    samples: Array
    weights: Array
    known: bool

    @property
    def flat(self) -> Array:
        """Samples [k][channels]."""
        return self.samples.reshape(self.samples.shape[0], self.weights.shape[1])

    @property
    def active(self) -> int:
        """Number of channels that are not all zero."""
        return int(np.sum(np.any(self.flat != 0, axis=0)))

    @property
    def numbers(self) -> int:
        """Real numbers in the data."""
        return self.active * self.samples.shape[0]

    def unknowns(self, order: int) -> int:
        """Real unknowns of a model: poles, and residues of the channels that are not all zero."""
        return order + self.active * order

    @property
    def largest_order(self) -> int:
        """Largest order with no more unknowns than numbers, and that the Hankel matrix can show."""
        rows = self.samples.shape[0] // 2
        return min(self.numbers // (self.active + 1), rows * self.active) if self.active else 0

    @property
    def total(self) -> float:
        """Weighted sum of squares of the data."""
        return float(np.sum((self.weights * self.flat) ** 2))

    @property
    def floor(self) -> float:
        """Cost below which the data are reproduced to rounding."""
        return ROUNDING**2 * self.total

    def misfit(self, poles: ComplexArray) -> Array:
        """Fitted minus given samples with the best residues for these poles."""
        return coefficients_of(poles, self.flat, self.weights)[1]

    def cost(self, poles: ComplexArray) -> float:
        return float(np.sum((self.weights * self.misfit(poles)) ** 2))

    def polish(self, poles: ComplexArray, iterations: int, tolerance: float) -> tuple[ComplexArray, float]:
        """Return better poles, set apart where they coincide, and their cost."""
        better, cost = polished(poles, self.flat, self.weights, iterations, tolerance)
        apart = to_circle(separated_poles(to_plane(better)))
        return (better, cost) if np.array_equal(apart, better) else (apart, self.cost(apart))

    def criterion(self, order: int, cost: float) -> float:
        """Bayesian information criterion (Schwarz 1978): cost + unknowns ln N, or N ln(cost/N) + unknowns ln N."""
        count = self.numbers
        penalty = self.unknowns(order) * np.log(max(count, 2))
        cost = max(cost, self.floor, np.finfo(float).tiny)
        return float(cost + penalty) if self.known else float(count * np.log(cost / count) + penalty)

    def scatter(self, misfit: Array) -> Array:
        """Return the deviation of each channel's noise in a misfit: what neighbouring samples do not predict.

        The median is robust; with few samples the root mean square of the misfit itself.
        """
        count = misfit.shape[0]
        if count < FEWEST:
            return np.sqrt(np.mean(misfit**2, axis=0))
        missed = np.abs(unpredicted(np.arange(count, dtype=float), misfit.astype(complex)))
        return np.asarray(np.median(missed, axis=0) / MEDIAN)

    def with_weights(self, weights: Array) -> SampleProblem:
        return replace(self, weights=weights)
