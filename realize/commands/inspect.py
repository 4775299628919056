"""The command `inspect`."""

from __future__ import annotations

from realize.commands.common import Context, load, print_record, write_log
from realize.steps import history, inspect


def execute(context: Context, model: str, columns: list[str] | None, rate: float | None, **options: bool) -> int:
    """Say what a model or data file holds, or how it came about."""
    source = load(model, columns, rate=rate)
    history_only = options["history"]
    record = history(source) if history_only else inspect(source)
    write_log(context, record)
    if context.json:
        print_record(record)
    else:
        import sys

        from realize.reports.inspection import inspect_table
        from realize.reports.look import page_for
        from realize.reports.tables import history_table

        print(history_table(record) if history_only else inspect_table(record, page=page_for(sys.stdout)))
    return 0
