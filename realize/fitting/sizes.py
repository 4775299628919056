"""How large a misfit is, over all, at its worst and channel by channel: one record for lines and for samples."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.fitting.records import ChannelRow, Worst
from realize.fitting.spread import Spread
from realize.models.checks import frozen

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Sizes:
    """Sizes of a misfit.

    Parameters
    ----------
    common : [channels] float
        Powers of two that bring the scaled channels beside each other, the largest 1.
    peak : [channels] float
        Largest scaled value.
    size : float
        Of all values, in these.
    rms : float
        Misfit over size.
    worst : Worst
    """

    common: Array
    peak: Array
    size: float
    rms: float
    worst: Worst


def sizes_of(missed: NDArray[Any], values: NDArray[Any], lift: NDArray[np.int64], places: Array, inputs: int) -> Sizes:
    """Return the sizes of a misfit [k][channels] beside the values, both without the powers of two ``lift``.

    Parameters
    ----------
    places : [k] float
        Frequency or time of each line.
    inputs : int
    """
    common = np.ldexp(1.0, np.maximum(lift - np.max(lift), -500))
    size = float(np.sqrt(np.sum(np.abs(values * common) ** 2)))
    rms = float(np.sqrt(np.sum(np.abs(missed * common) ** 2))) / size if size > 0 else 0.0
    peak = np.max(np.abs(values), axis=0)
    relative = np.abs(missed) / np.where(peak > 0, peak, 1.0)
    line, channel = (int(k) for k in np.unravel_index(int(np.argmax(relative)), relative.shape))
    worst = Worst(float(relative[line, channel]), line, channel // inputs, channel % inputs, float(places[line]))
    return Sizes(common, peak, size, rms, worst)


def channel_rows(
    missed: NDArray[Any], values: NDArray[Any], weighted: NDArray[Any], factor: float, places: Array, inputs: int
) -> tuple[ChannelRow, ...]:
    """Return the sizes of a misfit channel by channel.

    Parameters
    ----------
    missed, values, places, inputs
        As ``sizes_of``.
    weighted : [lines][channels]
        The misfit of the lines that were fitted, over deviations known up to ``factor``.
    """
    rows = []
    for c in range(missed.shape[1]):
        size, peak = float(np.linalg.norm(values[:, c])), float(np.max(np.abs(values[:, c])))
        worst = int(np.argmax(np.abs(missed[:, c])))
        noise = np.linalg.norm(weighted[:, c]) / np.sqrt(max(weighted.shape[0], 1))
        rows.append(
            ChannelRow(
                output=c // inputs,
                input=c % inputs,
                rms=float(np.linalg.norm(missed[:, c])) / size if size > 0 else 0.0,
                weighted=float(noise / factor) if size > 0 and factor > 0 else 0.0,
                worst=float(np.abs(missed[worst, c])) / peak if peak > 0 else 0.0,
                frequency=float(places[worst]),
            )
        )
    return tuple(rows)


def spread_fields(spread: Spread, shape: tuple[int, ...]) -> dict[str, Any]:
    """Return the fields of a ``Fit`` that hold the deviations, for data [k][outputs][inputs]."""
    p, m = shape[1:]
    return {
        "response_deviation": frozen(spread.response.reshape(shape)),
        "residue_deviation": frozen(spread.residues.reshape(-1, p, m)),
        "direct_deviation": frozen(spread.direct.reshape(p, m)),
        "gain": frozen(spread.gain.reshape(p, m)),
        "gain_deviation": frozen(spread.gain_deviation.reshape(p, m)),
    }
