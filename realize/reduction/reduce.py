"""The one entrance to all methods of reduction."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.errors import Refused, UsageError
from realize.reduction import choice, kept_states
from realize.reduction.measure import Meter
from realize.reduction.plan import Loop, Request
from realize.reduction.prepare import Prepared, prepare
from realize.reduction.registry import automatic, method_named
from realize.reduction.result import Projected, Reduction

Array = NDArray[np.float64]


def reduce_states(
    A: Array,
    B: Array,
    C: Array,
    D: Array,
    *,
    sampled: bool,
    order: int | None = None,
    absolute_error: float | None = None,
    relative_error: float | None = None,
    method: str = "auto",
    measured: bool = False,
    band: tuple[float, float] | None = None,
    keep_steady_state: bool = False,
    keep_states: Sequence[int] = (),
    loop: Loop | None = None,
) -> Reduction:
    """Reduce a state model to an order, or to the smallest order whose error keeps a limit.

    The stable part is reduced; unstable poles and poles on the axis are kept as they are. Exactly one of `order`,
    `absolute_error`, `relative_error` is given.

    Parameters
    ----------
    A, B, C, D : arrays (n, n), (n, m), (p, n), (p, m)
    sampled : bool
        x[k+1] = A x[k] + B u[k] instead of dx/dt = A x + B u.
    order : int, optional
        States of the result, kept ones included.
    absolute_error : float, optional
        Limit of the largest gain of the difference, in the unit of the gain.
    relative_error : float, optional
        The same relative to the largest gain of the (stable part of the) model.
    method : str
        "auto" or a name from `realize.reduction.methods`.
    measured : bool
        Choose the order by the largest error found instead of the guaranteed bound.
    band : (low, high), optional
        The error counts at these frequencies only (rad/s, sampled rad per sample), and is measured there.
    keep_steady_state : bool
        The gain at zero frequency stays as it is: where the method does not see to it, through the feed-through.
    keep_states : sequence of int
        Indices of states that stay states of the result, the first ones.
    loop : Loop, optional
        The controller, or the plant, around the model.

    Returns
    -------
    Reduction

    Raises
    ------
    InputError, UsageError
        If the input or the options are not acceptable.
    Refused
        If the order is smaller than the number of poles that have to be kept, or a limit is below what rounding allows.
    """
    if sum(option is not None for option in (order, absolute_error, relative_error)) != 1:
        raise UsageError("give exactly one of: an order, an absolute error, a relative error")
    for error in (absolute_error, relative_error):
        if error is not None and not error >= 0:
            raise UsageError(f"an error of {error}: it must not be negative")
    request = Request(
        order, absolute_error, relative_error, measured, band, keep_steady_state, tuple(keep_states), loop
    )
    name, reason = automatic(request) if method == "auto" else (method, "asked for")
    chosen = method_named(name)
    # balancing needs no Schur form where there is a shorter way
    triangular = name != "balanced-truncation" or bool(request.keep_states)
    prepared = prepare(A, B, C, D, sampled=sampled, triangular=triangular)
    notes: list[str] = []
    if prepared.kept_order:
        on_axis = int(np.count_nonzero(prepared.split.marginal))
        notes.append(
            f"kept as they are: {choice.states(prepared.kept_order - on_axis)} of unstable poles and "
            f"{choice.states(on_axis)} of poles on the boundary of stability"
        )
    for state in request.keep_states:
        if not 0 <= state < prepared.scaled.A.shape[0]:
            raise UsageError(f"no state {state} to keep; there are {choice.states(prepared.scaled.A.shape[0])}, from 0")
    if request.keep_states:
        plan = kept_states.plan(prepared, request, name)
    else:
        plan = chosen.plan(prepared, request)
    meter = Meter(prepared, band, whole_model=plan.whole_model)
    steady = (keep_steady_state or chosen.keeps_steady_state) and (not plan.whole_model or not _integrates(prepared))
    offer = choice.Offer(prepared, plan, meter, steady)
    count, largest, limit = _chosen(offer, request, notes)
    count = _without_objection(offer, count, notes)
    part, change = offer.with_steady_state(plan.project(count))
    rounding = plan.rounding(count, part)
    if limit is not None and request.by_bound:
        assert plan.tails is not None
        # rounding may use up what the tail leaves: a few more states make room, if anything can
        for _ in range(3):
            if prepared.in_gain(float(plan.tails[count]) + change) + rounding <= limit or count >= plan.available:
                break
            count = plan.next_cut(count + 1)
            part, change = offer.with_steady_state(plan.project(count))
            rounding = plan.rounding(count, part)
        if not math.isfinite(rounding):
            raise Refused(
                "a pole lies on the boundary of stability to the last rounding, yet was not told from a stable one: no "
                "error can be promised; give the model with that pole exactly on the axis, or ask for an order"
            )
        if rounding > limit:
            raise Refused(
                f"an error of {limit:.3g} is below the rounding of this model, about {rounding:.3g}; ask for more"
            )
    tail = None if plan.tails is None else prepared.in_gain(float(plan.tails[count]) + change)
    assemble = _assembled_whole if plan.whole_model else _assembled
    found = assemble(prepared, part, count, chosen.name, rounding, largest, tail, notes)
    return replace(
        found,
        candidates=choice.candidates(offer, count, looked=measured or band is not None),
        algorithm=plan.algorithm(count),
        reason=reason,
    )


def _integrates(prepared: Prepared) -> bool:
    """Say whether a pole is kept at zero frequency."""
    return bool(np.any(prepared.split.kept_poles == (1.0 if prepared.sampled else 0.0)))


def _without_objection(offer: choice.Offer, count: int, notes: list[str]) -> int:
    """Return the first number of states from `count` on that the method does not object to."""
    plan = offer.plan
    if plan.objection is None:
        return count
    first, reason = count, ""
    while True:
        words = plan.objection(count, offer.with_steady_state(plan.project(count))[0])
        if not words:
            break
        reason = reason or words
        if count >= plan.available:
            notes.append(f"{reason} at order {first + offer.kept_order}, and no larger order is free of that")
            return first
        count = plan.next_cut(count + 1)
    if count != first:
        notes.append(
            f"{reason} at order {first + offer.kept_order}; the next order without that was taken, "
            f"{count + offer.kept_order}"
        )
    return count


def _chosen(offer: choice.Offer, request: Request, notes: list[str]) -> tuple[int, float | None, float | None]:
    """Return the number of stable states, the largest gain where it was needed, and the limit of the error."""
    prepared = offer.prepared
    if request.order is not None:
        return choice.by_order(offer, request.order, notes), None, None
    largest, limit = None, request.absolute_error
    if request.relative_error is not None:
        largest = prepared.in_gain(offer.meter.largest()) if request.band else prepared.largest_gain().value
        limit = request.relative_error * largest
        if prepared.kept_order:
            notes.append("the relative error refers to the largest gain of the stable part")
    assert limit is not None
    if request.by_bound:
        return choice.by_bound(offer, limit, notes), largest, limit
    return choice.by_measured(offer, limit, notes, banded=request.band is not None), largest, limit


def _assembled(
    prepared: Prepared,
    part: Projected,
    count: int,
    method: str,
    rounding: float,
    largest: float | None,
    tail: float | None,
    notes: list[str],
) -> Reduction:
    """Put the reduced stable part and the kept part together, in the model's own units."""
    scaled, split = prepared.scaled, prepared.split
    kept_a, kept_b, kept_c = split.kept
    stable = prepared.stable_order
    # half the difference of the units of input and output goes to the states, so that balanced stays balanced
    half = (scaled.input + scaled.output) // 2
    shift = (scaled.input - scaled.output) // 2
    with np.errstate(over="ignore", under="ignore"):
        A = np.ldexp(scipy.linalg.block_diag(part.A, kept_a), scaled.time)
        B = np.ldexp(np.vstack([part.B, kept_b]), half)
        C = np.ldexp(np.hstack([part.C, kept_c]), half)
        D = prepared.D + np.ldexp(part.D_change, scaled.gain)
        V = np.hstack([split.right[:, :stable] @ part.V, split.right[:, stable:]])
        W = np.vstack([part.W.T @ split.left[:stable], split.left[stable:]])
        right = np.ldexp(V, (scaled.states + shift)[:, None])
        left = np.ldexp(W, -(scaled.states + shift)[None, :]).T
    order = count + prepared.kept_order
    matrices = A.reshape(order, order), B, C, D
    return _reduction(prepared, matrices, (left, right), count, method, rounding, largest, tail, notes)


