"""Pole maps: the s-plane with lines of constant damping, and the z-plane with the unit circle."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.reports.numbers import prefixed
from realize.reports.style import FAINT, GREY, Look, folded

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
DAMPING = (0.001, 0.01, 0.1, 0.5)
#: Beyond this ratio of sizes a linear plane would put most poles on top of each other.
LINEAR_UP_TO = 25.0


def grouped(poles: ComplexArray) -> list[tuple[complex, int]]:
    """Return the poles of the closed upper half plane, those equal to a drawing's accuracy counted together."""
    groups: list[tuple[complex, int]] = []
    for pole in sorted(poles[poles.imag >= 0].tolist(), key=lambda p: (abs(p), p.real)):
        for k, (other, count) in enumerate(groups):
            if abs(pole - other) <= 1e-6 * max(abs(pole), abs(other)):
                groups[k] = (other, count + 1)
                break
        else:
            groups.append((pole, 1))
    return groups


def _unit_of(sizes: Array) -> float | None:
    """Return the width of the linear part of a folded axis, or None where a linear axis will do."""
    if sizes.size < 2 or sizes.max() <= LINEAR_UP_TO * sizes.min():
        return None
    return max(float(sizes.min()), float(sizes.max()) * 1e-8) / 2


def _axis_ticks(axis: Any, low: float, high: float, unit: float | None, scale: float, most: int) -> None:
    """Put ticks on a folded or linear axis whose view is [low, high] in drawn coordinates."""
    from matplotlib.ticker import FixedFormatter, FixedLocator, MaxNLocator

    if unit is None:
        # a power of ten between the drawn and the true numbers keeps both the ticks round and the locator in range
        ten = 10.0 ** math.floor(math.log10(scale))
        drawn_scale = scale / ten
        found = MaxNLocator(nbins=most, steps=[1, 2, 5, 10]).tick_values(low * drawn_scale, high * drawn_scale)
        ticks = [t / drawn_scale for t in found if low <= t / drawn_scale <= high]
        values = [t * drawn_scale * ten for t in ticks]
    else:
        largest = math.floor(math.log10(unit * math.sinh(min(max(abs(low), abs(high)), 700.0))))
        smallest = math.ceil(math.log10(2 * unit))
        sided = most if low > -0.5 or high < 0.5 else most // 2
        powers = list(range(smallest, largest + 1))
        step = max(1, math.ceil(len(powers) / sided))
        kept = [10.0**p for p in powers[::-1][::step]]
        if len(powers) <= sided // 3:
            kept = [f * 10.0**p for p in range(largest, smallest - 2, -1) for f in (5, 2, 1) if f * 10.0**p > 2 * unit]
        values = [-v for v in kept] + [0.0] + kept[::-1]
        drawn = folded(np.array(values), unit)
        values = [v for v, t in zip(values, drawn, strict=True) if low - 1e-9 <= t <= high + 1e-9]
        ticks = folded(np.array(values), unit).tolist()
    labels = [prefixed(float(f"{v:.6g}"), "", 4).replace(" ", "").replace("-", "\u2212") for v in values]
    axis.set_major_locator(FixedLocator(ticks))
    axis.set_major_formatter(FixedFormatter(labels))


def _marks(axes: Any, x: Array, y: Array, counts: Sequence[int], look: Look, place: int, crowded: bool) -> None:
    size = (4.0 if crowded else 7.5) - 0.6 * min(place, 4)
    axes.plot(
        x,
        y,
        look.pole_marker,
        linestyle="none",
        color=look.colour,
        markerfacecolor="none",
        markersize=size,
        markeredgewidth=1.5 if look.pole_marker in "x+" else 1.1,
        zorder=4,
        clip_on=False,
    )
    for a, b, count in zip(x, y, counts, strict=True):
        if count > 1:
            axes.annotate(
                f"{count}×",
                (a, b),
                xytext=(5, 4 + 8 * place),
                textcoords="offset points",
                fontsize=7.5,
                color=look.colour,
            )


def s_plane(axes: Any, poles: Mapping[int, ComplexArray], styles: Sequence[Look]) -> None:
    """Draw the poles of continuous models, by entry index: the upper half plane, right half shaded."""
    groups = {entry: grouped(values) for entry, values in poles.items()}
    points = np.array([pole for group in groups.values() for pole, _ in group], dtype=complex)
    real, imag = np.abs(points.real), points.imag
    units = _unit_of(real[real > 0]), _unit_of(imag[imag > 0])
    # drawn in units of the largest part, so that no size of a pole matters
    scales = [
        1.0 if unit is not None else float(part.max(initial=0.0)) or 1.0
        for unit, part in zip(units, (real, imag), strict=True)
    ]

    def drawn(values: Array, k: int) -> Array:
        unit = units[k]
        return np.asarray(values) / scales[k] if unit is None else folded(values, unit)

    x, y = drawn(points.real, 0), drawn(points.imag, 1)
    left, right, top = float(x.min(initial=0.0)), float(x.max(initial=0.0)), float(y.max(initial=0.0))
    width = max(right - left, 1.0 if not (right - left) else 0.0) or 1.0
    left, right = left - 0.1 * width, right + 0.1 * width
    top = 1.12 * top if top > 0 else 1.0
    bottom = -0.04 * top
    axes.set_xlim(left, right)
    axes.set_ylim(bottom, top)
    axes.axvspan(0.0, right, color=FAINT, alpha=0.55, linewidth=0, zorder=0)
    axes.axvline(0.0, color=GREY, linewidth=1.0, zorder=1)
    axes.axhline(0.0, color=GREY, linewidth=1.0, zorder=1)
    if np.any(imag > 0) and left < 0:
        _damping_lines(axes, units, scales, (left, right, top))
    crowded = points.size > 80
    for place, (entry, group) in enumerate(groups.items()):
        own = np.array([pole for pole, _ in group], dtype=complex)
        counts = [count for _, count in group]
        _marks(axes, drawn(own.real, 0), drawn(own.imag, 1), counts, styles[entry], place, crowded)
    _axis_ticks(axes.xaxis, left, right, units[0], scales[0], 6)
    if np.any(imag > 0):
        _axis_ticks(axes.yaxis, 0.0, top, units[1], scales[1], 7)
    else:
        axes.set_yticks([0.0])
    axes.set_title("Poles, s-plane (upper half)")
    axes.set_xlabel("real part, 1/s (shaded: unstable)")
    axes.set_ylabel("imaginary part, rad/s")


