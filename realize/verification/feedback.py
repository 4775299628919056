"""Distance of two plants in feedback (nu-gap), and robustness of a plant with a controller; each a claim."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from realize.errors import InputError, Refused
from realize.models import Model, StateSpace
from realize.models.state_space import is_identity
from realize.schema import Claim, judge
from realize.verification.curves import (
    MOST_PRODUCTS,
    Extreme,
    extreme_claim,
    largest_of,
    minors_affordable,
    minors_in,
    model_in,
    same_base,
    sampled_peak,
)
from realize.verification.views import View, view_of

UNITS = "depends on the units of inputs and outputs"


def gap_distance(first: Any, second: Any) -> Claim:
    """Return the nu-gap between two plants: 0 (the same) to 1 (no controller suits both with any margin).

    delta = sup over w of kappa(w), if det(I + P2~ P1) has no zero on the axis and its winding number is that of P1 = P2
    [1]_, else 1; P~(s) = P(-s)', and kappa is the sine of the largest angle between the graphs [P1; I] and [P2; I]::

        kappa = sigma_max((I + P2 P2*)^(-1/2) (P1 - P2) (I + P1* P1)^(-1/2)).

    In terms of the pole polynomials f1, f2 the winding number asks that the polynomial f1 f2~ det(I + P2~ P1), of
    degree n1 + n2, has n2 roots in the right half-plane and n1 in the left: poles on the axis need no convention.

    A controller whose stability margin with P1 exceeds delta stabilises P2. The gap depends on the units of inputs and
    outputs: scale both plants by the same weights first.

    Parameters
    ----------
    first, second : Model or Conversion
        Same inputs and outputs, same time base; unstable, descriptor and improper plants allowed.

    Returns
    -------
    Claim
        ``nu-gap``, relative: proved by exact polynomial inequalities and an exact count of roots for small orders (any
        number of channels up to about 3 x 3); measured beyond.

    References
    ----------
    .. [1] G. Vinnicombe, Frequency domain uncertainty and the graph topology, IEEE Trans. Automatic Control 38 (1993)
           1371-1383.
    """
    one, two = model_in(first), model_in(second)
    if one.shape != two.shape:
        raise InputError(
            f"{two.shape[0]} outputs and {two.shape[1]} inputs", f"{one.shape[0]} and {one.shape[1]}, as the first has"
        )
    same_base(one, two)
    return gap_claim(one, two)


def gap_claim(first: Model, second: Model) -> Claim:
    """Return the nu-gap of two models of one shape and time base; not available where dead times stand in the way."""
    if not same_outer_delays(first, second):
        return judge("nu-gap", None, note="not available: dead times differ, or differ between channels")
    one, two = view_of(first), view_of(second)
    if one is two:
        return judge("nu-gap", 0.0, basis="proved", uncertainty=0.0, where={"frequency": 0.0}, note=UNITS)
    found = _angles(one, two)
    if found is not None:
        return _exact_gap(found, one.exact_period, one, two)
    return _gap_in_doubles(one, two)


def same_outer_delays(first: Model, second: Model) -> bool:
    """True where both have the same dead times, and they are those of inputs and outputs alone (or of one channel)."""
    if first.dead_time is None and second.dead_time is None:
        return True
    one, two = (np.zeros(m.shape) if m.dead_time is None else m.dead_time.total for m in (first, second))
    if not np.array_equal(one, two):
        return False
    return bool(np.all(one - one[:, :1] - one[:1, :] + one[0, 0] == 0))


def _angles(one: View, two: View, *, controller: bool = False) -> Any:
    """Return the exact angles between two graphs, or None where too costly."""
    from realize.kernels.exact.graphs import angles, determinant_count

    if not (minors_affordable(one) and minors_affordable(two)):
        return None
    p, m = one.model.shape
    count = determinant_count(p, m)
    # the transpose of a controller stands for P2
    a, b = minors_in(one), minors_in(two, transposed=controller)
    if count * (a.degree + b.degree + 1) > MOST_PRODUCTS:
        return None
    return angles(a, b, adjoint=not controller)


def _exact_gap(found: Any, period: Any, one: View, two: View) -> Claim:
    n1, n2 = found.degrees
    sines = found.sines
    if not any(sines[1:]):
        return judge("nu-gap", 0.0, basis="proved", uncertainty=0.0, where={"frequency": 0.0}, note=UNITS)
    closed = found.closed
    if closed.degree() != n1 + n2 or _half_planes(closed) != (n1, n2):
        note = f"the winding number differs from that of equal plants; {UNITS}"
        return judge("nu-gap", 1.0, basis="proved", uncertainty=0.0, note=note)
    peak = largest_of(sines, period, [minors_in(one).poles, minors_in(two).poles])
    value = min(peak.value, 1.0)
    bound = None if peak.bound is None else min(max(peak.bound, value), 1.0)
    return extreme_claim("nu-gap", Extreme(value, peak.frequency, bound), unit="relative", note=UNITS)


def _half_planes(p: Any) -> tuple[int, int]:
    """Return how many roots are left and right of the axis, exactly."""
    from realize.kernels.exact.roots import roots

    if p.degree() < 1:
        return 0, 0
    left, right = 0, 0
    for root in roots(p):
        bits, ball = 128, root.ball
        while not root.on_axis and not ball.real < 0 and not ball.real > 0:
            bits *= 2
            ball = root.at(bits)
        if not root.on_axis:
            left, right = (left + root.multiplicity, right) if ball.real < 0 else (left, right + root.multiplicity)
    return left, right


def chordal_distance(first: np.ndarray, second: np.ndarray) -> np.ndarray:
    """Return kappa at each of k frequencies.

    Parameters
    ----------
    first, second : (k, p, m) complex arrays
        Frequency responses; entries that are not finite give 1.
    """
    result = np.ones(first.shape[0])
    m = first.shape[2]
    usable = np.isfinite(first).all(axis=(1, 2)) & np.isfinite(second).all(axis=(1, 2))
    if not usable.any():
        return result
    bases = []
    for values in (first[usable], second[usable]):
        size = np.maximum(np.abs(values).max(axis=(1, 2)), 1.0)[:, None, None]
        stacked = np.concatenate([values / size, np.broadcast_to(np.eye(m), (values.shape[0], m, m)) / size], axis=1)
        bases.append(np.linalg.qr(stacked)[0])
    V, W = bases
    rest = V - W @ (W.conj().transpose(0, 2, 1) @ V)
    result[usable] = np.minimum(np.linalg.svd(rest, compute_uv=False)[:, 0], 1.0)
    return result


def _gap_in_doubles(one: View, two: View) -> Claim:
    first, second = one.model, two.model
    note = f"in double arithmetic; {UNITS}"
    if not all(isinstance(m, StateSpace) and is_identity(m.E) for m in (first, second)) or one.period is not None:
        return judge(
            "nu-gap", None, note="not available: too large for exact arithmetic, and not two continuous states"
        )
    assert isinstance(first, StateSpace) and isinstance(second, StateSpace)
    # u = -P2~ y around P1: the roots of det(I + P2~ P1)
    inner = np.eye(first.shape[1]) + second.D.T @ first.D
    n, k = first.A.shape[0], second.A.shape[0]
    A = np.zeros((n + k, n + k))
    A[:n, :n], A[n:, n:] = first.A, -second.A.T
    A[n:, :n] = -second.C.T @ first.C
    B = np.vstack([first.B, -second.C.T @ first.D])
    C = np.hstack([second.D.T @ first.C, second.B.T])
    poles = np.linalg.eigvals(A - B @ np.linalg.solve(inner, C)) if n + k else np.zeros(0)
    if int(np.sum(poles.real > 0)) != k:
        return judge("nu-gap", 1.0, where={}, note=f"the winding number differs, {note}")
    found = sampled_peak(one, lambda w: chordal_distance(one.response(w), two.response(w)), two)
    return extreme_claim("nu-gap", found, unit="relative", note=note)


def stability_margin(plant: Any, controller: Any) -> Claim:
    """Return b(P, K), the generalised stability margin of the loop y = P u, u = -K y: 0 (not stable) to 1.

    1 / b = sup over w of sigma_max([P; I] (I + K P)^-1 [K, I]) [1]_. Every plant whose nu-gap to P is less than b is
    stabilised too. Like the nu-gap it depends on units.

    Parameters
    ----------
    plant : Model or Conversion
        p outputs, m inputs.
    controller : Model or Conversion
        m outputs, p inputs.

    Returns
    -------
    Claim
        ``stability-margin``, relative. `value` is a proved lower bound, and ``value + uncertainty`` is attained at a
        frequency.

    References
    ----------
    .. [1] K. Glover, D. McFarlane, Robust stabilization of normalized coprime factor plant descriptions with H-infinity
           bounded uncertainty, IEEE Trans. Automatic Control 34 (1989) 821-830.
    """
    P, K = model_in(plant, "plant"), model_in(controller, "controller")
    _loop_of(P, K)
    one, two = view_of(P), view_of(K)
    found = _angles(one, two, controller=True)
    if found is None:
        raise Refused("the plant and the controller are too large for exact arithmetic; reduce them first")
    if not loop_is_stable(found):
        note = f"the loop u = -K y is not internally stable; {UNITS}"
        return judge("stability-margin", 0.0, basis="proved", uncertainty=0.0, note=note)
    peak = largest_of(found.cosines, one.exact_period, [found.closed])
    attained = min(1 / peak.value, 1.0) if peak.value else 1.0
    where = {"frequency": peak.frequency if math.isfinite(peak.frequency) else None}
    if peak.bound is None or not math.isfinite(peak.bound):
        return judge("stability-margin", attained, where=where, note=UNITS)
    value = min(math.nextafter(1 / peak.bound, 0.0), attained)
    return judge(
        "stability-margin",
        value,
        basis="proved",
        uncertainty=math.nextafter(attained * (1 + 2.0**-50) - value, math.inf),
        where=where,
        note=f"a lower bound; {UNITS}",
    )


def _loop_of(P: Model, K: Model) -> None:
    if K.shape != P.shape[::-1]:
        raise InputError(
            f"a controller with {K.shape[0]} outputs and {K.shape[1]} inputs",
            f"{P.shape[1]} and {P.shape[0]}: its outputs are the plant's inputs",
        )
    same_base(P, K)
    for model in (P, K):
        if model.dead_time is not None and np.any(model.dead_time.total):
            raise Refused(
                "a loop with dead time is not rational: sample it with a period that divides it, or leave it out"
            )


def loop_is_stable(found: Any) -> bool:
    """Return whether the closed loop has all its roots inside, exactly: well-posed and internally stable."""
    degree = sum(found.degrees)
    return found.closed.degree() == degree and _half_planes(found.closed) == (degree, 0)


__all__ = ["chordal_distance", "gap_claim", "gap_distance", "loop_is_stable", "stability_margin"]