def _assembled_whole(
    prepared: Prepared,
    part: Projected,
    count: int,
    method: str,
    rounding: float,
    largest: float | None,
    tail: float | None,
    notes: list[str],
) -> Reduction:
    """Put a reduced whole model back into its own units; kept states count in theirs."""
    scaled = prepared.scaled
    # rows of W with a single entry 1 are physical states
    exponents = np.full(count, (scaled.output - scaled.input) // 2, dtype=np.int64)
    for k, row in enumerate(part.W.T):
        place = np.flatnonzero(row)
        if place.size == 1 and row[place[0]] == 1.0:
            exponents[k] = scaled.states[place[0]]
    with np.errstate(over="ignore", under="ignore"):
        A = np.ldexp(part.A, scaled.time + exponents[:, None] - exponents[None, :])
        B = np.ldexp(part.B, scaled.input + exponents[:, None])
        C = np.ldexp(part.C, scaled.output - exponents[None, :])
        D = prepared.D + np.ldexp(part.D_change, scaled.gain)
        left = np.ldexp(part.W, exponents[None, :] - scaled.states[:, None])
        right = np.ldexp(part.V, scaled.states[:, None] - exponents[None, :])
    stable = max(count - prepared.kept_order, 0)
    return _reduction(prepared, (A, B, C, D), (left, right), stable, method, rounding, largest, tail, notes)


def _reduction(
    prepared: Prepared,
    matrices: tuple[Array, Array, Array, Array],
    projections: tuple[Array, Array],
    stable: int,
    method: str,
    rounding: float,
    largest: float | None,
    tail: float | None,
    notes: list[str],
) -> Reduction:
    """Return the record of a result with that many stable states."""
    scaled, split = prepared.scaled, prepared.split
    with np.errstate(over="ignore", under="ignore"):
        values = np.ldexp(prepared.factors.values, scaled.gain)
        errors = np.ldexp(prepared.factors.errors, scaled.gain)
    for matrix in (*matrices, values):
        if not np.all(np.isfinite(matrix)):
            raise Refused("the result does not fit into doubles in these units; use units nearer to the model's size")
    lower = max(0.0, float(values[stable] - errors[stable])) if stable < values.size else 0.0
    A, B, C, D = matrices
    return Reduction(
        A=A,
        B=B,
        C=C,
        D=D,
        method=method,
        order=A.shape[0],
        kept_order=prepared.kept_order,
        kept_poles=np.ldexp(split.kept_poles.real, scaled.time) + 1j * np.ldexp(split.kept_poles.imag, scaled.time),
        hankel_singular_values=values,
        hankel_errors=errors,
        bound=None if tail is None else tail + rounding,
        tail_bound=tail,
        rounding=rounding,
        lower_bound=lower,
        largest_gain=largest,
        candidates=(),
        notes=tuple(notes),
        left=projections[0],
        right=projections[1],
        separation=split.separation,
        coupling=split.coupling,
        marginal=int(np.count_nonzero(split.marginal)),
        basis=prepared.basis,
    )
