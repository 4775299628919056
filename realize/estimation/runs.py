"""Repeated frequency responses to their mean and its deviation, line by line and channel by channel."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from realize.errors import InputError
from realize.estimation.noise import deviation_factor, pooled_noise

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Frequencies of two runs are the same to this share, which the decimals of a table keep.
SAME = 1e-6


def same_lines(frequencies: Sequence[Array], names: Sequence[str]) -> None:
    """Raise InputError where runs have different frequencies, with what they have in common in words."""
    first = frequencies[0]
    for name, other in zip(names[1:], frequencies[1:], strict=True):
        if other.size == first.size and np.all(np.abs(other - first) <= SAME * np.abs(first)):
            continue
        hint = ratio_of_units(first, other)
        if hint:
            raise InputError(f"frequencies {hint}", f"the frequencies of {names[0]}, in the same unit", file=name)
        if other.size != first.size:
            raise InputError(
                f"{other.size} lines", f"{first.size} at the same frequencies, as in {names[0]}", file=name
            )
        k = int(np.argmax(np.abs(other - first) > SAME * np.abs(first)))
        raise InputError(
            f"{other[k]:.9g} rad/s", f"{first[k]:.9g} rad/s, as in {names[0]}", field=f"frequency[{k}]", file=name
        )


def ratio_of_units(first: Array, other: Array) -> str:
    """Return words where two lists of frequencies differ by the factor 2 pi, '' where they do not."""
    if first.size != other.size or first.size < 2:
        return ""
    some = first > 0
    if not np.any(some):
        return ""
    ratio = other[some] / first[some]
    for factor, words in ((2 * np.pi, "2 pi times those"), (1 / (2 * np.pi), "1/(2 pi) of those")):
        if np.all(np.abs(ratio / factor - 1) < 1e-3):
            return f"{words} of the other: one of the two is in Hz and read as rad/s, or the other way round"
    return ""


def merge(responses: ComplexArray, deviations: Array | None) -> tuple[ComplexArray, Array]:
    """Return mean [k][outputs][inputs] of runs and the standard deviation of that mean.

    Without deviations: sqrt(sum |H_r - mean|^2 / (R (R - 1))), the sum shared with neighbouring lines where R is small.
    With them: weights 1/deviation^2; the deviation is 1/sqrt(sum of weights), raised where the runs scatter by more
    than they state (R. T. Birge, Physical Review 40, 1932).

    Parameters
    ----------
    responses : [runs][k][outputs][inputs] complex
        Two runs or more.
    deviations : [runs][k][outputs][inputs] float, optional
        All above zero.
    """
    runs, lines, p, m = responses.shape
    freedom = float(runs - 1)
    if deviations is None:
        mean = np.mean(responses, axis=0)
        power = np.sum(np.abs(responses - mean) ** 2, axis=0).reshape(lines, p * m) / freedom
        shared, total = pooled_noise(power, freedom)
        return mean, np.sqrt(shared / runs).reshape(lines, p, m) * deviation_factor(total)
    top = np.max(deviations)
    weights = (top / deviations) ** 2
    whole = np.sum(weights, axis=0)
    mean = np.sum(weights * responses, axis=0) / whole
    scatter = np.sum(weights * np.abs((responses - mean) / top) ** 2, axis=0).reshape(lines, p * m) / freedom
    shared, _ = pooled_noise(scatter, freedom)
    # stated deviations hold unless the runs contradict them beyond chance
    wide = shared.reshape(lines, p, m)
    return mean, top / np.sqrt(whole) * np.sqrt(np.maximum(wide, 1.0))
