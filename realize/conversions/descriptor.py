"""Rows of the conversion table about descriptor models."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from realize.conversions.second_order import verdict_words
from realize.errors import Refused
from realize.forms.descriptor import plain_states, with_polynomial_part, without_algebraic_states
from realize.forms.inversion import Verdict
from realize.models import Model, Offset, StateSpace
from realize.models.fractions import form_fractions
from realize.models.state_space import is_identity
from realize.verification.views import EXACT_BUDGET, predicted_cost

if TYPE_CHECKING:
    from realize.conversions.route import Task
    from realize.kernels.descriptor import Parts
    from realize.kernels.exact.descriptor import Structure

Array = NDArray[np.float64]
#: Largest number of states whose structure is counted exactly (some seconds).
LARGEST_COUNTED = 1000
#: Error of the response at a few points beyond which a model is not taken apart.
GOOD = 1e-10


def has_descriptor(model: Model) -> bool:
    """True for a state model with an E that is not the identity."""
    return isinstance(model, StateSpace) and not is_identity(model.E)


def structure_of(model: StateSpace) -> Structure | None:
    """Return the exact counts of the pencil of a descriptor model, made once; None beyond LARGEST_COUNTED states.

    Raises
    ------
    SingularPencil
    """
    if model.order > LARGEST_COUNTED:
        return None
    from realize.kernels.exact.descriptor import structure

    return model.remembered("structure", lambda: structure(model.exact("A"), model.exact("E")))


def smallest_descriptor(model: Model, task: Task) -> StateSpace:
    """The same plant with the smallest E: algebraic states eliminated, E divided out where harmless, P(s) by itself."""
    assert isinstance(model, StateSpace) and model.E is not None
    found = structure_of(model)
    if found is not None:
        task.details["descriptor"] = counts(found)
    if found is not None and found.index == 0:
        return _nonsingular(model, task)
    if found is None or found.index == 1:
        eliminated = without_algebraic_states(model.E, model.A, model.B, model.C, model.D)
        if eliminated is not None:
            task.notes.append(f"{model.order - len(eliminated.kept)} algebraic states were eliminated.")
            E, A, B, C, D, kept = eliminated
            A, B, rest, verdict = plain_states(E, A, B)
            _say(task, "What is left of E", verdict, rest is None)
            return _made(model, A, B, C, D, rest, kept)
    return _separated(model, task, found)


def counts(found: Structure) -> dict[str, Any]:
    """Return the record of a regular pencil: index and numbers of modes."""
    return {
        "regular": True,
        "index": found.index,
        "finite": found.finite,
        "infinite": found.infinite,
        "impulsive": found.impulsive,
    }


def _nonsingular(model: StateSpace, task: Task) -> StateSpace:
    A, B, E, verdict = plain_states(model.E, model.A, model.B)
    _say(task, "E", verdict, E is None)
    if verdict.kind == "singular":
        task.notes.append(
            "E is nonsingular on the numbers as given and singular within their rounding: some poles lie far beyond "
            "what its entries determine. If it came out of a transform, its small singular values should be zeros."
        )
    return _made(model, A, B, model.C, model.D, E, list(range(model.order)))


def _separated(model: StateSpace, task: Task, found: Structure | None) -> StateSpace:
    """Return finite and polynomial part side by side; the model as it is where doubles do not tell them apart."""
    from realize.kernels.descriptor import CLEAR, RankDoubt, split_infinite

    try:
        parts = split_infinite(model.E, model.A, model.B, model.C, None if found is None else found.deflations)
    except RankDoubt as doubt:
        return _left_alone(model, task, str(doubt))
    if parts.gap < CLEAR:
        return _left_alone(model, task, f"singular values above and below the cut are only {parts.gap:.3g} apart")
    if not parts.deflations:
        return _nonsingular(model, task)
    from realize.kernels.exact.numbers import nearest

    polynomial = _exact_polynomial(model) or _cleaned(parts, model.D)
    direct = np.array([[nearest(entry) for entry in row] for row in polynomial[0]]).reshape(model.shape)
    A, B, E, verdict = plain_states(parts.E, parts.A, parts.B, rows_count=False)
    try:
        result = _joined(model, A, B, parts.C, direct, E, polynomial)
    except OverflowError:
        raise Refused("a coefficient of the polynomial part lies beyond the range of doubles; scale time") from None
    lost = _quick_error(model, result, parts)
    if not lost <= GOOD:
        return _left_alone(model, task, f"taken apart, its response would be off by {lost:.1e} of its size")
    task.details["descriptor"] = {
        **task.details.get("descriptor", {}),
        "gap": None if np.isinf(parts.gap) else parts.gap,
        "polynomial_degree": len(polynomial) - 1,
    }
    task.notes.append(
        f"{model.order - parts.A.shape[0]} infinite modes were set apart by orthogonal transforms"
        + ("" if np.isinf(parts.gap) else f" (singular values above and below the cut are {parts.gap:.1e} apart)")
        + (
            f"; a polynomial part of degree {len(polynomial) - 1} stands in a nilpotent block of E by itself."
            if len(polynomial) > 1
            else "; nothing is left of them but feed-through."
        )
    )
    if parts.A.shape[0]:
        _say(task, "The E of the finite part", verdict, E is None)
    return result


def _joined(
    model: StateSpace, A: Array, B: Array, C: Array, direct: Array, E: Array | None, polynomial: list[Any]
) -> StateSpace:
    if len(polynomial) == 1:
        return _made(model, A, B, C, direct, E, None)
    return _made(model, *with_polynomial_part(A, B, C, direct, E, polynomial[1:]), None)


def _left_alone(model: StateSpace, task: Task, why: str) -> StateSpace:
    task.notes.append(
        f"The model keeps its E: doubles do not tell its finite and infinite modes apart ({why}). Conversions to "
        "transfer-function and zero-pole-gain are exact where they are affordable, and the verb minimal takes modes "
        "out that no input reaches or no output shows, such as those of a constraint that was differentiated."
    )
    return model


def _quick_error(model: StateSpace, result: StateSpace, parts: Parts) -> float:
    """Return the largest difference of the responses at a few points of the finite dynamics, relative to each."""
    import scipy.linalg

    sizes = np.abs(scipy.linalg.eigvals(parts.A, parts.E)) if parts.A.size else np.ones(1)
    sizes = sizes[np.isfinite(sizes)]
    # a pole at the origin comes out as a rounding of the others
    sizes = sizes[sizes > 1e-8 * sizes.max(initial=0.0)]
    middle = np.quantile(sizes if sizes.size else np.ones(1), [0.0, 0.25, 0.5, 0.75, 1.0])
    # far below the first mode a hidden pole at the origin shows that no longer cancels exactly
    points = np.exp(1j * np.pi / 3) * np.concatenate([middle[:1] * 1e-12, middle])
    before, after = model.rational_part(points), result.rational_part(points)
    size = np.abs(before).max(axis=(1, 2))
    error = np.abs(after - before).max(axis=(1, 2))
    with np.errstate(divide="ignore", invalid="ignore"):
        worst = np.where(error == 0, 0.0, error / size)
    # an integrator that is seen at the output grows there anyway: the claims judge it from the dynamic band on
    return float(worst[1:].max() if size[0] > 1e3 * size[1:].max() else worst.max())


def _exact_polynomial(model: StateSpace) -> list[Any] | None:
    """Return the exact polynomial part [power][output][input], lowest power first; None where it is too costly."""
    if predicted_cost(model) > EXACT_BUDGET:
        return None
    from flint import fmpq

    p, m = model.shape
    wholes = [[divmod(n, d)[0] for n, d in row] for row in form_fractions(model)]
    degree = max(max((whole.degree() for row in wholes for whole in row), default=0), 0)
    zero = fmpq(0)
    return [
        [[wholes[i][j][k] if k <= wholes[i][j].degree() else zero for j in range(m)] for i in range(p)]
        for k in range(degree + 1)
    ]


def _cleaned(parts: Parts, D: Array) -> list[Any]:
    """Return the polynomial part in doubles as rationals: an entry that is no larger than its rounding is zero."""
    from realize.kernels.exact.numbers import fraction

    values = np.where(np.abs(parts.polynomial) <= parts.rounding, 0.0, parts.polynomial)
    values[0] = parts.polynomial[0] + D
    degree = max((k for k in range(values.shape[0]) if np.any(values[k])), default=0)
    return [
        [[fraction(entry.as_integer_ratio()) for entry in row] for row in matrix]
        for matrix in values[: degree + 1].tolist()
    ]


def _say(task: Task, what: str, verdict: Verdict, inverted: bool) -> None:
    task.details["E"] = {"is": verdict.kind, "condition": verdict.condition, "inverted": inverted}
    if verdict.kind != "identity":
        task.notes.append(verdict_words(what, verdict, inverted))


def _made(
    model: StateSpace, A: Array, B: Array, C: Array, D: Array, E: Array | None, kept: list[int] | None
) -> StateSpace:
    """Return the result; states that were kept keep their names and their operating point."""
    common = model.common()
    states: Any = ()
    if kept is not None and len(kept) == A.shape[0]:
        states = tuple(model.states[k] for k in kept)
        offset = model.offset
        if offset is not None and offset.states is not None:
            common["offset"] = Offset(offset.inputs, offset.outputs, tuple(offset.states[k] for k in kept))
    return StateSpace(A=A, B=B, C=C, D=D, E=None if is_identity(E) else E, states=states, **common)
