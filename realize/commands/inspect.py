"""The command `inspect`."""

from __future__ import annotations

from realize.commands.common import Context, load, print_record, write_log
from realize.steps import inspect


def execute(context: Context, model: str, columns: list[str] | None) -> int:
    """Say what a model or data file holds."""
    record = inspect(load(model, columns))
    write_log(context, record)
    if context.json:
        print_record(record)
    else:
        from realize.reports.tables import inspect_table

        print(inspect_table(record))
    return 0
