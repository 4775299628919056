"""Options that contradict each other are found before anything runs: the step is tried on the smallest of plants."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from realize.errors import RealizeError, UsageError

if TYPE_CHECKING:
    from realize.batch.jobs import Step


def contradiction(step: Step) -> str:
    """Return the words of a contradiction between the options of a step, '' where there is none."""
    if not step.makes_model:
        return ""
    from realize.batch.perform import apply

    if step.verb == "convert" and "to" not in step.options:
        return "convert needs to = KIND"
    try:
        apply(step, small_plant(step.verb, step.options), step.options, second_opinion=False)
    except UsageError as error:
        return str(error)
    except (RealizeError, ArithmeticError):
        return ""  # what this plant cannot have, another one may
    return ""


def small_plant(verb: str, options: Mapping[str, Any]) -> Any:
    """Return the smallest model or data set that a verb takes with such options."""
    from realize.models import FrequencyResponse, TimeRecord, TransferFunction
    from realize.schema import ESTIMATION

    if any(options.get(option.keyword) for option in ESTIMATION):
        u = [[float((17 * k * k) % 31 - 15)] for k in range(256)]
        return TimeRecord(period=0.01, input=u, output=u)
    if verb != "fit":
        return TransferFunction(numerator=[1.0], denominator=[1.0, 1.0])
    w = [0.25 * 1.5**k for k in range(12)]
    return FrequencyResponse(frequency=w, frequency_unit="rad/s", response=[[[1 / (1 + 1j * x)]] for x in w])
