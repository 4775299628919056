"""Sampled responses fitted in the s plane: the exact bilinear map s = c (z - 1)/(z + 1) there and back."""

from __future__ import annotations

from math import comb

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
    poles: ComplexArray, residues: ComplexArray, direct: Array, c: float, powers: NDArray[np.int64] | None = None
) -> tuple[ComplexArray, ComplexArray, Array]:
    """Return poles, residues and direct term in z of sum residues/(s - poles) + direct with s = c (z - 1)/(z + 1).

    1/(s - p) = alpha + beta / (z - z_p), alpha = 1/(c - p), beta = 2 c / (c - p)^2, z_p = (c + p)/(c - p), and
    powers of it by the binomial theorem; |z_p| < 1 for every p on the left, and where rounding would put it on the
    circle it is drawn in by one rounding.

    Parameters
    ----------
    poles, residues, direct
        Pairs adjacent, the positive imaginary part first.
    c : float
    powers : [n] int, optional
        1 unless given; a repeated pole has all powers up to its multiplicity, rising.
    """
    size = np.ones(poles.size, dtype=np.int64) if powers is None else powers
    image = poles.copy()
    scaled = np.zeros(residues.shape, dtype=complex)
    constant = direct.astype(float).copy()
    for k in np.flatnonzero(poles.imag >= 0):
        p = complex(poles[k])
        z = (c + p) / (c - p)
        while p.real < 0 and abs(z) >= 1:
            z *= 1 - np.finfo(float).eps
        image[k] = z
        alpha, beta = 1 / (c - p), 2 * c / (c - p) ** 2
        pair = p.imag > 0
        power = int(size[k])
        constant = constant + (2 if pair else 1) * (residues[k] * alpha**power).real
        for i in range(1, power + 1):
            target = k if i == power else int(np.flatnonzero((poles == poles[k]) & (size == i))[0])
            scaled[target] += residues[k] * (comb(power, i) * alpha ** (power - i) * beta**i)
    for k in np.flatnonzero(poles.imag > 0):
        mate = np.flatnonzero((poles == poles[k].conjugate()) & (size == size[k]))[0]
        image[mate], scaled[mate] = image[k].conjugate(), scaled[k].conj()
    return image, scaled, constant


def factors_back(zeros: ComplexArray, poles: ComplexArray, gain: float, c: float) -> tuple[ComplexArray, float]:
    """Return zeros and leading coefficient in z of gain prod(s - zeros) / prod(s - poles), s = c (z - 1)/(z + 1).

    s - r = (c - r)(z - z_r)/(z + 1) with z_r = (c + r)/(c - r); a zero at c is at z = infinity, and what the function
    has more poles than zeros comes back at z = -1.
    """
    far = zeros == c
    image = (c + zeros[~far]) / (c - zeros[~far])
    parts = [c - zeros[~far], np.full(int(np.sum(far)), complex(-2 * c))]
    value, exponent = 1 + 0j, 0
    for number in np.concatenate(parts).tolist():
        value, exponent = _near_one(value * number, exponent)
    for number in (c - poles).tolist():
        value, exponent = _near_one(value / number, exponent)
    more = np.full(poles.size - zeros.size, -1 + 0j)
    return np.concatenate([image, more]), float(np.ldexp(gain * value.real, exponent))


def _near_one(value: complex, exponent: int) -> tuple[complex, int]:
    shift = int(np.frexp(abs(value))[1])
    return value * 2.0**-shift, exponent + shift
