"""Which values in doubles are trusted, and how many of the others are computed exactly."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Relative error bound up to which values in doubles are taken as they are.
TRUSTED = 1e-12
#: Predicted operations of one exact value: by itself, for each section's state, for each coefficient, for each residue.
POINT_OPERATIONS, SECTION_OPERATIONS, COEFFICIENT_OPERATIONS, RESIDUE_OPERATIONS = 3e4, 3e3, 3e2, 4e3
#: Predicted operations (about nanoseconds) that one evaluation may spend on exact values.
POINT_BUDGET = 5e8


def corrected(
    values: ComplexArray,
    bound: Array,
    points: ComplexArray,
    operations: float,
    exact: Callable[[ComplexArray], ComplexArray],
) -> ComplexArray:
    """Return values in doubles with those that cannot be trusted replaced by exact ones.

    The points with the largest bounds come first; when their number times the predicted operations of a point exceeds
    POINT_BUDGET, the others stay as they are, so that an evaluation takes about a second at most beyond the doubles.

    Parameters
    ----------
    values : complex array [k, ...]
    bound : array [k]
        Relative error bounds; infinite where nothing is known.
    points : complex array [k]
    operations : float
        Predicted operations of one exact value.
    exact : function of points
    """
    doubtful = (bound > TRUSTED) & np.isfinite(points)
    if not doubtful.any():
        return values
    index = np.flatnonzero(doubtful)
    most = max(int(POINT_BUDGET / operations), 1)
    if index.size > most:
        index = index[np.argsort(-bound[index], kind="stable")[:most]]
    result = values.copy()
    result[index] = exact(points[index])
    return result
