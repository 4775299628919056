"""The command `reduce`."""

from __future__ import annotations

from typing import Any

from realize.commands.common import Context, deliver, load, showing_proofs
from realize.steps import reduce


def execute(context: Context, model: str, **options: Any) -> int:
    """Reduce a model file."""
    with showing_proofs(options["certify"]):
        conversion = reduce(load(model), limits=context.limits, second_opinion=context.second_opinion, **options)
    return deliver(context, conversion)
