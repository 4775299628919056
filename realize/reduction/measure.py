"""Errors of many reduced models against one source: the source's response is computed once."""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from realize.errors import Refused
from realize.kernels.balancing import balanced_part
from realize.kernels.norms import gains, pole_frequencies, response_evaluator
from realize.kernels.residualisation import steady_state_gain
from realize.kernels.schur_response import SHARE, thinned
from realize.reduction.prepare import Prepared
from realize.reduction.result import Projected

Array = NDArray[np.float64]

#: Beyond this order of the source fewer frequencies are looked at.
FULL = 300
#: Most frequencies looked at up to that order, and beyond it.
MANY, FEW = 1500, 500
#: Frequencies spread over a band, its own poles aside.
SPREAD = 200


class Meter:
    """The largest gain of the difference to the stable part, over all frequencies or a band: the largest value found.

    The balanced minimal part stands for the stable part where it is smaller: they differ by rounding only.

    Parameters
    ----------
    prepared : Prepared
    band : (low, high) or None
        In the model's own unit of frequency (rad/s, sampled rad per sample).
    whole_model : bool
        Against the whole model in its scaled units, unstable part included; poles on the axis are kept away from.
    """

    def __init__(
        self, prepared: Prepared, band: tuple[float, float] | None = None, *, whole_model: bool = False
    ) -> None:
        self._sampled = prepared.sampled
        self._prepared = prepared
        self._whole = whole_model
        model = prepared.split.stable
        if whole_model:
            model = prepared.scaled.A, prepared.scaled.B, prepared.scaled.C
        elif 0 < prepared.available < min(prepared.stable_order, FULL):
            part = balanced_part(prepared.factors, prepared.available)
            model = part.A, part.B, part.C
        self.order = model[0].shape[0]
        self._band = band
        none = np.zeros(prepared.D.shape)
        self._model = *model, none
        self._ends = band is None and not prepared.sampled

    @cached_property
    def _direct(self) -> Array:
        with np.errstate(over="ignore"):
            direct = np.ldexp(self._prepared.D, -self._prepared.scaled.gain)
        if not np.all(np.isfinite(direct)):
            raise Refused("the feed-through is too large beside the rest of the response; ask for an absolute error")
        return direct

    @cached_property
    def _reference(self) -> Callable[[NDArray[np.complex128]], NDArray[np.complex128]]:
        return response_evaluator(*self._model)

    @cached_property
    def _values(self) -> NDArray[np.complex128]:
        return self._reference(self._points(self._seeds))

    @cached_property
    def _seeds(self) -> Array:
        poles = np.linalg.eigvals(self._model[0]).astype(complex) if self.order else np.zeros(0, dtype=complex)
        self._poles = poles
        seeds = pole_frequencies(poles, sampled=self._sampled)
        if self._band is not None:
            low, high = (math.ldexp(edge, -self._prepared.scaled.time) for edge in self._band)
            if self._sampled:
                high = min(high, math.pi)
            start = max(low, high * 1e-6)
            inside = seeds[(seeds > low) & (seeds < high)]
            seeds = np.unique(np.concatenate([[low, high], inside, np.geomspace(start, high, SPREAD)]))
        most = MANY if self.order <= FULL else FEW
        if self.order:
            seeds = thinned(seeds, self._points(seeds), poles, SHARE / 4)
        if seeds.size > most:
            seeds = seeds[np.unique(np.linspace(0, seeds.size - 1, most).astype(int))]
        return self._away_from_axis_poles(seeds) if self._whole else seeds

    def _away_from_axis_poles(self, seeds: Array) -> Array:
        split = self._prepared.split
        poles = split.kept_poles[split.marginal]
        if self._sampled:
            places = np.abs(np.angle(poles))
            return np.asarray(seeds[np.all(np.abs(seeds[:, None] - places[None, :]) > 1e-4, axis=1)], dtype=float)
        places = np.abs(poles.imag)
        others = np.abs(np.concatenate([self._poles, split.kept_poles]))
        least = float(others[others > 0].min(initial=np.inf))
        low = (least / 10 if np.isfinite(least) else 0.0) if np.any(np.abs(poles) == 0) else 0.0
        keep = (seeds >= low) & np.all(np.abs(seeds[:, None] - places[None, :]) > 1e-4 * places[None, :], axis=1)
        return np.asarray(seeds[keep & ((seeds > 0) | (low == 0))], dtype=float)

    def _points(self, frequencies: Array) -> NDArray[np.complex128]:
        return np.asarray(np.exp(1j * frequencies) if self._sampled else 1j * frequencies, dtype=complex)

    def error(self, part: Projected, *, rounds: int = 4) -> float:
        """Return the largest gain found of the difference to a reduced part (scaled unit).

        Parameters
        ----------
        part : Projected
        rounds : int
            Zooms into the highest maxima, each four times closer.
        """
        own = response_evaluator(part.A, part.B, part.C, part.D_change)

        def difference(frequencies: Array) -> Array:
            points = self._points(frequencies)
            return gains(self._reference(points) - own(points))

        sample = gains(self._values - own(self._points(self._seeds)))
        value = self._zoomed(difference, sample, rounds)
        if self._ends:
            value = max(value, float(gains(part.D_change[None].astype(complex))[0]))
        return value

    def largest(self) -> float:
        """Return the largest gain found of the stable part with its feed-through (scaled unit)."""

        def size(frequencies: Array) -> Array:
            return gains(self._reference(self._points(frequencies)) + self._direct)

        return self._zoomed(size, gains(self._values + self._direct), 6)

    def _zoomed(self, size: object, sample: Array, rounds: int) -> float:
        assert callable(size)
        w = self._seeds
        value = float(sample.max(initial=0.0))
        if w.size < 3 or not math.isfinite(value):
            return value
        padded = np.concatenate([[-np.inf], sample, [-np.inf]])
        tops = np.flatnonzero((padded[1:-1] >= padded[:-2]) & (padded[1:-1] >= padded[2:]))
        tops = tops[np.argsort(-sample[tops], kind="stable")][:3]
        low, high = w[np.maximum(tops - 1, 0)], w[np.minimum(tops + 1, w.size - 1)]
        rows = np.arange(tops.size)
        for _ in range(rounds):
            grid = low[:, None] + (high - low)[:, None] * np.linspace(0, 1, 9)[None, :]
            found = np.asarray(size(grid.ravel())).reshape(grid.shape)
            at = np.argmax(found, axis=1)
            value = max(value, float(found.max()))
            low, high = grid[rows, np.maximum(at - 1, 0)], grid[rows, np.minimum(at + 1, 8)]
        return value

    def steady_state(self, part: Projected) -> Array:
        """Return what a reduced part lacks at zero frequency (scaled unit)."""
        scaled = self._prepared.scaled
        model = self._prepared.split.stable
        if self._whole or self._prepared.kept_order == 0:
            # the matrices as they were given are nearest to the truth
            model = scaled.A, scaled.B, scaled.C
        full = steady_state_gain(*model, np.zeros(part.D_change.shape), sampled=self._sampled)
        return full - steady_state_gain(part.A, part.B, part.C, part.D_change, sampled=self._sampled)
