"""One page of pictures for one or several models: magnitude and phase, difference, poles, Hankel singular values."""

from __future__ import annotations

import io
import math
import os
import textwrap
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from realize.errors import UsageError
from realize.files.replacing import replace_file
from realize.models import FrequencyResponse, Model
from realize.reports import panels, polemap
from realize.reports.curves import Band, curves_of, drawing_band
from realize.reports.hankel import hankel_values
from realize.reports.numbers import clean
from realize.reports.roots import Roots, roots_of
from realize.reports.style import SETTINGS, drawable, looks

FORMATS = {".png": "png", ".svg": "svg"}
MOST_CHANNELS, MOST_ENTRIES = 6, 12

Entries = Sequence[tuple[str, Model]]


def draw(
    entries: Entries,
    path: str | os.PathLike[str],
    *,
    band: Band | None = None,
    title: str | None = None,
    hankel: Mapping[str, ArrayLike] | None = None,
) -> None:
    """Draw models and data on one page and write it as PNG or SVG.

    The same input gives the same bytes. A panel appears only when there is something to show in it.

    Parameters
    ----------
    entries : sequence of (label, model)
        At most 12, all with the same number of inputs and outputs. Data are drawn as points, models as lines; the first
        entry is the one that the others are compared with.
    path : path
        Ends in ``.png`` or ``.svg``.
    band : (low, high), optional
        Frequencies to draw, rad/s.
    title : str, optional
    hankel : mapping of label to singular values, optional
        Where known; otherwise they are computed for stable state models of moderate order.

    Raises
    ------
    UsageError
        For a suffix that is neither of the two, no entries, too many, different shapes, or a band that is none.
    """
    form = picture_format(path)
    with page_settings():
        figure = figure_of(entries, band=band, title=title, hankel=hankel)
        content = rendered(figure, form)
    replace_file(path, content)


def picture_format(path: str | os.PathLike[str]) -> str:
    """Return ``png`` or ``svg`` for the suffix of a path; raises UsageError for any other."""
    suffix = Path(path).suffix.lower()
    if suffix not in FORMATS:
        found = f"suffix {clean(suffix)!r}" if suffix else "no suffix"
        raise UsageError(f"{clean(path)}: {found}; a picture is written as .png or .svg")
    return FORMATS[suffix]


def page_settings() -> Any:
    """Return a context in which matplotlib draws with this project's settings only, and its own are restored after."""
    import matplotlib.style

    return matplotlib.style.context(["default", SETTINGS])


