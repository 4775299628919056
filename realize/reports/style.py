"""The look of the pictures: colours, lines, markers, ticks, in one place for all panels."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.reports.numbers import clean, prefixed, short

#: Steps of lightness first, hue second: neighbours in the list stay apart in grey and for colour-blind readers.
COLOURS = ("#0b2545", "#d1603d", "#2a9d8f", "#e0a100", "#6a4c93", "#7fb7d9")
LINES: tuple[Any, ...] = (
    "-",
    (0, (5, 2)),
    (0, (1.2, 1.6)),
    (0, (7, 2, 1.5, 2)),
    (0, (9, 3)),
    (0, (4, 1.5, 1, 1.5, 1, 1.5)),
)
DATA_MARKERS = ("o", "s", "^", "D", "v", "P")
POLE_MARKERS = ("x", "+", "o", "s", "^", "D")
GREY = "#6b7280"
FAINT = "#d5d9df"

SETTINGS: dict[str, Any] = {
    "font.family": ["DejaVu Sans"],
    "font.size": 9.0,
    "axes.titlesize": 9.5,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.labelsize": 9.0,
    "axes.edgecolor": GREY,
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.grid": True,
    "axes.axisbelow": True,
    "axes.formatter.useoffset": False,
    "grid.color": FAINT,
    "grid.linewidth": 0.6,
    "xtick.color": "#374151",
    "ytick.color": "#374151",
    "xtick.labelsize": 8.0,
    "ytick.labelsize": 8.0,
    "legend.fontsize": 9.0,
    "legend.frameon": False,
    "lines.solid_capstyle": "round",
    "figure.facecolor": "white",
    "savefig.dpi": 150,
    # names of signals are text, never formulas
    "text.parse_math": False,
    "svg.hashsalt": "realize",
    "svg.fonttype": "path",
    "path.simplify": True,
}


@dataclass(frozen=True)
class Look:
    """How one entry is drawn everywhere on the page."""

    colour: str
    line: Any
    width: float
    marker: str
    pole_marker: str


def looks(data: list[bool]) -> list[Look]:
    """Return the look of each entry; later lines are thinner, so that a line under another one stays visible."""
    result = []
    for k, is_data in enumerate(data):
        same = sum(1 for other in data[:k] if other == is_data)
        result.append(
            Look(
                colour=COLOURS[k % len(COLOURS)],
                line=LINES[same % len(LINES)],
                width=max(2.0 - 0.25 * same, 1.1),
                marker=DATA_MARKERS[same % len(DATA_MARKERS)],
                pole_marker=POLE_MARKERS[same % len(POLE_MARKERS)],
            )
        )
    return result


def drawable(text: str, longest: int = 60) -> str:
    """Return one line of text with every sign that the font lacks replaced by a question mark."""
    from matplotlib.font_manager import findfont, get_font

    known = get_font(findfont("DejaVu Sans")).get_charmap()
    return "".join(sign if ord(sign) in known else "?" for sign in clean(text, longest))


def frequency_label(value: float, digits: int = 4) -> str:
    """Return the label of a frequency tick: ``10``, ``2k``, ``5m``."""
    return prefixed(value, "", digits).replace(" ", "")


_RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def power_label(value: float, digits: int = 3) -> str:
    """Return the label of a level tick: a short number, or a power of ten."""
    power = round(math.log10(value))
    if -2 <= power <= 3:
        return short(value, digits)
    factor = value / 10.0**power if abs(power) < 300 else 1.0
    raised = "10" + str(power).translate(_RAISED)
    return raised if abs(factor - 1) < 1e-6 else short(value, digits)


def logarithmic_axis(axis: Any, low: float, high: float, label: Any, most: int = 7) -> None:
    """Put ticks on an axis that carries log10 of a positive quantity.

    The logarithm is drawn on a linear axis: any span of doubles has ticks, and none overflows.

    Parameters
    ----------
    axis : matplotlib axis
    low, high : float
        Ends of the view, in decades.
    label : callable
        Value, and number of digits where it matters, to text.
    most : int
        Number of labels that fit.
    """
    from matplotlib.ticker import FixedFormatter, FixedLocator, MaxNLocator, NullFormatter

    span = high - low
    minor: list[float] = []
    texts: dict[float, str] = {}
    if span >= 1.3:
        step = max(1, math.ceil(span / most))
        powers = [p for p in range(math.ceil(low - 1e-9), math.floor(high + 1e-9) + 1)]
        ticks = [float(p) for p in powers if p % step == 0]
        if span <= 4.5:
            minor = [p + math.log10(k) for p in range(math.floor(low), math.ceil(high)) for k in range(2, 10)]
        elif step > 1 and span <= 60:
            minor = [float(p) for p in powers if p % step]
    elif span >= 0.45:
        ticks = [
            p + f for p in range(math.floor(low), math.ceil(high) + 1) for f in (0.0, math.log10(2), math.log10(5))
        ]
    else:
        decade = math.floor(low)
        values = MaxNLocator(nbins=min(5, most)).tick_values(10 ** (low - decade), 10 ** (high - decade))
        values = [v for v in values if v > 0]
        ticks = [math.log10(v) + decade for v in values]
        # as many digits as it takes to tell neighbours apart
        digits = max(4, 1 + math.ceil(-math.log10((values[1] - values[0]) / values[0]))) if len(values) > 1 else 4
        texts = {t: label(float(f"{v:.12g}e{decade}"), digits) for t, v in zip(ticks, values, strict=True)}
    ticks = [t for t in ticks if low - 1e-9 <= t <= high + 1e-9]
    axis.set_major_locator(FixedLocator(ticks))
    axis.set_major_formatter(FixedFormatter([texts.get(t) or label(_power(t)) for t in ticks]))
    axis.set_minor_locator(FixedLocator([t for t in minor if low <= t <= high]))
    axis.set_minor_formatter(NullFormatter())


def _power(exponent: float) -> float:
    """10^exponent with the rounding of ticks taken out; at the ends of the doubles, the end."""
    if exponent >= 308:
        return 1e308
    value = 10.0**exponent
    return float(f"{value:.6g}") if value else 5e-324


def phase_step(span: float) -> float:
    """Return the distance of phase ticks, degrees, for a span in degrees."""
    for step in (15, 30, 45, 90, 180, 360):
        if span / step <= 6:
            return float(step)
    power = 10.0 ** math.floor(math.log10(span / 360 / 6))
    return next(360.0 * f * power for f in (1, 2, 5, 10, 20) if span / (360.0 * f * power) <= 6)


def folded(values: NDArray[np.float64], unit: float) -> NDArray[np.float64]:
    """Return asinh(v / unit): linear within one unit of zero, logarithmic far away, on both sides."""
    with np.errstate(over="ignore", under="ignore"):
        return np.arcsinh(np.asarray(values, dtype=float) / unit)
