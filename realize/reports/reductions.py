"""What a reduction found beside its claims, for people: orders that could be taken, loops, the licence."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from realize.reports.look import PLAIN, Page, facts, grid, laid_out, words
from realize.reports.numbers import clean, short

_LOOP_ROWS = (
    ("stability_margin", "margin b(P, K)"),
    ("gain_margin", "gain margin"),
    ("phase_margin", "phase margin, deg"),
    ("largest_sensitivity", "largest sensitivity"),
)


def reduction_table(details: Mapping[str, Any], *, page: Page = PLAIN) -> str:
    """Return the details of a reduction as text.

    Parameters
    ----------
    details : mapping
        ``receipt.details`` of a reduction.
    page : Page, optional
    """
    parts: list[Any] = []
    rows = [
        (title, clean(details[name], 400))
        for name, title in (("algorithm", "algorithm"), ("reason", "method because"))
        if details.get(name)
    ]
    split = details.get("split")
    if split:
        rows.append(
            (
                "split",
                f"{details['kept_order']} states kept; separation {short(split['separation'])} of the norm of A, "
                f"coupling {short(split['coupling'])}",
            )
        )
    if rows:
        parts.append(facts(rows))
    candidates = details.get("candidates")
    if candidates:
        parts += [words(""), _orders(candidates, details.get("weights") is not None, details.get("band"))]
    loop = details.get("closed_loop")
    if loop:
        parts += [words(""), *_loops(loop)]
    licence = details.get("licence")
    if licence:
        parts += [words(""), words(licence["sentence"], "green" if licence["given"] else "")]
    return laid_out(parts, page) if parts else ""


def _orders(candidates: Any, weighted: bool, band: Any) -> Any:
    """Return the orders that could be taken, the one that was marked."""
    columns = [("order", "right")]
    cells = [[str(one["order"]) for one in candidates]]
    place = " in the band" if band else ""
    for field, title in (
        ("bound", "error at most"),
        ("error", f"error found{place}"),
        ("nu_gap_bound", "nu-gap at most"),
    ):
        values = [one.get(field) for one in candidates]
        if any(value is not None for value in values):
            columns.append((title + (" (weighted)" if weighted and field != "nu_gap_bound" else ""), "right"))
            cells.append([short(value) for value in values])
    columns.append(("", "left"))
    cells.append(["taken" if one.get("kept") else "" for one in candidates])
    return grid(columns, [list(row) for row in zip(*cells, strict=True)])


def _loops(loop: Mapping[str, Any]) -> list[Any]:
    full, reduced = loop["full"], loop["reduced"]
    said = {True: "yes", False: "NO", None: "not known"}
    rows = [["stable", *(said[one["stable"]] for one in (full, reduced)), ""]]
    rows.append(["worst pole", *(_pole(one["worst_pole"]) for one in (full, reduced)), ""])
    for name, title in _LOOP_ROWS:
        if full.get(name) is None and reduced.get(name) is None:
            continue
        rows.append([title, _number(full.get(name)), _number(reduced.get(name)), _number(loop["loss"].get(name))])
    titles = [
        (f"loop u = -K y, {loop['of']} reduced", "left"),
        ("full", "right"),
        ("reduced", "right"),
        ("loss", "right"),
    ]
    return [grid(titles, rows)]


def _number(value: Any) -> str:
    if value is None:
        return "-"
    return "infinite" if isinstance(value, float) and math.isinf(value) else short(value)


def _pole(pole: Any) -> str:
    if pole is None:
        return "-"
    real, imaginary = pole
    return short(real) if imaginary == 0 else f"{short(real)} ± {short(abs(imaginary))}j"
