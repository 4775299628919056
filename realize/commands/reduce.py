"""The command `reduce`."""

from __future__ import annotations

from typing import Any

from realize.commands.common import Context, deliver, load, showing_proofs
from realize.steps import reduce


def execute(context: Context, model: str, controller: str | None, plant: str | None, **options: Any) -> int:
    """Reduce a model file."""
    others: dict[str, Any] = {
        name: load(path) for name, path in (("controller", controller), ("plant", plant)) if path is not None
    }
    with showing_proofs(True, "proving" if options["certify"] else "reducing"):
        conversion = reduce(
            load(model), limits=context.limits, second_opinion=context.second_opinion, **others, **options
        )
    if context.json:
        return deliver(context, conversion)
    from realize.reports.reductions import reduction_table

    return deliver(context, conversion, reduction_table(conversion.receipt.details))
