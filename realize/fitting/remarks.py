"""Words about a fit: what the data do not show, and what the error bars do not say."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from realize.fitting.records import Noise, PoleRow, Worst

Array = NDArray[np.float64]

#: Misfit of this many times the noise is worth a caution.
POOR = 1.5


def remarks(
    table: tuple[PoleRow, ...],
    w: Array,
    noise: Noise,
    weighted: float,
    worst: Worst,
) -> list[str]:
    """Return the cautions of a fit."""
    remarks = []
    lowest = w[w > 0][0]
    slow = [row for row in table if 0 < row.frequency < 0.1 * lowest and row.dominance > 0.1]
    if slow:
        remarks.append(
            f"{sum(2 if row.pair else 1 for row in slow)} pole(s) lie below a tenth of the lowest line: the data look "
            "like an integrator there, and the model is a stable stand-in for it below the band"
        )
    fast = [row for row in table if row.frequency > 10 * w[-1] and row.dominance > 1]
    if fast:
        remarks.append(
            f"{sum(2 if row.pair else 1 for row in fast)} pole(s) lie far above the highest line: the response still "
            "grows there, and the (proper) model levels off somewhere above the band"
        )
    narrow = [row for row in table if row.pair and _narrow(row, w)]
    if narrow:
        places = ", ".join(f"{row.frequency:.6g}" for row in narrow)
        remarks.append(
            "resonance(s) narrower than half the distance of the lines, whose damping hangs on a few lines: "
            f"{places} rad/s"
        )
    if weighted > POOR and noise.level > 0 and worst.value > 1e-9:
        source = "given" if noise.basis == "given" else "estimated"
        remarks.append(
            f"the misfit is {weighted:.3g} times the {source} noise: the data contain more than a model of this order, "
            "or their errors are not independent from line to line"
        )
    return remarks


def _narrow(row: PoleRow, w: Array) -> bool:
    if w.size < 3 or not w[0] < row.frequency < w[-1]:
        return False
    k = int(np.clip(np.searchsorted(w, row.frequency), 1, w.size - 1))
    return 2 * row.damping * row.frequency < 0.5 * (w[k] - w[k - 1])
