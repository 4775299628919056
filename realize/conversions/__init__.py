"""Conversions between kinds: rows of two tables, a route that can be printed."""

from realize.conversions.route import (
    DOUBLE_ROWS,
    ROWS,
    Choice,
    Row,
    Task,
    choose_arithmetic,
    convert_model,
    default_form,
    plan_route,
)

__all__ = [
    "DOUBLE_ROWS",
    "ROWS",
    "Choice",
    "Row",
    "Task",
    "choose_arithmetic",
    "convert_model",
    "default_form",
    "plan_route",
]
