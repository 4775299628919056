"""Poles of frequency responses from the column space of their shifts: subspace identification over any lines.

Lines jx are mapped to the unit circle, z = (c + jx)/(c - jx), where H(z) = C (zI - A)^-1 B + D. With polynomials p_i of
degree i, the rows w p_i(z_k) H(z_k) are (observability rows C p_i(A)) times states, plus polynomials of degree i. The
latter are removed by projection; the left singular vectors of what remains span the observability rows, and A follows
from z p_i = sum_j h_ji p_j. Powers of z are ill-conditioned over lines that cover an arc; polynomials that are
orthogonal over the lines (Arnoldi) make the projection orthogonal and cost the same.

Sources
-------
1. T. McKelvey, H. Akcay, L. Ljung, "Subspace-based multivariable system identification from frequency response data",
   IEEE Transactions on Automatic Control 41(7), 1996: lines anywhere, weighting by the covariance of the noise,
   bilinear map for continuous time.
2. P. Van Overschee, B. De Moor, "Continuous-time frequency domain subspace system identification", Signal Processing
   52, 1996 (orthogonal polynomials over the lines; from memory).
3. P. D. Brubeck, Y. Nakatsukasa, L. N. Trefethen, "Vandermonde with Arnoldi", SIAM Review 63(2), 2021.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.kernels.separable import chunks, triangular
from realize.kernels.vector_fitting import stacked

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Polynomials are orthogonalised until what is new in one is this share of it: then the lines are used up.
EXHAUSTED = 2.0**-40


@dataclass(frozen=True, eq=False)
class ObservableSpace:
    """What the shifts of a frequency response span.

    Parameters
    ----------
    vectors : [rows][channels][r] float
        Observability rows, by falling singular value.
    values : [r] float
        Singular values; noise of deviation 1/weights gives values near 1 and below about
        (1 + sqrt(rows channels / (2 lines))).
    shift : [rows][rows - 1] float
        z p_i = sum_j shift[j, i] p_j.
    scale : float
        c of the bilinear map.
    """

    vectors: Array
    values: Array
    shift: Array
    scale: float


def circle_points(x: Array, scale: float) -> ComplexArray:
    """Return z = (scale + jx)/(scale - jx)."""
    return (scale + 1j * x) / (scale - 1j * x)


def orthogonal_polynomials(z: ComplexArray, start: Array, rows: int) -> tuple[ComplexArray, Array]:
    """Return values [k][rows] of real polynomials of degree 0, 1, ... orthonormal over the lines, and the shift.

    The inner product is sum_k Re(conj(a_k) b_k); ``start`` [k] is the degree 0, which carries the weights. Fewer rows
    come back where the lines are used up.
    """
    values = np.empty((z.size, rows), dtype=complex)
    flat = np.empty((2 * z.size, rows))
    shift = np.zeros((rows, max(rows - 1, 0)))
    values[:, 0] = start / np.linalg.norm(start)
    flat[:, 0] = np.concatenate([values[:, 0].real, values[:, 0].imag])
    for i in range(rows - 1):
        new = z * values[:, i]
        column = np.concatenate([new.real, new.imag])
        before = float(np.linalg.norm(column))
        for _ in range(2):
            part = flat[:, : i + 1].T @ column
            column -= flat[:, : i + 1] @ part
            shift[: i + 1, i] += part
        size = float(np.linalg.norm(column))
        if size <= EXHAUSTED * before:
            return values[:, : i + 1], shift[: i + 1, :i]
        shift[i + 1, i] = size
        flat[:, i + 1] = column / size
        values[:, i + 1] = flat[: z.size, i + 1] + 1j * flat[z.size :, i + 1]
    return values, shift


def observable_space(x: Array, values: ComplexArray, weights: Array, rows: int, scale: float) -> ObservableSpace:
    """Return the space of observability rows of the responses of several channels with common poles.

    Parameters
    ----------
    x : [k] float
        Frequencies.
    values : [k][channels] complex
    weights : [k][channels] float
        1/deviation. A line counts by the root mean square of its weights in units of their channel; the rows of each
        channel are whitened by the covariance of their noise (reference 1).
    rows : int
        Number of shifts.
    scale : float
        c of the bilinear map.
    """
    channels = values.shape[1]
    z = circle_points(x, scale)
    level = np.sqrt(np.mean(weights**2, axis=0))
    unit = weights / np.where(level > 0, level, 1.0)
    line = np.sqrt(np.mean(unit**2, axis=1))
    polynomials, shift = orthogonal_polynomials(z, np.maximum(line, np.finfo(float).tiny), rows)
    rows = polynomials.shape[1]
    orthonormal = stacked(polynomials)
    colours = [_colour(polynomials, weights[:, c], level[c]) for c in range(channels)]
    factor: Array | None = None
    cross = np.zeros((rows, rows * channels))
    width = 2 * rows * channels
    for part in chunks(x.size, width):
        block = _shifted(polynomials[part], values[part] * level, colours)
        both = np.concatenate([np.arange(x.size)[part], x.size + np.arange(x.size)[part]])
        cross += orthonormal[both].T @ block
    for part in chunks(x.size, width):
        block = _shifted(polynomials[part], values[part] * level, colours)
        both = np.concatenate([np.arange(x.size)[part], x.size + np.arange(x.size)[part]])
        block -= orthonormal[both] @ cross
        factor = triangular(block, factor)
    assert factor is not None
    _, singular, right = np.linalg.svd(factor, full_matrices=False)
    vectors = right.reshape(-1, rows, channels).transpose(1, 2, 0)
    whole = np.empty_like(vectors)
    for c in range(channels):
        whole[:, c] = colours[c].T @ vectors[:, c] if level[c] > 0 else 0.0
    return ObservableSpace(whole, singular, shift, scale)


def _shifted(polynomials: ComplexArray, values: ComplexArray, colours: list[Array]) -> Array:
    """Return rows [2 k][rows channels] of p_i(z) H(z), whitened channel by channel."""
    parts = [
        np.linalg.solve(colours[c].T, stacked(polynomials * values[:, c, None]).T).T for c in range(values.shape[1])
    ]
    return np.stack(parts, axis=2).reshape(2 * polynomials.shape[0], -1)


def _colour(polynomials: ComplexArray, weights: Array, level: float) -> Array:
    """Return the triangular factor of the covariance of one channel's noise in the rows, in units of its level.

    Where the weights are so unlike that the covariance has no inverse in double precision, its diagonal stands in.
    """
    deviation = np.where(weights > 0, level / np.where(weights > 0, weights, 1.0), 0.0)
    factor = triangular(stacked(deviation[:, None] * polynomials))
    rows = polynomials.shape[1]
    if factor.shape[0] < rows or np.min(np.abs(np.diagonal(factor))) < 1e-8 * np.max(np.abs(factor)):
        size = np.linalg.norm(factor, axis=0)
        return np.diag(np.where(size > 0, size, 1.0))
    return factor


def subspace_poles(space: ObservableSpace, order: int) -> ComplexArray:
    """Return poles in the s plane of so many states: A from the shift in least squares, s = c (z - 1)/(z + 1).

    Poles may be unstable. A pole at z = -1, infinity in s, comes back as a very fast one.

    Parameters
    ----------
    order : int
        At most (rows - 1) channels and the number of singular values.
    """
    if order == 0:
        return np.zeros(0, complex)
    vectors = space.vectors[:, :, :order]
    rows = vectors.shape[0]
    before = vectors[: rows - 1].reshape(-1, order)
    after = np.tensordot(space.shift.T, vectors, axes=1).reshape(-1, order)
    matrix = np.linalg.lstsq(before, after, rcond=None)[0]
    z = np.linalg.eigvals(matrix).astype(complex)
    edge = np.abs(z + 1) < 2.0**-40
    return np.asarray(space.scale * np.where(edge, -(2.0**40), (z - 1) / np.where(edge, 1.0, z + 1)))
