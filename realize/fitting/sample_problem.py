"""The fitting problem of an impulse response: samples near 1 that a sum of decaying exponentials is fitted to."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.fitting.noise import unpredicted
from realize.fitting.problem import ROUNDING, Problem
from realize.kernels.exponentials import coefficients_of, polished, powers, real_columns, to_circle, to_plane
from realize.kernels.structured_solution import Solution
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
    def channels(self) -> int:
        return self.weights.shape[1]

    @property
    def values(self) -> NDArray[Any]:
        """Samples [k][channels], under the name that values of a frequency response have."""
        return self.flat

    @property
    def points(self) -> NDArray[Any]:
        """Exponents of the poles [k]."""
        return np.arange(float(self.samples.shape[0]))

    @property
    def real(self) -> NDArray[np.bool_]:
        """Samples that are real: all."""
        return np.ones(self.samples.shape[0], dtype=bool)

    @property
    def parts(self) -> int:
        """Real numbers in one value."""
        return 1

    @property
    def direct(self) -> bool:
        """Whether a direct term is among the unknowns: no sample after the first shows it."""
        return False

    @property
    def structure(self) -> None:
        """Nothing is kept but stability."""

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

    def solved(self, poles: ComplexArray) -> Solution:
        """Return the best residues for these poles."""
        residues, missed = coefficients_of(poles, self.flat, self.weights)
        misfit: NDArray[Any] = missed
        return Solution(poles, np.ones(poles.size, dtype=np.int64), residues, np.zeros(residues.shape[1]), misfit)

    def unlikelihood(self, misfit: NDArray[Any]) -> float:
        """Return sum (misfit weight)^2 / 2: minus the logarithm of the likelihood with normal errors 1/weight."""
        return 0.5 * float(np.sum((self.weights * misfit) ** 2))

    def evaluated(self, poles: ComplexArray, coefficients: Array, direct: Array) -> NDArray[Any]:
        """Return the misfit of given coefficients of ``exponentials.real_columns`` [n][channels]."""
        misfit: Array = real_columns(poles, 0, self.samples.shape[0]) @ coefficients - self.flat
        return misfit

    def margin(self, poles: ComplexArray) -> Array:
        """Return the distance of poles from the unit circle, positive inside."""
        return np.asarray(1 - np.abs(poles))

    def far(self, poles: ComplexArray) -> NDArray[np.bool_]:
        """Return which poles trade off with a direct term: none, as none is fitted."""
        return np.zeros(poles.size, dtype=bool)

    def rounding(self, poles: ComplexArray) -> float:
        """Return the part of ``unlikelihood`` that rounding alone may cause in the sum of exponentials.

        As ``Problem.rounding``: (16 eps)^2 sum weights^2 (sum_j |residue_j poles_j^k| (1 + k/8))^2, half of it;
        rounding a pole by 2 eps moves its power by 2 k eps.
        """
        residues, _ = coefficients_of(poles, self.flat, self.weights)
        k = self.points[:, None]
        size = (np.abs(powers(poles, 0, k.size)) * (1 + 0.125 * k)) @ np.abs(residues)
        cost = (16 * np.finfo(float).eps) ** 2 * float(np.sum((self.weights * size) ** 2))
        return 0.5 * max(self.floor, cost)

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


#: What poles, ranks and error bars are found for: lines of a frequency response, or samples of an impulse response.
Measured = Problem | SampleProblem
