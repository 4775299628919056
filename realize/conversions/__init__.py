"""Conversions between kinds: rows of one table, a route that can be printed."""

from realize.conversions.route import ROWS, Row, Task, convert_model, default_form, plan_route

__all__ = ["ROWS", "Row", "Task", "convert_model", "default_form", "plan_route"]
