"""What a change of coordinates hands on besides the model."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from realize.models import StateSpace


@dataclass(frozen=True)
class Changed:
    """A state model in new coordinates, the record for the receipt, and cautions."""

    model: StateSpace
    record: dict[str, Any]
    cautions: tuple[str, ...]
    condition: float
