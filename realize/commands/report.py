"""The command `report`."""

from __future__ import annotations

from pathlib import Path

from realize.commands.common import Context, load, print_record, say, write_log
from realize.errors import UsageError


def execute(
    context: Context, model: tuple[str, ...], band: tuple[float, float] | None, columns: list[str] | None
) -> int:
    """Draw model and data files."""
    if context.output is None:
        raise UsageError("report needs -o PICTURE, a name that ends in .png or .svg")
    from realize.reports import draw

    entries = [
        ("standard input" if path == "-" else Path(path).stem, load(path, columns, several=True)) for path in model
    ]
    draw(entries, context.output, band=band)
    record = {"step": "report", "inputs": list(model), "output": context.output}
    write_log(context, record)
    if context.json:
        print_record(record)
    else:
        say(f"wrote {context.output}")
    return 0
