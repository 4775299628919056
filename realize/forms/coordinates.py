"""What a change of coordinates of a state model gives back."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Coordinates:
    """A state model in new coordinates, the transform there and the way back.

    With the old states x and the new states z: x = T z and z = S x, so A_new = S A T, B_new = S B, C_new = C T.

    Attributes
    ----------
    A, B, C, D : ndarray, shapes (n, n), (n, m), (p, n), (p, m)
    transform : ndarray, shape (n, n)
        T; its columns have the units of the old states.
    back : ndarray, shape (n, n)
        S, the inverse of T, computed by itself and never by inverting the rounded T.
    condition : float
        Spectral condition number of T after the rows were scaled to the sizes of the states (powers of two), so that
        it does not depend on the units.
    details : dict
        What the form says about the plant, ready for JSON: block sizes and what they mean, structure indices,
        separations.
    cautions : tuple of str
    """

    A: Array
    B: Array
    C: Array
    D: Array
    transform: Array
    back: Array
    condition: float
    details: dict[str, Any] = field(default_factory=dict)
    cautions: tuple[str, ...] = ()
