"""What people look at: pictures and tables.

Everything is imported when it is first used: a table does not pay for pictures.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

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
_HOME_OF = {name: home for home, names in _HOMES.items() for name in names}

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


def __getattr__(name: str) -> Any:
    home = _HOME_OF.get(name)
    if home is None:
        raise AttributeError(f"module 'realize.reports' has no attribute {name!r}")
    return getattr(import_module(home), name)


def __dir__() -> list[str]:
    return __all__
