"""Second-order equations M q'' + D q' + K q = F u: first-order pencils, and values at complex points."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


class Pencil(NamedTuple):
    """E dx/dt = A x + B u, y = C x + D u."""

    A: Array
    B: Array
    C: Array
    D: Array
    E: Array


def first_order_pencil(
    M: Array, D: Array, K: Array, F: Array, outputs: tuple[Array, Array, Array], direct: Array
) -> Pencil:
    """Return the descriptor equations of a second-order model, every entry one of its own numbers.

    States: positions q, velocities v, and the accelerations that an output reads::

        q' = v,    M v' = -K q - D v + F u,    v_i' = a_i

    Nothing is inverted: a singular or ill-conditioned mass matrix stands in E as it is.

    Parameters
    ----------
    M, D, K : (n, n) arrays
    F : (n, m) array
    outputs : three (p, n) arrays
        What the outputs read of positions, velocities and accelerations.
    direct : (p, m) array
    """
    n, m = F.shape
    position, velocity, acceleration = outputs
    read = np.flatnonzero(np.any(acceleration != 0, axis=0))
    size = 2 * n + read.size
    A, B, E = np.zeros((size, size)), np.zeros((size, m)), np.zeros((size, size))
    q, v, a = slice(0, n), slice(n, 2 * n), slice(2 * n, size)
    E[q, q] = np.eye(n)
    A[q, v] = np.eye(n)
    E[v, v] = M
    # adding zero turns the -0.0 of a negated zero into 0.0
    A[v, q], A[v, v] = 0.0 - K, 0.0 - D
    B[v] = F
    E[a, v] = np.eye(n)[read]
    A[a, a] = np.eye(read.size)
    return Pencil(A, B, np.hstack([position, velocity, acceleration[:, read]]), direct, E)


def _exponent(matrix: Array) -> int:
    """Return e with all |entries| < 2^e; a very small number for a zero matrix."""
    top = np.abs(matrix).max(initial=0.0)
    return int(np.frexp(top)[1]) if top > 0 else -100_000


def second_order_response(
    M: Array, D: Array, K: Array, F: Array, outputs: tuple[Array, Array, Array], direct: Array, points: ComplexArray
) -> ComplexArray:
    """Return (P + s V + s^2 W)(s^2 M + s D + K)^-1 F + G at complex points: [k][outputs][inputs].

    One solve of size n a point. With s = sigma 2^k the three matrices are brought together by a common power of two
    first, so that nothing overflows where the response itself is a double; infinite where a point is exactly a pole.
    """
    p, m = direct.shape
    values = np.empty((points.size, p, m), dtype=complex)
    tops = [_exponent(matrix) for matrix in (K, D, M)]
    reads = [_exponent(matrix) for matrix in outputs]
    for index, s in enumerate(points.tolist()):
        size = max(abs(s.real), abs(s.imag))
        k = int(np.frexp(size)[1]) if size > 0 else 0
        sigma = complex(np.ldexp(s.real, -k), np.ldexp(s.imag, -k))
        lift = -max(top + power * k for power, top in enumerate(tops))
        raise_outputs = -max(top + power * k for power, top in enumerate(reads))
        P = _polynomial((K, D, M), sigma, k, lift)
        C = _polynomial(outputs, sigma, k, raise_outputs)
        try:
            x = np.linalg.solve(P, F.astype(complex))
        except np.linalg.LinAlgError:
            values[index] = np.inf
            continue
        with np.errstate(over="ignore", under="ignore", invalid="ignore"):
            product = C @ x
            shift = lift - raise_outputs
            half = shift // 2
            for part in (half, shift - half):
                product = np.ldexp(product.real, part) + 1j * np.ldexp(product.imag, part)
            values[index] = product + direct
        if not np.isfinite(x).all():
            values[index] = np.inf
    return values


def _polynomial(parts: tuple[Array, Array, Array], sigma: complex, k: int, lift: int) -> ComplexArray:
    """Return (sum parts[i] s^i) 2^lift with s = sigma 2^k."""
    total = np.zeros(parts[0].shape, dtype=complex)
    with np.errstate(under="ignore"):
        for power, matrix in enumerate(parts):
            if matrix.size and np.any(matrix):
                total += np.ldexp(matrix, max(power * k + lift, -5000)) * sigma**power
    return total
