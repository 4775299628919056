"""Poles from the column space of shifted responses, polished to maximum likelihood."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np
from numpy.typing import NDArray

from realize.fitting.ho_kalman import fit_by_shift_invariance
from realize.fitting.problem import Problem
from realize.fitting.proposed import search_with
from realize.fitting.registry import Method, register
from realize.kernels.frequency_subspace import observable_space, subspace_poles

ComplexArray = NDArray[np.complex128]

#: Shifts: this many times the largest order, shared by the channels, and at least FEWEST.
SHIFTS, FEWEST = 3, 8


def proposer(problem: Problem, highest: int) -> Callable[[int], list[ComplexArray]]:
    """Return the function from an order to the poles of the subspace method, with one decomposition for all orders."""
    low, high = problem.band()
    highest += problem.given
    alive = np.any(problem.values != 0, axis=0)
    channels = max(int(np.sum(alive)), 1)
    rows = max(SHIFTS * (highest + 1) // channels + 2, FEWEST)
    # one shift takes one real number of each line
    rows = min(rows, max((2 * problem.points.size) // (1 + channels), 2))
    space = observable_space(
        problem.x, problem.values[:, alive], problem.weights[:, alive], rows, float(np.sqrt(low) * np.sqrt(high))
    )
    most = min(space.values.size, (space.vectors.shape[0] - 1) * channels)

    def propose(order: int) -> list[ComplexArray]:
        count = min(order + problem.given, most)
        return [subspace_poles(space, count)] if count > 0 else []

    return propose


SUBSPACE = register(
    Method(
        name="subspace",
        says="poles from the column space of shifted responses, polished to maximum likelihood",
        source="McKelvey, Akcay & Ljung 1996; Van Overschee & De Moor 1996; of impulse responses Kung 1978",
        fit=partial(search_with, proposer),
        fit_samples=fit_by_shift_invariance,
    )
)
