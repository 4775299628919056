"""The command `convert`."""

from __future__ import annotations

from typing import Any

from realize.commands.common import Context, deliver, load, print_record, showing_proofs, write_log
from realize.errors import UsageError
from realize.steps import convert, explain


def execute(
    context: Context,
    model: str,
    to: str | None,
    form: str | None,
    common_denominator: bool,
    digits: int | None,
    arithmetic: str,
    certify: bool,
    ordering: str | None,
    force: bool,
    side: str | None,
    frequencies: list[float] | None,
    band: tuple[float, float] | None,
    count: int | None,
    period: float | None,
    columns: list[str] | None,
    rate: float | None,
    **rest: Any,
) -> int:
    """Convert a model file."""
    if to is None:
        raise UsageError("convert needs --to KIND")
    source = load(model, columns, rate=rate)
    if rest.pop("explain"):
        lines = explain(
            source,
            to,
            form=form,
            ordering=ordering,
            common_denominator=common_denominator,
            digits=digits,
            arithmetic=arithmetic,
        )
        if context.json:
            record = {"step": "convert", "route": lines[:-1], "arithmetic": lines[-1]}
            write_log(context, record)
            print_record(record)
        else:
            print("\n".join(lines))
        return 0
    with showing_proofs(certify):
        conversion = convert(
            source,
            to,
            form=form,
            ordering=ordering,
            force=force,
            side=side,
            frequencies=frequencies,
            band=band,
            count=count,
            period=period,
            common_denominator=common_denominator,
            digits=digits,
            arithmetic=arithmetic,
            certify=certify,
            limits=context.limits,
            second_opinion=context.second_opinion,
            **rest,
        )
    return deliver(context, conversion)
