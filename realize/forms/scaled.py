"""Scaled coordinates: every state in a unit of its own, a power of two."""

from __future__ import annotations

import numpy as np

from realize.forms.coordinates import Array, Coordinates, Setting, Units, take_units_out
from realize.kernels.response import balancing_scale


def _spread(*matrices: Array) -> float:
    """Return the largest over the smallest nonzero entry."""
    sizes = np.abs(np.concatenate([matrix.reshape(-1) for matrix in matrices]))
    sizes = sizes[sizes > 0]
    if not sizes.size:
        return 1.0
    mantissa, exponent = np.frexp(np.array([sizes.max(), sizes.min()]))
    power = min(int(exponent[0] - exponent[1]), 1023)
    return float(np.ldexp(mantissa[0] / mantissa[1], power))


def scaled_states(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Scale the states by powers of two so that rows and columns of [A B; C 0] are of like size.

    x_i = 2^k_i z_i. Nothing is rounded unless an entry leaves the range of normal doubles.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
    D : (p, m) array
    setting : Setting

    Returns
    -------
    Coordinates
        Details: ``exponents`` k, and the ``spread`` (largest over smallest nonzero entry of A, B, C) before and after.

    References
    ----------
    .. [1] B. N. Parlett, C. Reinsch, Balancing a matrix for calculation of eigenvalues and eigenvectors, Numer. Math.
           13 (1969) 293-304 (from memory).
    """
    n, m, p = A.shape[0], B.shape[1], C.shape[0]
    units = take_units_out(A, B, C, setting)
    result = units.restored(units.A, units.B, units.C, D, np.eye(n), np.eye(n))
    exponents, after = units.states, _spread(result.A, result.B, result.C)
    # the same with A, B and C weighed as they are: which of the two is more even depends on the plant
    border = np.zeros((n + m + p, n + m + p))
    border[:n, :n], border[:n, n : n + m], border[n + m :, :n] = np.abs(A), np.abs(B), np.abs(C)
    other = np.frexp(balancing_scale(border)[:n])[1].astype(np.int64) - 1
    plain = Units(
        np.ldexp(A, other[None, :] - other[:, None]),
        np.ldexp(B, -other[:, None]),
        np.ldexp(C, other[None, :]),
        other,
        0,
        0,
    )
    if all(np.all(np.isfinite(matrix)) for matrix in (plain.A, plain.B, plain.C)):
        spread = _spread(plain.A, plain.B, plain.C)
        if spread < after:
            exponents, after = other, spread
            result = plain.restored(plain.A, plain.B, plain.C, D, np.eye(n), np.eye(n))
    result.details.update(exponents=exponents.tolist(), spread={"before": _spread(A, B, C), "after": after})
    return result
