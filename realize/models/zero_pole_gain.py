"""Zeros, poles and gain, channel by channel."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from realize.errors import InputError
from realize.kernels.response import root_ratio
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
        for i in range(p):
            for j in range(m):
                values[:, i, j] = root_ratio(self.zeros[i][j], self.poles[i][j], self.gain[i, j], points)
        return values
