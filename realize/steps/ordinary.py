"""Any model as ordinary state space, for the steps that need one."""

from __future__ import annotations

import numpy as np

from realize.conversions import Task, convert_model, plan_route
from realize.errors import Refused
from realize.models import Model, StateSpace, is_data
from realize.models.state_space import is_identity


def states_of(model: Model) -> tuple[StateSpace, list[str]]:
    """Return a model as ordinary state space (without E), and the route in words.

    Raises
    ------
    Refused
        If the plant is improper, or E has an index above 1 or singular values that are neither large nor zero.
    """
    if is_data(model):
        raise Refused(f"a model of kind {model.kind} is data; fit a model first")
    route: list[str] = []
    if not isinstance(model, StateSpace):
        task = Task(model, "state-space")
        rows = plan_route(task)
        made = convert_model(task, rows)
        assert isinstance(made, StateSpace)
        model, route = made, [row.target for row in rows]
    if is_identity(model.E):
        return (model if model.E is None else model.with_(E=None)), route
    from realize.kernels.algebraic_states import NotIndexOne, Undecided, without_descriptor

    try:
        with np.errstate(over="ignore", invalid="ignore"):
            found = without_descriptor(model.A, model.B, model.C, model.D, model.E)
    except NotIndexOne as reason:
        raise Refused(
            f"E is singular and {reason}: the model is improper or its pencil is singular, which reduction does not "
            "split off"
        ) from None
    except Undecided as reason:
        raise Refused(f"E cannot be divided out: {reason}") from None
    except np.linalg.LinAlgError:
        raise Refused("E cannot be divided out: its singular values could not be computed") from None
    if not all(np.isfinite(matrix).all() for matrix in (found.A, found.B, found.C, found.D)):
        raise Refused("E cannot be divided out in doubles: entries overflow; use units nearer to the model's size")
    words = f"E divided out (condition number {found.condition:.1e})"
    if found.algebraic:
        words = (
            f"{found.algebraic} algebraic states solved for (condition number {found.left_out:.1e}), the rest of E "
            f"divided out (condition number {found.condition:.1e})"
        )
    # algebraic states leave, and the others are mixed: names no longer fit
    names = model.states if found.algebraic == 0 else ()
    offset = model.offset if found.algebraic == 0 else model.common()["offset"]
    plain = model.with_(A=found.A, B=found.B, C=found.C, D=found.D, E=None, states=names, offset=offset, decimals={})
    return plain, [*route, words]
