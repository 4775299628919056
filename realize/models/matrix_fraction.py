"""Matrix fractions: G = N D^-1 (right) or D^-1 N (left) with polynomial matrices N, D."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from realize.errors import InputError
from realize.models import checks
from realize.models.base import ComplexArray, Model

#: Largest size of a denominator and highest power that are accepted.
LARGEST_SIDE, LARGEST_POWER = 100, 1000


@dataclass(frozen=True, eq=False, kw_only=True, repr=False)
class MatrixFraction(Model):
    """Matrix fraction: numerator denominator^-1 (side "right") or denominator^-1 numerator (side "left").

    Parameters
    ----------
    side : str
        "left" or "right": the side of the denominator.
    numerator : [power][outputs][inputs]
        Highest power first; leading zero matrices are dropped.
    denominator : [power][n][n]
        n inputs (right) or outputs (left); its determinant must not be zero for every s.
    """

    kind: ClassVar[str] = "matrix-fraction"
    side: str
    numerator: Any
    denominator: Any

    def _normalise(self) -> None:
        if self.side not in ("left", "right"):
            raise InputError(f"{self.side!r}", '"left" or "right"', field="side")
        decimals = {name: dict(rows) for name, rows in self.decimals.items()}
        for name in ("numerator", "denominator"):
            values = checks.array(getattr(self, name), name, 3, allow=decimals.get(name))
            if 0 in values.shape:
                raise InputError("an empty polynomial matrix", "[power][row][column]", field=name)
            if values.shape[0] - 1 > LARGEST_POWER or max(values.shape[1:]) > LARGEST_SIDE:
                raise InputError(
                    f"shape {list(values.shape)}",
                    f"powers up to {LARGEST_POWER} and up to {LARGEST_SIDE} rows and columns",
                    field=name,
                )
            table = decimals.get(name, {})
            start = 0
            while start < values.shape[0] - 1 and not np.any(values[start]):
                if any(k[0] == start and checks.decimal_fraction(text, name) != 0 for k, text in table.items()):
                    break
                start += 1
            decimals[name] = {(k[0] - start, *k[1:]): text for k, text in table.items() if k[0] >= start}
            self._put(name, checks.frozen(values[start:]))
        self._put("decimals", decimals)
        p, m = self.shape
        size = m if self.side == "right" else p
        if self.denominator.shape[1:] != (size, size):
            raise InputError(
                f"{self.denominator.shape[1]} x {self.denominator.shape[2]}",
                f"{size} x {size}: a {self.side} denominator is as wide as the {'inputs' if size == m else 'outputs'}",
                field="denominator",
            )

    @property
    def shape(self) -> tuple[int, int]:
        return self.numerator.shape[1], self.numerator.shape[2]

    @property
    def order(self) -> int:
        """Degree of the determinant of the denominator."""
        from realize.models.fractions import form_fractions

        degree: int = form_fractions(self)[0][0][1].degree()
        return degree

    def polynomials(self, name: str) -> list[list[Any]]:
        """Return a field as exact polynomials [row][column]."""
        from realize.kernels.exact.polynomials import polynomial

        values = self.exact(name)
        return [
            [polynomial([matrix[i][j] for matrix in values]) for j in range(len(values[0][0]))]
            for i in range(len(values[0]))
        ]

    def rational_part(self, points: ComplexArray) -> ComplexArray:
        """Exact values of each channel at complex points, rounded once; infinite where D is singular."""
        from realize.kernels.exact.numbers import fraction
        from realize.kernels.exact.points import products_at
        from realize.kernels.exact.polynomials import reduce_fraction
        from realize.models.fractions import form_fractions

        reduced = self.remembered(
            "reduced", lambda: [[reduce_fraction(n, d) for n, d in row] for row in form_fractions(self)]
        )
        values = np.empty((points.size, *self.shape), dtype=complex)
        finite = np.isfinite(points)
        for i, row in enumerate(reduced):
            for j, (n, d) in enumerate(row):
                values[finite, i, j] = products_at(fraction(1), [n], [d], points[finite])
        values[~finite] = np.nan
        return values
