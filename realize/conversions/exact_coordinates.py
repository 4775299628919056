"""Forms of exact matrices: from the numbers of a state model as they are typed, or from exact fractions."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from realize.conversions import builders
from realize.errors import Refused
from realize.forms import append_polynomial_part
from realize.forms.coordinates import Coordinates, NoTransform, Setting
from realize.forms.registry import TABLE
from realize.models import Model, StateSpace
from realize.verification.views import EXACT_BUDGET, budget_lifted

if TYPE_CHECKING:
    from realize.conversions.route import Task

#: Forms that a model of several channels gets minimal, because its realization has states of every channel.
MINIMAL = ("jordan", "multi-input-companion")


def setting_of(task: Task) -> Setting:
    """Return what a form needs to know of a task."""
    time = task.model.time
    return Setting(time.seconds if time.sampled else None, task.ordering or "speed", task.force)


def exact_cost(model: StateSpace, name: str) -> float:
    """Return predicted operations of a form of exact matrices."""
    return float(model.remembered(f"cost of {name}", lambda: _exact_cost(model, name)))


def _exact_cost(model: StateSpace, name: str) -> float:
    from realize.kernels.exact import cost
    from realize.kernels.exact.bases import basis_operations, jordan_operations

    n = model.order
    if n > 400:
        return float("inf")
    bits = max(cost.matrix_bits(model.exact("A")), 1)
    return jordan_operations(n, bits) if name == "jordan" else basis_operations(n, bits)


def in_doubles(model: StateSpace, name: str, arithmetic: str) -> bool:
    """Say whether a form of exact matrices is computed in doubles: where it can be, if asked or beyond the budget."""
    if TABLE[name].in_doubles is None or arithmetic == "exact":
        return False
    return arithmetic == "double" or (exact_cost(model, name) > EXACT_BUDGET and not budget_lifted())


def exact_matrices(model: StateSpace, task: Task, name: str) -> tuple[Any, int, str]:
    """Return the exact matrices of a state model, the number of its finite states, and what became of E.

    Raises
    ------
    NoTransform
        If doubles were asked for, the form is beyond the budget of exact arithmetic, or E is singular.
    """
    from realize.conversions.coordinates import finite_states
    from realize.kernels.exact.bases import rational_states

    if task.arithmetic == "double":
        raise NoTransform(f"{name} coordinates of a state model are computed in exact arithmetic alone")
    predicted = exact_cost(model, name)
    if predicted > EXACT_BUDGET and not budget_lifted():
        raise NoTransform(
            f"{name} coordinates of {model.order} states are beyond what exact arithmetic can do in seconds (about "
            f"{predicted:.1e} predicted operations, budget {EXACT_BUDGET:.1e}); use --form schur, cascade or balanced, "
            "or --arithmetic exact to do it all the same"
        )
    A, B, C, D = (model.exact(field) for field in "ABCD")
    n = model.order
    if model.E is None or np.array_equal(model.E, np.eye(n)):
        return rational_states(A, B, C, D), n, ""
    finite = None if "E" in model.decimals or "A" in model.decimals else finite_states(model)
    if finite is not None:
        head = ([row[:finite] for row in A[:finite]], B[:finite], [row[:finite] for row in C], D)
        says = f"the last {n - finite} states carry the polynomial part and stay as they are"
        return rational_states(*head), finite, says
    try:
        states = rational_states(A, B, C, D, model.exact("E"))
    except ZeroDivisionError:
        raise NoTransform(
            "E is singular, so that dx/dt = E^-1 A x + E^-1 B u does not exist; use --form cascade or --form modal"
        ) from None
    return states, n, "E was solved for exactly, E^-1 A and E^-1 B, and is no longer there"


def form_of_fractions(grid: list[list[tuple[Any, Any]]], task: Task, name: str) -> Any:
    """Return a form of the exact realization of fractions, a polynomial part beside it.

    Raises
    ------
    Refused
        If the form does not go with the channels, or a number is beyond the range of doubles.
    """
    from realize.conversions.coordinates import Changed, record_of
    from realize.kernels.exact.bases import controllable_realization, dual, observable_part

    p, m = len(grid), len(grid[0])
    wholes: list[list[Any]] = [[None] * m for _ in range(p)]
    degree = 0
    proper = []
    for i, row in enumerate(grid):
        line = []
        for j, (n, d) in enumerate(row):
            wholes[i][j], rest = divmod(n, d)
            degree = max(degree, wholes[i][j].degree())
            line.append((rest, d))
        proper.append(line)
    used = proper if degree > 0 else grid
    if name == "observability":
        # the realization that is observable whatever cancels: the dual of that of the transpose
        states = dual(controllable_realization([[used[i][j] for i in range(p)] for j in range(m)]))
    else:
        states = controllable_realization(used)
        if name == "jordan" or (name in MINIMAL and m > 1):
            states = observable_part(states)
    new: Coordinates = TABLE[name].apply(states.A, states.B, states.C, states.D, setting_of(task))
    details = record_of(TABLE[name], new, of_source=False)
    if degree <= 0:
        model = builders.state_model(task, new.A, new.B, new.C, new.D)
        return Changed(model, details, new.cautions, float("inf"))
    from realize.kernels.exact.polynomials import coefficients

    polynomial = np.zeros((degree + 1, p, m))
    for i in range(p):
        for j in range(m):
            values = builders.rounded(coefficients(wholes[i][j]))[0] if wholes[i][j].degree() >= 0 else []
            polynomial[degree + 1 - len(values) :, i, j] = values
    model = builders.state_model(task, *append_polynomial_part(new.A, new.B, new.C, np.zeros((p, m)), polynomial))
    details["descriptor"] = f"the last {model.order - new.A.shape[0]} states carry the polynomial part"
    return Changed(model, details, new.cautions, float("inf"))


def refuse_beyond(model: Model, name: str) -> None:
    """Raise `Refused` for numbers that doubles do not hold, in coordinates that are in doubles."""
    if model.beyond_doubles:
        raise Refused(
            f"{model.beyond_doubles[0]} lies beyond the range of doubles, and {name} coordinates are in doubles; "
            "scale time and gain first"
        )
