"""The table at the end of a run."""

from __future__ import annotations

import os
from collections.abc import Mapping
from typing import Any

#: Files that the table names; the summary and the records have them all.
SHOWN = 20


def summary_table(summary: Mapping[str, Any]) -> str:
    """Return the summary of a run as text: counts, worst claims, what was set aside, where reports are.

    Parameters
    ----------
    summary : mapping
        As `realize.batch.Summary.record` gives it.
    """
    lines = [_counts(summary), ""]
    if summary["worst"]:
        rows: list[tuple[str, ...]] = [("step", "claim", "worst", "limit", "basis", "over", "file")]
        rows += [_row(row) for row in summary["worst"]]
        widths = [max(len(row[k]) for row in rows) for k in range(len(rows[0]))]
        lines += ["  ".join(c.ljust(w) for c, w in zip(row, widths, strict=True)).rstrip() for row in rows] + [""]
    if summary["aside"]:
        lines.append("set aside or kept over a limit:")
        for entry in summary["aside"][:SHOWN]:
            lines.append(f"  {_clean(entry['file'])}, step {entry['step']}: {_clean(entry.get('reason', ''))}")
        more = len(summary["aside"]) - SHOWN
        if more > 0:
            lines.append(f"  and {more:,} more, in the records")
        lines.append("")
    for path in summary["reports"][:SHOWN]:
        lines.append(f"report   {_clean(os.path.join(summary['output'], path))}")
    if len(summary["reports"]) > SHOWN:
        lines.append(f"         and {len(summary['reports']) - SHOWN:,} more, in the records")
    lines.append(f"records  {_clean(summary['records'])}")
    return "\n".join(lines)


def _counts(summary: Mapping[str, Any]) -> str:
    left = summary["files"] - summary["done"] - summary["kept"] - summary["set_aside"]
    parts = [f"{summary['done']:,} of {summary['files']:,} files done"]
    for name, words in (("kept", "kept over a limit"), ("set_aside", "set aside"), ("earlier", "from earlier runs")):
        if summary[name]:
            parts.append(f"{summary[name]:,} {words}")
    if left:
        parts.append(f"{left:,} left to do")
    now = summary["done"] + summary["kept"] + summary["set_aside"] - summary["earlier"]
    rate = f", {now / summary['seconds']:.3g} a second" if now and summary["seconds"] > 0 else ""
    return f"{', '.join(parts)}; {summary['seconds']:.3g} s{rate}"


def _row(row: Mapping[str, Any]) -> tuple[str, ...]:
    value = "infinite" if row["infinite"] else f"{row['value']:.3g}"
    limit = "-" if row["limit"] is None else f"{row['limit']:.3g}"
    step = f"{row['step']} {row['verb']}"
    return (step, row["name"], value, limit, row.get("basis", ""), str(row["failed"] or "-"), _clean(row["file"]))


def _clean(text: str) -> str:
    return "".join(c if c.isprintable() else c.encode("unicode_escape", "replace").decode() for c in text)
