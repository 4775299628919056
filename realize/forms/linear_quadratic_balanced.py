"""Linear-quadratic balanced coordinates, which unstable models have too (Jonckheere & Silverman 1983)."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.errors import Refused
from realize.forms.coordinates import Array, Coordinates, Setting, Units, take_units_out
from realize.kernels.balancing import EPS, state_signs
from realize.kernels.linear_quadratic import NoSolution, residual, riccati_factor

#: Relative residual of the Riccati equations up to which the characteristic values mean anything.
RESIDUAL = 1e-8


def linear_quadratic_balanced_form(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Return coordinates in which the Riccati solutions of control and of filtering are equal and diagonal.

    With R = I + D'D, S = I + D D' (continuous; sampled as in `realize.kernels.linear_quadratic`)

        A'X + X A + C'C - (X B + C'D) R^-1 (B'X + D'C) = 0,
        A Y + Y A' + B B' - (Y C' + B D') S^-1 (C Y + D B') = 0

    and X = Z'Z, Y = L L', Z L = U V W': T = L W V^-1/2 and T^-1 = V^-1/2 U'Z make X = Y = V, the characteristic values
    in decreasing order [1]_ (there with D = 0). They say how hard a state is to control and to estimate, and depend on
    the units of inputs and outputs. The first large entry of each row of B (of a column of C where the row is nothing)
    is positive.

    Parameters
    ----------
    A : (n, n), B : (n, m), C : (p, n), D : (p, m) arrays
    setting : Setting

    Returns
    -------
    Coordinates
        `details` holds ``characteristic_values`` and ``riccati_residual`` (relative, the larger one of both equations).

    Raises
    ------
    Refused
        If an equation has no stabilising solution, its residual is too large, or the model is not minimal within
        doubles.

    References
    ----------
    .. [1] E. A. Jonckheere, L. M. Silverman, A new set of invariants for linear systems - application to reduced order
           compensator design, IEEE Trans. Automat. Control 28 (1983) 953-964.
    """
    n = A.shape[0]
    units = take_units_out(A, B, C, setting)
    if n == 0:
        details: dict[str, Any] = {"characteristic_values": [], "riccati_residual": 0.0}
        return units.restored(units.A, units.B, units.C, D, np.eye(0), np.eye(0), 1.0, details)
    own_A, own_B, own_C, exponent, odd = _weighted(units)
    sampled = setting.sampled
    try:
        Z = riccati_factor(own_A, own_B, own_C, D, sampled=sampled)
        L = riccati_factor(own_A.T, own_C.T, own_B.T, D.T, sampled=sampled).T
    except NoSolution as error:
        raise Refused(
            f"a Riccati equation has no stabilising solution in doubles ({error}): a mode on the boundary of stability "
            "may be out of reach of the inputs or unseen by the outputs, or the gains may span too much; take the "
            "minimal realization first, change the units of inputs and outputs, or use --form schur"
        ) from None
    U, values, Wt = np.linalg.svd(Z @ L)
    noise = n * EPS * float(np.linalg.norm(Z, 2) * np.linalg.norm(L, 2))
    lost = int(np.sum(values <= noise))
    if lost:
        size = values[n - lost] / max(values[0], np.finfo(float).tiny)
        raise Refused(
            f"linear-quadratic balanced coordinates need a minimal model: the last {lost} of {n} characteristic values "
            f"cannot be told from zero in doubles ({size:.1e} of the largest one); take the "
            "minimal realization first"
        )
    root = np.sqrt(values)
    right, left = L @ Wt.T / root, (U.T @ Z) / root[:, None]
    new_A, new_B, new_C = left @ own_A @ right, left @ own_B, own_C @ right
    sign = state_signs(new_B, new_C.T)
    new_A, new_B, new_C = new_A * sign[:, None] * sign, new_B * sign[:, None], new_C * sign
    right, left = right * sign, left * sign[:, None]
    V = np.diag(values)
    found = max(
        residual(new_A, new_B, new_C, D, V, sampled=sampled),
        residual(new_A.T, new_C.T, new_B.T, D.T, V, sampled=sampled),
    )
    if not found <= RESIDUAL and not setting.force:
        raise Refused(
            f"the Riccati equations are solved to {found:.1e} of their terms only: the coordinates would not be "
            "balanced; change the units of inputs and outputs, or use --form schur (--force gives them all the same)"
        )
    condition = float(np.linalg.norm(right, 2) * np.linalg.norm(left, 2))
    # back to the units of A', B', C'
    scale = np.sqrt(2.0) if odd else 1.0
    back_B, back_C = np.ldexp(new_B * scale, -exponent), np.ldexp(new_C * scale, -exponent)
    return units.restored(
        new_A,
        back_B,
        back_C,
        D,
        right,
        left,
        condition,
        {"characteristic_values": values.tolist(), "riccati_residual": found},
    )


def _weighted(units: Units) -> tuple[Array, Array, Array, int, bool]:
    """Return A', B', C' with the gain put back (costs depend on it) and time still scaled: B / 2^(time / 2)."""
    power = 2 * units.gain - units.time
    odd = bool(power % 2)
    exponent = (power - 1) // 2 + 1 if odd else power // 2
    scale = np.sqrt(0.5) if odd else 1.0
    return units.A, np.ldexp(units.B * scale, exponent), np.ldexp(units.C * scale, exponent), exponent, odd
