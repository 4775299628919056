"""The panels of a page: each draws on axes that it is given."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.reports.curves import Curve, aligned_phases, relative_difference
from realize.reports.numbers import channel_name, channel_unit
from realize.reports.style import (
    FAINT,
    GREY,
    Look,
    drawable,
    frequency_label,
    logarithmic_axis,
    phase_step,
    power_label,
)

Array = NDArray[np.float64]


def _log_hertz(frequency: Array) -> Array:
    return np.log10(frequency) - math.log10(2 * math.pi)


def _plot(axes: Any, curve: Curve, look: Look, x: Array, y: Array) -> None:
    if curve.data:
        size = 6.0 if x.size < 60 else 4.6 if x.size < 250 else 3.8
        axes.plot(
            x, y, look.marker, markersize=size, markerfacecolor="none", color=look.colour, markeredgewidth=0.7, zorder=2
        )
    else:
        axes.plot(x, y, linestyle=look.line, linewidth=look.width, color=look.colour, zorder=3)


def _say(axes: Any, text: str) -> None:
    axes.text(0.5, 0.5, text, transform=axes.transAxes, ha="center", va="center", color=GREY)


def _frequency_axis(axes: Any, band: tuple[float, float], most: int = 7) -> None:
    low, high = _log_hertz(np.array(band, dtype=float))
    axes.set_xlim(low, high)
    logarithmic_axis(axes.xaxis, low, high, frequency_label, most)


def _margins(axes: Any, values: Array, smallest: float, drop: float = math.inf) -> None:
    """Set limits around finite values: at least ``smallest`` apart, deep narrow dips cut ``drop`` below the rest."""
    finite = values[np.isfinite(values)]
    if finite.size == 0:
        return
    low, high = float(finite.min()), float(finite.max())
    low = max(low, float(np.quantile(finite, 0.02)) - drop)
    pad = max(0.06 * (high - low), (smallest - (high - low)) / 2)
    axes.set_ylim(low - pad, high + pad)


def channel(
    above: Any,
    below: Any,
    curves: Sequence[Curve],
    styles: Sequence[Look],
    index: tuple[int, int],
    band: tuple[float, float],
) -> None:
    """Draw magnitude (above) and phase (below) of one channel [output, input] of all curves."""
    from matplotlib.ticker import MaxNLocator, MultipleLocator

    i, j = index
    named = next((c.model for c in curves if c.model.outputs[i].name or c.model.inputs[j].name), curves[0].model)
    above.set_title(drawable(channel_name(named, i, j, 56), 56))
    units = [channel_unit(c.model, i, j) for c in curves]
    unit = next((text for text in units if text), "")
    above.set_ylabel("magnitude, dB" + (f"\n{drawable('re 1 ' + unit, 40)}" if unit else ""))
    below.set_ylabel("phase, degrees")
    below.set_xlabel("frequency, Hz")

    levels = []
    for curve, look in zip(curves, styles, strict=True):
        values = curve.rational[:, i, j]
        with np.errstate(divide="ignore", over="ignore", invalid="ignore"):
            level = 20 * np.log10(np.hypot(values.real, values.imag))
        level = np.where(np.isfinite(level), level, np.nan)
        levels.append(level)
        if np.isfinite(level).any():
            _plot(above, curve, look, _log_hertz(curve.frequency), level)
    phases = aligned_phases(curves, i, j)
    for curve, look, phase in zip(curves, styles, phases, strict=True):
        if np.isfinite(phase).any():
            _plot(below, curve, look, _log_hertz(curve.frequency), phase)

    everything, turned = np.concatenate(levels), np.concatenate(phases)
    if not np.isfinite(everything).any():
        zero = all(not np.any(curve.rational[:, i, j]) for curve in curves)
        _say(
            above, "nothing at these frequencies" if not everything.size else "identically zero" if zero else "infinite"
        )
        below.set_ylim(-180, 180)
        above.set_yticks([])
        below.yaxis.set_major_locator(MultipleLocator(90))
    else:
        _margins(above, everything, 6.0, 20.0)
        above.yaxis.set_major_locator(MaxNLocator(nbins=6, steps=[1, 2, 4, 5, 10]))
        _margins(below, turned, 100.0)
        bottom, top = below.get_ylim()
        below.yaxis.set_major_locator(MultipleLocator(phase_step(top - bottom)))
    for axes in (above, below):
        _frequency_axis(axes, band)
    above.tick_params(labelbottom=False)


def difference(axes: Any, curves: Sequence[Curve], styles: Sequence[Look], band: tuple[float, float]) -> list[str]:
    """Draw ||G - G_first|| / ||G_first|| of each further curve; return notes on what could not be drawn."""
    notes = []
    first = curves[0]
    axes.set_title(drawable(f"Difference from {first.label}", 44))
    axes.set_ylabel("|difference| / |response|")
    axes.set_xlabel("frequency, Hz")
    drawn = [np.zeros(0)]
    for curve, look in zip(curves[1:], styles[1:], strict=True):
        w, error = relative_difference(first, curve)
        if w.size == 0:
            notes.append(f"{curve.label}: no frequency in common with {first.label}.")
            continue
        if not np.any(error > 0):
            notes.append(f"{curve.label}: no difference from {first.label} at the frequencies drawn.")
            continue
        with np.errstate(divide="ignore", invalid="ignore"):
            level = np.log10(error)
        level = np.where(np.isfinite(level), level, np.nan)
        if np.isfinite(level).any():
            drawn.append(level)
            if curve.data:
                _plot(axes, curve, look, _log_hertz(w), level)
            else:
                # at the lines of noisy data a thin line; between models the same line as above
                width = 0.9 if first.data else look.width
                axes.plot(_log_hertz(w), level, linestyle=look.line, linewidth=width, color=look.colour, zorder=3)
            if w.size == 1:
                axes.plot(_log_hertz(w), level, look.pole_marker, color=look.colour)
    deviation = getattr(first.model, "deviation", None) if first.data else None
    if deviation is not None and first.frequency.size:
        inside = np.isin(first.model.radians, first.frequency)  # type: ignore[attr-defined]
        size = np.linalg.norm(deviation[inside].reshape(first.frequency.size, -1), axis=1)
        with np.errstate(divide="ignore", invalid="ignore"):
            level = np.log10(size / np.linalg.norm(first.response.reshape(first.frequency.size, -1), axis=1))
        if np.isfinite(level).any():
            level = np.where(np.isfinite(level), level, np.nan)
            drawn.append(level)
            axes.fill_between(_log_hertz(first.frequency), level, -400.0, color=FAINT, alpha=0.6, linewidth=0, zorder=1)
            axes.plot(_log_hertz(first.frequency), level, color=GREY, linewidth=0.9, zorder=1)
            axes.text(
                0.02,
                0.03,
                "grey: below one standard deviation",
                transform=axes.transAxes,
                fontsize=7.5,
                color="#374151",
            )
    values = np.concatenate(drawn)
    if np.isfinite(values).any():
        _margins(axes, values, 1.0, 2.0)
        low, high = axes.get_ylim()
        logarithmic_axis(axes.yaxis, low, high, power_label)
    else:
        _say(axes, "no difference to draw")
        axes.set_yticks([])
    _frequency_axis(axes, band, 5)
    return notes


def hankel(axes: Any, values: Mapping[int, Array], styles: Sequence[Look]) -> list[str]:
    """Draw Hankel singular values by entry index on a logarithmic scale; return notes on values that are zero."""
    from matplotlib.ticker import MaxNLocator

    axes.set_title("Hankel singular values")
    axes.set_xlabel("number")
    axes.set_ylabel("value")
    levels, notes, longest = [], [], 1
    several = len(values) > 1
    for place, (entry, sequence) in enumerate(values.items()):
        look = styles[entry]
        sequence = np.asarray(sequence, dtype=float)
        positive = np.isfinite(sequence) & (sequence > 0)
        if not positive.any():
            continue
        number = np.arange(1, sequence.size + 1)[positive]
        level = np.log10(sequence[positive])
        levels.append(level)
        longest = max(longest, int(number[-1]))
        axes.plot(
            number,
            level,
            marker=look.pole_marker,
            markersize=5.5 - 0.5 * place if number.size < 60 else 2.5,
            markerfacecolor="none",
            linestyle=look.line if several else ":",
            linewidth=0.8,
            color=look.colour,
        )
        if not positive.all():
            notes.append(f"{int(np.sum(~positive))} Hankel singular values are zero and not drawn.")
    if not levels:
        _say(axes, "all zero")
        return notes
    axes.set_xlim(1 - max(0.4, 0.03 * longest), longest + max(0.4, 0.03 * longest))
    axes.xaxis.set_major_locator(MaxNLocator(nbins=8, integer=True, min_n_ticks=1))
    _margins(axes, np.concatenate(levels), 1.0)
    low, high = axes.get_ylim()
    logarithmic_axis(axes.yaxis, low, high, power_label)
    return notes
