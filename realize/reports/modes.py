"""The modes of a fit with their error bars, and the misfit of each channel, as text."""

from __future__ import annotations

import cmath
import math
from collections.abc import Mapping, Sequence
from typing import Any

from realize.reports.look import PLAIN, Page, bullets, grid, laid_out, words
from realize.reports.numbers import prefixed, short

#: Rows of a table before the rest is only counted.
MOST_ROWS = 40
#: Entries of a mode shape in the table; the record has all of them.
MOST_ENTRIES = 6


def modes_table(details: Mapping[str, Any], *, page: Page = PLAIN) -> str:
    """Return modes with frequency, damping and shape, one standard deviation each, and what the bars rest on.

    Parameters
    ----------
    details : mapping
        ``modes``, ``bars`` and ``channels`` of the receipt of a fit.
    """
    modes = details["modes"]
    if not modes:
        return laid_out([words("no modes: order 0")], page)
    outputs, inputs = max(len(modes[0]["output_shape"]), 1), max(len(modes[0]["input_shape"]), 1)
    unit, size = _common_unit(max(mode["frequency"] for mode in modes) / (2 * math.pi))
    columns = [(unit, "right"), ("±", "left"), ("damping", "right"), ("±", "left"), ("share", "right")]
    if outputs * inputs > 1:
        columns.append(("rank", "right"))
    columns += [(name, "left") for name, count in (("outputs", outputs), ("inputs", inputs)) if count > 1]
    columns.append(("", "left"))
    rows = []
    for mode in modes[:MOST_ROWS]:
        row = [
            short(mode["frequency"] / (2 * math.pi) / size, _digits(mode["frequency"], mode["frequency_deviation"])),
            _relative(mode["frequency"], mode["frequency_deviation"]),
            _damping(mode),
            _relative(mode["damping"], mode["damping_deviation"]) if mode["pair"] else "",
            _percent(mode["dominance"]),
        ]
        if outputs * inputs > 1:
            row.append(str(mode["rank"]))
        row += [_shape(mode[name]) for name in ("output_shape", "input_shape") if len(mode[name]) > 1]
        row.append("may be noise" if mode["cancelling"] else "")
        rows.append(row)
    if not any(row[-1] for row in rows):
        columns, rows = columns[:-1], [row[:-1] for row in rows]
    parts: list[Any] = [words("modes (± one standard deviation)", "bold"), grid(columns, rows)]
    if len(modes) > MOST_ROWS:
        parts.append(words(f"... and {len(modes) - MOST_ROWS} more modes, by frequency"))
    parts += [words(""), bullets(bars_in_words(details["bars"]), "")]
    return laid_out(parts, page)


def channels_table(details: Mapping[str, Any], *, page: Page = PLAIN) -> str:
    """Return the misfit of each channel: RMS, in deviations of the noise, and the largest with its place."""
    rows = [
        [
            f"{row['input']} → {row['output']}",
            short(row["rms"]),
            short(row["weighted"]),
            short(row["worst"]),
            prefixed(row["time"], "s", 4) if "time" in row else prefixed(row["frequency"] / (2 * math.pi), "Hz", 4),
        ]
        for row in details["channels"][:MOST_ROWS]
    ]
    columns = [
        ("channel", "left"),
        ("misfit", "right"),
        ("misfit/noise", "right"),
        ("largest", "right"),
        ("at", "right"),
    ]
    more = len(details["channels"]) - MOST_ROWS
    parts = [grid(columns, rows)] + ([words(f"... and {more} more channels")] if more > 0 else [])
    return laid_out(parts, page)


def bars_in_words(bars: Mapping[str, Any] | None) -> list[str]:
    """Return what the error bars rest on, and what they leave out."""
    if bars is None:
        return ["No bars were made for this kind of data."]
    lines = []
    if bars["level"] is None:
        lines.append("No bars: as many numbers were fitted as the data have.")
    elif bars["basis"] == "sandwich":
        why = []
        if not bars["white"]:
            why.append(f"neighbouring lines err alike (correlation {short(bars['correlation'], 2)})")
        if not bars["independent"]:
            why.append("channels err together")
        why = why or ["the misfit is larger in places than the noise"]
        lines.append(
            f"The bars are larger than those of independent errors, by up to {short(bars['growth'])}: {', '.join(why)}."
        )
    if bars["enlarged"]:
        lines.append(
            f"The misfit is {short(bars['level'])} times the deviations given, more than chance: the bars grow with it."
        )
    lines.append(f"Not in the bars: {bars['excludes']}.")
    return lines


def _common_unit(hertz: float) -> tuple[str, float]:
    """Return the unit of a column of frequencies and its size in Hz."""
    for name, size in (("GHz", 1e9), ("MHz", 1e6), ("kHz", 1e3)):
        if size <= hertz < 1e3 * size:
            return name, size
    return "Hz", 1.0


def _digits(value: float, deviation: float | None) -> int:
    """Return how many digits make sense beside the deviation: two of the deviation's own."""
    if not deviation or not value:
        return 6
    return max(3, min(12, 2 + math.ceil(math.log10(max(abs(value) / deviation, 1.0)))))


def _damping(mode: Mapping[str, Any]) -> str:
    if not mode["pair"]:
        return "real pole"
    return short(mode["damping"], min(6, _digits(mode["damping"], mode["damping_deviation"])))


def _relative(value: float, deviation: float | None) -> str:
    if deviation is None:
        return "open"
    return _percent(deviation / value) if value else short(deviation, 2)


def _percent(ratio: float) -> str:
    return f"{short(100 * ratio, 2)} %"


def _shape(entries: Sequence[Sequence[float]]) -> str:
    """Return the entries as size and phase in degrees: ``1, 0.59∠-179``."""
    texts = []
    for re, im in entries[:MOST_ENTRIES]:
        size, angle = cmath.polar(complex(re, im))
        turn = round(math.degrees(angle))
        turn = 180 if turn == -180 else turn
        texts.append(short(size, 2) + (f"∠{turn}" if turn else ""))
    return " ".join(texts) + (" …" if len(entries) > MOST_ENTRIES else "")
