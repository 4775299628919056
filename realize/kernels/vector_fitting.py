"""Vector fitting in real arithmetic: common stable poles of several responses, and their residues.

The caller brings the frequencies near 1 and the responses near 1 (powers of two); each least squares problem is then
scaled by its columns. Conjugate pairs stand adjacent, the member with the positive imaginary part first.

Sources
-------
1. B. Gustavsen, A. Semlyen, "Rational approximation of frequency domain responses by vector fitting", IEEE
   Transactions on Power Delivery 14(3), 1999.
2. B. Gustavsen, "Improving the pole relocating properties of vector fitting", IEEE Transactions on Power Delivery
   21(3), 2006 (relaxed non-triviality).
3. D. Deschrijver, M. Mrozowski, T. Dhaene, D. De Zutter, "Macromodeling of multiport systems using a fast
   implementation of the vector fitting method", IEEE Microwave and Wireless Components Letters 18(6), 2008.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from realize.kernels.separable import chunks, groups_of, triangular

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Smallest damping ratio given to a relocated pole that lands on the imaginary axis: a few roundings of its size.
SMALLEST_DAMPING = 8 * np.finfo(float).eps
#: Relocated poles stay as far from 0, relative to the highest line: squares of 1/s have to stay numbers.
NEAREST = 2.0**-200
#: Smallest relative distance of two poles; nearer ones are set apart. A double pole moved apart by a relative
#: distance d changes a response by d^2 (2^-36 here), while its residues grow by 1/d.
SMALLEST_DISTANCE = 2.0**-18


def ordered_poles(poles: ComplexArray, reflect: bool = True) -> ComplexArray:
    """Return the poles stable, by increasing size, conjugate pairs exact and adjacent with the positive member first.

    Poles on the right are reflected at the imaginary axis (reference 1); poles on it get ``SMALLEST_DAMPING``.

    Parameters
    ----------
    poles : [n] complex
        Closed under conjugation: only members with imaginary part >= 0 are read.
    reflect : bool
        False leaves poles on the right where they are.

    Returns
    -------
    [n] complex
    """
    upper = poles[poles.imag >= 0]
    size = np.abs(upper)
    size = np.where(size > 0, size, np.finfo(float).tiny ** 0.25)
    real = np.maximum(np.abs(upper.real), SMALLEST_DAMPING * size)
    real = np.where(upper.real > 0, real, -real) if not reflect else -real
    upper = real + 1j * upper.imag
    upper = upper[np.argsort(np.abs(upper), kind="stable")]
    result: list[complex] = []
    for pole in upper.tolist():
        result.extend([complex(pole.real, 0.0)] if pole.imag == 0 else [pole, pole.conjugate()])
    return np.array(result, dtype=complex)


def separated_poles(poles: ComplexArray, reflect: bool = True) -> ComplexArray:
    """Return ordered poles with members nearer than ``SMALLEST_DISTANCE`` (relative) moved apart about their middle."""
    upper = ordered_poles(poles, reflect)
    upper = upper[upper.imag >= 0]
    for k in range(1, upper.size):
        distance = np.abs(upper[:k] - upper[k])
        j = int(np.argmin(distance))
        if distance[j] < SMALLEST_DISTANCE * abs(upper[k]) and (upper[j].imag > 0) == (upper[k].imag > 0):
            middle = (upper[j] + upper[k]) / 2
            upper[j], upper[k] = middle * (1 - SMALLEST_DISTANCE), middle * (1 + SMALLEST_DISTANCE)
        while np.any(np.abs(upper[:k] - upper[k]) < SMALLEST_DISTANCE * np.abs(upper[k])):
            upper[k] *= 1 + 2 * SMALLEST_DISTANCE
    # a pair nearly on the real axis is a double real pole with residues that grow alike
    flat = (upper.imag > 0) & (upper.imag < SMALLEST_DISTANCE * np.abs(upper))
    upper[flat] = upper[flat].real + 1j * SMALLEST_DISTANCE * np.abs(upper[flat])
    return ordered_poles(np.concatenate([upper, upper[upper.imag > 0].conj()]), reflect)


def real_basis(points: ComplexArray, poles: ComplexArray, vanish: float = np.inf) -> ComplexArray:
    """Return partial fractions whose real coefficients are real and imaginary parts of the residues: [k][n].

    A real pole gives 1/(s - p); a pair gives 1/(s - p) + 1/(s - p*) and j/(s - p) - j/(s - p*). With a finite
    ``vanish`` each function is lowered by its value at that real point, where it is then zero.
    """
    first = poles.imag >= 0
    where = np.flatnonzero(first)
    fraction = 1 / (points[:, None] - poles[None, where])
    mirrored = 1 / (points[:, None] - poles[None, where].conj())
    result = np.empty((points.size, poles.size), dtype=complex)
    paired = poles[where].imag > 0
    result[:, where] = np.where(paired, fraction + mirrored, fraction)
    if np.any(paired):
        result[:, where[paired] + 1] = 1j * (fraction - mirrored)[:, paired]
    if np.isfinite(vanish):
        result -= real_basis(np.array([complex(vanish)]), poles).real
    return result


def stacked(matrix: ComplexArray) -> Array:
    """Return real parts above imaginary parts."""
    return np.concatenate([matrix.real, matrix.imag], axis=0)


def least_squares(matrix: Array, right: Array) -> Array:
    """Solve one least squares problem with columns scaled to length 1; the smallest solution when it is not unique."""
    # a pole next to a line gives entries whose squares would overflow
    top = np.max(np.abs(matrix), axis=0, initial=0.0)
    top = np.where(top > 0, top, 1.0)
    norm = top * np.linalg.norm(matrix / top, axis=0)
    norm = np.where(norm > 0, norm, 1.0)
    result = np.linalg.lstsq(matrix / norm, right, rcond=4 * np.finfo(float).eps)[0]
    return result / (norm if right.ndim == 1 else norm[:, None])


def residues_of(
    points: ComplexArray,
    poles: ComplexArray,
    values: ComplexArray,
    weights: Array,
    direct: bool,
    vanish: float = np.inf,
) -> tuple[ComplexArray, Array, ComplexArray]:
    """Return the residues and direct terms that fit the values best with the given poles, and the misfit.

    Minimises sum |weights (values - sum_j residues_j / (s - poles_j) - direct)|^2 channel by channel.

    Parameters
    ----------
    points : [k] complex
    poles : [n] complex
        Ordered as ``ordered_poles`` returns them.
    values : [k][channels] complex
    weights : [k][channels] float
    direct : bool
        Whether there is a direct term.
    vanish : float
        Real point at which a response without direct term is zero; infinite for continuous time.

    Returns
    -------
    residues : [n][channels] complex
    direct : [channels] float
    misfit : [k][channels] complex
        Fitted minus given values.
    """
    n, channels = poles.size, values.shape[1]
    offset = np.inf if direct else vanish
    basis = real_basis(points, poles, offset)
    if direct:
        basis = np.hstack([basis, np.ones((points.size, 1))])
    if basis.shape[1] == 0:
        return np.zeros((0, channels), complex), np.zeros(channels), -values.astype(complex)
    if n == 0 and np.all(values == values[:1]):
        return np.zeros((0, channels), complex), values[0].real.copy(), values[0].real - values
    coefficient = np.empty((basis.shape[1], channels))
    for members, common, factor in groups_of(weights):
        triangle: Array | None = None
        for part in chunks(points.size, 2 * (basis.shape[1] + members.size)):
            whole = np.hstack([basis[part], values[part][:, members] * factor])
            triangle = triangular(stacked(common[part, None] * whole), triangle)
        assert triangle is not None
        size = basis.shape[1]
        coefficient[:, members] = least_squares(triangle[:size, :size], triangle[:size, size:]) / factor
    misfit = basis @ coefficient - values
    constant = coefficient[n] if direct else np.zeros(channels)
    if not direct and np.isfinite(vanish):
        constant = -real_basis(np.array([complex(vanish)]), poles)[0].real @ coefficient[:n]
    residues = coefficient[:n].astype(complex)
    first = np.flatnonzero(poles.imag > 0)
    residues[first] += 1j * coefficient[first + 1]
    residues[first + 1] = residues[first].conj()
    return residues, constant, misfit


def relocated(
    points: ComplexArray,
    poles: ComplexArray,
    values: ComplexArray,
    weights: Array,
    direct: bool,
    vanish: float = np.inf,
    reflect: bool = True,
    beside: ComplexArray | None = None,
) -> ComplexArray:
    """Return the poles after one relocation: the zeros of sigma(s) in sigma H = (proper fraction over the old poles).

    sigma(s) = d + sum_j c_j phi_j(s) is found by relaxed least squares (reference 2): the sum of its real part over
    the points is fixed instead of d. Each channel is reduced by its own QR factorisation to the rows that hold sigma
    alone (reference 3). Zeros are eigenvalues of A - b c^T / d with A, b real (reference 1, appendix); those on the
    right are reflected unless ``reflect`` is false. ``beside`` [k][columns] holds functions that the right side may
    contain beside those of the old poles. Other parameters as in ``residues_of``.
    """
    n = poles.size
    if n == 0:
        return poles
    plain = np.hstack([real_basis(points, poles), np.ones((points.size, 1))])
    own = real_basis(points, poles, np.inf if direct else vanish)
    if direct:
        own = np.hstack([own, np.ones((points.size, 1))])
    if beside is not None:
        own = np.hstack([own, beside])
    total = np.sqrt(np.sum(np.abs(weights * values) ** 2))
    strength = np.sqrt(np.sum(np.abs(weights * values) ** 2, axis=1))
    scale = np.linalg.norm(strength[:, None] * plain, axis=0)
    scale = np.where(scale > 0, scale, 1.0)
    rows = []
    for c in range(values.shape[1]):
        left = stacked(weights[:, c, None] * own)
        norm = np.linalg.norm(left, axis=0)
        right = stacked((-weights[:, c] * values[:, c])[:, None] * plain) / scale
        whole = np.hstack([left / np.where(norm > 0, norm, 1.0), right])
        triangle: Array = np.linalg.qr(whole, mode="r")  # type: ignore[assignment]
        rows.append(triangle[own.shape[1] :, own.shape[1] :])
    reduced = np.vstack(rows)
    relaxation = plain.real.sum(axis=0) / scale * (total / points.size)
    matrix = np.vstack([reduced, relaxation])
    right = np.zeros(matrix.shape[0])
    right[-1] = total
    sigma = np.linalg.lstsq(matrix, right, rcond=max(matrix.shape) * np.finfo(float).eps)[0] / scale
    # a sigma whose constant vanishes has a zero at infinity: fall back on the unrelaxed form (reference 2, section V)
    if not abs(sigma[n]) > 1e-8 * np.max(np.abs(plain[:, :n] * sigma[:n])):
        sigma = np.append(least_squares(reduced[:, :n], -reduced[:, n] / scale[n]) / scale[:n], 1.0)
    zeros = np.linalg.eigvals(_zeros_matrix(poles, sigma[:n] / sigma[n])).astype(complex)
    # a line at 0 may draw poles in without end
    near = np.abs(zeros) < NEAREST * np.max(np.abs(points))
    zeros[near] = -NEAREST * np.max(np.abs(points))
    return ordered_poles(zeros, reflect)


def _zeros_matrix(poles: ComplexArray, c: Array) -> Array:
    n = poles.size
    matrix = np.diag(poles.real)
    b = np.ones(n)
    for k in np.flatnonzero(poles.imag > 0):
        matrix[k, k + 1] = poles[k].imag
        matrix[k + 1, k] = -poles[k].imag
        b[k], b[k + 1] = 2.0, 0.0
    return matrix - np.outer(b, c)


def starting_poles(low: float, high: float, count: int, spacing: str) -> ComplexArray:
    """Return starting poles over a band.

    ``logarithmic`` and ``linear``: pairs -w/100 +- jw (reference 1, section VI), with one real pole in the middle when
    the count is odd; in a band narrower than its own frequency the damping is a quarter of the distance between pairs
    where that is less. ``real``: logarithmically spaced real poles.

    Parameters
    ----------
    low, high : float
        Positive edges of the band, rad/s.
    count : int
        Number of poles.
    spacing : str
    """
    if spacing == "real":
        return ordered_poles(-np.geomspace(low, high, count).astype(complex))
    pairs = count // 2
    if spacing == "logarithmic":
        frequency = np.geomspace(low, high, pairs + 2)[1:-1] if pairs == 1 else np.geomspace(low, high, pairs)
    else:
        frequency = np.linspace(low, high, pairs + 2)[1:-1]
    damping = np.minimum(0.01, 0.25 * max((high - low) / (pairs + 1), high * 1e-12) / frequency)
    upper = frequency * (-damping + 1j)
    single = [complex(-np.sqrt(low * high))] if count % 2 else []
    return ordered_poles(np.concatenate([upper, upper.conj(), np.array(single, dtype=complex)]))


def weighted_cost(misfit: ComplexArray, weights: Array) -> float:
    """Return sum |weights misfit|^2."""
    return float(np.sum(np.abs(weights * misfit) ** 2))


def vector_fit(
    points: ComplexArray,
    poles: ComplexArray,
    values: ComplexArray,
    weights: Array,
    direct: bool,
    vanish: float,
    iterations: int,
) -> tuple[ComplexArray, float]:
    """Return the best poles met while relocating, and their cost; stops when the poles no longer move.

    Parameters as in ``residues_of``; ``iterations`` is the largest number of relocations.
    """

    def cost(moved: ComplexArray) -> float:
        return weighted_cost(residues_of(points, moved, values, weights, direct, vanish)[2], weights)

    def move(old: ComplexArray) -> ComplexArray:
        return relocated(points, old, values, weights, direct, vanish)

    return relocating(poles, move, cost, weighted_cost(values, weights), iterations)


def relocating(
    poles: ComplexArray,
    move: Callable[[ComplexArray], ComplexArray],
    cost_of: Callable[[ComplexArray], float],
    size: float,
    iterations: int,
) -> tuple[ComplexArray, float]:
    """Return the best poles met while moving them, and their cost; stops when they rest, or at a cost of rounding.

    Parameters
    ----------
    poles : [n] complex
    move : callable
        Returns the next poles.
    cost_of : callable
    size : float
        Cost of no model at all.
    iterations : int
        Largest number of moves.
    """
    best, lowest = poles, np.inf
    for _ in range(iterations):
        moved = move(poles)
        cost = cost_of(moved)
        if cost < lowest:
            best, lowest = moved, cost
        still = moved.size == poles.size and np.all(np.abs(moved - poles) <= 1e-6 * np.abs(moved.real))
        poles = moved
        if still or cost <= (4 * np.finfo(float).eps) ** 2 * size:
            break
    return best, lowest