def _damping_lines(
    axes: Any, units: tuple[float | None, float | None], scales: Sequence[float], view: tuple[float, float, float]
) -> None:
    """Draw lines of constant damping ratio, each labelled where it leaves the view."""
    left, _, top = view
    reach_x = -left * scales[0] if units[0] is None else units[0] * math.sinh(-left)
    reach_y = top * scales[1] if units[1] is None else units[1] * math.sinh(top)
    placed: list[tuple[float, float]] = []
    for ratio in DAMPING:
        slope = math.sqrt(1 - ratio**2) / ratio
        end = min(reach_x, reach_y / slope)
        a = np.concatenate([[0.0], np.geomspace(end * 1e-12, end, 300)])
        u = -(a / scales[0] if units[0] is None else folded(a, units[0]))
        v = a * slope / scales[1] if units[1] is None else folded(a * slope, units[1])
        axes.plot(u, v, color=GREY, linewidth=0.7, linestyle=(0, (3, 3)), zorder=1)
        # the label sits on the line just before it leaves the view, away from the axes and from other labels
        k = int(np.flatnonzero((u >= 0.95 * left) & (v <= 0.95 * top))[-1])
        spot = float(u[k] / left), float(v[k] / top)
        near = any(abs(spot[0] - x) < 0.09 and abs(spot[1] - y) < 0.06 for x, y in placed)
        if near or spot[0] < 0.03 or spot[1] < 0.06:
            continue
        placed.append(spot)
        axes.annotate(
            f"{ratio:g}",
            (u[k], v[k]),
            fontsize=7.0,
            color="#4b5563",
            ha="center",
            va="center",
            zorder=2,
            bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.8},
        )


def z_plane(axes: Any, poles: Mapping[int, ComplexArray], styles: Sequence[Look]) -> None:
    """Draw the poles of sampled models, by entry index: the upper half plane with the unit circle."""
    from matplotlib.ticker import MaxNLocator

    groups = {entry: grouped(values) for entry, values in poles.items()}
    points = np.array([pole for group in groups.values() for pole, _ in group], dtype=complex)
    angle = np.linspace(0, np.pi, 721)
    near = np.abs(points - 1).max(initial=0.0)
    if 0 < near < 0.3:
        # all poles near z = 1: a window around them
        reach = 1.25 * near
        left, right, top = 1 - reach, 1 + 0.35 * reach, 1.1 * reach
    else:
        far = max(1.0, float(np.abs(points).max(initial=0.0)))
        left, right, top = (
            -1.08 * max(1.0, -points.real.min(initial=0.0)),
            1.08 * max(1.0, points.real.max(initial=0.0)),
            1.08 * far,
        )
    axes.set_xlim(left, right)
    axes.set_ylim(-0.06 * top, top)
    axes.set_aspect("equal", adjustable="box")
    axes.plot(np.cos(angle), np.sin(angle), color=GREY, linewidth=1.1, zorder=1)
    axes.axhline(0.0, color=GREY, linewidth=0.8, zorder=1)
    for ratio in (0.1, 0.5):
        slope = math.sqrt(1 - ratio**2) / ratio
        a = np.concatenate([[0.0], np.geomspace(1e-9, 1.0, 600)]) * np.pi / slope
        spiral = np.exp(-a + 1j * a * slope)
        axes.plot(spiral.real, spiral.imag, color=GREY, linewidth=0.7, linestyle=(0, (3, 3)), zorder=1)
        inside = (spiral.real > left) & (spiral.real < right) & (spiral.imag < top)
        if inside.any():
            away = np.where(inside, np.abs(spiral - 1), 0.0)
            k = int(np.argmin(np.abs(away - 0.6 * away.max())))
            axes.annotate(
                f"{ratio:g}",
                (spiral.real[k], spiral.imag[k]),
                fontsize=7.0,
                color="#4b5563",
                ha="center",
                va="center",
                bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.8},
            )
    crowded = points.size > 80
    for place, (entry, group) in enumerate(groups.items()):
        own = np.array([pole for pole, _ in group], dtype=complex)
        _marks(axes, own.real, own.imag, [count for _, count in group], styles[entry], place, crowded)
    axes.xaxis.set_major_locator(MaxNLocator(nbins=5))
    axes.yaxis.set_major_locator(MaxNLocator(nbins=5))
    axes.set_title("Poles, z-plane (upper half)")
    axes.set_xlabel("real part")
    axes.set_ylabel("imaginary part")
