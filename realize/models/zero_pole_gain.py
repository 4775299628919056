"""Zeros, poles and gain, channel by channel."""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial
from typing import Any, ClassVar

import numpy as np

from realize.errors import InputError
from realize.kernels.response import root_ratio
from realize.kernels.trust import POINT_OPERATIONS, SECTION_OPERATIONS, corrected
from realize.models import checks
from realize.models.base import ComplexArray, Model


@dataclass(frozen=True, eq=False, kw_only=True, repr=False)
class ZeroPoleGain(Model):
    """Zero-pole-gain: gain * prod(s - zero) / prod(s - pole) for each channel.

    Parameters
    ----------
    zeros, poles : list of complex, or [outputs][inputs] of lists
        Both members of each conjugate pair (rad/s; plain numbers for a sampled model); one list of poles serves all.
    gain : float or [outputs][inputs]
    """

    kind: ClassVar[str] = "zero-pole-gain"
    zeros: Any
    poles: Any
    gain: Any

    def _normalise(self) -> None:
        decimals = {name: dict(rows) for name, rows in self.decimals.items()}
        gain = self.gain if np.ndim(self.gain) else [[self.gain]]
        self._put("gain", checks.array(gain, "gain", 2, allow=decimals.get("gain")))
        shape = self.gain.shape
        if 0 in shape:
            raise InputError("no channels", "at least one input and one output", field="gain")
        for name in ("zeros", "poles"):
            lists = checks.channels(getattr(self, name), name, complex, allow=decimals.get(name))
            if len(lists) * len(lists[0]) == 1 and shape != (1, 1):
                decimals[name] = {
                    (i, j, *index[2:]): text
                    for index, text in decimals.get(name, {}).items()
                    for i in range(shape[0])
                    for j in range(shape[1])
                }
            lists = checks.spread(lists, shape, name)
            for i, row in enumerate(lists):
                for j, roots in enumerate(row):
                    checks.conjugation_closed(roots, f"{name}[{i}][{j}]")
            self._put(name, lists)
        self._put("decimals", decimals)

    @property
    def shape(self) -> tuple[int, int]:
        return self.gain.shape

    @property
    def order(self) -> int:
        p, m = self.shape
        degrees = [max(self.poles[i][j].size, self.zeros[i][j].size) for i in range(p) for j in range(m)]
        first = self.poles[0][0]
        if p * m > 1 and all(np.array_equal(roots, first) for row in self.poles for roots in row):
            return max(degrees) * min(p, m)
        return sum(degrees)

    def rational_part(self, points: ComplexArray) -> ComplexArray:
        p, m = self.shape
        values = np.empty((points.size, p, m), dtype=complex)
        beyond, rounded = bool(self.beyond_doubles), ("zeros" in self.decimals, "poles" in self.decimals)
        for i in range(p):
            for j in range(m):
                zeros, poles = self.zeros[i][j], self.poles[i][j]
                gain = 1.0 if beyond else self.gain[i, j]
                rough, bound = root_ratio(zeros, poles, gain, points, *rounded)
                if beyond:
                    bound = np.full(points.size, np.inf)
                operations = POINT_OPERATIONS + SECTION_OPERATIONS * (zeros.size + poles.size)
                values[:, i, j] = corrected(rough, bound, points, operations, partial(self._exact_values, i, j))
        return values

    def _exact_values(self, i: int, j: int, points: ComplexArray) -> ComplexArray:
        """Return one channel at finite points in exact arithmetic, rounded once."""
        from realize.kernels.exact.numbers import complex_fraction, fraction
        from realize.kernels.exact.points import products_at
        from realize.kernels.exact.polynomials import from_roots

        sides = []
        for name in ("zeros", "poles"):
            roots = [complex_fraction(root) for root in self.exact(name)[i][j]]
            pairs = [[(x, y), (x, -y)] if y else [(x, y)] for x, y in roots if y >= 0]
            sides.append([from_roots(pair) for pair in pairs])
        return products_at(fraction(self.exact("gain")[i][j]), sides[0], sides[1], points)
