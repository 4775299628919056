"""Norms of a model: largest gain over all frequencies, H2 norm, Hankel norm; each a claim."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from realize.kernels import norms
from realize.kernels.lyapunov import NotStable
from realize.models import Model, StateSpace
from realize.models.state_space import is_identity
from realize.schema import Claim, judge
from realize.verification.curves import (
    Extreme,
    above,
    extreme_claim,
    largest_of,
    minors_affordable,
    minors_in,
    model_in,
    pole_on_axis,
    sampled_peak,
)
from realize.verification.views import View, view_of

#: Largest degree whose H2 norm, and whose Hankel norm, is proved.
H2_ORDER, HANKEL_ORDER = 200, 40
TOLERANCE = 1e-9


def largest_gain(model: Any) -> Claim:
    """Return the L-infinity norm: the largest singular value over all frequencies, and where it is.

    sup over w of sigma_max(G(jw)), sampled G(exp(jwT)). The plant may be unstable; with a pole on the axis or unit
    circle, or improper, it is infinite. Dead time at inputs and outputs does not change it.

    Parameters
    ----------
    model : Model or Conversion
        Any parametric kind, descriptor models included.

    Returns
    -------
    Claim
        ``largest-gain``, absolute. Proved by an exact polynomial inequality [1]_ for small orders (several channels: in
        number); bounded by the eigenvalues of a Hamiltonian matrix in doubles, or measured, beyond.

    References
    ----------
    .. [1] S. Boyd, V. Balakrishnan, P. Kabamba, A bisection method for computing the H-infinity norm of a transfer
           matrix, Math. Control Signals Systems 2 (1989) 207-219.
    """
    model = model_in(model)
    return _gain_claim(view_of(model), _channel_delay(model))


def _channel_delay(model: Model) -> str:
    """Return a note where dead times differ between channels in a way that changes singular values."""
    if model.dead_time is None or 1 in model.shape:
        return ""
    channels = np.asarray(model.dead_time.channels, dtype=float)
    return "" if not np.any(channels) else "dead times of the channels left out"


def _gain_claim(view: View, note: str) -> Claim:
    if minors_affordable(view):
        from realize.kernels.exact.graphs import gain_squares

        axis = pole_on_axis(view)
        if axis is not None:
            found = Extreme(math.inf, axis, math.inf)
            return extreme_claim(
                "largest-gain", found, basis="proved", note="improper" if axis == math.inf else "a pole on the axis"
            )
        minors = minors_in(view)
        found = largest_of(gain_squares(minors), view.exact_period, [minors.poles])
        return extreme_claim("largest-gain", found, basis="measured" if note else None, note=note)
    model = view.model
    if isinstance(model, StateSpace) and is_identity(model.E):
        peak = norms.peak_gain(model.A, model.B, model.C, model.D, sampled=view.period is not None, tolerance=TOLERANCE)
        where = peak.frequency / view.period if view.period is not None else peak.frequency
        from realize.verification.fragility import fragility

        doubt = 16 * (fragility(model, np.array([where if math.isfinite(where) else 0.0])) or 0.0) * peak.value
        bound = peak.upper + doubt if peak.basis == "bounded" and math.isfinite(peak.upper) else None
        note = "; ".join(part for part in (note, "in double arithmetic") if part)
        return extreme_claim(
            "largest-gain",
            Extreme(peak.value, where, bound),
            basis="measured" if bound is None else "bounded",
            note=note,
        )
    found = sampled_peak(view, lambda w: norms.gains(view.response(w)))
    return extreme_claim("largest-gain", found, note="samples in double arithmetic")


def h2_norm(model: Any) -> Claim:
    """Return the H2 norm: root of the sum over the channels of the integral of the squared impulse response.

    Continuous ||G||^2 = (1 / 2 pi) integral ||G(jw)||_F^2 dw; sampled ||G||^2 = sum over k of ||h_k||_F^2, the
    feed-through h_0 = D included (per sample: no factor of the period). Infinite for a continuous model with
    feed-through; not available for one that is not stable. Dead time does not change it.

    Parameters
    ----------
    model : Model or Conversion

    Returns
    -------
    Claim
        ``h2-norm``, absolute; proved up to order 200 (ball arithmetic), measured beyond.
    """
    model = model_in(model)
    return h2_claim("h2-norm", view_of(model))


def h2_claim(name: str, view: View) -> Claim:
    """Return the H2 norm of a model as a claim of that name."""
    degree = _degree(view)
    if view.fractions is not None and degree <= H2_ORDER:
        return h2_of_fractions(name, view.fractions, view.period is not None)
    model = view.model
    if not (isinstance(model, StateSpace) and is_identity(model.E)):
        return judge(name, None, unit="absolute", note="convert to state space without E first: exact is too costly")
    return h2_of_states(name, model.A, model.B, model.C, model.D, view.period is not None)


def _degree(view: View) -> int:
    if view.fractions is None:
        return int(view.model.order or 0)
    return max(max(n.degree(), d.degree()) for row in view.fractions for n, d in row)


def h2_of_states(name: str, A: Any, B: Any, C: Any, D: Any, sampled: bool) -> Claim:
    """Return the H2 norm of a state model from its Gramian in doubles, both Gramians compared."""
    try:
        value = norms.squared_norm(A, B, C, D, sampled=sampled)
        other = norms.squared_norm(A.T.copy(), C.T.copy(), B.T.copy(), D.T.copy(), sampled=sampled)
    except NotStable:
        return judge(name, None, unit="absolute", note="not stable")
    if not math.isfinite(value):
        return judge(name, value, unit="absolute", basis="bounded", note="a feed-through in continuous time")
    apart = abs(value - other) / value if value else 0.0
    return judge(name, value, unit="absolute", note=f"from a Gramian; the other one differs by {apart:.1e}, relative")


def h2_of_fractions(name: str, fractions: Any, sampled: bool) -> Claim:
    """Return the H2 norm of exact fractions (numerator, denominator) [output][input]."""
    from flint import arb, fmpq_poly

    from realize.kernels.exact.graphs import continuous
    from realize.kernels.exact.numbers import near_ball, precision
    from realize.kernels.exact.polynomials import reduce_fraction
    from realize.kernels.exact.squared_norms import squared_h2

    grid: Any = continuous(fractions) if sampled else fractions
    groups: dict[str, tuple[Any, list[Any]]] = {}
    infinite = False
    for row in grid:
        for n, d in row:
            n, d = reduce_fraction(n, d)
            if not n:
                continue
            if sampled:
                # dz / z = 2 ds / (1 - s^2)
                improper = n.degree() > d.degree()
                d = d * fmpq_poly([1, 1])
                n, d = reduce_fraction(n, d)
            else:
                improper = n.degree() >= d.degree()
            if improper and sampled:
                return judge(name, None, unit="absolute", note="not stable: a pole at z = -1")
            infinite |= improper
            groups.setdefault(str(d), (d, []))[1].append(n)
    parts = [(d, [n for n in numerators if n.degree() < d.degree()]) for d, numerators in groups.values()]
    found = []
    for d, numerators in parts:
        part = squared_h2(numerators, d)
        if part is None:
            return judge(name, None, unit="absolute", basis="proved", note="not stable")
        found.append(part)
    if infinite:
        note = "a feed-through in continuous time, or improper"
        return judge(name, math.inf, unit="absolute", basis="proved", note=note)
    with precision(128):
        root = (sum(found, arb(0)) * (2 if sampled else 1)).sqrt()
        value = near_ball(root)
    return judge(name, value, unit="absolute", basis="proved", uncertainty=above(value * 2.0**-52))


def hankel_norm(model: Any) -> Claim:
    """Return the Hankel norm of the stable part: its largest Hankel singular value.

    The largest eigenvalue of the product of the two Gramians, square root. Direct terms do not count.

    Parameters
    ----------
    model : Model or Conversion

    Returns
    -------
    Claim
        ``hankel-norm``, absolute; proved for one channel that is stable, up to order 40; else measured, with an
        estimate of the rounding in the note.
    """
    model = model_in(model)
    view = view_of(model)
    if model.shape == (1, 1) and view.fractions is not None and _degree(view) <= HANKEL_ORDER:
        from realize.kernels.exact.graphs import continuous
        from realize.kernels.exact.roots import inside_left_half_plane
        from realize.kernels.exact.squared_norms import hankel_norm as exact_norm

        grid: Any = view.fractions if view.period is None else continuous(view.fractions)
        n, d = grid[0][0]
        improper = view.period is not None and n.degree() > d.degree()
        if not improper and (d.degree() < 1 or inside_left_half_plane(d) == d.degree()):
            value, rounding = exact_norm(n, d)
            note = "" if model.dead_time is None else "dead time left out"
            return judge(
                "hankel-norm",
                value,
                unit="absolute",
                basis="measured" if note else "proved",
                uncertainty=rounding,
                note=note,
            )
    if not (isinstance(model, StateSpace) and is_identity(model.E)):
        return judge("hankel-norm", None, unit="absolute", note="convert to state space without E first")
    return _hankel_in_doubles(model, view.period is not None)


def _hankel_in_doubles(model: StateSpace, sampled: bool) -> Claim:
    import scipy.linalg

    from realize.kernels.balancing import hankel_factors
    from realize.kernels.splitting import split_stable
    from realize.kernels.unit_scaling import scale_model

    scaled = scale_model(model.A, model.B, model.C, sampled=sampled)
    A, B, C = scaled.A, scaled.B, scaled.C
    part = ""
    poles = np.linalg.eigvals(A) if A.size else np.zeros(0)
    if np.any(np.abs(poles) >= 1 if sampled else poles.real >= 0):
        split = split_stable(A, B, C, sampled=sampled)
        A, B, C = split.stable
        part = f"; the stable part, {A.shape[0]} of {model.order} states"
    if A.shape[0] == 0 or not np.any(B) or not np.any(C):
        return judge("hankel-norm", 0.0, unit="absolute", note=f"nothing stable is connected{part}")
    T, Q = scipy.linalg.schur(A, output="real", check_finite=False)
    factors = hankel_factors(T, Q.T @ B, C @ Q, sampled=sampled)
    value = float(np.ldexp(factors.values[0], scaled.gain))
    error = float(factors.errors[0] / factors.values[0]) if factors.values[0] else 0.0
    note = f"from Gramians in doubles, rounding estimated at {error:.1e}, relative{part}"
    return judge("hankel-norm", value, unit="absolute", note=note)


__all__ = ["h2_norm", "hankel_norm", "largest_gain"]
