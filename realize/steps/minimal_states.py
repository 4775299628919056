"""What to remove from a state model, and candidates for what is left."""

from __future__ import annotations

import math
from collections.abc import Iterator
from contextlib import suppress
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.conversions import Task, builders
from realize.errors import Refused
from realize.forms.minimal_states import BOTH, UNOBSERVABLE, UNREACHABLE, Minimal, minimal_states, visible
from realize.forms.polynomial_part import append_polynomial_part
from realize.models import Model, Offset, StateSpace
from realize.models.fractions import form_fractions
from realize.models.state_space import is_identity
from realize.verification.views import EXACT_BUDGET, predicted_cost

Array = NDArray[np.float64]
EPS = float(np.finfo(float).eps)
#: Exact coordinates of larger state models would take minutes.
LARGEST_EXACT = 150


@dataclass
class Decision:
    """The order, what it rests on, and what goes.

    Attributes
    ----------
    order : int
    proved : bool
    threshold, dropped, kept : float
        Relative change of the numbers: allowed, needed for what goes, needed for the next.
    gone : list of dict
        ``pole``, ``states`` (counted once for each member of a pair), ``why`` and perhaps ``change``.
    made : Model, optional
        A result that needs no new coordinates.
    exact : Minimal, optional
        The exact minimal realization, where the order is its order.
    hidden : (unreachable, unobservable) arrays, optional
        Bases of what goes within rounding, in the source's coordinates.
    polynomial : array, optional
        Polynomial part of a descriptor model, [power][p][m], and feed-through.
    doubtful : bool
        The number of modes hidden among poles near each other was no clear decision.
    """

    order: int
    proved: bool
    threshold: float
    dropped: float
    kept: float
    gone: list[dict[str, Any]] = field(default_factory=list)
    made: Model | None = None
    exact: Minimal | None = None
    hidden: tuple[Array, Array] | None = None
    polynomial: Array | None = None
    notes: list[str] = field(default_factory=list)
    doubtful: bool = False


def decide(model: Model, exact: bool) -> Decision:
    """Return the decision about a state model."""
    assert isinstance(model, StateSpace)
    plain = is_identity(model.E)
    kept = _visible_states(model) if plain else None
    threshold = 0.0 if exact else 4 * max(model.order, 1) * EPS
    if kept is not None and kept.size < model.order:
        smaller = _part(model, kept)
        found = decide(smaller, exact)
        gone = _structural(model, kept)
        found.gone = gone + found.gone
        found.threshold = threshold
        if found.made is None and found.exact is None and found.hidden is None:
            found.made = smaller
        return found
    singular = not plain and _singular(model)
    if singular:
        return _descriptor(model, threshold)
    if exact or model.order <= LARGEST_EXACT:
        if model.order > LARGEST_EXACT:
            raise Refused(
                f"exact arithmetic on {model.order} states that are all joined would take too long (up to "
                f"{LARGEST_EXACT} are taken); leave out --exact, or split the plant"
            )
        found = _exactly(model, threshold)
        if exact:
            return found
        within = _within(model, threshold, found.order)
        return found if within is None else within
    within = _within(model, threshold, model.order)
    return within or Decision(model.order, False, threshold, 0.0, math.inf, made=model)


def _visible_states(model: StateSpace) -> NDArray[np.int64]:
    pattern = [_nonzero(model, name) for name in "ABC"]
    return visible(*pattern)


def _nonzero(model: StateSpace, name: str) -> NDArray[np.bool_]:
    values = np.array(getattr(model, name)) != 0
    for index in model.decimals.get(name, {}):
        # a decimal may be nonzero although its double is not
        values[index] = True
    return values


def _part(model: StateSpace, kept: NDArray[np.int64]) -> StateSpace:
    """Return the model with only some of its states: their numbers, names and operating point as they were."""
    place = {int(k): i for i, k in enumerate(kept)}
    decimals: dict[str, dict[Any, str]] = {"D": dict(model.decimals.get("D", {}))}
    for name in "ABC":
        rows: dict[Any, str] = {}
        for (i, j), text in model.decimals.get(name, {}).items():
            first, second = (i if name == "C" else place.get(i)), (j if name == "B" else place.get(j))
            if first is not None and second is not None:
                rows[first, second] = text
        decimals[name] = rows
    offset = model.offset
    if offset is not None and offset.states is not None:
        offset = Offset(offset.inputs, offset.outputs, tuple(offset.states[k] for k in kept))
    return StateSpace(
        A=model.A[np.ix_(kept, kept)],
        B=model.B[kept],
        C=model.C[:, kept],
        D=model.D,
        states=tuple(model.states[k] for k in kept) if any(s.name or s.unit for s in model.states) else (),
        decimals=decimals,
        **{**model.common(), "offset": offset},
    )


