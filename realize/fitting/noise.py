"""Deviations of measured lines: given, from coherence, or estimated from the data.

Sources
-------
1. J. S. Bendat, A. G. Piersol, Random Data, 4th edition 2010, section 9.1: variance of an estimated frequency response
   |H|^2 (1 - c) / (2 n c) with coherence c and n averages (from memory).
2. T. Gasser, L. Sroka, C. Jennen-Steinmetz, "Residual variance and residual pattern in nonlinear regression",
   Biometrika 73, 1986: noise from what neighbouring points do not predict.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Fewer lines than this tell nothing about the shape of the noise.
FEWEST_LINES = 24
#: Smallest size of a response or deviation relative to the channel's median that is taken for real in an estimate.
SMALLEST_SHARE = 1e-6


def floored(deviation: Array, values: ComplexArray) -> Array | None:
    """Return given deviations [k][channels] fit for dividing; None if a channel has no positive one.

    A zero says that the deviation of that line is not known (one average, for instance): it takes that of the nearest
    line with a positive one. None is below the rounding of the value itself.
    """
    result = deviation.copy()
    lines = np.arange(result.shape[0])
    for c in range(result.shape[1]):
        positive = np.flatnonzero(result[:, c] > 0)
        if positive.size == 0:
            return None
        after = np.clip(np.searchsorted(positive, lines), 0, positive.size - 1)
        before = np.maximum(after - 1, 0)
        closer = np.abs(lines - positive[before]) <= np.abs(positive[after] - lines)
        nearest = np.where(closer, positive[before], positive[after])
        result[:, c] = np.maximum(result[nearest, c], np.finfo(float).eps * np.abs(values[:, c]))
    return result


def from_coherence(values: ComplexArray, coherence: Array) -> Array:
    """Return deviations up to a common factor: |H| sqrt((1 - c)/c) (reference 1).

    Floors: c is kept within [0.001, 0.9999] (a coherence nearer 1 is not known from a finite number of averages), and
    |H| is the root mean square of three neighbouring lines, at least a millionth of the channel's median.
    """
    c = np.clip(coherence, 1e-3, 1 - 1e-4)
    size = smoothed_size(values, 1)
    return np.maximum(size, SMALLEST_SHARE * np.median(size, axis=0)) * np.sqrt((1 - c) / c)


def smoothed_size(values: ComplexArray, reach: int) -> Array:
    """Return the root mean square of |values| over 2 reach + 1 neighbouring lines: [k][channels]."""
    square = np.abs(values) ** 2
    total = np.zeros_like(square)
    for shift in range(-reach, reach + 1):
        index = np.clip(np.arange(square.shape[0]) + shift, 0, square.shape[0] - 1)
        total += square[index]
    return np.sqrt(total / (2 * reach + 1))


def unpredicted(x: Array, values: ComplexArray) -> ComplexArray:
    """Return what cubic interpolation through two lines on either side misses, scaled to the deviation of one line.

    For white noise of deviation sigma each entry [k - 4][channels] has deviation sigma (reference 2).
    """
    k = x.size
    middle = np.arange(2, k - 2)
    nodes = middle[:, None] + np.array([-2, -1, 1, 2])[None, :]
    weights = np.ones((middle.size, 4))
    for i in range(4):
        for j in range(4):
            if i != j:
                weights[:, i] *= (x[middle] - x[nodes[:, j]]) / (x[nodes[:, i]] - x[nodes[:, j]])
    missed = values[middle] - np.einsum("ki,kic->kc", weights, values[nodes])
    return missed / np.sqrt(1 + np.sum(weights**2, axis=1))[:, None]


def noise_shape(x: Array, rough: ComplexArray, size: Array) -> Array:
    """Return deviations [k][channels] estimated line by line: sigma^2 = a^2 + b^2 |H|^2 with a, b for each channel.

    ``rough`` holds the data or the misfit of a fit, ``size`` the smoothed |H|. What neighbours do not predict is
    collected in groups of like |H|; each group's median (robust against the few lines at sharp resonances, where the
    response itself is not predicted) gives one level, and the ratio a : b is the one that fits the levels best in
    logarithms. A proportional part is used only where it explains the levels clearly better than a constant.
    """
    k, channels = rough.shape
    result = np.empty((k, channels))
    missed = np.abs(unpredicted(x, rough)) ** 2 if k >= 8 else np.zeros((0, channels))
    for c in range(channels):
        h = size[:, c] ** 2
        if k < 8 or not np.any(h > 0):
            result[:, c] = np.sqrt(np.mean(h)) if np.any(h > 0) else 1.0
            continue
        # ln 2: median of an exponential variable of mean 1
        power = missed[:, c] / np.log(2)
        inner = h[2:-2]
        if k < FEWEST_LINES:
            level = np.median(power)
            result[:, c] = np.sqrt(level) if level > 0 else np.sqrt(np.mean(h))
            continue
        groups = np.array_split(np.argsort(inner, kind="stable"), int(np.clip(k // 12, 2, 12)))
        level = np.array([np.median(power[g]) for g in groups])
        mean = np.array([np.median(inner[g]) for g in groups])
        top = np.max(mean)
        good = (level > 0) & (mean > 0)
        if np.sum(good) < 2:
            result[:, c] = np.sqrt(np.mean(h))
            continue
        level, mean = level[good], mean[good] / top
        best, chosen = np.inf, 0.0
        for ratio in [np.inf, *np.geomspace(1e6, 1e-14, 61)]:
            shape = np.ones_like(mean) if ratio == np.inf else ratio + mean
            spread = np.log(level / shape)
            error = float(np.sum((spread - np.mean(spread)) ** 2))
            # the constant comes first: anything else must halve what it leaves unexplained
            if error < best * (0.5 if best < np.inf and chosen == np.inf else 1.0):
                best, chosen = error, ratio
        shape = np.ones_like(h) if chosen == np.inf else chosen + h / top
        fitted = np.ones_like(mean) if chosen == np.inf else chosen + mean
        result[:, c] = np.sqrt(shape * np.exp(np.mean(np.log(level / fitted))))
    for c in range(channels):
        result[:, c] = np.maximum(result[:, c], SMALLEST_SHARE * np.median(result[:, c]))
    return result


def noise_factor(x: Array, misfit: ComplexArray, weights: Array) -> float:
    """Return the noise in units of 1/weights, from what neighbouring misfits do not predict; 0 if unknown."""
    if x.size < 8:
        return 0.0
    return float(np.sqrt(np.median(np.abs(unpredicted(x, misfit * weights)) ** 2) / np.log(2)))
