"""Poles of the Loewner pencil, polished to maximum likelihood."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np
from numpy.typing import NDArray

from realize.fitting.problem import Problem
from realize.fitting.proposed import search_with
from realize.fitting.registry import Method, register
from realize.fitting.thinning import thinned_to
from realize.kernels.loewner import pencil, pencil_poles

ComplexArray = NDArray[np.complex128]

#: Lines in the pencil: its singular values cost the cube of their number.
MOST_LINES = 320


def proposer(problem: Problem, highest: int) -> Callable[[int], list[ComplexArray]]:
    """Return the function from an order to the finite eigenvalues of the pencil, with one decomposition for all orders.

    Lines are selected where the response changes most, then go to the left and to the right in turn; left samples
    take the channels in turn as directions. Rows and columns carry the weights of their lines.
    """
    few = thinned_to(problem, max(MOST_LINES, 4 * highest))
    low, high = problem.band()
    scale = float(np.sqrt(low) * np.sqrt(high))
    alive = np.any(few.values != 0, axis=0)
    values, weights = few.values[:, alive], few.weights[:, alive]
    level = np.sqrt(np.mean(weights**2, axis=0))
    unit = np.sqrt(np.mean((weights / np.where(level > 0, level, 1.0)) ** 2, axis=1))
    values = values * level
    left, right = slice(0, None, 2), slice(1, None, 2)
    directions = np.eye(values.shape[1])[np.arange(values[left].shape[0]) % values.shape[1]] * unit[left, None]
    samples = np.sum(directions * values[left], axis=1)[:, None]
    across = unit[right, None]
    found = pencil(
        few.points[left],
        directions.astype(complex),
        samples,
        few.points[right],
        across.astype(complex),
        across * values[right],
        scale,
    )
    most = found.values.size

    def propose(order: int) -> list[ComplexArray]:
        # with a direct term the pencil has one eigenvalue more, at infinity
        wanted = order + problem.given
        return [pencil_poles(found, min(count, most), scale) for count in (wanted, wanted + 1) if 0 < count]

    return propose


LOEWNER = register(
    Method(
        name="loewner",
        says="poles of the Loewner pencil of tangential samples, polished to maximum likelihood",
        source="Mayo & Antoulas 2007",
        fit=partial(search_with, proposer),
    )
)
