"""Scaled coordinates: every state in a unit of its own, a power of two."""

from __future__ import annotations

import numpy as np

from realize.forms.coordinates import Array, Coordinates, Setting, take_units_out


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
    units = take_units_out(A, B, C, setting)
    n = A.shape[0]
    result = units.restored(units.A, units.B, units.C, D, np.eye(n), np.eye(n))
    result.details.update(
        exponents=units.states.tolist(),
        spread={"before": _spread(A, B, C), "after": _spread(result.A, result.B, result.C)},
    )
    return result
