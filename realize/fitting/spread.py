"""Deviations of residues, direct terms, steady-state gain and response, in the units of the data."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.fitting.modes import Units
from realize.fitting.problem import Problem
from realize.fitting.records import Bars
from realize.fitting.restored import values_of
from realize.fitting.solution import Estimate
from realize.kernels.information import length

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class Spread:
    """One standard deviation (complex: sqrt of the mean |error|^2) of everything linear, flat over channels.

    ``response`` [k][channels], ``residues`` [n][channels], ``direct``, ``gain``, ``gain_deviation`` [channels].
    """

    response: Array
    residues: Array
    direct: Array
    gain: Array
    gain_deviation: Array


def deviations(
    problem: Problem, solution: Estimate, units: Units, bars: Bars, growth: Array, used: NDArray[np.bool_]
) -> Spread:
    """Return all deviations of a solution.

    The bars of a residue grow with those of its pole, those of response, gain and direct term with the largest.
    """
    covariance = solution.covariance
    level = np.inf if bars.level is None else bars.level
    most = level * float(np.max(growth, initial=1.0))
    channels, poles = problem.values.shape[1], solution.poles
    loose = bool(np.any(covariance.free))
    at_infinity = np.zeros(channels)
    residues = np.zeros((poles.size, channels))
    for c in np.flatnonzero(covariance.active):
        root = covariance.channel_root(int(c))
        at_infinity[c] = length((covariance.slopes.infinity(int(c)) @ root)[None])[0]
        for k in np.flatnonzero(poles.imag >= 0):
            paired = bool(poles[k].imag > 0)
            change = covariance.slopes.residue(int(k), int(c)) @ root
            if units.period is not None:
                moved = np.zeros(root.shape[1], dtype=complex)
                if k < solution.free:
                    moved = root[k] + 1j * root[k + 1] if paired else root[k].astype(complex)
                away = units.corner - poles[k]
                change = 2 * units.corner * (change + 2 * solution.residues[k, c] * moved / away) / away**2
            bar = length(np.abs(change)[None])[0] * growth[k]
            if np.any(covariance.free[k : k + 1 + int(paired)]):
                bar = np.inf
            residues[k : k + 1 + int(paired), c] = bar
    if units.period is not None:
        # in z a repeated pole mixes the coefficients of its powers
        residues[np.isin(poles, poles[solution.solution.powers > 1])] = np.inf

    lines = np.tile(at_infinity, (used.size, 1))
    lines[used] = covariance.response_deviation(problem.points)
    direct = at_infinity
    if units.period is not None:
        direct = covariance.response_deviation(np.array([complex(units.corner)]))[0]
    gain, gain_deviation = _steady_gain(solution)
    scale = units.shift if units.period is None else 0
    with np.errstate(over="ignore", under="ignore", invalid="ignore"):
        return Spread(
            response=_sized(lines, most, units.lift, False),
            residues=_sized(residues, level, units.lift + scale, False),
            direct=_sized(direct, most, units.lift, False),
            gain=np.ldexp(gain, units.lift),
            gain_deviation=_sized(gain_deviation, most, units.lift, loose),
        )


def _steady_gain(solution: Estimate) -> tuple[Array, Array]:
    """Return the value at s = 0 and its deviation, scaled; infinite with a pole there."""
    inner = solution.solution
    active = solution.covariance.active
    if np.any(inner.poles == 0):
        return np.where(active, np.inf, 0.0), np.where(active, np.inf, 0.0)
    zero = np.zeros(1, dtype=complex)
    parts = [r / (zero[:, None] - p) ** k for p, k, r in zip(inner.poles, inner.powers, inner.residues, strict=True)]
    value = values_of(inner, zero, parts)[0].real
    return value, solution.covariance.response_deviation(zero)[0]


def _sized(values: Array, level: float, exponents: NDArray[np.int64], loose: bool) -> Array:
    """Return values times level in the units of the data; a zero (nothing was fitted) stays zero."""
    if loose:
        return np.where(values == 0, 0.0, np.inf)
    product = np.where(values == 0, 0.0, values * level)
    return np.ldexp(product, exponents)
