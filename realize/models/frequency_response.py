"""Measured or computed response at listed frequencies."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from realize.errors import InputError, Refused
from realize.models import checks
from realize.models.base import Array, ComplexArray, Model


@dataclass(frozen=True, eq=False, kw_only=True, repr=False)
class FrequencyResponse(Model):
    """Frequency response: complex values at increasing frequencies.

    Parameters
    ----------
    frequency : [k] float
        Increasing, not negative, in ``frequency_unit``.
    frequency_unit : str
        "Hz" or "rad/s".
    response : [k][outputs][inputs] complex
    deviation : [k][outputs][inputs] float, optional
        One standard deviation of the (complex) response.
    coherence : [k][outputs][inputs] float, optional
        0 to 1.
    """

    kind: ClassVar[str] = "frequency-response"
    frequency: Any
    frequency_unit: str
    response: Any = None
    deviation: Any = None
    coherence: Any = None

    def _normalise(self) -> None:
        frequency = checks.array(self.frequency, "frequency", 1)
        if frequency.size == 0:
            raise InputError("no frequencies", "at least one", field="frequency")
        if self.frequency_unit not in ("Hz", "rad/s"):
            raise InputError(f"{self.frequency_unit!r}", '"Hz" or "rad/s"', field="frequency_unit")
        if frequency[0] < 0:
            raise InputError(f"{frequency[0]}", "a frequency that is not negative", field="frequency[0]")
        bad = np.flatnonzero(np.diff(frequency) <= 0)
        if bad.size:
            k = int(bad[0]) + 1
            raise InputError(
                f"{frequency[k]} after {frequency[k - 1]}", "increasing frequencies", field=f"frequency[{k}]"
            )
        response = checks.array(self.response, "response", 3, complex)
        if response.shape[0] != frequency.size:
            raise InputError(
                f"{response.shape[0]} lines", f"{frequency.size}, one for each frequency", field="response"
            )
        if 0 in response.shape[1:]:
            raise InputError("no channels", "at least one input and one output", field="response")
        self._put("frequency", frequency)
        self._put("response", response)
        for name in ("deviation", "coherence"):
            value = getattr(self, name)
            if value is None:
                continue
            values = checks.array(value, name, 3)
            if values.shape != response.shape:
                raise InputError(f"shape {list(values.shape)}", f"shape {list(response.shape)}", field=name)
            wrong = np.argwhere((values < 0) | ((values > 1) if name == "coherence" else np.zeros(values.shape, bool)))
            if wrong.size:
                expected = "a number between 0 and 1" if name == "coherence" else "a number that is not negative"
                raise InputError(f"{values[tuple(wrong[0])]}", expected, field=checks.place_of(name, wrong[0]))
            self._put(name, values)
        if self.time.sampled and self.radians[-1] > np.pi / self.time.seconds * (1 + 1e-12):
            as_rad = self.frequency_unit == "Hz" and frequency[-1] <= np.pi / self.time.seconds * (1 + 1e-12)
            raise InputError(
                f"{frequency[-1]} {self.frequency_unit}",
                "frequencies up to half the sampling rate" + (" (in rad/s, they would fit)" if as_rad else ""),
                field=f"frequency[{frequency.size - 1}]",
            )

    @property
    def radians(self) -> Array:
        """Frequencies in rad/s."""
        return self.frequency * (2 * np.pi) if self.frequency_unit == "Hz" else np.asarray(self.frequency)

    @property
    def shape(self) -> tuple[int, int]:
        return self.response.shape[1], self.response.shape[2]

    @property
    def order(self) -> None:
        return None

    def evaluate(self, s: Any) -> ComplexArray:
        raise Refused("a frequency response is data: it has values at its own frequencies only; fit a model first")
