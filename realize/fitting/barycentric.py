"""Poles of AAA approximations with conjugate symmetry, polished to maximum likelihood."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np
from numpy.typing import NDArray

from realize.fitting.problem import Problem
from realize.fitting.proposed import search_with
from realize.fitting.registry import Method, register
from realize.kernels.barycentric import approximations, poles_of_barycentric

ComplexArray = NDArray[np.complex128]

#: Degrees beyond the order whose poles are offered as well: AAA places spurious pairs in noise, which the clean-up
#: removes by their contribution, and the right poles are then those of a larger degree.
BEYOND = 6


def proposer(problem: Problem, highest: int) -> Callable[[int], list[ComplexArray]]:
    """Return the function from an order to the poles of the approximations of that degree and a few more."""
    alive = np.any(problem.values != 0, axis=0)
    found: dict[int, ComplexArray] = {}
    most = highest + problem.given + BEYOND
    for function in approximations(problem.x, problem.values[:, alive], problem.weights[:, alive], most):
        found[function.degree] = poles_of_barycentric(function)

    def propose(order: int) -> list[ComplexArray]:
        wanted = order + problem.given
        degrees = sorted(n for n in found if wanted <= n <= wanted + BEYOND)
        return [found[n] for n in (degrees[:1] + degrees[-1:] if len(degrees) > 1 else degrees)]

    return propose


BARYCENTRIC = register(
    Method(
        name="barycentric",
        says="poles of the AAA algorithm with conjugate symmetry, cleaned up and polished to maximum likelihood",
        source="Nakatsukasa, Sete & Trefethen 2018; Lietaert, Meerbergen, Perez & Vandereycken 2022",
        fit=partial(search_with, proposer),
    )
)
