"""Coordinates of a state model."""

from realize.forms.cascade import cascade_states, group_roots
from realize.forms.companion import controllable_companion, observable_companion
from realize.forms.modal import modal_states
from realize.forms.polynomial_part import append_polynomial_part

__all__ = [
    "append_polynomial_part",
    "cascade_states",
    "controllable_companion",
    "group_roots",
    "modal_states",
    "observable_companion",
]
