"""The command `fit`."""

from __future__ import annotations

from typing import Any

from realize.commands.common import Context, deliver, load
from realize.steps import fit


def execute(context: Context, data: str, columns: list[str] | None, **options: Any) -> int:
    """Fit a model to a data file."""
    conversion = fit(load(data, columns), limits=context.limits, second_opinion=context.second_opinion, **options)
    more = []
    if not context.json:
        from realize.reports.root_lists import poles_table
        from realize.reports.tables import fit_table

        details = conversion.receipt.details
        poles = [(complex(re, im), count) for re, im, count in details["poles"]]
        more = [fit_table(details["candidates"]), poles_table(poles, details.get("period"))]
    return deliver(context, conversion, *more)
