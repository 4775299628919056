"""The verb `reduce`."""

from __future__ import annotations

import time

import numpy as np

from realize.conversions import Task, convert_model, plan_route
from realize.errors import Refused, UsageError
from realize.models import FrequencyResponse, Model, StateSpace
from realize.models.state_space import is_identity
from realize.schema import REDUCTION_METHODS
from realize.steps.conversion import Conversion, model_of
from realize.steps.receipts import finish, refusing_singular
from realize.steps.second_opinion import asking
from realize.verification.reduction import reduction_claims
from realize.verification.stability import order_claim, stability_claim
from realize.verification.views import whatever_it_costs

#: An E with a larger condition number is not divided out.
HARMLESS_E = 1e8


def states_of(model: Model) -> tuple[StateSpace, list[str]]:
    """Return a model as ordinary state space (without E), and the route in words.

    Raises
    ------
    Refused
        If E is singular or nearly so, or the plant is improper.
    """
    if isinstance(model, FrequencyResponse):
        raise Refused("a frequency response is data; fit a model first")
    route: list[str] = []
    if not isinstance(model, StateSpace):
        task = Task(model, "state-space")
        rows = plan_route(task)
        made = convert_model(task, rows)
        assert isinstance(made, StateSpace)
        model, route = made, [row.target for row in rows]
    if is_identity(model.E):
        return (model if model.E is None else model.with_(E=None)), route
    scale = np.abs(model.E).max(axis=1)
    if np.any(scale == 0):
        raise Refused(
            "E is singular: the model is improper or has algebraic states, which reduction does not split off"
        )
    power = np.ldexp(1.0, -np.frexp(scale)[1])[:, None]
    condition = float(np.linalg.cond(power * model.E))
    if not condition < HARMLESS_E:
        raise Refused(
            f"E has condition number {condition:.1e}: dividing it out would spoil the model, and the parts "
            "belonging to poles near infinity are not split off"
        )
    solved = np.linalg.solve(power * model.E, power * np.hstack([model.A, model.B]))
    n = model.A.shape[0]
    plain = model.with_(A=solved[:, :n], B=solved[:, n:], E=None, decimals={})
    return plain, [*route, f"E divided out (condition number {condition:.1e})"]


@refusing_singular()
def reduce(
    model: Model | Conversion,
    *,
    order: int | None = None,
    error: float | None = None,
    absolute_error: float | None = None,
    method: str = "auto",
    certify: bool = False,
    limits: dict[str, float] | None = None,
    second_opinion: bool | None = False,
) -> Conversion:
    """Find a smaller model, with the error known.

    Exactly one of order, error and absolute_error is given.

    Parameters
    ----------
    model : Model or Conversion
        Kinds other than state space are converted first. Unstable poles and poles on the axis are kept.
    order : int, optional
        Number of states of the result.
    error, absolute_error : float, optional
        Largest L-infinity norm of the difference, relative to the largest gain or in the units of the response; the
        smallest order whose bound keeps it is taken.
    method : str
        "balanced-truncation" or "auto".
    certify : bool
        Prove the claims whatever it costs.
    limits : dict, optional
        Limits by claim name.
    second_opinion : bool

    Returns
    -------
    Conversion
        A state-space model; ``receipt.details`` holds the Hankel singular values and the candidate orders.

    Raises
    ------
    UsageError, InputError, Refused
    """
    started = time.perf_counter()
    source = model_of(model)
    if method not in REDUCTION_METHODS:
        raise UsageError(f"no method {method!r}; there are: {', '.join(REDUCTION_METHODS)}")
    if sum(value is not None for value in (order, error, absolute_error)) != 1:
        raise UsageError("give exactly one of --order, --error and --absolute-error")
    plain, route = states_of(source)

    from realize.reduction import reduce_states

    found = reduce_states(
        plain.A,
        plain.B,
        plain.C,
        plain.D,
        sampled=source.time.sampled,
        order=order,
        absolute_error=absolute_error,
        relative_error=error,
        method=method,
    )
    result = StateSpace(A=found.A, B=found.B, C=found.C, D=found.D, **source.common())
    with whatever_it_costs(certify), asking("reduce", plain, {"order": found.order}, second_opinion) as opinion:
        limit = absolute_error
        if error is not None and found.largest_gain is not None:
            limit = error * found.largest_gain
        claims = reduction_claims(source, plain, result, bound=found.bound, limit=limit, limits=limits or {})
        claims += [order_claim(result, (limits or {}).get("order")), stability_claim(result)]
        return finish(
            "reduce",
            found.method,
            [*route, "state-space"],
            source,
            result,
            claims,
            started=started,
            cautions=list(found.notes),
            opinion=opinion,
            limits=limits,
            details={
                "hankel_singular_values": [float(value) for value in found.hankel_singular_values[:200]],
                "candidates": [{"order": c.order, "bound": float(c.bound)} for c in found.candidates],
                "kept_order": found.kept_order,
                "lower_bound": float(found.lower_bound),
            },
        )
