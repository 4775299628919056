"""What a method prepares for one model: the orders there are, their bounds, and the reduced model of each."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from realize.reduction.result import Projected

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Loop:
    """The other half of a loop u = -K y around the model that is reduced, in the model's own units.

    Attributes
    ----------
    A, B, C, D : arrays
        States of the controller, or of the plant when the model that is reduced is the controller.
    controller : bool
        True where these are the states of the controller.
    """

    A: Array
    B: Array
    C: Array
    D: Array
    controller: bool = True


@dataclass(frozen=True)
class Request:
    """What was asked of a reduction, for the methods to see.

    Attributes
    ----------
    order : int or None
    absolute_error, relative_error : float or None
    measured : bool
        The order is chosen by the error found instead of the bound.
    band : (low, high) or None
        Where the error counts: rad/s, sampled models rad per sample.
    keep_steady_state : bool
    keep_states : tuple of int
        States of the model that stay states of the result.
    loop : Loop or None
    """

    order: int | None = None
    absolute_error: float | None = None
    relative_error: float | None = None
    measured: bool = False
    band: tuple[float, float] | None = None
    keep_steady_state: bool = False
    keep_states: tuple[int, ...] = ()
    loop: Loop | None = None

    @property
    def by_bound(self) -> bool:
        """True where the order has to come from a bound."""
        return self.order is None and not self.measured and self.band is None


@dataclass(frozen=True)
class Plan:
    """One method applied to one model: every order it offers.

    Attributes
    ----------
    least : int
        The fewest stable states a result can have.
    available : int
        The most stable states a result can have.
    allowed : (available + 1,) bool array
        Whether a cut after r states is allowed: it divides no group of equal values and no complex pair.
    tails : (available + 1,) array or None
        The theorem's bound for r states (scaled unit); None for a method without one.
    project : callable
        Number of stable states to the reduced stable part.
    rounding : callable
        Number of stable states and reduced part to what rounding may add to the bound (absolute, own unit).
    whole : str
        What a cut must not divide, in words.
    algorithm : callable
        Number of stable states to the words for the receipt on how it was computed.
    sketch : callable or None
        A quicker way to a part with the same response, where there is one.
    objection : callable or None
        Number of stable states and reduced part to the reason why it must not be taken, empty where there is none.
    values : array or None
        Singular values of the method's own, such as weighted Hankel singular values.
    whole_model : bool
        The parts stand for the whole model in its scaled units, not for the stable part.
    """

    available: int
    allowed: NDArray[np.bool_]
    tails: Array | None
    project: Callable[[int], Projected]
    rounding: Callable[[int, Projected], float]
    whole: str
    algorithm: Callable[[int], str]
    least: int = 0
    sketch: Callable[[int], Projected] | None = field(default=None)
    objection: Callable[[int, Projected], str] | None = field(default=None)
    values: Array | None = None
    whole_model: bool = False

    def outline(self, count: int) -> Projected:
        """Return a reduced part for measuring its response."""
        return self.project(count) if self.sketch is None else self.sketch(count)

    def next_cut(self, count: int) -> int:
        """Return the smallest number of states from `count` on that divides nothing."""
        count = max(count, self.least)
        while count < self.available and not self.allowed[count]:
            count += 1
        return min(count, self.available)

    def cuts(self) -> list[int]:
        """Return every number of stable states that a result can have."""
        return [k for k in range(self.least, self.available + 1) if self.allowed[k] or k == self.available]