def rendered(figure: Any, form: str) -> bytes:
    """Return the figure as the bytes of a PNG or SVG file, without time or version."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.backends.backend_svg import FigureCanvasSVG

    canvas = (FigureCanvasAgg if form == "png" else FigureCanvasSVG)(figure)
    metadata = {"Software": None} if form == "png" else {"Date": None, "Creator": None}
    target = io.BytesIO()
    canvas.print_figure(target, format=form, metadata=metadata)
    return target.getvalue()


def _checked(entries: Entries, band: Band | None) -> list[tuple[str, Model]]:
    listed = [(clean(label, 40) or f"entry {k}", model) for k, (label, model) in enumerate(entries)]
    if not listed:
        raise UsageError("nothing to draw: give at least one model")
    if len(listed) > MOST_ENTRIES:
        raise UsageError(
            f"{len(listed)} models on one page; at most {MOST_ENTRIES} can be told apart, draw several pages"
        )
    shape = listed[0][1].shape
    for label, model in listed[1:]:
        if model.shape != shape:
            raise UsageError(
                f"{label} has {model.shape[1]} inputs and {model.shape[0]} outputs, {listed[0][0]} has {shape[1]} and "
                f"{shape[0]}; models on one page need the same inputs and outputs"
            )
    if band is not None and not (0 < band[0] < band[1] < math.inf):
        raise UsageError(f"band {band[0]:g} to {band[1]:g} rad/s; a band runs from a number above zero to a larger one")
    if band is not None and all(model.time.sampled for _, model in listed):
        end = max(math.pi / model.time.seconds for _, model in listed)
        if band[0] >= end:
            raise UsageError(f"a band from {band[0]:g} rad/s on; half the sampling rate is {end:.6g} rad/s")
    return listed


def _notes(listed: Entries, band: Band) -> list[str]:
    notes = []
    p, m = listed[0][1].shape
    if p * m > MOST_CHANNELS:
        notes.append(f"{MOST_CHANNELS} of {p * m} channels are drawn; the difference is that of all channels together.")
    for label, model in listed:
        if isinstance(model, FrequencyResponse):
            if model.radians[0] == 0:
                notes.append(f"{label}: the line at 0 Hz has no place on a logarithmic axis.")
            outside = int(np.sum((model.radians > 0) & ((model.radians < band[0]) | (model.radians > band[1]))))
            if outside:
                notes.append(f"{label}: {outside} of {model.radians.size} lines lie outside the frequencies drawn.")
    first = listed[0][1]
    for label, model in listed[1:]:
        for own, other in zip(first.inputs + first.outputs, model.inputs + model.outputs, strict=True):
            if own.unit and other.unit and own.unit != other.unit:
                notes.append(f"Units differ: {own.unit} in {listed[0][0]}, {other.unit} in {label}.")
    return notes


def _pole_sets(listed: Entries, roots: Sequence[Roots]) -> tuple[dict[int, Any], dict[int, Any]]:
    continuous: dict[int, Any] = {}
    sampled: dict[int, Any] = {}
    for k, (_, model) in enumerate(listed):
        if roots[k].poles.size:
            (sampled if model.time.sampled else continuous)[k] = roots[k].poles
    return continuous, sampled


def figure_of(
    entries: Entries,
    *,
    band: Band | None = None,
    title: str | None = None,
    hankel: Mapping[str, ArrayLike] | None = None,
) -> Any:
    """Return the page as a matplotlib figure, not yet written; parameters as for `draw`, inside `page_settings`."""
    from matplotlib.figure import Figure
    from matplotlib.layout_engine import ConstrainedLayoutEngine

    listed = _checked(entries, band)
    models = [model for _, model in listed]
    roots = [roots_of(model) for model in models]
    span = drawing_band(models, roots, band)
    curves = curves_of(listed, roots, span)
    styles = looks([curve.data for curve in curves])
    notes = _notes(listed, span)

    p, m = models[0].shape
    cells = [(i, j) for i in range(p) for j in range(m)][:MOST_CHANNELS]
    columns = min(3, len(cells)) if len(cells) != 4 else 2
    rows = -(-len(cells) // columns)

    extra: list[tuple[str, Any]] = []
    if len(curves) > 1:
        extra.append(("difference", None))
    for name, poles in zip(("s-plane", "z-plane"), _pole_sets(listed, roots), strict=True):
        if poles:
            extra.append((name, poles))
    values = {
        k: found for k, (label, model) in enumerate(listed) if (found := _hankel(label, model, hankel)) is not None
    }
    if values:
        extra.append(("hankel", values))

    width = max((7.5, 11.0, 13.5)[columns - 1], (7.5, 7.5, 11.0, 13.5)[max(len(extra) - 1, 0)])
    heights = [2.2, 1.6] * rows + ([3.3] if extra else [])
    engine = ConstrainedLayoutEngine(w_pad=0.08, h_pad=0.06, hspace=0.02, wspace=0.03)
    figure = Figure(figsize=(width, sum(heights) + 0.9), layout=engine)
    slots = max(len(extra), columns)
    parts = math.lcm(columns, slots)
    grid = figure.add_gridspec(len(heights), parts, height_ratios=heights)

    share = parts // columns
    for place, cell in enumerate(cells):
        row, column = divmod(place, columns)
        where = slice(column * share, (column + 1) * share)
        above = figure.add_subplot(grid[2 * row, where])
        below = figure.add_subplot(grid[2 * row + 1, where])
        panels.channel(above, below, curves, styles, cell, span)
    share = parts // slots
    for place, (name, content) in enumerate(extra):
        axes = figure.add_subplot(grid[len(heights) - 1, place * share : (place + 1) * share])
        if name == "difference":
            notes += panels.difference(axes, curves, styles, span)
        elif name == "s-plane":
            polemap.s_plane(axes, content, styles)
        elif name == "z-plane":
            polemap.z_plane(axes, content, styles)
        else:
            notes += panels.hankel(axes, content, styles)

    _legend(figure, curves, styles, width, title)
    if notes:
        wrapped = [
            line for note in dict.fromkeys(notes) for line in textwrap.wrap(drawable(note, 200), int(15.5 * width))
        ]
        figure.supxlabel("\n".join(wrapped), fontsize=8, x=0.012, ha="left", color="#374151")
    return figure


def _legend(figure: Any, curves: Sequence[Any], styles: Sequence[Any], width: float, title: str | None) -> None:
    from matplotlib.lines import Line2D

    handles = []
    for curve, look in zip(curves, styles, strict=True):
        if curve.data:
            handle = Line2D([], [], color=look.colour, marker=look.marker, markerfacecolor="none", linestyle="none")
        else:
            marker = look.pole_marker
            handle = Line2D([], [], color=look.colour, linestyle=look.line, linewidth=look.width, marker=marker)
            handle.set_markerfacecolor("none")
        handles.append(handle)
    labels = [drawable(curve.label, 40) for curve in curves]
    longest = max(len(label) for label in labels)
    across = max(1, min(len(labels), int(width / (0.075 * longest + 0.7))))
    legend = figure.legend(handles, labels, loc="outside upper left", ncols=across, handlelength=3.2, columnspacing=1.6)
    if title:
        # part of the legend, so that the layout keeps the two apart
        legend.set_title(drawable(title, 100), prop={"size": 12, "weight": "bold"})
        legend.set_alignment("left")


def _hankel(label: str, model: Model, given: Mapping[str, ArrayLike] | None) -> Any:
    """Return Hankel singular values as given, or those computed from the model, or None."""
    if given is not None and label in given:
        return np.asarray(given[label], dtype=float)
    return hankel_values(model)
