"""A quick look for the largest error of a pair of models: one thin grid in doubles for all claims.

What it finds is evaluated exactly, and a proof follows that knows whether something larger hides; where the proof finds
that the look missed it, the careful search takes over.
"""

from __future__ import annotations

import math
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from realize.verification.proof import Proof
from realize.verification.quick import Squares
from realize.verification.search import Band, summits

Array = NDArray[np.float64]

#: Bits of the frequencies where exact values are taken: short numbers are quick, and nobody needs a longer place.
PLACE_BITS = 32
#: x = tan^2 of the half angle beyond which a sampled frequency counts as the end of the circle.
_END = 1e12


class Found(NamedTuple):
    """A value, its frequency (rad/s), and places in the proof's variable near which the value is almost as large."""

    value: float
    where: float
    near: tuple[Any, ...] = ()


def short(frequency: float) -> float:
    """Return a frequency rounded to `PLACE_BITS` bits."""
    return rounded(frequency, PLACE_BITS)


def rounded(value: float, bits: int) -> float:
    """Return a double rounded to so many bits."""
    mantissa, exponent = math.frexp(value)
    return math.ldexp(round(math.ldexp(mantissa, bits)), exponent - bits)


class Glance:
    """Squares of error, source and denominators of one proof on one grid.

    Parameters
    ----------
    proof : Proof
    grid : [k] float
        Frequencies to look at, rad/s, over the widest band of all claims.
    edges : list of float
        More of them.
    """

    def __init__(self, proof: Proof, grid: Array, edges: list[float]) -> None:
        from realize.kernels.exact.numbers import nearest

        self.proof = proof
        self.period = None if proof.period is None else float(proof.period)
        self.unit = nearest(proof.unit) if proof.period is None else 1.0
        self.squares = Squares([proof.error_square, proof.source_square, proof.denominator_square, *proof.gain_squares])
        w = np.unique(np.concatenate([grid, np.array(edges)])) if edges else grid
        self.w = w if self.period is None else w[w <= np.pi / self.period]
        self.usable = 1e-290 < self.unit < 1e290
        self.x = self._x(self.w) if self.usable else self.w
        self.usable = self.usable and self.squares.reach(self.x)

    def _x(self, w: Array) -> Array:
        with np.errstate(over="ignore"):
            if self.period is None:
                return np.square(w / self.unit)
            return np.minimum(np.square(np.tan(w * (self.period / 2))), _END)

    @cached_property
    def values(self) -> Array:
        """Error, source, denominators, source's numerators and denominator, squared: [5][k]."""
        with np.errstate(over="ignore", invalid="ignore"):
            return self.squares(self.x)

    def largest(self, band: Band, above: int, below: int) -> list[float] | None:
        """Return the frequencies near the highest maxima of a quotient over a band, highest first; None for no look."""
        inside = band.contains(self.w)
        values = self.squares.root_of_quotient(self.values, above, below)[inside]
        values[np.isnan(values)] = 0.0
        if values.size == 0 or not np.isfinite(values).all():
            return None
        found = np.array(summits(self.w[inside], values, band))
        sizes = self.squares.root_of_quotient(self.squares(self._x(found)), above, below)
        return [float(found[k]) for k in np.argsort(-sizes, kind="stable").tolist()]

    def error(self, band: Band, divisor: float) -> Found | None:
        """Return the largest error found, relative to the source (divisor 0) or to a gain; None for no look."""
        places = self.largest(band, 0, 2 if divisor else 1) if self.usable else None
        if not places:
            return None
        where = self._inside(places[0], band)
        near = {self.proof.place(short(w), up=False) for w in places if w > 0 and (self.period is None)}
        return Found(
            self.proof.value_at(where, divisor or None), where, tuple(sorted(x for x in near if x is not None))
        )

    def gain(self, band: Band) -> tuple[float, float] | None:
        """Return a gain of the source near its largest one, and its frequency."""
        places = self.largest(band, 3, 4) if self.usable else None
        if not places:
            return None
        where = self._inside(places[0], band)
        return self.proof.gain_at(where), where

    @staticmethod
    def _inside(where: float, band: Band) -> float:
        rounded = short(where)
        return rounded if band.holds(rounded) else where
