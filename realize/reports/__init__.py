"""What people look at: pictures and tables. Drawing libraries are imported where they are used."""

from realize.reports.look import PLAIN, Page, page_for
from realize.reports.plots import draw
from realize.reports.root_lists import poles_table
from realize.reports.tables import compare_table, fit_table, inspect_table, receipt_table

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
