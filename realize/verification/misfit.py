"""Claims about a model against measured data: the misfit at the data's own lines."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.models import FrequencyResponse, Model
from realize.schema import Claim, judge

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Misfit:
    """Model minus data at the data's lines: [k][outputs][inputs] complex, dead time included, with rounding bounds."""

    data: FrequencyResponse
    difference: NDArray[np.complex128]
    keep: NDArray[np.bool_]


def misfit(data: FrequencyResponse, model: Model, keep: NDArray[np.bool_] | None = None) -> Misfit:
    """Evaluate the model at the data's lines.

    Parameters
    ----------
    keep : [k] bool, optional
        The lines that count; all unless given.
    """
    lines = np.ones(data.radians.size, dtype=bool) if keep is None else keep
    with np.errstate(all="ignore"):
        # a line at a pole of the model gives an infinite misfit
        values = model.evaluate(model.time.points(data.radians[lines]))
    return Misfit(data, values - data.response[lines], lines)


def _where(part: Misfit, index: tuple[int, ...]) -> dict[str, float | int]:
    w = part.data.radians[part.keep]
    place: dict[str, float | int] = {"frequency": float(w[index[0]])}
    if len(index) == 3:
        place |= {"output": int(index[1]), "input": int(index[2])}
    return place


def rms_misfit(part: Misfit, limit: float | None = None) -> Claim:
    """Return the root mean square misfit relative to the root mean square response."""
    H = part.data.response[part.keep]
    top = float(np.abs(H).max()) or 1.0
    size = float(np.sqrt(np.sum(np.abs(H / top) ** 2)))
    error = float(np.sqrt(np.sum(np.abs(part.difference / top) ** 2)))
    value = error / size if size > 0 else (0.0 if error == 0 else np.inf)
    return judge("rms-misfit", value, limit=limit, uncertainty=_rounding(value))


def _rounding(value: float) -> float:
    """Rounding of the evaluation and the sums: far below any measured misfit, never zero."""
    return 1e-12 + 1e-9 * value


def worst_misfit(part: Misfit, limit: float | None = None) -> Claim:
    """Return the largest misfit of one channel at one line, relative to that channel's largest value."""
    H = np.abs(part.data.response[part.keep])
    peak = H.max(axis=0)
    peak = np.where(peak > 0, peak, H.max() or 1.0)
    relative = np.abs(part.difference) / peak
    index = tuple(int(i) for i in np.unravel_index(int(np.argmax(relative)), relative.shape))
    value = float(relative[index])
    return judge("worst-misfit", value, limit=limit, uncertainty=_rounding(value), where=_where(part, index))


def weighted_misfit(part: Misfit, deviation: Array | None, limit: float | None = None, note: str = "") -> Claim | None:
    """Return the root mean square of misfit / standard deviation; None without deviations."""
    if deviation is None:
        return None
    sigma = deviation[part.keep]
    usable = sigma > 0
    if not usable.any():
        return None
    ratio = np.abs(part.difference[usable]) / sigma[usable]
    value = float(np.sqrt(np.mean(ratio**2)))
    return judge("weighted-misfit", value, limit=limit, unit="1", uncertainty=_rounding(value), note=note)


def data_claims(
    data: FrequencyResponse, model: Model, limits: dict[str, float], keep: NDArray[np.bool_] | None = None
) -> list[Claim]:
    """Return the misfit claims that need nothing but data and model."""
    part = misfit(data, model, keep)
    claims = [rms_misfit(part, limits.get("rms-misfit")), worst_misfit(part, limits.get("worst-misfit"))]
    weighted = weighted_misfit(part, data.deviation, limits.get("weighted-misfit"))
    return claims + ([weighted] if weighted is not None else [])
