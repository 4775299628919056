"""Partial fractions."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from realize.errors import InputError
from realize.kernels.response import partial_fractions
from realize.kernels.trust import POINT_OPERATIONS, RESIDUE_OPERATIONS, corrected
from realize.models import checks
from realize.models.base import ComplexArray, Model


@dataclass(frozen=True, eq=False, kw_only=True, repr=False)
class PoleResidue(Model):
    """Pole-residue form: sum of residues[k] / (s - poles[k])^powers[k], plus a polynomial part.

    Parameters
    ----------
    poles : [n] complex
        Both members of each conjugate pair; a pole that repeats is listed once for each power.
    residues : [n][outputs][inputs] complex
    powers : [n] int, optional
        1 unless given.
    direct : [outputs][inputs] or [power][outputs][inputs], optional
        Feed-through, or polynomial part with the highest power first. Needed when there are no poles.
    """

    kind: ClassVar[str] = "pole-residue"
    poles: Any
    residues: Any
    powers: Any = None
    direct: Any = None

    def _normalise(self) -> None:
        poles = checks.array(self.poles, "poles", 1, complex, allow=self.decimals.get("poles"))
        n = poles.size
        residues = self.residues
        direct = None if self.direct is None else self._direct()
        if n == 0:
            if direct is None:
                raise InputError("neither poles nor a direct part", "a direct part [outputs][inputs]", field="direct")
            residues = np.zeros((0, *direct.shape[1:]), dtype=complex)
        residues = checks.array(residues, "residues", 3, complex, allow=self.decimals.get("residues"))
        if residues.shape[0] != n:
            raise InputError(f"{residues.shape[0]} residue matrices", f"{n}, one for each pole", field="residues")
        if 0 in residues.shape[1:]:
            raise InputError("no channels", "at least one input and one output", field="residues")
        if direct is None:
            direct = np.zeros((1, *residues.shape[1:]))
        if direct.shape[1:] != residues.shape[1:]:
            raise InputError(
                f"{direct.shape[1]} x {direct.shape[2]}", f"{residues.shape[1]} x {residues.shape[2]}", field="direct"
            )
        powers = np.ones(n, dtype=int) if self.powers is None else checks.array(self.powers, "powers", 1)
        if powers.size != n:
            raise InputError(f"{powers.size} powers", f"{n}, one for each pole", field="powers")
        bad = np.flatnonzero((powers < 1) | (powers != np.rint(powers)))
        if bad.size:
            raise InputError(f"{powers[bad[0]]:g}", "a positive integer", field=f"powers[{bad[0]}]")
        seen: dict[tuple[complex, int], int] = {}
        whole = powers.astype(int)
        for k in range(n):
            key = (complex(poles[k]), int(whole[k]))
            if key in seen:
                raise InputError(
                    f"pole {key[0]:g} with power {key[1]} again (first at poles[{seen[key]}])",
                    "one entry for each pole and power; give repeated poles increasing powers, or add the residues",
                    field=f"poles[{k}]",
                )
            seen[key] = k
        for k in range(n):
            pole = complex(poles[k])
            mate = seen.get((pole.conjugate(), int(whole[k])))
            if mate is None:
                raise InputError(
                    f"{pole:g} without its conjugate",
                    "both members of every conjugate pair, equal to the last bit",
                    field=f"poles[{k}]",
                )
            if not np.array_equal(residues[mate], residues[k].conj()):
                raise InputError(
                    "residues that are not the conjugates of those of the conjugate pole",
                    f"the conjugates of residues[{mate}]" if mate != k else "real residues at a real pole",
                    field=f"residues[{k}]",
                )
        self._put("poles", poles)
        self._put("residues", residues)
        self._put("powers", checks.frozen(whole))
        self._put("direct", checks.frozen(direct))

    def _direct(self) -> np.ndarray:
        value = self.direct
        depth = np.ndim(value) if not isinstance(value, (list, tuple)) else _depth(value)
        decimals = dict(self.decimals.get("direct", {}))
        if depth == 2:
            value = [value]
            decimals = {(0, *index): text for index, text in decimals.items()}
            self._put("decimals", {**self.decimals, "direct": decimals})
        array = checks.array(value, "direct", 3, allow=decimals)
        if array.shape[0] == 0:
            raise InputError("no powers", "at least the constant term", field="direct")
        return array

    @property
    def shape(self) -> tuple[int, int]:
        return self.residues.shape[1], self.residues.shape[2]

    @property
    def order(self) -> int:
        p, m = self.shape
        finite = 0
        for pole in dict.fromkeys(self.poles.tolist()):
            members = self.poles == pole
            highest = int(self.powers[members].max())
            if p * m == 1:
                finite += highest
            else:
                finite += block_rank(self.residues[members], self.powers[members])
        degree = self.direct.shape[0] - 1
        return finite + degree * min(p, m)

    def rational_part(self, points: ComplexArray) -> ComplexArray:
        values, bound = partial_fractions(self.poles, self.residues, self.powers, self.direct, points)
        if self.decimals:
            # the doubles are themselves rounded: relative to the distance from the poles
            bound = np.full(points.size, np.inf)
        p, m = self.shape
        operations = POINT_OPERATIONS + RESIDUE_OPERATIONS * self.poles.size * p * m
        return corrected(values, bound, points, operations, self._exact_values)

    def _exact_values(self, points: ComplexArray) -> ComplexArray:
        """Return the response at finite points in exact arithmetic, rounded once."""
        from realize.kernels.exact.numbers import complex_fraction, fraction
        from realize.kernels.exact.points import partial_fractions_at

        poles = [complex_fraction(pole) for pole in self.exact("poles")]
        residues = [[[complex_fraction(r) for r in row] for row in matrix] for matrix in self.exact("residues")]
        direct = [[[fraction(c) for c in row] for row in matrix] for matrix in self.exact("direct")]
        return partial_fractions_at(poles, residues, [int(power) for power in self.powers], direct, points)


def _depth(value: Any) -> int:
    depth = 0
    while isinstance(value, (list, tuple)) and value:
        depth += 1
        value = value[0]
    return depth + (np.ndim(value) if isinstance(value, np.ndarray) else 0)


def block_rank(residues: np.ndarray, powers: np.ndarray) -> int:
    """Rank of the block Hankel matrix of one pole's Laurent coefficients: its share of the McMillan degree.

    Gilbert (1963) for simple poles; Kailath, Linear Systems (1980), for repeated ones (from memory).
    """
    highest = int(powers.max())
    p, m = residues.shape[1:]
    hankel = np.zeros((highest * p, highest * m), dtype=complex)
    for power, matrix in zip(powers, residues, strict=True):
        for i in range(int(power)):
            j = int(power) - 1 - i
            hankel[i * p : (i + 1) * p, j * m : (j + 1) * m] = matrix
    singular = np.linalg.svd(hankel, compute_uv=False)
    return int(np.sum(singular > singular[0] * max(hankel.shape) * 4 * np.finfo(float).eps)) if singular[0] > 0 else 0
