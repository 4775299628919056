"""What people look at: pictures and tables.

Everything is imported when it is first used: a table does not pay for pictures.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from realize.later import names_at_home

if TYPE_CHECKING:
    from realize.reports.inspection import inspect_table
    from realize.reports.look import PLAIN, Page, page_for
    from realize.reports.plots import draw
    from realize.reports.root_lists import poles_table
    from realize.reports.tables import compare_table, fit_table, receipt_table

_HOMES = {
    "realize.reports.look": ("PLAIN", "Page", "page_for"),
    "realize.reports.plots": ("draw",),
    "realize.reports.root_lists": ("poles_table",),
    "realize.reports.inspection": ("inspect_table",),
    "realize.reports.tables": ("compare_table", "fit_table", "receipt_table"),
}

__all__ = [
    "PLAIN",
    "Page",
    "compare_table",
    "draw",
    "fit_table",
    "inspect_table",
    "page_for",
    "poles_table",
    "receipt_table",
]


__getattr__ = names_at_home(__name__, _HOMES)


def __dir__() -> list[str]:
    return __all__
