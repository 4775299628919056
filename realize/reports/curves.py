"""Frequencies worth drawing, and the responses there."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.models import FrequencyResponse, Model, StateSpace
from realize.reports.roots import Roots, continuous_equivalent

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
Band = tuple[float, float]

#: Points of a grid refined to the last; a page is about 600 dots wide for each channel.
MOST_POINTS = 4000
#: State models beyond this order cost time at every point: fewer points, and no refinement by the response.
REFINED_UP_TO = 48
FEWER_POINTS = 1000


@dataclass(frozen=True)
class Curve:
    """One entry as drawn: label, model, frequencies (rad/s), response without its dead time, and the dead time."""

    label: str
    model: Model
    data: bool
    frequency: Array
    rational: ComplexArray
    dead_time: Array

    @property
    def response(self) -> ComplexArray:
        """Response with dead time, [k][outputs][inputs]."""
        return self.rational * np.exp(-1j * self.frequency[:, None, None] * self.dead_time)


def _is_large(model: Model) -> bool:
    return isinstance(model, StateSpace) and model.A.shape[0] > REFINED_UP_TO


def corner_frequencies(model: Model, roots: Roots) -> Array:
    """Return |pole| and |zero| in rad/s, those at zero left out (sampled: of ln z / T)."""
    with np.errstate(over="ignore"):
        size = np.abs(continuous_equivalent(model, np.concatenate([roots.poles, roots.zeros])))
    return size[(size > 0) & np.isfinite(size)]


def drawing_band(models: Sequence[Model], roots: Sequence[Roots], band: Band | None = None) -> Band:
    """Return the frequencies to draw, rad/s.

    In this order: the band asked for; the band of the data with a tenth of its width on each side (a quarter of an
    octave at the most); from a tenth of the smallest to ten times the largest pole or zero. Sampled models end at
    pi / period.
    """
    ends = [math.pi / model.time.seconds for model in models if model.time.sampled]
    end = max(ends) if len(ends) == len(models) and ends else math.inf
    if band is not None:
        return band
    data = [model.radians[model.radians > 0] for model in models if isinstance(model, FrequencyResponse)]
    data = [values for values in data if values.size]
    if data:
        low, high = min(values[0] for values in data), max(values[-1] for values in data)
        margin = min(2**0.25, (high / low) ** 0.1) if low < high else 4.0
        return low / margin, high * margin
    corners = np.concatenate([corner_frequencies(model, own) for model, own in zip(models, roots, strict=True)])
    if corners.size:
        low, high = float(corners.min()) / 10, float(min(corners.max(), 1e300)) * 10
    elif math.isfinite(end):
        low, high = end / 1000, end
    else:
        low, high = 0.1, 10.0
    high = min(high, end)
    return (low, high) if low < high / 2 else (high / 1000, high)


def drawing_grid(model: Model, roots: Roots, band: Band) -> Array:
    """Return frequencies for one parametric model: logarithmic, denser around each lightly damped pole and zero.

    Near a root with frequency w0 and damping ratio d the offsets are w0 * d * sinh(t), so that a peak of any width gets
    its share of points.
    """
    low, high = band
    if model.time.sampled:
        high = min(high, math.pi / model.time.seconds)
    if not low < high:
        return np.zeros(0)
    decades = math.log10(high) - math.log10(low)
    most = FEWER_POINTS if _is_large(model) else MOST_POINTS
    plain = int(np.clip(150 * decades, 0.15 * most, most // 2))
    parts = [np.logspace(math.log10(low), math.log10(high), plain)]
    for values in (roots.poles, roots.zeros):
        equivalent = continuous_equivalent(model, values)
        w0 = np.abs(equivalent.imag)
        with np.errstate(over="ignore", divide="ignore", invalid="ignore"):
            damping = np.abs(equivalent.real) / w0
        light = (w0 > low) & (w0 < high) & (damping < 0.3)
        pairs = sorted(set(zip(w0[light].tolist(), damping[light].tolist(), strict=True)))
        each = int(np.clip(most / 2 / max(len(pairs), 1), 3, 41)) | 1
        for frequency, ratio in pairs:
            width = max(ratio, 1e-9)
            reach = math.asinh(0.3 / width)
            parts.append(frequency * (1 + width * np.sinh(np.linspace(-reach, reach, each))))
    grid = np.unique(np.concatenate([*parts, [low, high]]))
    return grid[(grid >= low) & (grid <= high)]


def rational_response(model: Model, frequency: Array) -> ComplexArray:
    """Return the response without dead time, not-a-number where it is infinite."""
    values = model.rational_part(model.time.points(frequency))
    return np.where(np.isfinite(values), values, complex(np.nan, np.nan))


def refined(model: Model, grid: Array) -> tuple[Array, ComplexArray]:
    """Return grid and response, with points put in wherever a channel turns or jumps by more than a drawing hides."""
    values = rational_response(model, grid)
    if _is_large(model):
        return grid, values
    for _ in range(5):
        if grid.size >= MOST_POINTS or grid.size < 2:
            break
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            step = np.abs(np.log(values[1:] / values[:-1]))  # 0.35: 3 dB, or 20 degrees
        rough = np.any(np.where(np.isfinite(step), step, 0.0) > 0.35, axis=(1, 2))
        middle = np.sqrt(grid[:-1][rough]) * np.sqrt(grid[1:][rough])
        middle = middle[(middle > grid[:-1][rough]) & (middle < grid[1:][rough])]
        if middle.size == 0:
            break
        more = rational_response(model, middle)
        place = np.argsort(np.concatenate([grid, middle]), kind="stable")
        grid, values = np.concatenate([grid, middle])[place], np.concatenate([values, more])[place]
    return grid, values


def curves_of(entries: Sequence[tuple[str, Model]], roots: Sequence[Roots], band: Band) -> list[Curve]:
    """Return the curve of each entry over the band: data at their own lines, models on their own grid."""
    curves = []
    for (label, model), own in zip(entries, roots, strict=True):
        p, m = model.shape
        dead = np.zeros((p, m)) if model.dead_time is None else model.dead_time.total
        if isinstance(model, FrequencyResponse):
            inside = (model.radians > 0) & (model.radians >= band[0]) & (model.radians <= band[1])
            w = model.radians[inside]
            curves.append(Curve(label, model, True, w, model.response[inside], np.zeros((p, m))))
        else:
            w, values = refined(model, drawing_grid(model, own, band))
            curves.append(Curve(label, model, False, w, values, dead))
    return curves


def relative_difference(first: Curve, other: Curve) -> tuple[Array, Array]:
    """Return frequencies and ||G_other - G_first|| / ||G_first||, Frobenius norms over the channels.

    Data are compared at their own lines; two sets of data at the lines they share.
    """
    if first.data and other.data:
        both, here, there = np.intersect1d(first.frequency, other.frequency, return_indices=True)
        reference, values = first.response[here], other.response[there]
    elif first.data or not other.data:
        both, reference = first.frequency, first.response
        both, reference = _within(other.model, both, reference)
        values = _evaluated(other, both)
    else:
        both, values = _within(first.model, other.frequency, other.response)
        reference = _evaluated(first, both)
    size = _frobenius(reference)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        return both, _frobenius(values - reference) / size


def _frobenius(values: ComplexArray) -> Array:
    """Frobenius norm of each matrix, scaled so that nothing overflows."""
    parts = np.concatenate([values.real, values.imag], axis=2)
    parts = parts.reshape(values.shape[0], parts.shape[1] * parts.shape[2])
    size = np.abs(parts).max(axis=1, initial=0.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(size == 0, 0.0, size * np.sqrt(np.sum((parts / size[:, None]) ** 2, axis=1)))


def _within(model: Model, frequency: Array, values: ComplexArray) -> tuple[Array, ComplexArray]:
    if not model.time.sampled:
        return frequency, values
    inside = frequency <= math.pi / model.time.seconds * (1 + 1e-12)
    return frequency[inside], values[inside]


def _evaluated(curve: Curve, frequency: Array) -> ComplexArray:
    values = rational_response(curve.model, frequency)
    return values * np.exp(-1j * frequency[:, None, None] * curve.dead_time)


def rational_phase(curve: Curve, output: int, column: int) -> Array:
    """Return the phase of one channel without its dead time, unwrapped, in degrees; it starts within [-180, 180)."""
    values = curve.rational[:, output, column]
    phase = np.full(values.size, np.nan)
    good = np.isfinite(values) & (values != 0)
    if good.any():
        phase[good] = np.degrees(np.unwrap(np.angle(values[good])))
        # a rounding's +180 is -180 too
        phase -= 360 * math.ceil((phase[good][0] - 180 * (1 - 1e-9)) / 360)
    return phase


def aligned_phases(curves: Sequence[Curve], output: int, column: int) -> list[Array]:
    """Return the phases of one channel of all curves on a common branch, degrees, dead time included.

    The first parametric curve leads. Others move as a whole by a multiple of 360 degrees so that they meet it, dead
    times aside, at the low end. Data points, which noise can carry around, each take the branch nearest to it.
    """
    phases = [rational_phase(curve, output, column) for curve in curves]
    usable = [k for k, phase in enumerate(phases) if np.isfinite(phase).any()]
    models = [k for k in usable if not curves[k].data]
    late = [np.degrees(curve.frequency * curve.dead_time[output, column]) for curve in curves]
    for k in usable:
        lead = (models or usable)[0]
        if k == lead:
            continue
        pointwise = curves[k].data and bool(models)
        good = np.isfinite(phases[lead])
        x, y = np.log(curves[lead].frequency[good]), phases[lead][good]
        if pointwise:
            y = y - late[lead][good]
        own = np.log(curves[k].frequency)
        inside = (own >= x[0]) & (own <= x[-1]) & np.isfinite(phases[k])
        if inside.any():
            turns = np.rint((np.interp(own, x, y) - phases[k]) / 360)
            low = turns[inside][: max(1, int(inside.sum()) // 5)]
            whole = float(np.median(low))
            phases[k] = phases[k] + 360 * (np.where(inside, turns, whole) if pointwise else whole)
    return [phase - delay for phase, delay in zip(phases, late, strict=True)]
