"""Conversions between kinds: rows of two tables, a route that can be printed."""

from realize.conversions.changed import Changed
from realize.conversions.route import (
    COORDINATE_ROWS,
    DOUBLE_ROWS,
    ROWS,
    Choice,
    Row,
    Task,
    choose_arithmetic,
    convert_model,
    coordinate_row,
    default_form,
    follow,
    plan_route,
)

__all__ = [
    "COORDINATE_ROWS",
    "DOUBLE_ROWS",
    "ROWS",
    "Changed",
    "Choice",
    "Row",
    "Task",
    "choose_arithmetic",
    "convert_model",
    "coordinate_row",
    "default_form",
    "follow",
    "plan_route",
]
