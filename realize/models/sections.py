"""Products of second-order sections."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from realize.errors import InputError
from realize.kernels.response import section_product
from realize.kernels.trust import POINT_OPERATIONS, SECTION_OPERATIONS, corrected
from realize.models import checks
from realize.models.base import ComplexArray, Model


@dataclass(frozen=True, eq=False, kw_only=True, repr=False)
class Sections(Model):
    """Second-order sections: gain * product of (b2 s^2 + b1 s + b0) / (a2 s^2 + a1 s + a0).

    Parameters
    ----------
    sections : [k][2][3] float
        ``sections[k][0]`` numerator, ``sections[k][1]`` denominator, highest power first; leading zeros make a section
        of first order or a constant.
    gain : float
        An exact decimal of it has the index ().
    """

    kind: ClassVar[str] = "sections"
    sections: Any
    gain: float = 1.0

    def _normalise(self) -> None:
        values = checks.array(self.sections, "sections", 3, allow=self.decimals.get("sections"))
        if values.size == 0:
            values = np.zeros((0, 2, 3))
        if values.shape[1:] != (2, 3):
            raise InputError(f"shape {list(values.shape)}", "shape [k][2][3]", field="sections")
        for k in range(values.shape[0]):
            if not np.any(values[k, 1]) and not any(i[:2] == (k, 1) for i in self.decimals.get("sections", {})):
                raise InputError("zero", "a denominator that is not zero", field=f"sections[{k}].denominator")
        self._put("sections", checks.frozen(values))
        allowed = {(0, *index): text for index, text in self.decimals.get("gain", {}).items()}
        self._put("gain", float(checks.array([self.gain], "gain", 1, allow=allowed)[0]))

    @property
    def shape(self) -> tuple[int, int]:
        return 1, 1

    @property
    def order(self) -> int:
        degrees = [[2 if row[0] else 1 if row[1] else 0 for row in section] for section in self.sections]
        numerator = sum(degree[0] for degree in degrees)
        denominator = sum(degree[1] for degree in degrees)
        return max(numerator, denominator)

    def rational_part(self, points: ComplexArray) -> ComplexArray:
        beyond = bool(self.beyond_doubles)
        values, bound = section_product(self.sections, 1.0 if beyond else self.gain, points)
        if beyond:
            bound = np.full(points.size, np.inf)
        operations = POINT_OPERATIONS + 2 * SECTION_OPERATIONS * self.sections.shape[0]
        return corrected(values, bound, points, operations, self._exact_values)[:, None, None]

    def _exact_values(self, points: ComplexArray) -> ComplexArray:
        """Return the response at finite points in exact arithmetic, rounded once."""
        from realize.kernels.exact.numbers import fraction
        from realize.kernels.exact.points import products_at
        from realize.kernels.exact.polynomials import polynomial

        pairs = [[polynomial(row) for row in section] for section in self.exact("sections")]
        above, below = [n for n, _ in pairs], [d for _, d in pairs]
        return products_at(fraction(self.exact("gain")), above, below, points)
