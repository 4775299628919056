"""The one entrance to all methods of reduction."""

from __future__ import annotations

import math

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.errors import Refused, UsageError
from realize.kernels.norms import pole_frequencies
from realize.reduction import choice
from realize.reduction.prepare import Prepared, prepare
from realize.reduction.registry import automatic, method_named
from realize.reduction.result import Projected, Reduction

Array = NDArray[np.float64]

EPS = float(np.finfo(float).eps)
#: The sensitivity of a result with more states than this is sampled at fewer frequencies.
SAMPLED_FREQUENCIES = 60


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
) -> Reduction:
    """Reduce a state model to an order, or to the smallest order whose guaranteed error keeps a limit.

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
    # balancing needs no Schur form where there is a shorter way
    triangular = method not in ("auto", "balanced-truncation")
    prepared = prepare(A, B, C, D, sampled=sampled, triangular=triangular)
    chosen_method = method_named(automatic(prepared) if method == "auto" else method)
    notes: list[str] = []
    if prepared.kept_order:
        on_axis = int(np.count_nonzero(prepared.split.marginal))
        notes.append(
            f"kept as they are: {choice.states(prepared.kept_order - on_axis)} of unstable poles and "
            f"{choice.states(on_axis)} of poles on the boundary of stability"
        )
    largest: float | None = None
    limit: float | None = None
    if order is not None:
        count = choice.by_order(prepared, order, notes)
    else:
        limit = absolute_error
        if relative_error is not None:
            peak = prepared.largest_gain()
            largest = peak.value
            limit = relative_error * largest
            if prepared.kept_order:
                notes.append("the relative error refers to the largest gain of the stable part")
        assert limit is not None
        count = choice.by_error(prepared, limit, notes)
    part = chosen_method.project(prepared, count)
    rounding = rounding_term(prepared, part, count)
    if limit is not None:
        # rounding may use up what the tail leaves: a few more states make room, if anything can
        for _ in range(3):
            if prepared.in_gain(float(prepared.tails[count])) + rounding <= limit or count >= prepared.available:
                break
            count += 1
            while not prepared.cut_allowed(count):
                count += 1
            count = min(count, prepared.available)
            part = chosen_method.project(prepared, count)
            rounding = rounding_term(prepared, part, count)
        if not math.isfinite(rounding):
            raise Refused(
                "a pole lies on the boundary of stability to the last rounding, yet was not told from a stable one: no "
                "error can be promised; give the model with that pole exactly on the axis, or ask for an order"
            )
        if rounding > limit:
            raise Refused(
                f"an error of {limit:.3g} is below the rounding of this model, about {rounding:.3g}; ask for more"
            )
    return _assembled(prepared, part, count, chosen_method.name, rounding, largest, notes)


def rounding_term(prepared: Prepared, part: Projected, count: int) -> float:
    """Return what rounding may add to the theorem's bound (absolute, in the model's own unit).

    Twice the estimated errors of the values that were cut, and the first-order effect of errors in the entries of the
    result, |dG| <= |C (sI - A)^-1| |dA| |(sI - A)^-1 B| + |C (sI - A)^-1| |dB| + |dC| |(sI - A)^-1 B|, largest over the
    frequencies of the result's poles. The error of an entry is n^1/2 eps times the size of the products it is summed
    from, which are graded by the Hankel singular values (the root is the usual statistical growth: Higham, Accuracy
    and Stability of Numerical Algorithms, 2002, section 2.8), and the relative errors of the two values it belongs to.
    Instead of the latter the backward error of the Schur form may count once, by what it does to the response: the
    balanced model is exact for a model that near. The smaller of the two estimates stands.
    """
    factors = prepared.factors
    n = factors.values.size
    cut = 2 * float(factors.errors[count : prepared.available].sum()) if count < n else 0.0
    if count == 0 or n == 0:
        return prepared.in_gain(cut)
    unit = EPS * math.sqrt(n)
    root = np.sqrt(factors.values[:count])
    uncertain = factors.errors[:count] / factors.values[:count] / 2
    # sizes of the sums behind each entry, form by form as in `balanced_part`
    left, right = np.abs(factors.left[:, :count]), np.abs(factors.right[:, :count])
    roots = factors.roots
    above = (left.T @ (np.abs(roots.M) @ left)) / root[:, None] * root
    below = (right.T @ (np.abs(roots.N) @ right)) * root[:, None] / root
    change_a = unit * (np.triu(above) + np.tril(below, -1))
    sums_b = root * np.linalg.norm(right.T @ np.abs(roots.input), axis=1)
    sums_c = root * np.linalg.norm(np.abs(roots.output) @ left, axis=0)
    doubt_a = np.abs(part.A) * (uncertain[:, None] + uncertain)
    doubt_b, doubt_c = uncertain * np.linalg.norm(part.B, axis=1), uncertain * np.linalg.norm(part.C, axis=0)
    poles = np.linalg.eigvals(part.A).astype(complex)
    frequencies = pole_frequencies(poles, sampled=prepared.sampled)
    points = np.exp(1j * frequencies) if prepared.sampled else 1j * frequencies
    distance = np.min(np.abs(points[:, None] - poles[None, :]), axis=1)
    points = points[np.argsort(distance, kind="stable")[:SAMPLED_FREQUENCIES]]
    triangle, basis = scipy.linalg.schur(part.A.astype(complex), output="complex")
    into, out = basis.conj().T @ part.B, part.C @ basis
    worst, doubt = 0.0, 0.0
    for point in points:
        pencil = point * np.eye(count) - triangle
        if np.any(np.diagonal(pencil) == 0):
            # a pole of the result is on the boundary of stability: what rounding can do there has no bound
            return math.inf
        state = basis @ scipy.linalg.solve_triangular(pencil, into, check_finite=False)
        costate = scipy.linalg.solve_triangular(pencil, out.T, trans=1, check_finite=False).T @ basis.conj().T
        x, y = np.linalg.norm(state, axis=1), np.linalg.norm(costate, axis=0)
        worst = max(worst, float(y @ change_a @ x + unit * (y @ sums_b + sums_c @ x)))
        doubt = max(doubt, float(y @ doubt_a @ x + y @ doubt_b + doubt_c @ x))
    return prepared.in_gain(cut + worst + min(doubt, factors.response_error))


def _assembled(
    prepared: Prepared,
    part: Projected,
    count: int,
    method: str,
    rounding: float,
    largest: float | None,
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
        values = np.ldexp(prepared.factors.values, scaled.gain)
        errors = np.ldexp(prepared.factors.errors, scaled.gain)
    A = A.reshape(count + prepared.kept_order, count + prepared.kept_order)
    for matrix in (A, B, C, D, values):
        if not np.all(np.isfinite(matrix)):
            raise Refused("the result does not fit into doubles in these units; use units nearer to the model's size")
    tail = prepared.in_gain(float(prepared.tails[count]))
    if count < prepared.stable_order:
        lower = max(0.0, float(values[count] - errors[count]))
    else:
        lower = 0.0
    return Reduction(
        A=A,
        B=B,
        C=C,
        D=D,
        method=method,
        order=count + prepared.kept_order,
        kept_order=prepared.kept_order,
        kept_poles=np.ldexp(split.kept_poles.real, scaled.time) + 1j * np.ldexp(split.kept_poles.imag, scaled.time),
        hankel_singular_values=values,
        hankel_errors=errors,
        bound=tail + rounding,
        tail_bound=tail,
        rounding=rounding,
        lower_bound=lower,
        largest_gain=largest,
        candidates=choice.candidates(prepared, count),
        notes=tuple(notes),
        left=left,
        right=right,
        separation=split.separation,
        coupling=split.coupling,
    )
