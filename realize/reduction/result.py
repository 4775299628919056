"""What a reduction returns."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.kernels.schur_response import Basis

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Projected:
    """The reduced stable part in the scaled units of `Prepared`: matrices, and projections from the stable block."""

    A: Array
    B: Array
    C: Array
    D_change: Array
    W: Array
    V: Array


@dataclass(frozen=True)
class Candidate:
    """One order that could be chosen: bound on the largest gain of the difference, and the largest found (absolute).

    None: the method has no bound; the error was not looked for, because the source is large and the order was not
    chosen by errors.
    """

    order: int
    bound: float | None
    error: float | None = None


@dataclass(frozen=True)
class Reduction:
    """A reduced model and what is known about its error.

    Attributes
    ----------
    A, B, C, D : arrays
        The reduced model: stable states first, then the kept unstable and marginal ones.
    method : str
    order : int
        States of the reduced model, kept ones included.
    kept_order : int
        How many of them belong to unstable poles and poles on the axis, kept as they are.
    kept_poles : complex array
    hankel_singular_values, hankel_errors : arrays
        Of the stable part, decreasing, in the unit of the gain; estimated absolute error of each.
    bound : float or None
        The largest gain of the difference is at most this: the theorem's bound plus `rounding` (absolute). None for a
        method without one.
    tail_bound : float or None
        The theorem's bound alone, such as 2 * sum of the distinct values that were cut.
    rounding : float
        What rounding in the values cut and in the projected matrices may add.
    lower_bound : float
        No model of this order has a smaller error: the first Hankel singular value that was cut.
    largest_gain : float or None
        Largest gain of the source's stable part, where it was needed.
    candidates : tuple of Candidate
        Up to twenty orders (kept states included).
    notes : tuple of str
        What was decided on the way: moved cuts, poles kept, orders lowered.
    left, right : arrays
        W (n, order) and V (n, order) with W'V = I: A = W'A_source V and so on (for methods that project).
    separation, coupling : float
        How well stable and kept parts could be told apart; see `realize.kernels.splitting.Split`.
    marginal : int
        How many of the kept poles lie on the boundary of stability.
    algorithm : str
        How it was computed, in words.
    reason : str
        Why this method.
    basis : callable or None
        Invariant bases of the source that were found on the way, for the evaluation of its response.
    """

    A: Array
    B: Array
    C: Array
    D: Array
    method: str
    order: int
    kept_order: int
    kept_poles: NDArray[np.complex128]
    hankel_singular_values: Array
    hankel_errors: Array
    bound: float | None
    tail_bound: float | None
    rounding: float
    lower_bound: float
    largest_gain: float | None
    candidates: tuple[Candidate, ...]
    notes: tuple[str, ...]
    left: Array
    right: Array
    separation: float
    coupling: float
    marginal: int = 0
    algorithm: str = ""
    reason: str = ""
    basis: Callable[[], Basis | None] | None = None
