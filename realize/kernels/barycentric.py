"""The AAA algorithm for several responses with common support points, conjugate symmetry built in.

    r_c(s) = sum_j w_j f_cj / (s - z_j)  /  sum_j w_j / (s - z_j),

the sums over support points z_j and their conjugates, with conjugate weights and values: r is real. Support points are
taken one (pair) at a time where the error is largest; the weights are the right singular vector of the smallest
singular value of the Loewner matrix of all channels.

Sources
-------
1. Y. Nakatsukasa, O. Sete, L. N. Trefethen, "The AAA algorithm for rational approximation", SIAM Journal on Scientific
   Computing 40(3), 2018.
2. P. Lietaert, K. Meerbergen, J. Perez, B. Vandereycken, "Automatic rational approximation and linearization of
   nonlinear eigenvalue problems", IMA Journal of Numerical Analysis 42(2), 2022 (several functions at once).
3. A. Hochman, "FastAAA: a fast rational-function fitter", IEEE Conference on Electrical Performance of Electronic
   Packaging and Systems, 2017 (conjugate symmetry; from memory).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.kernels.separable import triangular
from realize.kernels.vector_fitting import stacked

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class Barycentric:
    """A real rational function of several channels.

    Parameters
    ----------
    support : [m] float
        Frequencies of the support points, not negative; 0 stands for itself alone, others with their conjugates.
    coefficients : [m] complex
        Weights of the points jx; real at 0.
    values : [m][channels] complex
    error : float
        Largest weighted error over the lines.
    """

    support: Array
    coefficients: ComplexArray
    values: ComplexArray
    error: float

    @property
    def degree(self) -> int:
        """Number of poles."""
        return int(2 * self.support.size - np.sum(self.support == 0)) - 1


def cauchy(points: ComplexArray, support: Array) -> tuple[ComplexArray, ComplexArray]:
    """Return 1/(s - jx) and 1/(s + jx) for every point and support frequency; the second is 0 for x = 0."""
    with np.errstate(divide="ignore", invalid="ignore"):
        near: ComplexArray = np.asarray(1 / (points[:, None] - 1j * support), dtype=complex)
        far = np.where(support > 0, 1 / (points[:, None] + 1j * support), 0.0)
    return near, np.asarray(far, dtype=complex)


def evaluated(function: Barycentric, points: ComplexArray) -> ComplexArray:
    """Return the values at points [k][channels]; at a support point its own values."""
    near, far = cauchy(points, function.support)
    w, f = function.coefficients, function.values
    with np.errstate(divide="ignore", invalid="ignore"):
        top = near @ (w[:, None] * f) + far @ (w.conj()[:, None] * f.conj())
        result = top / (near @ w + far @ w.conj())[:, None]
    for j, x in enumerate(function.support):
        result[points == 1j * x] = f[j]
        if x > 0:
            result[points == -1j * x] = f[j].conj()
    return result


def approximations(x: Array, values: ComplexArray, weights: Array, most: int) -> Iterator[Barycentric]:
    """Yield approximations of growing degree, one support point more each time.

    Parameters
    ----------
    x : [k] float
        Frequencies, increasing, not negative.
    values : [k][channels] complex
    weights : [k][channels] float
        Errors count by them.
    most : int
        Largest degree.
    """
    lines, channels = values.shape
    left = np.ones(lines, dtype=bool)
    points = np.asarray(1j * x, dtype=complex)
    total = np.sum(weights, axis=0)
    mean = np.sum(weights * values.real, axis=0) / np.where(total > 0, total, 1.0)
    current = np.broadcast_to(mean.astype(complex), values.shape)
    chosen: list[int] = []
    columns: list[Array] = []
    nodes = 0
    while True:
        error = np.sum(np.abs(weights * (values - current)) ** 2, axis=1)
        worst = int(np.argmax(np.where(left, error, -1.0)))
        real = x[worst] == 0
        if nodes + (1 if real else 2) - 1 > most or np.sum(left) <= 1:
            return
        nodes += 1 if real else 2
        chosen.append(worst)
        left[worst] = False
        columns.append(_loewner_columns(points, values, weights, worst))
        keep = np.tile(np.tile(left, channels), 2)
        matrix = np.hstack(columns)[keep]
        vector = np.linalg.svd(triangular(matrix), full_matrices=True)[2][-1]
        coefficients = np.empty(len(chosen), dtype=complex)
        place = 0
        for j, k in enumerate(chosen):
            single = x[k] == 0
            coefficients[j] = vector[place] if single else vector[place] + 1j * vector[place + 1]
            place += 1 if single else 2
        function = Barycentric(x[chosen], coefficients, values[chosen], 0.0)
        current = evaluated(function, points)
        # a line at a pole of the approximation is as wrong as one where it is zero
        current = np.where(np.isfinite(current), current, 0.0)
        size = np.max(np.abs(weights * (values - current)))
        yield Barycentric(function.support, function.coefficients, function.values, float(size))


def _loewner_columns(points: ComplexArray, values: ComplexArray, weights: Array, chosen: int) -> Array:
    """Return the columns of one support point: [2 channels k][1 or 2], channel by channel, real parts first.

    w (F - f)/(s - z) + w* (F - f*)/(s - z*) is (first + second) Re w + j (first - second) Im w.
    """
    near, far = cauchy(points, points[chosen : chosen + 1].imag)
    near[chosen] = 0.0
    f = values[chosen]
    first = weights * (values - f) * near
    if points[chosen].imag == 0:
        return stacked(first.T.reshape(-1, 1))
    second = weights * (values - f.conj()) * far
    return stacked(np.stack([(first + second).T.reshape(-1), 1j * (first - second).T.reshape(-1)], axis=1))


def poles_of_barycentric(function: Barycentric) -> ComplexArray:
    """Return the zeros of the denominator: s with w^T (s - Z)^-1 1 = 0, in real coordinates; may be unstable.

    v with w^T v = 0 and (s - Z) v in the direction of the ones: a problem of two sizes less, without the infinite
    eigenvalues of the arrow form.
    """
    size = function.degree + 1
    Z = np.zeros((size, size))
    ones, w = np.zeros(size), np.zeros(size)
    place = 0
    for x, c in zip(function.support, function.coefficients, strict=True):
        ones[place], w[place] = 1.0, c.real
        if x > 0:
            Z[place, place + 1], Z[place + 1, place] = -x, x
            w[place], w[place + 1] = 2 * c.real, -2 * c.imag
        place += 2 if x > 0 else 1
    inside = np.linalg.qr(w[:, None], mode="complete")[0][:, 1:]
    beside = np.linalg.qr(ones[:, None], mode="complete")[0][:, 1:]
    from scipy.linalg import eigvals

    homogeneous = eigvals(beside.T @ Z @ inside, beside.T @ inside, homogeneous_eigvals=True)
    top, bottom = homogeneous[0], homogeneous[1]
    finite = np.abs(bottom) > 0
    return np.asarray(top[finite] / bottom[finite], dtype=complex)
