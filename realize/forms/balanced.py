"""Balanced, input-normal and output-normal coordinates of a stable model (Moore 1981)."""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
import scipy.linalg

from realize.errors import Refused
from realize.forms.coordinates import Array, Coordinates, Setting, Units, take_units_out
from realize.kernels.balancing import EPS, HankelFactors, balanced_part, equal_groups, hankel_factors, state_signs
from realize.kernels.lyapunov import NotStable

Kind = Literal["balanced", "input-normal", "output-normal"]


def _factored(A: Array, B: Array, C: Array, setting: Setting, form: Kind) -> tuple[Units, Array, HankelFactors]:
    units = take_units_out(A, B, C, setting)
    if A.shape[0] == 0:
        return units, np.eye(0), hankel_factors(units.A, units.B, units.C, sampled=setting.sampled)
    T, Q = scipy.linalg.schur(units.A, output="real", check_finite=False)
    try:
        factors = hankel_factors(T, Q.T @ units.B, units.C @ Q, sampled=setting.sampled)
    except NotStable as error:
        raise Refused(
            f"{form} coordinates need a stable model, and {error}: its Gramians do not exist; "
            "use --form linear-quadratic-balanced, which unstable models have too"
        ) from None
    lost = int(np.sum(factors.values <= _scatter(T, Q.T @ units.B, units.C @ Q, factors.values, setting)))
    if lost:
        kept = A.shape[0] - lost
        raise Refused(
            f"{form} coordinates need a minimal model: {lost} of {A.shape[0]} Hankel singular values cannot be "
            f"told from zero in doubles ({factors.values[kept] / max(factors.values[0], np.finfo(float).tiny):.1e} of "
            f"the largest one, and as uncertain); take the minimal realization first, or reduce it to order {kept}"
        )
    return units, Q, factors


def _scatter(T: Array, B: Array, C: Array, values: Array, setting: Setting) -> Array:
    """Return how far each value moves when it is computed anew from the dual, whose rounding errors are others.

    Three times the largest difference among neighbours, and 4 n eps of the value: a value that is no larger is noise.
    The bound that comes with the values counts every change of A by rounding, and so condemns small values that the
    structure of a plant (unlike units, separate channels) protects.
    """
    n = values.size
    order = np.concatenate([np.arange(0, n, 2), np.arange(1, n, 2)])
    turned, Q = scipy.linalg.schur(np.ascontiguousarray(T.T[np.ix_(order, order)]), output="real", check_finite=False)
    try:
        again = hankel_factors(turned, Q.T @ C.T[order], B.T[:, order] @ Q, sampled=setting.sampled).values
    except NotStable:
        # a pole so close to the axis that the second Schur form has it on the other side
        return np.full(n, np.inf)
    difference = np.abs(values - again)
    near = np.max([np.roll(np.pad(difference, 2), k)[2:-2] for k in range(-2, 3)], axis=0)
    return np.asarray(3 * near + 4 * n * EPS * values)


def _said(units: Units, factors: HankelFactors) -> tuple[dict[str, Any], tuple[str, ...]]:
    """Return details and cautions: Hankel singular values in the model's own units, and which of them are equal."""
    exponent = 2 * units.gain - units.time
    with np.errstate(over="ignore", under="ignore"):
        values, errors = np.ldexp(factors.values, exponent), np.ldexp(factors.errors, exponent)
    details: dict[str, Any] = {
        "hankel_singular_values": values.tolist(),
        "hankel_errors": [error if np.isfinite(error) else None for error in errors.tolist()],
    }
    groups = equal_groups(factors.values)
    counts = np.bincount(groups) if groups.size else np.zeros(0, dtype=int)
    if not np.any(counts > 1):
        return details, ()
    size = int(counts.max())
    return details, (
        f"{size} Hankel singular values are equal within rounding: the coordinates of their states are only determined "
        "up to a rotation.",
    )


def _condition(units: Units, transform: Array, back: Array) -> float:
    return float(np.linalg.norm(transform, 2) * np.linalg.norm(back, 2)) if transform.size else 1.0


def balanced_form(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Return balanced coordinates: both Gramians equal and diagonal, the Hankel singular values in decreasing order.

    x = T z with T = L Z S^-1/2 and T^-1 = S^-1/2 U'R, from the square roots L L' and R'R of the Gramians of the scaled
    model and R L = U S Z' [1]_, [2]_. The first large entry of each row of B (of a column of C where the row is
    nothing) is positive.

    Parameters
    ----------
    A : (n, n), B : (n, m), C : (p, n), D : (p, m) arrays
    setting : Setting

    Returns
    -------
    Coordinates
        `details` holds ``hankel_singular_values`` and ``hankel_errors`` (estimated; None where unknown), in the units
        of the response.

    Raises
    ------
    Refused
        If the model is not stable, or not minimal within doubles.

    References
    ----------
    .. [1] B. C. Moore, Principal component analysis in linear systems, IEEE Trans. Automat. Control 26 (1981) 17-32.
    .. [2] M. S. Tombs, I. Postlethwaite, Truncated balanced realization of a stable non-minimal state-space system,
           Int. J. Control 46 (1987) 1319-1330.
    """
    units, Q, factors = _factored(A, B, C, setting, "balanced")
    part = balanced_part(factors, A.shape[0])
    transform, back = Q @ part.V, part.W.T @ Q.T
    details, cautions = _said(units, factors)
    condition = _condition(units, transform, back)
    return units.restored(part.A, part.B, part.C, D, transform, back, condition, details, cautions)


def input_normal_form(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Return input-normal coordinates: controllability Gramian I, observability Gramian diag(s^2).

    x = T z with T = L Z; Hankel singular values s in decreasing order.

    Parameters, results and exceptions are those of `balanced_form`.
    """
    return _normal(A, B, C, D, setting, "input-normal")


def output_normal_form(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Return output-normal coordinates: observability Gramian I, controllability Gramian diag(s^2).

    z = T^-1 x with T^-1 = U'R; Hankel singular values s in decreasing order.

    Parameters, results and exceptions are those of `balanced_form`.
    """
    return _normal(A, B, C, D, setting, "output-normal")


def _normal(A: Array, B: Array, C: Array, D: Array, setting: Setting, form: Kind) -> Coordinates:
    units, Q, factors = _factored(A, B, C, setting, form)
    roots, s, U, Z = factors.roots, factors.values, factors.left, factors.right
    into, out = Z.T @ roots.input, roots.output @ U
    if form == "input-normal":
        # with T L = L N the model in the basis L Z is Z'N Z, Z'L^-1 B
        inner, right, left = Z.T @ roots.N @ Z, roots.L @ Z, (roots.R.T @ U / s).T
        B_new, C_new = into, out * s
    else:
        inner, right, left = U.T @ roots.M @ U, roots.L @ Z / s, U.T @ roots.R
        B_new, C_new = s[:, None] * into, out
    sign = state_signs(B_new, C_new.T)
    # Gramians carry the unit 2^(2 gain - time), whose square root moves between T and its inverse
    exponent = 2 * units.gain - units.time
    unit = float(np.ldexp(np.sqrt(2.0) if exponent % 2 else 1.0, exponent // 2))
    factor = unit * sign if form == "input-normal" else sign / unit
    details, cautions = _said(units, factors)
    transform, back = Q @ right, left @ Q.T
    condition = _condition(units, transform, back)
    return units.restored(
        inner * sign[:, None] * sign,
        B_new / factor[:, None],
        C_new * factor,
        D,
        transform * factor,
        back / factor[:, None],
        condition,
        details,
        cautions,
    )
