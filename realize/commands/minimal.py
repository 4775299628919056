"""The command `minimal`."""

from __future__ import annotations

from typing import Any

from realize.commands.common import Context, deliver, load, showing_proofs
from realize.steps import minimal


def execute(context: Context, model: str, **options: Any) -> int:
    """Write the minimal realization of a model file."""
    with showing_proofs(options["certify"]):
        conversion = minimal(load(model), limits=context.limits, second_opinion=context.second_opinion, **options)
    return deliver(context, conversion)