def _structural(model: StateSpace, kept: NDArray[np.int64]) -> list[dict[str, Any]]:
    """Return the modes of the states that no path joins to an input and an output."""
    from realize.kernels.exact.roots import roots
    from realize.kernels.exact.states import characteristic_polynomial

    A, B, C = (_nonzero(model, name) for name in "ABC")
    reached = set(visible(A, B, np.ones((1, A.shape[0]), dtype=bool)).tolist())
    seen = set(visible(A, np.ones((A.shape[0], 1), dtype=bool), C).tolist())
    groups: dict[str, list[int]] = {UNREACHABLE: [], UNOBSERVABLE: [], BOTH: []}
    for k in range(A.shape[0]):
        if k in reached and k in seen:
            continue
        groups[BOTH if k not in reached and k not in seen else UNOBSERVABLE if k in reached else UNREACHABLE].append(k)
    gone = []
    a = model.exact("A")
    for why, states in groups.items():
        if not states:
            continue
        if len(states) <= LARGEST_EXACT:
            p = characteristic_polynomial([[a[i][j] for j in states] for i in states])
            gone += [{"pole": root.value, "states": root.multiplicity, "why": why} for root in roots(p)]
        else:
            poles = np.linalg.eigvals(model.A[np.ix_(states, states)])
            gone += [{"pole": complex(pole), "states": 1, "why": why} for pole in poles]
    return gone


def _singular(model: StateSpace) -> bool:
    from flint import fmpq_mat

    from realize.kernels.exact.numbers import fraction

    if model.order > LARGEST_EXACT:
        scale = np.abs(model.E).max(axis=1)
        if np.any(scale == 0):
            return True
        return bool(np.linalg.cond(model.E / scale[:, None]) > 1 / EPS)
    return fmpq_mat([[fraction(x) for x in row] for row in model.exact("E")]).rank() < model.order


def _rational(model: StateSpace) -> tuple[Any, Any, Any]:
    """Return A, B, C as rationals, E divided out exactly."""
    A, B, C = (model.exact(name) for name in "ABC")
    if is_identity(model.E):
        return A, B, C
    from flint import fmpq_mat

    from realize.kernels.exact.numbers import fraction

    n = model.order
    E = fmpq_mat([[fraction(x) for x in row] for row in model.exact("E")])
    both = E.solve(fmpq_mat([[fraction(x) for x in (*a, *b)] for a, b in zip(A, B, strict=True)])).tolist()
    return [row[:n] for row in both], [row[n:] for row in both], C


def _exactly(model: StateSpace, threshold: float) -> Decision:
    if model.order == 0:
        return Decision(0, True, threshold, 0.0, math.inf, made=model)
    found = minimal_states(*_rational(model), sampled=model.time.sampled)
    gone = [{"pole": mode.pole, "states": 1, "why": mode.why} for mode in found.hidden]
    notes = [] if found.proved else [_MODULAR.format(found.order)]
    made = model if found.order == model.order else None
    return Decision(found.order, found.proved, threshold, 0.0, math.inf, gone, made, found, notes=notes)


_MODULAR = "The minimal order {} is a rank modulo two large primes: too low only if both divide every minor."


