"""State models, with an optional descriptor matrix E."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray

from realize.errors import InputError
from realize.kernels.response import state_evaluator
from realize.kernels.schur_response import SchurResponse, suits
from realize.models import checks
from realize.models.base import ComplexArray, Model, Signal


@dataclass(frozen=True, eq=False, kw_only=True, repr=False)
class StateSpace(Model):
    """State space: E dx/dt = A x + B u, y = C x + D u; sampled: E x[k+1] = A x[k] + B u[k].

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
    D : (p, m) array, optional
        Zero unless given.
    E : (n, n) array, optional
        Identity unless given.
    states : sequence of Signal, optional
        Names and units of the states.
    """

    kind: ClassVar[str] = "state-space"
    A: Any
    B: Any
    C: Any
    D: Any = None
    E: Any = None
    states: tuple[Signal, ...] = ()

    def _normalise(self) -> None:
        A, B, C = (self._matrix(name) for name in "ABC")
        D, E = (None if getattr(self, name) is None else self._matrix(name) for name in "DE")
        n = A.shape[0]
        if A.shape == (0, 0) or A.size == 0:
            n = 0
            if D is None and (B.size or C.size or B.shape[1] == 0 or C.shape[0] == 0):
                raise InputError("no states and no D", "a feed-through D when there are no states", field="A")
            p, m = D.shape if D is not None else (C.shape[0], B.shape[1])
            A, B, C = np.zeros((0, 0)), np.zeros((0, m)), np.zeros((p, 0))
            E = None
        if A.shape != (n, n):
            raise InputError(f"{A.shape[0]} x {A.shape[1]}", "as many columns as rows", field="A")
        if B.shape[0] != n:
            raise InputError(f"{B.shape[0]} rows", f"{n}, one for each state", field="B")
        if C.shape[1] != n:
            raise InputError(f"{C.shape[1]} columns", f"{n}, one for each state", field="C")
        p, m = C.shape[0], B.shape[1]
        if p == 0 or m == 0:
            raise InputError("no channels", "at least one input and one output", field="C" if p == 0 else "B")
        if D is None:
            D = np.zeros((p, m))
        if D.shape != (p, m):
            raise InputError(f"{D.shape[0]} x {D.shape[1]}", f"{p} x {m} (outputs x inputs)", field="D")
        if E is not None and E.shape != (n, n):
            raise InputError(f"{E.shape[0]} x {E.shape[1]}", f"{n} x {n}, as A", field="E")
        for name, value in zip("ABCDE", (A, B, C, D, E), strict=True):
            # those that were given are frozen copies already
            self._put(name, checks.frozen(value) if value is not None and value.flags.writeable else value)
        self._put("states", checks.signals(self.states, n, "states", Signal))

    def _matrix(self, name: str) -> NDArray[Any]:
        return checks.array(getattr(self, name), name, 2, allow=self.decimals.get(name))

    @property
    def shape(self) -> tuple[int, int]:
        return self.D.shape

    @property
    def order(self) -> int:
        return self.A.shape[0]

    @property
    def state_count(self) -> int:
        return self.A.shape[0]

    def rational_part(self, points: ComplexArray) -> ComplexArray:
        large = self.large_response()
        if large is not None:
            return large.values(points) + self.D
        evaluator = self.remembered("evaluator", lambda: state_evaluator(self.A, self.B, self.C, self.D, self.E))
        return evaluator(points)

    def large_response(self) -> SchurResponse | None:
        """Return the Schur form of a large dense model with its poles, made once; None for other models."""
        return self.remembered(
            "large response", lambda: SchurResponse(self.A, self.B, self.C) if suits(self.A, self.E) else None
        )


def is_identity(E: np.ndarray | None) -> bool:
    """True where the descriptor matrix is absent or the identity."""
    return E is None or np.array_equal(E, np.eye(E.shape[0]))
