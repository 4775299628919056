"""The command `fit`."""

from __future__ import annotations

from typing import Any

from realize.commands.common import Context, deliver, load
from realize.errors import UsageError
from realize.steps import fit


def execute(
    context: Context, data: tuple[str, ...], columns: list[str] | None, rate: float | None, **options: Any
) -> int:
    """Fit a model to a data file, or to the runs in several."""
    if data.count("-") > 1:
        raise UsageError("only one of the inputs can be standard input")
    runs = [load(path, columns, rate=rate, several=len(data) > 1) for path in data]
    conversion = fit(
        runs if len(runs) > 1 else runs[0],
        names=data,
        limits=context.limits,
        second_opinion=context.second_opinion,
        **options,
    )
    more = []
    if not context.json:
        from realize.reports.modes import channels_table, modes_table
        from realize.reports.tables import fit_table

        details = conversion.receipt.details
        more = [fit_table(details["candidates"]), modes_table(details)]
        if len(details.get("channels", ())) > 1:
            more.append(channels_table(details))
    return deliver(context, conversion, *more)
