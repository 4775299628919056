"""Inputs and outputs recorded at equal steps of time."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

from realize.errors import InputError, Refused
from realize.models import checks
from realize.models.base import ComplexArray, Model


@dataclass(frozen=True, eq=False, kw_only=True, repr=False)
class TimeRecord(Model):
    """Time record: inputs and outputs at 0, period, 2 period, ...

    ``time`` is that of the plant: continuous, where the record samples signals that move between the samples;
    sampled, where the inputs are held between the samples or the plant is a sampled one itself.

    Parameters
    ----------
    period : float
        Sampling period of the record, s; the model's own where time is sampled.
    input : [k][inputs] float
    output : [k][outputs] float
    """

    kind: ClassVar[str] = "time-record"
    period: float
    input: Any
    output: Any

    def _normalise(self) -> None:
        self._put("period", checks.step_of_time(self.period, self.time.seconds if self.time.sampled else None))
        for name in ("input", "output"):
            values = checks.array(getattr(self, name), name, 2)
            if 0 in values.shape:
                raise InputError("no samples", "at least one sample of one signal", field=name)
            self._put(name, values)
        if self.input.shape[0] != self.output.shape[0]:
            raise InputError(
                f"{self.output.shape[0]} samples", f"{self.input.shape[0]}, as there are of the input", field="output"
            )

    @property
    def shape(self) -> tuple[int, int]:
        return self.output.shape[1], self.input.shape[1]

    @property
    def order(self) -> None:
        return None

    def evaluate(self, s: Any) -> ComplexArray:
        raise Refused("a time record is data: estimate its frequency response, or fit a model")

    def rational_part(self, points: ComplexArray) -> ComplexArray:
        raise Refused("a time record is data: estimate its frequency response, or fit a model")
