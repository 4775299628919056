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
    for c in np.flatnonzero(covariance.active):
        root = covariance.channel_root(int(c))
        at_infinity[c] = length((covariance.slopes.infinity(int(c)) @ root)[None])[0]
    residues = residue_deviations(solution, units, growth)
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
            response=sized(lines, most, units.lift, False),
            residues=sized(residues, level, units.lift + scale, False),
            direct=sized(direct, most, units.lift, False),
            gain=np.ldexp(gain, units.lift),
            gain_deviation=sized(gain_deviation, most, units.lift, loose),
        )


def residue_deviations(solution: Estimate, units: Units, growth: Array) -> Array:
    """Return the deviations of all residues, each grown with its pole's, in units of the noise level: [n][channels]."""
    covariance, poles = solution.covariance, solution.poles
    result = np.zeros((poles.size, covariance.active.size))
    for c in np.flatnonzero(covariance.active):
        root = covariance.channel_root(int(c))
        for k in np.flatnonzero(poles.imag >= 0):
            paired = bool(poles[k].imag > 0)
            moved = np.zeros(root.shape[1], dtype=complex)
            if k < solution.free:
                moved = root[k] + 1j * root[k + 1] if paired else root[k].astype(complex)
            change = covariance.slopes.residue(int(k), int(c)) @ root
            change = units.residue_change(change, moved, poles[k], solution.residues[k, c])
            bar = length(np.abs(change)[None])[0] * growth[k]
            if np.any(covariance.free[k : k + 1 + int(paired)]):
                bar = np.inf
            result[k : k + 1 + int(paired), c] = bar
    return result


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


def sized(values: Array, level: float, exponents: NDArray[np.int64], loose: bool) -> Array:
    """Return values times level in the units of the data; a zero (nothing was fitted) stays zero."""
    if loose:
        return np.where(values == 0, 0.0, np.inf)
    product = np.where(values == 0, 0.0, values * level)
    return np.ldexp(product, exponents)
