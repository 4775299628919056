"""The command `reduce`."""

from __future__ import annotations

from typing import Any

from realize.commands.common import Context, deliver, load
from realize.steps import reduce


def execute(context: Context, model: str, **options: Any) -> int:
    """Reduce a model file."""
    conversion = reduce(load(model), limits=context.limits, second_opinion=context.second_opinion, **options)
    return deliver(context, conversion)
