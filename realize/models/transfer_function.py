"""Ratios of polynomials, channel by channel."""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial
from typing import Any, ClassVar

import numpy as np

from realize.errors import InputError
from realize.kernels.response import polynomial_ratio
from realize.kernels.trust import COEFFICIENT_OPERATIONS, POINT_OPERATIONS, corrected
from realize.models import checks
from realize.models.base import ComplexArray, Model

OWN = ("numerator", "denominator")


@dataclass(frozen=True, eq=False, kw_only=True, repr=False)
class TransferFunction(Model):
    """Transfer function: numerator / denominator for each channel.

    Parameters
    ----------
    numerator, denominator : list of float, or [outputs][inputs] of lists
        Coefficients, highest power first; one denominator serves all channels. Leading zeros are dropped.
    """

    kind: ClassVar[str] = "transfer-function"
    numerator: Any
    denominator: Any

    def _normalise(self) -> None:
        decimals = {name: dict(rows) for name, rows in self.decimals.items()}
        numerator = checks.channels(self.numerator, "numerator", float, allow=decimals.get("numerator"))
        denominator = checks.channels(self.denominator, "denominator", float, allow=decimals.get("denominator"))
        shape = (len(numerator), len(numerator[0]))
        if len(denominator) * len(denominator[0]) == 1 and shape != (1, 1):
            shared = decimals.get("denominator", {})
            decimals["denominator"] = {
                (i, j, *index[2:]): text
                for index, text in shared.items()
                for i in range(shape[0])
                for j in range(shape[1])
            }
        denominator = checks.spread(denominator, shape, "denominator")
        self._put("numerator", self._trimmed(numerator, "numerator", decimals))
        self._put("denominator", self._trimmed(denominator, "denominator", decimals))
        self._put("decimals", decimals)
        for i, row in enumerate(self.denominator):
            for j, polynomial in enumerate(row):
                if polynomial.size == 1 and polynomial[0] == 0 and (i, j, 0) not in decimals.get("denominator", {}):
                    raise InputError("zero", "a denominator that is not zero", field=f"denominator[{i}][{j}]")

    @staticmethod
    def _trimmed(value: checks.Channels, name: str, decimals: dict[str, dict[Any, str]]) -> checks.Channels:
        """Drop leading zeros, and move the indices of exact decimals along."""
        table = decimals.get(name, {})
        kept: dict[Any, str] = {}
        rows = []
        for i, row in enumerate(value):
            line = []
            for j, polynomial in enumerate(row):
                if polynomial.size == 0:
                    raise InputError("an empty polynomial", "at least one coefficient", field=f"{name}[{i}][{j}]")
                own = {index[2]: text for index, text in table.items() if index[:2] == (i, j)}
                start = 0
                while start < polynomial.size - 1 and polynomial[start] == 0:
                    if start in own and checks.decimal_fraction(own[start], name) != 0:
                        break
                    start += 1
                for k, text in own.items():
                    if k >= start and checks.decimal_fraction(text, name) != 0:
                        kept[(i, j, k - start)] = text
                line.append(checks.frozen(polynomial[start:]) if start else polynomial)
            rows.append(tuple(line))
        decimals[name] = kept
        return tuple(rows)

    @property
    def shape(self) -> tuple[int, int]:
        return len(self.numerator), len(self.numerator[0])

    @property
    def order(self) -> int:
        p, m = self.shape
        first = self.denominator[0][0]
        degrees = [
            max(d.size, n.size) - 1
            for numerators, denominators in zip(self.numerator, self.denominator, strict=True)
            for n, d in zip(numerators, denominators, strict=True)
        ]
        if p * m > 1 and all(np.array_equal(d, first) for row in self.denominator for d in row):
            return max(degrees) * min(p, m)
        return sum(degrees)

    def rational_part(self, points: ComplexArray) -> ComplexArray:
        p, m = self.shape
        values = np.empty((points.size, p, m), dtype=complex)
        for i in range(p):
            for j in range(m):
                rough, bound = polynomial_ratio(
                    self.exact_or_double("numerator", i, j), self.exact_or_double("denominator", i, j), points
                )
                size = self.numerator[i][j].size + self.denominator[i][j].size
                operations = POINT_OPERATIONS + COEFFICIENT_OPERATIONS * size
                values[:, i, j] = corrected(rough, bound, points, operations, partial(self._exact_values, i, j))
        return values

    def _exact_values(self, i: int, j: int, points: ComplexArray) -> ComplexArray:
        """Return one channel at finite points in exact arithmetic, rounded once."""
        from realize.kernels.exact.numbers import fraction
        from realize.kernels.exact.points import products_at
        from realize.kernels.exact.polynomials import polynomial

        n, d = (polynomial(self.remembered(name, partial(self.exact, name))[i][j]) for name in OWN)
        return products_at(fraction(1), [n], [d], points)

    def exact_or_double(self, name: str, i: int, j: int) -> tuple[np.ndarray, np.ndarray]:
        """Return mantissas and binary exponents of one channel's polynomial, also for decimals beyond the doubles."""
        values = getattr(self, name)[i][j]
        mantissa, exponent = np.frexp(values)
        exponent = exponent.astype(np.int64)
        for index, text in self.decimals.get(name, {}).items():
            if index[:2] == (i, j):
                fraction = checks.decimal_fraction(text, name)
                shift = fraction.numerator.bit_length() - fraction.denominator.bit_length()
                scaled = fraction / checks.Fraction(2) ** shift
                mantissa[index[2]], step = np.frexp(float(scaled))
                exponent[index[2]] = shift + step
        return mantissa, exponent
