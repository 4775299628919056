"""The mode table of a fit, with error bars: frequency, damping, shapes across channels, strength."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.fitting.bars import judged
from realize.fitting.records import Bars, PoleRow
from realize.fitting.sample_problem import Measured
from realize.fitting.solution import Estimate
from realize.kernels.information import length

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: A residue that noise alone would reach once in a thousand fits may be noise.
CHANCE = 1e-3
#: Poles of samples nearer to zero than this are gone after one sample.
SMALLEST_POLE = 2.0**-200


@dataclass(frozen=True)
class Units:
    """Powers of two taken off frequencies (``shift``) and channels (``lift``), and the period of sampled data."""

    shift: int
    lift: NDArray[np.int64]
    period: float | None

    @property
    def corner(self) -> float:
        """The c of s = c (z - 1)/(z + 1), scaled."""
        return float(np.ldexp(1.0, -self.shift))

    def frequency(self, value: float) -> float:
        """Return rad/s for a scaled frequency (sampled data: for one in radians a sample)."""
        return float(np.ldexp(value, self.shift)) if self.period is None else value / self.period

    def in_time(self, poles: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
        """Return continuous poles (scaled; sampled data: ln z) and their derivative by the fitted ones."""
        if self.period is None:
            return poles, np.ones_like(poles)
        c = self.corner
        z = (c + poles) / (c - poles)
        return np.log(z), 2 * c / ((c - poles) * (c + poles))

    def residue_change(
        self, change: ComplexArray, moved: ComplexArray, pole: complex, residue: complex
    ) -> ComplexArray:
        """Return changes of a residue of the result, from those of the fitted residue and of its pole."""
        if self.period is None:
            return change
        away = self.corner - pole
        result: ComplexArray = 2 * self.corner * (change + 2 * residue * moved / away) / away**2
        return result


@dataclass(frozen=True)
class SampleUnits(Units):
    """Where the fitted poles are those of samples themselves, z."""

    def in_time(self, poles: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
        # a pole at z = 0 has no logarithm: it is as good as one so far inside, with bars that say nothing
        z = np.where(np.abs(poles) < SMALLEST_POLE, SMALLEST_POLE, poles).astype(complex)
        return np.log(z), np.asarray(1 / z, dtype=complex)

    def residue_change(
        self, change: ComplexArray, moved: ComplexArray, pole: complex, residue: complex
    ) -> ComplexArray:
        return change


def mode_table(
    problem: Measured, solution: Estimate, shape: tuple[int, int], units: Units, dominance: Array
) -> tuple[tuple[PoleRow, ...], Bars, Array]:
    """Return the rows by increasing frequency, what stands behind their bars, and the growth of bars by pole.

    Parameters
    ----------
    problem : Problem or SampleProblem
    solution : Estimate
    shape : (outputs, inputs)
    units : Units
    dominance : [n] float
        As in the rows, for the first of a pair.
    """
    poles = solution.poles
    first = np.flatnonzero(poles.imag >= 0)
    s, slope = units.in_time(poles[first])
    moving = first < solution.free
    wanted = np.zeros((2 * first.size, solution.free))
    a, b, size = s.real, s.imag, np.abs(s)
    with np.errstate(divide="ignore", invalid="ignore"):
        by_s = [(a / size, b / size), (-(b**2) / size**3, a * b / size**3)]
    for row, (da, db) in enumerate(by_s):
        at = 2 * np.arange(first.size) + row
        wanted[at[moving], first[moving]] = np.nan_to_num(da * slope.real + db * slope.imag)[moving]
        paired = (poles[first].imag > 0) & moving
        wanted[at[paired], first[paired] + 1] = np.nan_to_num(db * slope.real - da * slope.imag)[paired]
    found = judged(problem, solution, wanted)
    deviation, growth = found.deviation.reshape(-1, 2), found.growth.reshape(-1, 2).max(axis=1)
    level = found.bars.level
    rows = []
    for j, k in enumerate(first):
        frequency = float(size[j])
        rows.append(
            PoleRow(
                frequency=frequency,
                damping=float(-a[j] / size[j]) if frequency > 0 else 1.0,
                dominance=float(dominance[k]),
                index=int(k),
                pair=bool(poles[k].imag > 0),
                frequency_deviation=float(deviation[j, 0]),
                damping_deviation=float(deviation[j, 1]) if b[j] != 0 else 0.0,
                rank=int(solution.ranks[k]),
                **_shapes(solution, int(k), shape, units, growth[j], level),
            )
        )
    order = np.argsort([row.frequency for row in rows], kind="stable")
    by_pole = np.ones(poles.size)
    by_pole[first] = growth
    by_pole[first[poles[first].imag > 0] + 1] = growth[poles[first].imag > 0]
    table = tuple(
        replace(
            rows[i],
            frequency=units.frequency(rows[i].frequency),
            frequency_deviation=units.frequency(rows[i].frequency_deviation),
        )
        for i in order
    )
    return table, found.bars, by_pole


def _shapes(
    solution: Estimate, index: int, shape: tuple[int, int], units: Units, growth: float, level: float | None
) -> dict[str, Any]:
    """Return shapes, their deviations, strength and whether the residue may be noise."""
    from scipy.special import chdtri

    paired = bool(solution.poles[index].imag > 0)
    residue = solution.residues[index]
    root = solution.covariance.residue_root(index, paired)
    step = root[::2] + 1j * root[1::2] if paired else root.astype(complex)
    known = level is not None and not np.any(solution.covariance.free[index : index + 1 + int(paired)])
    size = growth * level if known and level is not None else np.inf
    strength = _strength(root, residue, paired, level, growth)
    freedom = residue.size * (2 if paired else 1)
    with np.errstate(divide="ignore"):
        magnitude = np.log2(np.abs(residue)) + units.lift
    top = int(np.argmax(magnitude))
    i, j = divmod(top, shape[1])
    result: dict[str, Any] = {"strength": strength, "cancelling": bool(strength**2 < chdtri(freedom, CHANCE))}
    places = {
        "output_shape": np.arange(shape[0]) * shape[1] + j,
        "input_shape": i * shape[1] + np.arange(shape[1]),
    }
    for name, where in places.items():
        if residue[top] == 0:
            value, spread = np.zeros(where.size, complex), np.full(where.size, np.inf)
        else:
            # at most 1 but for rounding, whatever the units
            unit = np.ldexp(1.0, np.maximum(units.lift[where] - units.lift[top], -1074).astype(int))
            ratio = residue[where] / residue[top]
            change = (step[where] - ratio[:, None] * step[top]) / residue[top]
            ratio[where == top], change[where == top] = 1.0, 0.0
            value = ratio * unit
            with np.errstate(invalid="ignore"):
                spread = np.nan_to_num(length(np.abs(change)) * unit * size, nan=0.0, posinf=np.inf)
        for array, key in ((value, name), (spread, f"{name}_deviation")):
            array.setflags(write=False)
            result[key] = array
    return result


def _strength(root: Array, residue: ComplexArray, paired: bool, level: float | None, growth: float) -> float:
    if level is None or level == 0:
        return 0.0 if level is None else np.inf
    flat = np.stack([residue.real, residue.imag], axis=1).reshape(-1) if paired else residue.real
    # the covariance of a residue of low rank is singular: its own directions alone count
    u, d, _ = np.linalg.svd(root, full_matrices=False)
    kept = d > 1e-9 * np.max(d, initial=0.0)
    with np.errstate(over="ignore"):
        return float(np.linalg.norm((u[:, kept].T @ flat) / d[kept]) / (level * growth))
