"""Changes of coordinates of a state model: the forms of `realize.forms.registry` as steps of a conversion."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from realize.conversions.changed import Changed
from realize.conversions.exact_coordinates import exact_matrices, in_doubles, refuse_beyond, setting_of
from realize.errors import Refused
from realize.forms.coordinates import Array, Coordinates
from realize.forms.registry import TABLE, Form
from realize.models import Offset, Signal, StateSpace

if TYPE_CHECKING:
    from realize.conversions.route import Task

#: Transforms of more states than this stay out of the receipt.
MATRICES_UP_TO = 200


@dataclass(frozen=True)
class Explicit:
    """Matrices without E: those of the finite part, and what is put back beside it afterwards."""

    A: Array
    B: Array
    C: Array
    #: States of the finite part; the others are a polynomial part's chain, left as they are.
    finite: int
    #: Condition number of E, 1 where there is none.
    condition: float
    says: str


def change(model: StateSpace, task: Task, name: str, *, of_source: bool) -> Changed:
    """Write a state model in the coordinates of a form.

    Parameters
    ----------
    model : StateSpace
        The source itself, or the realization that stands for it.
    task : Task
    name : str
        A key of `realize.forms.registry.TABLE`.
    of_source : bool
        True where the transform is against the states of the source.

    Raises
    ------
    Refused
        If E is singular within rounding, numbers lie beyond the range of doubles, or the form does not exist.
    """
    form = TABLE[name]
    if form.in_doubles is not None and in_doubles(model, name, task.arithmetic):
        refuse_beyond(model, name)
        explicit = explicit_states(model, name)
        with np.errstate(all="ignore"):
            new = form.in_doubles(explicit.A, explicit.B, explicit.C, model.D, setting_of(task))
    elif form.exact:
        states, finite, says = exact_matrices(model, task, name)
        explicit = Explicit(model.A, model.B, model.C, finite, 1.0, says)
        new = form.apply(states.A, states.B, states.C, states.D, setting_of(task))
    else:
        refuse_beyond(model, name)
        explicit = explicit_states(model, name)
        with np.errstate(all="ignore"):
            new = form.apply(explicit.A, explicit.B, explicit.C, model.D, setting_of(task))
    _check(new, name)
    condition = max(float(new.condition), explicit.condition)
    result = _assembled(model, explicit, new)
    return Changed(result, _record(form, new, explicit, of_source), new.cautions, condition)


def explicit_states(model: StateSpace, name: str) -> Explicit:
    """Return A, B, C with E solved, or with the chain of a polynomial part set aside."""
    n = model.A.shape[0]
    if model.E is None or np.array_equal(model.E, np.eye(n)):
        return Explicit(model.A, model.B, model.C, n, 1.0, "")
    finite = finite_states(model)
    if finite is not None:
        return Explicit(
            model.A[:finite, :finite],
            model.B[:finite],
            model.C[:, :finite],
            finite,
            1.0,
            f"the last {n - finite} states carry the polynomial part and stay as they are",
        )
    import scipy.linalg

    # rows and columns of E of like size, by powers of two: its condition does not depend on the units
    rows = _exponents(np.abs(model.E).max(axis=1))
    own = np.ldexp(model.E, -rows[:, None])
    columns = _exponents(np.abs(own).max(axis=0))
    own = np.ldexp(own, -columns[None, :])
    values = np.linalg.svd(own, compute_uv=False)
    if values[-1] <= n * np.finfo(float).eps * values[0]:
        raise Refused(
            f"E is singular within rounding (its smallest singular value is {values[-1] / values[0]:.1e} of the "
            f"largest, states in like units), so {name} coordinates of dx/dt = E^-1 A x + E^-1 B u do not exist; "
            "use --form cascade or --form modal, which keep what E does as a polynomial part"
        )
    right = np.ldexp(np.hstack([model.A, model.B]), -rows[:, None])
    solved = np.ldexp(scipy.linalg.solve(own, right, check_finite=False), -columns[:, None])
    return Explicit(
        solved[:, :n],
        solved[:, n:],
        model.C,
        n,
        float(values[0] / values[-1]),
        "E was solved for, E^-1 A and E^-1 B, and is no longer there",
    )


def _exponents(sizes: Array) -> Any:
    return np.where(sizes > 0, np.frexp(sizes)[1], 0).astype(np.int64)


def finite_states(model: StateSpace) -> int | None:
    """Return n where E = diag(I_n, N), A = diag(A_n, I) with N strictly upper triangular; None for any other E."""
    E, A, size = model.E, model.A, model.A.shape[0]
    zero = np.flatnonzero(np.diagonal(E) == 0)
    if not zero.size:
        return None
    n = int(zero[0])
    head, tail = slice(0, n), slice(n, size)
    good = (
        np.array_equal(E[head, head], np.eye(n))
        and np.array_equal(A[tail, tail], np.eye(size - n))
        and not np.any(np.tril(E[tail, tail]))
        and not any(np.any(matrix[one, two]) for matrix in (A, E) for one, two in ((head, tail), (tail, head)))
    )
    return n if good else None


def _check(new: Coordinates, name: str) -> None:
    for matrix in (new.A, new.B, new.C, new.D, new.transform, new.back):
        if not np.all(np.isfinite(matrix)):
            raise Refused(
                f"an entry of the {name} coordinates lies beyond the range of doubles; scale time or gain first"
            )


def _assembled(model: StateSpace, explicit: Explicit, new: Coordinates) -> StateSpace:
    common = model.common()
    n, size = explicit.finite, model.A.shape[0]
    A, B, C, E = new.A, new.B, new.C, None
    if n < size:
        A, B, C, E = np.eye(size), model.B.copy(), model.C.copy(), model.E
        A[:n, :n], B[:n], C[:, :n] = new.A, new.B, new.C
    offset = model.offset
    if offset is not None and offset.states is not None:
        states = np.array(offset.states, dtype=float)
        states[:n] = new.back @ states[:n]
        if not np.all(np.isfinite(states)):
            raise Refused("the operating point of the states lies beyond the range of doubles in these coordinates")
        common["offset"] = Offset(offset.inputs, offset.outputs, tuple(states.tolist()))
    return StateSpace(A=A, B=B, C=C, D=new.D, E=E, states=_names(model, new), **common)


def _names(model: StateSpace, new: Coordinates) -> tuple[Signal, ...]:
    """Return names and units of states that were only scaled; of any other transform none survive."""
    T = new.transform
    if not any(state.name or state.unit for state in model.states) or np.any(T - np.diag(np.diagonal(T))):
        return ()
    mantissa, exponent = np.frexp(np.diagonal(T))
    if np.any(mantissa != 0.5):
        return ()
    powers = [*(exponent - 1).tolist(), *[0] * (model.A.shape[0] - T.shape[0])]
    return tuple(
        Signal(state.name, f"2^{k} {state.unit}" if k and state.unit else state.unit)
        for state, k in zip(model.states, powers, strict=True)
    )


def _record(form: Form, new: Coordinates, explicit: Explicit, of_source: bool) -> dict[str, Any]:
    record = record_of(form, new, of_source)
    if explicit.says:
        record["descriptor"] = explicit.says
        record["descriptor_condition"] = explicit.condition
    return record


def record_of(form: Form, new: Coordinates, of_source: bool) -> dict[str, Any]:
    """Return what the receipt says of a change of coordinates."""
    record: dict[str, Any] = {
        "form": form.name,
        "condition": float(new.condition) if np.isfinite(new.condition) else None,
        "against": "states of the source" if of_source else "states of the default realization, not of the source",
    }
    if not of_source:
        record["note"] = "the source has no states to go back to: the way back is a conversion to its kind"
    elif new.A.shape[0] <= MATRICES_UP_TO:
        record |= {"transform": new.transform.tolist(), "back": new.back.tolist()}
    else:
        record["note"] = (
            f"transform and way back of {new.A.shape[0]} states are left out of the record; "
            f"realize.forms.registry.TABLE[{form.name!r}].apply gives them"
        )
    return record | new.details
