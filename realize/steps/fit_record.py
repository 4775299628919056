"""What the receipt of a fit tells beside its claims: orders tried, modes with error bars, channels, band."""

from __future__ import annotations

from collections import Counter
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from realize.fitting import Fit
from realize.fitting.records import ChannelRow
from realize.models import FrequencyResponse

#: Lines of the confidence band that a receipt keeps; ``realize.fitting.Fit`` has all of them.
BAND_LINES = 40
#: Outliers that a receipt lists.
MOST_OUTLIERS = 200
#: What the bars of every fit leave out; docs/methods/error-bars.rst says more.
EXCLUDES = (
    "errors of the model itself: modes outside the band, dynamics that are not linear, an order that is wrong, a dead "
    "time that is wrong"
)
EXCLUDES_ORDER = "; the order was chosen by the same data, which the bars take as if it had been known"


def fit_details(found: Fit, source: FrequencyResponse, w: NDArray[np.float64], chosen: bool) -> dict[str, Any]:
    """Return the details of the receipt.

    Parameters
    ----------
    found : Fit
    source : FrequencyResponse
    w : [k] float
        Frequencies fitted, rad/s.
    chosen : bool
        Whether the data chose the order.
    """
    return {
        "lines": int(w.size),
        **found_details(found, chosen),
        "channels": [_channel(row) | {"frequency": row.frequency} for row in found.channels],
        "outliers": [
            {
                "frequency": row.frequency,
                "output": row.output,
                "input": row.input,
                "size": row.size,
                "weight": row.weight,
            }
            for row in found.outliers[:MOST_OUTLIERS]
        ],
        "band": _band(found, w),
        "dead_times": [
            {"seconds": row.seconds, "deviation": row.deviation, "output": row.output, "input": row.input}
            for row in found.dead_times
        ],
        "period": source.time.seconds if source.time.sampled else None,
    }


def sample_details(found: Fit, count: int, period: float | None, chosen: bool) -> dict[str, Any]:
    """Return the details of the receipt of a fit to an impulse response of so many samples."""
    return {
        "samples": count,
        **found_details(found, chosen),
        "channels": [_channel(row) | {"time": row.frequency} for row in found.channels],
        "period": period,
    }


def found_details(found: Fit, chosen: bool) -> dict[str, Any]:
    """Return what fits of all kinds of data tell."""
    return {
        "noise": {"basis": found.noise.basis, "level": found.noise.level},
        "candidates": [
            {
                "order": c.order,
                "rms": c.rms,
                "weighted": c.weighted,
                "criterion": c.criterion,
                "kept": c.kept,
                "held_out": c.held_out,
                "correlation": c.correlation,
                "spread": None if c.spread is None else _finite(c.spread),
                "cancelling": c.cancelling,
            }
            for c in found.candidates
        ],
        "poles": [[pole.real, pole.imag, count] for pole, count in Counter(found.poles.tolist()).items()],
        "modes": [
            {
                "frequency": row.frequency,
                "frequency_deviation": _finite(row.frequency_deviation),
                "damping": row.damping,
                "damping_deviation": _finite(row.damping_deviation) if row.pair else None,
                "dominance": row.dominance,
                "pair": row.pair,
                "rank": row.rank,
                "strength": _finite(row.strength),
                "cancelling": row.cancelling,
                "output_shape": _pairs(row.output_shape),
                "output_shape_deviation": _listed(row.output_shape_deviation),
                "input_shape": _pairs(row.input_shape),
                "input_shape_deviation": _listed(row.input_shape_deviation),
            }
            for row in found.pole_table
        ],
        "bars": _bars(found, chosen),
        "gain": {"value": _listed(found.gain), "deviation": _listed(found.gain_deviation)},
    }


def _channel(row: ChannelRow) -> dict[str, Any]:
    return {"output": row.output, "input": row.input, "rms": row.rms, "weighted": row.weighted, "worst": row.worst}


def _bars(found: Fit, chosen: bool) -> dict[str, Any] | None:
    bars = found.bars
    if bars is None:
        return None
    return {
        "basis": bars.basis,
        "level": bars.level,
        "freedom": bars.freedom,
        "correlation": bars.correlation,
        "white": bars.white,
        "independent": bars.independent,
        "enlarged": bars.enlarged,
        "growth": bars.growth,
        "excludes": EXCLUDES + (EXCLUDES_ORDER if chosen else ""),
    }


def _band(found: Fit, w: NDArray[np.float64]) -> dict[str, Any] | None:
    """Return the confidence band at lines spread over the data and at the ones nearest to the strongest modes."""
    if found.bars is None:
        return None
    count = min(w.size, BAND_LINES)
    spread = np.unique(np.rint(np.linspace(0, w.size - 1, max(count // 2, 1))).astype(int))
    strongest = sorted((row for row in found.pole_table if row.pair), key=lambda row: -row.dominance)
    nearest = [int(np.argmin(np.abs(w - row.frequency))) for row in strongest[: count - spread.size]]
    lines = np.union1d(spread, np.array(nearest, dtype=int))
    return {"frequency": w[lines].tolist(), "deviation": _listed(found.response_deviation[lines])}


def _finite(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None


def _listed(array: ArrayLike) -> Any:
    """Return an array as lists, with None for what is not determined."""
    values = np.asarray(array)
    if values.ndim == 0:
        return _finite(float(values))
    return [_listed(entry) for entry in values]


def _pairs(values: NDArray[np.complex128]) -> list[list[float]]:
    return [[value.real, value.imag] for value in values.tolist()]
