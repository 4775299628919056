"""Claims about a model against measured data: the misfit at the data's own lines."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.models import FrequencyResponse, Model
from realize.schema import Claim, judge
from realize.verification.fragility import fragility
from realize.verification.views import view_of

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Misfit:
    """Model minus data at the lines that count, and a bound on its rounding: [k][outputs][inputs]."""

    data: FrequencyResponse
    difference: NDArray[np.complex128]
    bound: Array | None
    keep: NDArray[np.bool_]


def misfit(data: FrequencyResponse, model: Model, keep: NDArray[np.bool_] | None = None) -> Misfit:
    """Evaluate the model at the data's lines, from exact fractions where affordable.

    Parameters
    ----------
    keep : [k] bool, optional
        The lines that count; all unless given.
    """
    lines = np.ones(data.radians.size, dtype=bool) if keep is None else keep
    w = data.radians[lines]
    view = view_of(model)
    with np.errstate(all="ignore"):
        # a line at a pole of the model gives an infinite misfit
        values = model.delayed(view.response(w), model.time.points(w))
        size = np.abs(values) + np.abs(data.response[lines])
    if view.fractions is not None:
        turns = 0.0 if model.dead_time is None else float(w.max() * model.dead_time.total.max())
        bound = _EPS * (8 + 2 * turns) * size
    else:
        fragile = fragility(model, w[w > 0]) if np.any(w > 0) else None
        bound = None if fragile is None else (16 * fragile + 8 * _EPS) * size
    return Misfit(data, values - data.response[lines], bound, lines)


_EPS = float(np.finfo(float).eps)


def _where(part: Misfit, index: tuple[int, ...]) -> dict[str, float | int]:
    w = part.data.radians[part.keep]
    place: dict[str, float | int] = {"frequency": float(w[index[0]])}
    if len(index) == 3:
        place |= {"output": int(index[1]), "input": int(index[2])}
    return place


def _norm(values: NDArray[Any]) -> float:
    """Return the root of the sum of squares, safe against overflow."""
    top = float(np.abs(values).max(initial=0.0))
    if not np.isfinite(top) or top == 0:
        return top
    # sizes first: a complex quotient by a subnormal number overflows
    return float(np.sqrt(np.sum((np.abs(values) / top) ** 2))) * top


def _ratio(value: float, size: float) -> float:
    return value / size if size > 0 else (0.0 if value == 0 else np.inf)


def _hidden(part: Misfit, measure: Callable[[NDArray[Any]], float], value: float) -> float | None:
    """Return what rounding in the evaluation and in the sums can hide."""
    if part.bound is None:
        return None
    return measure(part.bound) + 1e-12 * value


def rms_misfit(part: Misfit, limit: float | None = None) -> Claim:
    """Return the root mean square misfit relative to the root mean square response."""
    size = _norm(part.data.response[part.keep])

    def measure(values: NDArray[Any]) -> float:
        return _ratio(_norm(values), size)

    value = measure(part.difference)
    return judge("rms-misfit", value, limit=limit, uncertainty=_hidden(part, measure, value))


def worst_misfit(part: Misfit, limit: float | None = None) -> Claim:
    """Return the largest misfit of one channel at one line, relative to that channel's largest value."""
    H = np.abs(part.data.response[part.keep])
    peak = H.max(axis=0)
    peak = np.where(peak > 0, peak, H.max() or 1.0)

    def measure(values: NDArray[Any]) -> float:
        return float((np.abs(values) / peak).max())

    relative = np.abs(part.difference) / peak
    index = tuple(int(i) for i in np.unravel_index(int(np.argmax(relative)), relative.shape))
    value = float(relative[index])
    hidden = _hidden(part, measure, value)
    return judge("worst-misfit", value, limit=limit, uncertainty=hidden, where=_where(part, index))


def weighted_misfit(part: Misfit, deviation: Array | None, limit: float | None = None, note: str = "") -> Claim | None:
    """Return the root mean square of misfit / standard deviation; None without deviations."""
    if deviation is None:
        return None
    sigma = deviation[part.keep]
    usable = sigma > 0
    if not usable.any():
        return None

    def measure(values: NDArray[Any]) -> float:
        with np.errstate(over="ignore"):
            return _norm(np.abs(values[usable]) / sigma[usable]) / float(np.sqrt(usable.sum()))

    value = measure(part.difference)
    return judge("weighted-misfit", value, limit=limit, unit="1", uncertainty=_hidden(part, measure, value), note=note)


def data_claims(
    data: FrequencyResponse, model: Model, limits: dict[str, float], keep: NDArray[np.bool_] | None = None
) -> list[Claim]:
    """Return the misfit claims that need nothing but data and model."""
    part = misfit(data, model, keep)
    claims = [rms_misfit(part, limits.get("rms-misfit")), worst_misfit(part, limits.get("worst-misfit"))]
    weighted = weighted_misfit(part, data.deviation, limits.get("weighted-misfit"))
    return claims + ([weighted] if weighted is not None else [])
