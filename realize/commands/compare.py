"""The command `compare`."""

from __future__ import annotations

from realize.commands.common import Context, load, print_record, showing_proofs, write_log
from realize.errors import UsageError
from realize.steps import compare


def execute(
    context: Context,
    a: str,
    b: tuple[str, ...],
    certify: bool,
    band: tuple[float, float] | None,
    columns: list[str] | None,
) -> int:
    """Compare model and data files with the first one."""
    if [a, *b].count("-") > 1:
        raise UsageError("only one of the inputs can be standard input")
    models = [load(path, columns, several=True) for path in (a, *b)]
    with showing_proofs(certify):
        record = compare(*models, band=band, certify=certify, names=[a, *b])
    write_log(context, record)
    if context.json:
        print_record(record)
    else:
        from realize.reports.tables import compare_table

        print(compare_table(record))
    return 0
