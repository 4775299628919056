"""Scattering, impedance, admittance and hybrid parameters of a network, one from the other.

Every parameter P relates an input and an output vector that are linear in the voltages V and the currents I into the
ports: [x_in; x_out] = T [V; I], x_out = P x_in. With the T of both, [F; G] = T_new T_old^-1 [I; P], P_new = G F^-1.
Waves are a = (V + R I) / (2 sqrt R), b = (V - R I) / (2 sqrt R) with the real reference R of each port (K. Kurokawa,
"Power waves and the scattering matrix", IEEE Trans. Microwave Theory Tech. 13(2), 1965).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def variables_of(parameter: str, reference: Array) -> Array:
    """Return T, [2 n][2 n]: inputs and outputs of a parameter from voltages (V) and currents (A)."""
    n = reference.size
    one, none = np.eye(n), np.zeros((n, n))
    if parameter == "scattering":
        root = np.diag(1 / (2 * np.sqrt(reference)))
        cross = np.diag(np.sqrt(reference) / 2)
        return np.block([[root, cross], [root, -cross]])
    if parameter == "impedance":
        return np.block([[none, one], [one, none]])
    if parameter == "admittance":
        return np.block([[one, none], [none, one]])
    # hybrid: I1, V2 in and V1, I2 out; the inverse: V1, I2 in and I1, V2 out
    mixed = np.array([[0, 0, 1, 0], [0, 1, 0, 0], [1, 0, 0, 0], [0, 0, 0, 1]], dtype=float)
    return mixed if parameter == "hybrid" else mixed[[2, 3, 0, 1]]


def converted(
    values: ComplexArray, deviation: Array | None, old: Array, new: Array
) -> tuple[ComplexArray, Array | None, Array]:
    """Return other parameters of the same network, their deviation, and how well each line can be inverted.

    dP_new = (G_1 - P_new F_1) dP F^-1; the errors of the entries are taken as independent.

    Parameters
    ----------
    values : [k][n][n] complex
    deviation : [k][n][n] float, optional
    old, new : [2 n][2 n] float
        `variables_of` the parameter that the values are, and of the one wanted.

    Returns
    -------
    values, deviation, and the ratio of the singular values of F at each line, smallest by largest; the values mean
    nothing where it is near rounding.
    """
    n = values.shape[1]
    through = new @ np.linalg.inv(old)
    upper, lower = through[:n], through[n:]
    F = upper[:, :n] + upper[:, n:] @ values
    G = lower[:, :n] + lower[:, n:] @ values
    # rows of F have different units for hybrid parameters: scaled to compare
    rows = np.linalg.norm(F, axis=2, keepdims=True)
    singular = np.linalg.svd(F / np.where(rows > 0, rows, 1.0), compute_uv=False)
    with np.errstate(divide="ignore", invalid="ignore"):
        share = np.where(singular[:, 0] > 0, singular[:, -1] / singular[:, 0], 0.0)
    good = share > np.finfo(float).eps
    safe = np.where(good[:, None, None], F, np.eye(n))
    # P F = G from the right
    result = np.swapaxes(np.linalg.solve(np.swapaxes(safe, 1, 2), np.swapaxes(G, 1, 2)), 1, 2)
    if deviation is None:
        return result, None, share
    left = np.abs(lower[:, n:] - result @ upper[:, n:]) ** 2
    right = np.abs(np.linalg.inv(safe)) ** 2
    return result, np.sqrt(left @ deviation**2 @ right), share
