"""Second-order models: mass, damping and stiffness."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray

from realize.errors import InputError
from realize.kernels.second_order import Pencil, first_order_pencil, second_order_response
from realize.models import checks
from realize.models.base import Array, ComplexArray, Model

#: The three matrices that read positions, velocities and accelerations.
OUTPUTS = ("position_output", "velocity_output", "acceleration_output")
SQUARE = ("mass", "damping", "stiffness")


@dataclass(frozen=True, eq=False, kw_only=True, repr=False)
class SecondOrder(Model):
    """Second-order model: M q'' + D q' + K q = F u, y = P q + V q' + W q'' + G u; continuous time.

    Parameters
    ----------
    mass, stiffness : (n, n) arrays
        M, which may be singular, and K.
    damping : (n, n) array, optional
        D; zero unless given.
    input : (n, m) array
        F.
    position_output, velocity_output, acceleration_output : (p, n) arrays
        P, V and W; at least one of them, the others are zero.
    direct : (p, m) array, optional
        G; zero unless given.
    """

    kind: ClassVar[str] = "second-order"
    mass: Any
    damping: Any = None
    stiffness: Any
    input: Any
    position_output: Any = None
    velocity_output: Any = None
    acceleration_output: Any = None
    direct: Any = None

    def _normalise(self) -> None:
        if self.time.sampled:
            raise InputError("sampled time", "continuous time: q' and q'' are derivatives", field="time")
        M, K, F = (self._matrix(name) for name in ("mass", "stiffness", "input"))
        n = M.shape[0]
        if n == 0:
            raise InputError("no coordinates", "at least one row and column", field="mass")
        D = np.zeros((n, n)) if self.damping is None else self._matrix("damping")
        for name, value in zip(SQUARE, (M, D, K), strict=True):
            if value.shape != (n, n):
                raise InputError(f"{value.shape[0]} x {value.shape[1]}", f"{n} x {n}, square as the mass", field=name)
        if F.shape[0] != n or F.shape[1] == 0:
            raise InputError(
                f"{F.shape[0]} x {F.shape[1]}", f"{n} rows, one for each coordinate, and an input", field="input"
            )
        given = {name: self._matrix(name) for name in OUTPUTS if getattr(self, name) is not None}
        if not given:
            raise InputError("missing", "at least one of " + ", ".join(OUTPUTS), field=OUTPUTS[0])
        p = next(iter(given.values())).shape[0]
        for name, value in given.items():
            if value.shape != (p, n) or p == 0:
                raise InputError(
                    f"{value.shape[0]} x {value.shape[1]}", f"{max(p, 1)} x {n} (outputs x coordinates)", field=name
                )
        direct = np.zeros((p, F.shape[1])) if self.direct is None else self._matrix("direct")
        if direct.shape != (p, F.shape[1]):
            raise InputError(
                f"{direct.shape[0]} x {direct.shape[1]}", f"{p} x {F.shape[1]} (outputs x inputs)", field="direct"
            )
        for name, value in zip(SQUARE, (M, D, K), strict=True):
            self._put(name, checks.frozen(value))
        self._put("input", checks.frozen(F))
        for name in OUTPUTS:
            self._put(name, checks.frozen(given.get(name, np.zeros((p, n)))))
        self._put("direct", checks.frozen(direct))

    def _matrix(self, name: str) -> NDArray[Any]:
        return checks.array(getattr(self, name), name, 2, allow=self.decimals.get(name))

    @property
    def shape(self) -> tuple[int, int]:
        return self.direct.shape[0], self.direct.shape[1]

    @property
    def order(self) -> int:
        return 2 * int(self.mass.shape[0])

    @property
    def state_count(self) -> int:
        return int(self.mass.shape[0])

    @property
    def arguments(self) -> tuple[Array, Array, Array, Array, tuple[Array, Array, Array], Array]:
        """M, D, K, F, (P, V, W), G."""
        outputs = (self.position_output, self.velocity_output, self.acceleration_output)
        return self.mass, self.damping, self.stiffness, self.input, outputs, self.direct

    @property
    def pencil(self) -> Pencil:
        """The same equations of first order, with the mass matrix in E: see `first_order_pencil`."""
        return self.remembered("pencil", lambda: first_order_pencil(*self.arguments))

    def rational_part(self, points: ComplexArray) -> ComplexArray:
        return second_order_response(*self.arguments, points)
