"""Poles from Markov parameters: Ho and Kalman's Hankel matrix, its singular values, two ways of shifting it.

H has the block h[i + j] in row i and column j, h[0], h[1], ... the Markov parameters C B, C A B, ... Long sequences are
never laid out: products with H are convolutions.

Sources
-------
1. B. L. Ho, R. E. Kalman, "Effective construction of linear state-variable models from input/output functions",
   Regelungstechnik 14, 1966.
2. S. Y. Kung, "A new identification and model reduction algorithm via singular value decomposition", 12th Asilomar
   Conference on Circuits, Systems and Computers, 1978 (shift of the observability matrix).
3. J.-N. Juang, R. S. Pappa, "An eigensystem realization algorithm for modal parameter identification and model
   reduction", Journal of Guidance, Control and Dynamics 8(5), 1985.
4. N. Halko, P. G. Martinsson, J. A. Tropp, "Finding structure with randomness", SIAM Review 53(2), 2011.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Up to this many rows or columns the Hankel matrix is laid out and decomposed as a whole.
DENSE = 240
#: Vectors beyond those wanted, and passes over the matrix, of the randomized decomposition (reference 4).
EXTRA, PASSES = 16, 3


@dataclass(frozen=True, eq=False)
class Hankel:
    """The leading singular values and vectors of a block Hankel matrix.

    Parameters
    ----------
    samples : [k][p][m] float
    rows, columns : int
        Blocks; rows + columns <= k, so that the shifted matrix exists too.
    left : [rows p][r] float
    values : [r] float
    right : [columns m][r] float
    """

    samples: Array
    rows: int
    columns: int
    left: Array
    values: Array
    right: Array


def times(samples: Array, matrix: Array, rows: int) -> Array:
    """Return (Hankel matrix of the samples with that many block rows) @ matrix.

    Parameters
    ----------
    samples : [k][p][m] float
    matrix : [columns m][r] float
        rows + columns - 1 <= k.
    """
    p, m = samples.shape[1:]
    columns = matrix.shape[0] // m
    used = samples[: rows + columns - 1]
    length = 1 << int(rows + columns - 1).bit_length()
    turned = matrix.reshape(columns, m, -1)[::-1]
    spectrum = np.matmul(np.fft.rfft(used, length, axis=0), np.fft.rfft(turned, length, axis=0))
    whole: Array = np.fft.irfft(spectrum, length, axis=0)[columns - 1 : columns - 1 + rows]
    return whole.reshape(rows * p, -1)


def laid_out(samples: Array, rows: int, columns: int) -> Array:
    """Return the block Hankel matrix itself: [rows p][columns m]."""
    p, m = samples.shape[1:]
    index = np.arange(rows)[:, None] + np.arange(columns)[None, :]
    return samples[index].transpose(0, 2, 1, 3).reshape(rows * p, columns * m)


def decomposed(samples: Array, rows: int, columns: int, wanted: int) -> Hankel:
    """Return at least ``wanted`` leading singular values and vectors, or all there are."""
    p, m = samples.shape[1:]
    size = min(rows * p, columns * m)
    if size <= max(DENSE, wanted + EXTRA):
        left, values, right = np.linalg.svd(laid_out(samples, rows, columns), full_matrices=False)
        return Hankel(samples, rows, columns, left, values, right.T)
    mirrored = samples.transpose(0, 2, 1)
    right = np.random.default_rng(1966).standard_normal((columns * m, wanted + EXTRA))
    for _ in range(PASSES):
        left = np.linalg.qr(times(samples, right, rows))[0]
        right = np.linalg.qr(times(mirrored, left, columns))[0]
    left = np.linalg.qr(times(samples, right, rows))[0]
    inner = times(mirrored, left, columns)
    q, r = np.linalg.qr(inner)
    u, values, v = np.linalg.svd(r)
    return Hankel(samples, rows, columns, left @ v.T, values, q @ u)


def shifted_poles(hankel: Hankel, order: int) -> ComplexArray:
    """Return the poles of the eigensystem realization: eigenvalues of S^-1/2 U^T (shifted H) V S^-1/2 (reference 3)."""
    if order == 0:
        return np.zeros(0, complex)
    root = np.sqrt(hankel.values[:order])
    after = times(hankel.samples[1:], hankel.right[:, :order], hankel.rows)
    matrix = (hankel.left[:, :order].T @ after) / root[:, None] / root
    return _closed(np.linalg.eigvals(matrix).astype(complex))


def shift_invariant_poles(hankel: Hankel, order: int) -> ComplexArray:
    """Return the poles of A in O[first blocks] A = O[last blocks], O the left singular vectors (reference 2)."""
    if order == 0:
        return np.zeros(0, complex)
    p = hankel.samples.shape[1]
    space = hankel.left[:, :order]
    matrix = np.linalg.lstsq(space[:-p], space[p:], rcond=None)[0]
    return _closed(np.linalg.eigvals(matrix).astype(complex))


def _closed(poles: ComplexArray) -> ComplexArray:
    """Return eigenvalues of a real matrix with pairs exact and adjacent, the positive member first."""
    result: list[complex] = []
    for pole in sorted(poles[poles.imag >= 0].tolist(), key=lambda z: (abs(z), z.real)):
        result.extend([complex(pole.real, 0.0)] if pole.imag == 0 else [pole, pole.conjugate()])
    return np.array(result, dtype=complex)


def realized(hankel: Hankel, order: int) -> tuple[Array, Array, Array]:
    """Return A, B, C of the eigensystem realization: C A^k B = h[k] where the order is that of the sequence."""
    p, m = hankel.samples.shape[1:]
    if order == 0:
        return np.zeros((0, 0)), np.zeros((0, m)), np.zeros((p, 0))
    root = np.sqrt(hankel.values[:order])
    after = times(hankel.samples[1:], hankel.right[:, :order], hankel.rows)
    A = (hankel.left[:, :order].T @ after) / root[:, None] / root
    return A, root[:, None] * hankel.right[:m, :order].T, hankel.left[:p, :order] * root
