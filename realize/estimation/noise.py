"""Noise power of each line from few degrees of freedom: neighbouring lines share theirs."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

#: Degrees of freedom that lines collect from their neighbours: the deviation is then known to about 14 %,
#: and what weights made of it cost the estimates some 4 %.
ENOUGH = 24.0
#: A line whose own power exceeds that of its neighbours this often by chance only, keeps its own (hum).
BY_CHANCE = 1e-3


def pooled_noise(power: Array, freedom: float) -> tuple[Array, float]:
    """Return noise powers [lines][channels], shared among neighbours, and their degrees of freedom.

    A power with f degrees of freedom (of complex errors) is distributed as the true one times chi^2(2f)/(2f). Lines
    are averaged with as many neighbours as it takes for ``ENOUGH``. Where a line alone exceeds that mean by more than
    chance allows, its own counts: hum is not smeared away.
    """
    if freedom >= ENOUGH or power.shape[0] == 1:
        return power, freedom
    reach = min(int(np.ceil((ENOUGH / freedom - 1) / 2)), (power.shape[0] - 1) // 2)
    padded = np.concatenate([power[reach:0:-1], power, power[-2 : -2 - reach : -1]]) if reach else power
    total = np.cumsum(np.concatenate([np.zeros((1, power.shape[1])), padded]), axis=0)
    width = 2 * reach + 1
    mean = (total[width:] - total[:-width]) / width
    # chi-squared, by the cube root of Wilson and Hilferty: 3.09 deviations for one in a thousand
    variance = 1 / (9 * freedom)
    limit = (1 - variance + 3.09 * np.sqrt(variance)) ** 3
    return np.where(power > limit * mean, power, mean), freedom * width


def deviation_factor(freedom: float) -> float:
    """Return the factor on a deviation that makes the mean square of error / deviation one: sqrt(f / (f - 1)).

    The error is normal and the deviation's square is chi-squared with 2f degrees of freedom, independent of it.
    """
    return float(np.sqrt(freedom / max(freedom - 1, 0.25)))


def running_median(values: Array, reach: int) -> Array:
    """Return the median over 2 reach + 1 neighbours, fewer at the ends: [lines][channels]."""
    n = values.shape[0]
    result = np.empty_like(values)
    for k in range(n):
        result[k] = np.median(values[max(0, k - reach) : k + reach + 1], axis=0)
    return result
