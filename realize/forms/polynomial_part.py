"""Improper plants: the polynomial part as a descriptor block with nilpotent E."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


def append_polynomial_part(
    A: Array, B: Array, C: Array, D: Array, polynomial: Array
) -> tuple[Array, Array, Array, Array, Array]:
    """Return A, B, C, D, E of the proper model plus sum over k >= 1 of polynomial[-1-k] s^k.

    One chain of degree + 1 states for each input: E has ones beside the diagonal, A is the identity, so that
    C (sE - A)^-1 B = -(C B + s C E B + s^2 C E^2 B + ...), exact in its entries.

    Parameters
    ----------
    polynomial : [power][p][m]
        Highest power first; the constant term (the last) is added to D.
    """
    p, m = D.shape
    degree = polynomial.shape[0] - 1
    n = A.shape[0]
    size = n + m * (degree + 1)
    a, b, c, e = np.eye(size), np.zeros((size, m)), np.zeros((p, size)), np.zeros((size, size))
    a[:n, :n], b[:n], c[:, :n], e[:n, :n] = A, B, C, np.eye(n)
    for j in range(m):
        start = n + j * (degree + 1)
        part = slice(start, start + degree + 1)
        e[part, part] = np.eye(degree + 1, k=1)
        b[start + degree, j] = -1.0
        # state degree - k of the chain is s^k u
        for k in range(1, degree + 1):
            c[:, start + degree - k] = polynomial[degree - k][:, j]
    return a, b, c, D + polynomial[-1], e
