"""Hankel singular values of any stable model, each with an error estimate."""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from realize.errors import RealizeError, Refused
from realize.kernels.exact.cost import BUDGET, affordable, hankel_operations
from realize.models import Model
from realize.schema import PARAMETRIC_KINDS
from realize.steps.conversion import Conversion, model_of
from realize.steps.inspect_zeros import smith_of
from realize.steps.receipts import probe_frequencies
from realize.verification import View, view_of

Array = NDArray[np.float64]


class HankelValues(NamedTuple):
    """Hankel singular values of a stable model.

    Attributes
    ----------
    values : (n,) array
        Decreasing, in the unit of the gain. n is the order of the model; as many as exceed its minimal order are
        exactly zero.
    errors : (n,) array
        The true value differs by no more than this.
    basis : str
        ``proved``: errors are bounds, from ball arithmetic. ``measured``: they are estimates, from double arithmetic.
    note : str
        What else is to be said, in words.
    """

    values: Array
    errors: Array
    basis: str
    note: str


def hankel_singular_values(model: Model | Conversion) -> HankelValues:
    """Return all Hankel singular values of a stable model to high relative accuracy, with an error for each.

    The square roots of the eigenvalues of the product of the two Gramians, whatever the coordinates. Predicted
    operations decide between ball arithmetic on the exact transfer matrix (orders up to about 100: relative errors
    below 1e-13, however far a value is below the first) and Gramian factors in doubles, whose errors are estimated.
    Feed-through and dead time do not count.

    Parameters
    ----------
    model : Model or Conversion

    Returns
    -------
    HankelValues

    Raises
    ------
    Refused
        If the model is data, improper, not stable, or a value is too large for a double.

    References
    ----------
    .. [1] B. C. Moore, Principal component analysis in linear systems, IEEE Trans. Automat. Control 26 (1981) 17-32.
    """
    model = model_of(model)
    if model.kind not in PARAMETRIC_KINDS:
        raise Refused("data has no Hankel singular values; fit a model first")
    view = view_of(model)
    exact = None if view.fractions is None else _in_balls(view)
    found = _in_doubles(model) if exact is None else exact
    missing = (model.order or 0) - found.values.size
    if missing > 0 and exact is not None:
        zeros = np.zeros(missing)
        found = found._replace(values=np.append(found.values, zeros), errors=np.append(found.errors, zeros))
    return found


def _in_balls(view: View) -> HankelValues | None:
    """Return values proved by ball arithmetic, or None where that is too costly."""
    from realize.kernels.exact.graphs import continuous
    from realize.kernels.exact.hankel_values import NotStable, common_parts, first_bits, hankel_values

    fractions: Any = view.fractions
    if view.period is not None:
        fractions = continuous(fractions)
    elif any(n.degree() > d.degree() for row in fractions for n, d in row):
        raise Refused("the model is improper: its Hankel singular values are infinite")
    _, d = common_parts(fractions)
    order, proved = strict_order(fractions)
    proved = proved or order == view.model.order
    if not proved:
        form = smith_of(view)
        if form is not None and form.proved:
            order, proved = form.degree, True
    rows, columns = max(view.model.shape), min(view.model.shape)
    bits = 2 * first_bits(d.degree())
    while affordable(hankel_operations(d.degree(), rows, columns, order, 2 * bits), BUDGET) and bits < 1 << 15:
        bits *= 2
    if not affordable(hankel_operations(d.degree(), rows, columns, order, bits), BUDGET):
        return None
    try:
        found = hankel_values(fractions, order, bits)
    except NotStable:
        raise Refused("the model is not stable: a pole is on or beyond the edge of stability") from None
    if found is None:
        return None
    pairs = [_rounded(ball) for ball in found.balls]
    note = "" if proved else f"how many are not zero, {order}, is a rank modulo two large primes"
    return HankelValues(np.array([v for v, _ in pairs]), np.array([e for _, e in pairs]), "proved", note)


def strict_order(fractions: Any) -> tuple[int, bool]:
    """Return the McMillan degree of the strictly proper part of a rational matrix, and whether it is proved."""
    from realize.kernels.exact.order import mcmillan_degree
    from realize.kernels.exact.polynomials import ZERO

    numerators = [[n % d if d.degree() > 0 else ZERO for n, d in row] for row in fractions]
    order, proved = mcmillan_degree(numerators, [[d for _, d in row] for row in fractions])
    return order, proved


def _rounded(ball: Any) -> tuple[float, float]:
    """Return the double next to the midpoint of a ball, and how far the ball reaches from it, rounded up."""
    from flint import arb

    from realize.kernels.exact.numbers import near_ball, precision

    value = near_ball(ball)
    if math.isinf(value):
        raise Refused("a Hankel singular value is too large for a double; use smaller units")
    with precision(192):
        distance = near_ball((ball - arb(value)).abs_upper())
    return value, math.nextafter(distance, math.inf) if distance or not ball.is_exact() else 0.0


def _in_doubles(model: Model) -> HankelValues:
    from realize.kernels.hankel_estimates import estimated_values
    from realize.kernels.lyapunov import NotStable
    from realize.steps.reduce import states_of

    try:
        states, route = states_of(model)
        values, errors, exponent = estimated_values(states.A, states.B, states.C, sampled=model.time.sampled)
    except NotStable:
        raise Refused("in double arithmetic a pole is on or beyond the edge of stability, or too near to it") from None
    except RealizeError as error:
        raise Refused(str(error)) from None
    with np.errstate(over="ignore", under="ignore"):
        values, errors = np.ldexp(values, exponent), np.ldexp(errors, exponent)
    if not np.all(np.isfinite(values)):
        raise Refused("a Hankel singular value is too large for a double; use smaller units")
    # an estimate that is smaller than the smallest number counts as that
    errors = np.maximum(errors, float(np.finfo(float).smallest_subnormal))
    note = "in double arithmetic: exact arithmetic would take too long"
    if route:
        errors = errors + _misfit(model, states)
        note += f"; from the states that {' → '.join(route)} gave, whose difference from the model is in the errors"
    return HankelValues(values, np.minimum(errors, float(np.finfo(float).max)), "measured", note)


#: The largest gain of a difference is taken to be at most so many times the largest that was found.
UNSEEN = 4.0


def _misfit(model: Model, states: Model) -> float:
    """Return how far values of a model and of its states can be apart: by the largest gain of the difference."""
    w = probe_frequencies(model)
    points = model.time.points(np.append(0.0, w))
    apart = model.rational_part(points) - states.rational_part(points)
    return UNSEEN * float(np.max(np.linalg.norm(apart, axis=(1, 2)), initial=0.0))
