"""Sampled responses fitted in the s plane: the exact bilinear map s = c (z - 1)/(z + 1) there and back."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Lines nearer than this to z = -1 (relative to half the sampling rate) have no usable image and are left out.
EDGE = 1e-6


def warped(frequency: Array, period: float) -> tuple[Array, NDArray[np.bool_]]:
    """Return tan(w T / 2), the image of z = exp(jwT) with c = 1, and which lines have one (z = -1 has none)."""
    half = frequency * (period / 2)
    usable = half < np.pi / 2 * (1 - EDGE)
    return np.tan(np.where(usable, half, 0.0)), usable


def mapped_back(
    poles: ComplexArray, residues: ComplexArray, direct: Array, c: float
) -> tuple[ComplexArray, ComplexArray, Array]:
    """Return poles, residues and direct term in z of sum residues/(s - poles) + direct with s = c (z - 1)/(z + 1).

    r/(s - p) = r/(c - p) + 2 c r/(c - p)^2 / (z - z_p), z_p = (c + p)/(c - p); |z_p| < 1 for every p on the left, and
    where rounding would put it on the circle it is drawn in by one rounding.
    """
    first = np.flatnonzero(poles.imag >= 0)
    image, scaled = poles.copy(), residues.copy()
    constant = direct.astype(float).copy()
    for k in first:
        p = complex(poles[k])
        z = (c + p) / (c - p)
        while abs(z) >= 1:
            z *= 1 - np.finfo(float).eps
        share = residues[k] / (c - p)
        image[k] = z
        scaled[k] = 2 * c * share / (c - p)
        if p.imag > 0:
            image[k + 1] = z.conjugate()
            scaled[k + 1] = scaled[k].conj()
            constant = constant + 2 * share.real
        else:
            constant = constant + share.real
    return image, scaled, constant
