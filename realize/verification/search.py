"""Frequencies to look at, and the search for the largest value of an error over them."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.verification.views import Dynamics

Array = NDArray[np.float64]

#: Zeros and poles closer to the axis than this damping ratio get an interval of the same relative width.
LIGHT = 1e-4
PER_DECADE = 12
MOST_SEEDS = 2000
#: The thinner grid of what a proof checks afterwards, and distances beside a root in units of its damping.
FEW_PER_DECADE = 8
_BESIDE = (0.3, 1.0, 3.0)
#: Powers of ten in steps of that grid.
_STEPS = 10.0 ** (np.arange(100 * FEW_PER_DECADE) / FEW_PER_DECADE)
#: Lists of roots up to this length are gone through one by one.
FEW_ROOTS = 24


@dataclass(frozen=True)
class Band:
    """A range of angular frequencies (rad/s), with zero included or not, and intervals left out."""

    low: float
    high: float
    zero: bool = False
    left_out: tuple[tuple[float, float], ...] = ()

    def contains(self, w: Array) -> NDArray[np.bool_]:
        """Return which frequencies are inside and not left out."""
        inside = (w >= self.low) & (w <= self.high)
        if self.zero:
            inside |= w == 0
        for low, high in self.left_out:
            inside &= ~((w > low) & (w < high))
        return inside

    def holds(self, w: float) -> bool:
        """Return whether one frequency is inside and not left out."""
        inside = self.low <= w <= self.high or (self.zero and w == 0)
        return inside and not any(low < w < high for low, high in self.left_out)

    def keep(self, w: Array) -> Array:
        """Return the frequencies that are inside and not left out."""
        return w[self.contains(w)]

    @property
    def edges(self) -> list[float]:
        """The ends, and the ends of what is left out."""
        return [self.low, self.high, *(end for pair in self.left_out for end in pair)]


def dynamic_band(zeros: Dynamics, poles: Dynamics, period: float | None, finite_at_zero: bool) -> Band:
    """Return 1/10 of the smallest to 10 times the largest nonzero |pole| or |zero|; about 1 rad/s without any."""
    sizes = [size for roots in (zeros, poles) for size in roots.frequency.tolist() if 0 < size < math.inf]
    top = math.pi / period if period is not None else math.inf
    if not sizes:
        middle = 1.0 if period is None else 0.1 * top
        low, high = middle / 10, min(10 * middle, top)
    else:
        low, high = min(sizes) / 10, min(max(sizes) * 10, top)
        low = min(low, high / 10)
    return Band(max(low, 1e-300), min(high, 1e300), finite_at_zero, axis_intervals(poles))


def axis_intervals(poles: Dynamics) -> tuple[tuple[float, float], ...]:
    """Return the intervals around poles on the axis, of relative half-width `LIGHT`."""
    if not poles.on_axis.any():
        return ()
    frequencies = np.unique(np.abs(poles.s[poles.on_axis].imag))
    return tuple((w * (1 - LIGHT), w * (1 + LIGHT)) for w in frequencies.tolist() if w > 0)


def seeds(band: Band, *lists: Dynamics) -> Array:
    """Return a grid over the band with every known pole and zero in it, and points beside the lightly damped ones."""
    decades = max(np.log10(band.high) - np.log10(band.low), 0.1)
    count = int(np.clip(PER_DECADE * decades, 25, 600))
    parts = [10.0 ** np.linspace(np.log10(band.low), np.log10(band.high), count), np.array([band.low, band.high])]
    for roots in lists:
        size, damping = roots.frequency, roots.damping
        usable = (size > 0) & np.isfinite(size)
        size, damping = size[usable], np.maximum(damping[usable], 1e-15)
        natural = np.abs(roots.s.imag[usable])
        spread = np.minimum(damping, 0.3)
        parts += [size, natural[natural > 0]]
        if size.size * 8 <= MOST_SEEDS * 4:
            for step in (0.3, 1.0, 3.0):
                parts += [size * (1 + step * spread), size / (1 + step * spread)]
            parts += [size * (1 + LIGHT), size * (1 - LIGHT)]
    for low, high in band.left_out:
        parts.append(np.array([low, high]))
    w = np.unique(np.concatenate(parts + ([np.zeros(1)] if band.zero else [])))
    return band.keep(w)


def few_seeds(band: Band, *lists: Dynamics) -> Array:
    """Return a thinner grid than `seeds`, rising, with the ends of what is left out: for what a proof checks."""
    decades = math.log10(band.high) - math.log10(band.low)
    ends = [0.0, band.low, band.high, *(end for pair in band.left_out for end in pair)]
    count = math.ceil(FEW_PER_DECADE * decades)
    if count <= _STEPS.size:
        parts = [band.low * _STEPS[1:count]]
    else:
        parts = [np.exp(np.linspace(math.log(band.low), math.log(band.high), count)[1:-1])]
    for roots in lists:
        if 0 < roots.s.size <= FEW_ROOTS:
            ends += _beside(roots)
        elif roots.s.size:
            size = roots.frequency
            spread = 1 + np.minimum(roots.damping, 0.3) * np.array(_BESIDE)[:, None]
            parts += [size, (size * spread).reshape(-1), (size / spread).reshape(-1), np.abs(roots.s.imag)]
    w = np.concatenate([*parts, ends])
    w.sort()
    keep = np.isfinite(w)
    keep[1:] &= w[1:] > w[:-1]
    return w[keep]


def _beside(roots: Dynamics) -> list[float]:
    """Return the same places for a short list, each pair and each repeated root once."""
    places = []
    for root, size in dict(zip(roots.s.tolist(), roots.frequency.tolist(), strict=True)).items():
        if root.imag < 0 or not size:
            continue
        spread = min(abs(root.real) / size, 0.3)
        places += [size, root.imag]
        if spread:
            for step in _BESIDE:
                places += [size * (1 + step * spread), size / (1 + step * spread)]
    return places


def summits(w: Array, values: Array, band: Band, most: int = 3) -> list[float]:
    """Return frequencies near the highest maxima of samples: samples, and vertices of parabolas through them."""
    if values.size == 0:
        return []
    padded = np.concatenate([[-np.inf], values, [-np.inf]])
    peaks = np.flatnonzero((values >= padded[:-2]) & (values >= padded[2:]))
    peaks = peaks[np.argsort(-values[peaks], kind="stable")][:most]
    top = float(values[peaks[0]])
    found = []
    for k in peaks.tolist():
        if values[k] < 0.9 * top:
            break
        found.append(float(w[k]))
        if 0 < k < w.size - 1 and w[k - 1] > 0:
            place = vertex(w[k - 1 : k + 2].tolist(), values[k - 1 : k + 2].tolist())
            if place is not None and band.holds(place):
                found.append(place)
    return found


def vertex(w: list[float], values: list[float]) -> float | None:
    """Return the vertex of the parabola through three samples over log w, within them; None without a maximum."""
    before, after = math.log(w[0] / w[1]), math.log(w[2] / w[1])
    left, right = (values[1] - values[0]) / -before, (values[2] - values[1]) / after
    if not math.isfinite(left + right) or left <= right:
        return None
    return w[1] * math.exp(min(max((after * left - before * right) / (2 * (left - right)), before), after))


#: Relative distances at which neighbours are looked at, one after the other.
REACHES = (0.03, 0.004)


def sharpened(error: Callable[[float], float], found: tuple[float, float], band: Band) -> tuple[float, float]:
    """Return (value, frequency) moved to the vertex of a parabola through its neighbours, twice."""
    for reach in REACHES:
        value, place = found
        around = [place * (1 - reach), place, place * (1 + reach)]
        if place <= 0 or not math.isfinite(value) or not all(band.holds(x) for x in around):
            return found
        values = [error(around[0]), value, error(around[2])]
        moved = vertex(around, values)
        found = max(found, (values[0], around[0]), (values[2], around[2]))
        if moved is not None and band.holds(moved):
            found = max(found, (error(moved), moved))
    return found


def largest(
    error: Callable[[Array], Array], w: Array, band: Band, rounds: int = 3, values: Array | None = None
) -> tuple[float, float]:
    """Return the largest value found and its frequency: a grid, then zooming in on the highest local maxima.

    Parameters
    ----------
    values : [k] float, optional
        The error at w, where it is known already.
    """
    values = np.asarray(error(w) if values is None else values, dtype=float)
    if values.size == 0:
        return 0.0, 0.0
    if np.isnan(values).any():
        k = int(np.flatnonzero(np.isnan(values))[0])
        return np.inf, float(w[k])
    best = int(np.argmax(values))
    found, where = float(values[best]), float(w[best])
    if not np.isfinite(found) or w.size < 3:
        return found, where
    padded = np.concatenate([[-np.inf], values, [-np.inf]])
    peaks = np.flatnonzero((values >= padded[:-2]) & (values >= padded[2:]) & (values > 0.2 * found))
    peaks = peaks[np.argsort(-values[peaks], kind="stable")][:5]
    ends = w.tolist()
    spans = [(ends[max(k - 1, 0)], ends[min(k + 1, w.size - 1)]) for k in peaks.tolist()]
    for _ in range(rounds):
        if not spans:
            break
        grids = [np.linspace(low, high, 11)[1:-1] for low, high in spans]
        points = np.concatenate(grids)
        inside = band.contains(points)
        new = np.full(points.size, -1.0)
        if inside.any():
            new[inside] = error(points[inside])
        top = int(np.argmax(new))
        if new[top] > found:
            found, where = float(new[top]), float(points[top])
        spans = []
        start = 0
        for grid in grids:
            part = new[start : start + grid.size]
            start += grid.size
            k = int(np.argmax(part))
            step = grid[1] - grid[0]
            if part[k] > 0.5 * found:
                spans.append((float(grid[k] - step), float(grid[k] + step)))
    return found, where
