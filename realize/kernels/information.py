"""Fisher information of poles, residues and direct terms together, in factored form, and what follows from it.

Unknowns of one channel: the poles (real and imaginary part of the first member of a pair, a real pole as itself), the
coefficients of ``vector_fitting.real_basis``, and the direct term. A misfit that is circular complex with mean square
1/weight^2 has the information 2 sum J^T J over real and imaginary parts, J the weighted derivatives (source 1); a line
at frequency 0 has a real part alone, and half of that.

Roots. A root of a covariance is a matrix X with covariance X X^T; nothing is multiplied out.

Sources
-------
1. S. M. Kay, Fundamentals of Statistical Signal Processing: Estimation Theory, 1993, chapters 3 and 15 (from memory).
2. R. Pintelon, J. Schoukens, System Identification: A Frequency Domain Approach, 2nd edition 2012, chapter 9 (from
   memory): covariance of poles from the Jacobian of the weighted misfit.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.kernels.separable import chunks, triangular
from realize.kernels.vector_fitting import real_basis, stacked

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def pole_slopes(points: ComplexArray, poles: ComplexArray, residues: ComplexArray, vanish: float) -> ComplexArray:
    """Return the derivatives of sum residues/(s - poles) of one channel by the pole coordinates: [k][n].

    d/dp of r/(s - p) is r/(s - p)^2; a pair has the columns of its real and of its imaginary part.

    Parameters
    ----------
    points : [k] complex
    poles, residues : [n] complex
        Ordered as ``vector_fitting.ordered_poles`` returns them.
    vanish : float
        Real point at which every partial fraction is lowered to zero; infinite for none.
    """
    first = np.flatnonzero(poles.imag >= 0)
    paired = poles[first].imag > 0
    one = residues[first] / (points[:, None] - poles[first]) ** 2
    two = residues[first].conj() / (points[:, None] - poles[first].conj()) ** 2
    result = np.empty((points.size, poles.size), dtype=complex)
    result[:, first] = np.where(paired, one + two, one)
    result[:, first[paired] + 1] = 1j * (one - two)[:, paired]
    if np.isfinite(vanish):
        result -= pole_slopes(np.array([complex(vanish)]), poles, residues, np.inf).real
    return result


def channel_slopes(
    points: ComplexArray, poles: ComplexArray, residues: ComplexArray, direct: bool, vanish: float
) -> ComplexArray:
    """Return the derivatives of one channel by poles, coefficients and direct term: [k][2 n (+ 1)]."""
    offset = np.inf if direct else vanish
    columns = [pole_slopes(points, poles, residues, offset), real_basis(points, poles, offset)]
    if direct:
        columns.append(np.ones((points.size, 1), dtype=complex))
    return np.hstack(columns)


@dataclass(frozen=True, eq=False)
class ChannelFactor:
    """The weighted derivatives of one channel as an orthonormal basis times ``triangle``, and the misfit in that basis.

    Parameters
    ----------
    triangle : [u][u] float
        J = Q triangle; fewer rows than unknowns of the channel where there are fewer numbers.
    inner : [u] float
        Q^T misfit.
    outer : float
        Sum of squares of the misfit that no unknown of the channel reaches.
    """

    triangle: Array
    inner: Array
    outer: float


def channel_factor(
    slopes: ComplexArray | Array, weights: Array, misfit: ComplexArray | Array, zero: NDArray[np.bool_]
) -> ChannelFactor:
    """Return the factor of one channel.

    Parameters
    ----------
    slopes : [k][u] complex or float
        Derivatives of the channel by its unknowns.
    weights : [k] float
        1/deviation.
    misfit : [k] complex or float
    zero : [k] bool
        Lines that are real, at frequency 0 or samples of time: they have half the information.
    """
    own = np.where(zero, weights * np.sqrt(0.5), weights)
    size = slopes.shape[1]
    triangle: Array = np.zeros((0, size + 1))
    for part in chunks(misfit.size, 2 * (size + 1)):
        whole = np.hstack([slopes[part], misfit[part, None]])
        lines: NDArray[Any] = own[part, None] * whole
        triangle = triangular(stacked(lines) if np.iscomplexobj(lines) else lines, triangle)
    return ChannelFactor(triangle[:size, :size], triangle[:size, size], float(np.sum(triangle[size:, size] ** 2)))


def inverse_root(matrix: Array) -> tuple[Array, Array]:
    """Return X with X X^T = (2 M^T M)^-1, and which directions M leaves undetermined: [u][r], [u][z].

    Columns are scaled to length 1 first; singular values below rounding count as zero.
    """
    size = np.linalg.norm(matrix, axis=0)
    dead = size == 0
    size = np.where(dead, 1.0, size)
    triangle: Array = np.linalg.qr(matrix / size, mode="r")  # type: ignore[assignment]
    _, values, vt = np.linalg.svd(triangle, full_matrices=True)
    full = np.zeros(size.size)
    full[: values.size] = values
    kept = full > max(matrix.shape) * np.finfo(float).eps * np.max(full, initial=0.0)
    root = (vt[kept].T / full[kept]) / size[:, None] * np.sqrt(0.5)
    return root, vt[~kept].T / size[:, None]


def length(rows: Array) -> Array:
    """Return the lengths of rows: deviations, where the rows are gradients times a root."""
    result: Array = np.linalg.norm(rows, axis=-1)
    return result