def _descriptor(model: StateSpace, threshold: float) -> Decision:
    """Return the decision about a model with singular E: its finite part realized anew, on the numbers as given."""
    from realize.kernels.exact.numbers import nearest
    from realize.kernels.exact.polynomials import coefficients, reduce_fraction

    if predicted_cost(model) > EXACT_BUDGET:
        raise Refused(
            f"E is singular, and {model.order} states are beyond what exact arithmetic splits into a proper and a "
            "polynomial part in seconds; eliminate the algebraic states first"
        )
    p, m = model.shape
    proper: list[list[Any]] = []
    wholes = []
    for row in form_fractions(model):
        proper.append([])
        for n, d in row:
            whole, rest = divmod(n, d)
            proper[-1].append(reduce_fraction(rest, d))
            wholes.append([nearest(c) for c in coefficients(whole)])
    degree = max(len(whole) for whole in wholes) - 1
    polynomial = np.zeros((degree + 1, p, m))
    for k, whole in enumerate(wholes):
        polynomial[degree + 1 - len(whole) :, k // m, k % m] = whole
    A, B, C = _column_companion(proper)
    found = minimal_states(A, B, C, sampled=model.time.sampled) if A else Minimal(0, True, {}, [])
    if found.order == len(A) and A:
        found = Minimal(found.order, True, _coordinates(A, B, C, found.order, model.time.sampled), [])
    notes = ["E is singular: the decision is made on the numbers as given."] if threshold else []
    order = found.order + _polynomial_order(polynomial)
    decision = Decision(order, found.proved, threshold, 0.0, math.inf, [], None, found, None, polynomial, notes)
    if order == model.order:
        decision.made = model
    elif degree == 0:
        notes.append(f"{model.order - order} states are algebraic or hidden: the result is without them.")
    return decision


def _polynomial_order(polynomial: Array) -> int:
    """Return the McMillan degree of a polynomial matrix at infinity: the rank of its block Hankel matrix."""
    degree = polynomial.shape[0] - 1
    if degree == 0:
        return 0
    p, m = polynomial.shape[1:]
    hankel = np.zeros((degree * p, degree * m))
    for i in range(degree):
        for j in range(degree - i):
            hankel[i * p : (i + 1) * p, j * m : (j + 1) * m] = polynomial[-2 - i - j]
    from flint import fmpq, fmpq_mat

    return int(fmpq_mat([[fmpq(*x.as_integer_ratio()) for x in row] for row in hankel.tolist()]).rank())


def _coordinates(A: Any, B: Any, C: Any, order: int, sampled: bool) -> Any:
    from realize.kernels.exact.gramians import balanced_projection, balanced_states, staircase_states

    projected = balanced_projection(A, B, C, order, (order, order, order), sampled=sampled)
    return {
        "staircase": lambda: staircase_states(projected, outputs=len(C) < len(B[0])),
        "balanced": lambda: balanced_states(projected),
    }


def _column_companion(grid: Any) -> tuple[Any, Any, Any]:
    """Return a realization over the rationals of strictly proper fractions: one companion block for each input."""
    from flint import fmpq

    from realize.kernels.exact.polynomials import ONE

    p, m = len(grid), len(grid[0])
    blocks = []
    for j in range(m):
        common = ONE
        for i in range(p):
            common = common * (grid[i][j][1] // common.gcd(grid[i][j][1]))
        common = common / common.leading_coefficient()
        blocks.append((common, [grid[i][j][0] * (common // grid[i][j][1]) for i in range(p)]))
    n = sum(common.degree() for common, _ in blocks)
    zero = fmpq(0)
    A = [[zero] * n for _ in range(n)]
    B = [[zero] * m for _ in range(n)]
    C = [[zero] * n for _ in range(p)]
    start = 0
    for j, (common, rows) in enumerate(blocks):
        k = common.degree()
        for a in range(k):
            if a + 1 < k:
                A[start + a][start + a + 1] = fmpq(1)
            A[start + k - 1][start + a] = -common[a]
            for i in range(p):
                C[i][start + a] = rows[i][a]
        if k:
            B[start + k - 1][j] = fmpq(1)
        start += k
    return A, B, C


def _within(model: StateSpace, threshold: float, exact_order: int) -> Decision | None:
    """Return the decision within rounding where it goes below the exact order; None where the exact one stands.

    The gap of the exact decision is measured all the same.
    """
    from realize.forms.within_rounding import hidden_within

    if model.order == 0:
        return None
    found = hidden_within(model.A, model.B, model.C, model.E, threshold, sampled=model.time.sampled)
    if found.order >= exact_order:
        decision = _exactly(model, threshold) if model.order <= LARGEST_EXACT else None
        if decision is None:
            decision = Decision(model.order, False, threshold, 0.0, found.kept, made=model)
        decision.kept = found.kept
        decision.doubtful = found.doubtful
        return decision
    gone = [{"pole": m.pole, "states": 1, "why": m.why, "change": m.change} for m in found.modes]
    return Decision(
        found.order,
        False,
        threshold,
        max((m.change for m in found.modes), default=0.0),
        found.kept,
        gone,
        hidden=(found.unreachable, found.unobservable),
        doubtful=found.doubtful,
    )


def candidates(model: StateSpace, decision: Decision) -> Iterator[tuple[Model, str, bool]]:
    """Return state models of the decided order in several coordinates, with their names and whether they keep every
    channel accurate everywhere."""
    task = Task(model, "state-space", "cascade")
    if decision.exact is not None and decision.hidden is None:
        if model.shape == (1, 1) and predicted_cost(model) <= EXACT_BUDGET:
            with suppress(Refused):
                yield _cascade(model, task), "cascade", True
        for name, make in decision.exact.coordinates.items():
            with suppress(Refused):
                yield _state_model(task, make(), decision.polynomial), name, False
        if not decision.exact.coordinates and decision.made is None:
            p, m = model.shape
            empty = np.zeros((0, 0)), np.zeros((0, m)), np.zeros((p, 0))
            yield _state_model(task, empty, decision.polynomial), "constant", True
        return
    if decision.hidden is not None:
        from realize.forms.within_rounding import truncated

        for name, make in truncated(
            model.A, model.B, model.C, model.E, decision.order, *decision.hidden, sampled=model.time.sampled
        ):
            with suppress(Refused, ArithmeticError):
                yield _state_model(task, make(), None), name, False


def _cascade(model: StateSpace, task: Task) -> StateSpace:
    from realize.kernels.exact.polynomials import reduce_fraction

    grid = [[reduce_fraction(n, d) for n, d in row] for row in form_fractions(model)]
    return builders.cascade(builders.factors_from_fractions(grid, task), task)


def _state_model(task: Task, matrices: tuple[Array, Array, Array], polynomial: Array | None) -> StateSpace:
    A, B, C = matrices
    model = task.model
    assert isinstance(model, StateSpace)
    if polynomial is None:
        return builders.state_model(task, A, B, C, model.D)
    if polynomial.shape[0] == 1:
        return builders.state_model(task, A, B, C, polynomial[0])
    return builders.state_model(task, *append_polynomial_part(A, B, C, np.zeros(model.shape), polynomial))
