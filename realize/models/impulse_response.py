"""Samples of an impulse response at equal steps of time."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

from realize.errors import InputError, Refused
from realize.models import checks
from realize.models.base import ComplexArray, Model
from realize.schema import KINDS


@dataclass(frozen=True, eq=False, kw_only=True, repr=False)
class ImpulseResponse(Model):
    """Impulse response: values at 0, period, 2 period, ...; Markov parameters where time is sampled.

    Parameters
    ----------
    period : float
        Step of time, s; the model's own sampling period where time is sampled.
    samples : [k][outputs][inputs] float
    """

    kind: ClassVar[str] = "impulse-response"
    period: float
    samples: Any

    def _normalise(self) -> None:
        samples = checks.array(self.samples, "samples", 3)
        if 0 in samples.shape:
            raise InputError("no samples", "at least one, of at least one input and output", field="samples")
        self._put("period", checks.step_of_time(self.period, self.time.seconds if self.time.sampled else None))
        self._put("samples", samples)

    @property
    def shape(self) -> tuple[int, int]:
        return self.samples.shape[1], self.samples.shape[2]

    @property
    def order(self) -> None:
        return None

    def evaluate(self, s: Any) -> ComplexArray:
        raise Refused("an impulse response is data: it has values at its own times only")

    def rational_part(self, points: ComplexArray) -> ComplexArray:
        raise Refused("an impulse response is data: it has values at its own times only")


def is_data(model: Model) -> bool:
    """True for kinds that hold data in place of parameters."""
    return not KINDS[model.kind].parametric
