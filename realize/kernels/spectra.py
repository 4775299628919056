"""Spectra of windowed segments, and the linear problem of each line: responses of several inputs with their covariance.

A record is cut into K segments of L samples that may overlap. With the transforms X_k (inputs) and Y_k (outputs) of
segment k at one line, Y_k = H X_k + E_k. The noise of the outputs is taken as stationary, with a spectrum that does not
change over the main lobe of the window. Then the errors of two segments that begin q samples apart have the correlation

    c(q) = exp(2 pi j f q / L) sum_n w[n] w[n + q] / sum_n w[n]^2            (reference 1)

at line f, whatever the inputs are, and every variance below follows from the inputs as they were recorded.

Sources
-------
1. P. D. Welch, "The use of fast Fourier transform for the estimation of power spectra", IEEE Trans. Audio
   Electroacoustics 15(2), 1967.
2. J. S. Bendat, A. G. Piersol, *Random Data*, 4th edition, 2010, chapters 6, 7 and 9 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Coefficients a of sum_k (-1)^k a_k cos(2 pi k n / L).
COSINES: dict[str, tuple[float, ...]] = {
    "rectangular": (1.0,),
    "hann": (0.5, 0.5),
    "hamming": (0.54, 0.46),
    "blackman": (0.42, 0.5, 0.08),
    # the five terms of ISO 18431-2 with a flat top
    "flat-top": (0.21557895, 0.41663158, 0.277263158, 0.083578947, 0.006947368),
}


def window_of(name: str, length: int) -> Array:
    """Return a window of a period of ``length`` samples: w[0] is its edge, w[length/2] its middle."""
    n = np.arange(length)
    result = np.zeros(length)
    for k, a in enumerate(COSINES[name]):
        result += (-1) ** k * a * np.cos(2 * np.pi * ((k * n) % length) / length)
    return result


def window_correlation(window: Array, shift: int) -> float:
    """Return sum w[n] w[n + shift] / sum w[n]^2."""
    if shift >= window.size:
        return 0.0
    return float(window[: window.size - shift] @ window[shift:] / (window @ window))


def line_correlation(window: Array, lines: int) -> float:
    """Return how alike white noise is in lines that far apart: |sum w^2 exp(-2 pi j lines n/L)| / sum w^2."""
    power = window**2
    turn = np.exp(-2j * np.pi * lines * np.arange(window.size) / window.size)
    return float(np.abs(power @ turn) / np.sum(power))


def independent_step(window: Array, alike: float) -> int:
    """Return the smallest distance of lines from which on the squared correlation of estimates is at most ``alike``."""
    step = 1
    while step < window.size // 4 and any(line_correlation(window, step * k) ** 2 > alike for k in (1, 2)):
        step += 1
    return step


def segment_spectra(signals: Array, starts: NDArray[np.int64], window: Array) -> ComplexArray:
    """Return the transforms of windowed segments: [lines][segments][channels], lines 0 to L/2.

    Parameters
    ----------
    signals : [samples][channels]
    starts : [segments] int
    window : [L]
    """
    length = window.size
    result = np.empty((length // 2 + 1, starts.size, signals.shape[1]), dtype=complex)
    for k, start in enumerate(starts):
        result[:, k, :] = np.fft.rfft(signals[start : start + length] * window[:, None], axis=0)
    return result


@dataclass(frozen=True)
class Lines:
    """Least squares at every line.

    Parameters
    ----------
    response : [lines][outputs][inputs] complex
    noise : [lines][outputs][outputs] complex
        Unbiased cross-spectra of the errors, in the units of |Y_k|^2; NaN where no degree of freedom is left.
    spread : [lines][inputs][inputs] complex
        V: covariance of the estimates H_i. and H_l. is noise_il times V, conj(E) on the right.
    freedom : [lines] float
        Degrees of freedom of ``noise``.
    residual : [lines][outputs] float
        Sum of |errors|^2 over the segments.
    power : [lines][outputs] float
        Sum of |Y_k|^2 over the segments.
    plain : [lines][inputs] float
        Diagonal of (X^H X)^-1.
    condition : [lines] float
        Ratio of the singular values of X whose columns have norm one, smallest by largest.
    """

    response: ComplexArray
    noise: ComplexArray
    spread: ComplexArray
    freedom: Array
    residual: Array
    power: Array
    plain: Array
    condition: Array


def _correlated(
    values: ComplexArray,
    line: NDArray[np.int64],
    starts: NDArray[np.int64],
    runs: NDArray[np.int64],
    window: Array,
) -> ComplexArray:
    """Return C values for the correlation matrix C of the errors: [lines][segments][columns]."""
    length = window.size
    result = values.copy()
    for distance in range(1, starts.size):
        shift = np.where(runs[distance:] == runs[:-distance], starts[distance:] - starts[:-distance], length)
        if np.all(shift >= length):
            break
        table = {int(q): window_correlation(window, int(q)) for q in np.unique(shift)}
        c = np.array([table[int(q)] for q in shift])
        # E of the later segment is E of the earlier one turned by exp(2 pi j f q / L), as far as they overlap
        turn = np.exp(2j * np.pi * np.mod(np.multiply.outer(line, shift % length), length) / length) * c
        result[:, distance:] += turn[:, :, None] * values[:, :-distance]
        result[:, :-distance] += np.conj(turn)[:, :, None] * values[:, distance:]
    return result


def solve_lines(
    x: ComplexArray,
    y: ComplexArray,
    line: NDArray[np.int64],
    starts: NDArray[np.int64],
    runs: NDArray[np.int64],
    window: Array,
) -> Lines:
    """Return the least squares response of every line, with the covariance that the overlap of the segments gives.

    H^T = R^-1 Q^H Y with X = Q R; cov(H_i.) = S_ii R^-1 Q^H C Q R^-H; S = E^H E / (K - trace(Q^H C Q)).

    Parameters
    ----------
    x : [lines][segments][inputs] complex
        No line may have inputs that are linearly dependent.
    y : [lines][segments][outputs] complex
    line : [lines] int
        Number of each line: its frequency is that many times 1 / (L times the period).
    starts, runs : [segments] int
        First sample of each segment, increasing within a record, and the record it is of, which follow each other.
    window : [L]
    """
    scale = np.sqrt(np.sum(np.abs(x) ** 2, axis=1, keepdims=True))
    q, r = np.linalg.qr(x / scale)
    singular = np.linalg.svd(r, compute_uv=False)
    inverse = np.linalg.solve(r, np.broadcast_to(np.eye(r.shape[-1]), r.shape)) / np.swapaxes(scale, 1, 2)
    adjoint = np.conj(np.swapaxes(q, 1, 2))
    solution = inverse @ (adjoint @ y)
    errors = y - x @ solution
    mixed = adjoint @ _correlated(q, line, starts, runs, window)
    freedom = x.shape[1] - np.trace(mixed, axis1=1, axis2=2).real
    spread = inverse @ mixed @ np.conj(np.swapaxes(inverse, 1, 2))
    raw = np.swapaxes(errors, 1, 2) @ np.conj(errors)
    with np.errstate(divide="ignore", invalid="ignore"):
        noise = np.where(freedom[:, None, None] > 0.05, raw / freedom[:, None, None], np.nan)
    return Lines(
        np.swapaxes(solution, 1, 2),
        noise,
        spread,
        freedom,
        np.sum(np.abs(errors) ** 2, axis=1),
        np.sum(np.abs(y) ** 2, axis=1),
        np.sum(np.abs(inverse) ** 2, axis=2),
        singular[:, -1] / singular[:, 0],
    )


def total_least_squares(x: ComplexArray, y: ComplexArray) -> ComplexArray:
    """Return the response of every line with noise on inputs and outputs alike: [lines][outputs][inputs].

    Every signal is scaled to the same power at each line; the smallest right singular vector of [X, y_i] gives row i of
    H. For one input that is |H| = sqrt(S_yy / S_xx) with the phase of the cross-spectrum, the geometric mean of H1 and
    H2 (reference: G. T. Rocklin, J. Crowley, H. Vold, "A comparison of H1, H2, and Hv frequency response functions",
    3rd International Modal Analysis Conference, 1985, from memory).
    """
    size = np.sqrt(np.sum(np.abs(x) ** 2, axis=1))
    result = np.empty((x.shape[0], y.shape[2], x.shape[2]), dtype=complex)
    for i in range(y.shape[2]):
        own = np.sqrt(np.sum(np.abs(y[:, :, i]) ** 2, axis=1))
        safe = np.where(own > 0, own, 1.0)
        stacked = np.concatenate([x / size[:, None, :], (y[:, :, i] / safe[:, None])[:, :, None]], axis=2)
        vector = np.linalg.svd(np.linalg.qr(stacked, mode="r"))[2][:, -1, :]
        with np.errstate(divide="ignore", invalid="ignore"):
            row = -np.conj(vector[:, :-1]) / np.conj(vector[:, -1:])
        result[:, i, :] = np.where(own[:, None] > 0, row * (safe[:, None] / size), 0.0)
    return result


def resolution_bias(response: ComplexArray, window: Array) -> Array:
    """Return the estimated size of the bias by finite resolution at each line: [lines][outputs][inputs].

    The expectation of the estimate is sum_t h(t) r(t) exp(-jwt) with the correlation r of the window, which near t = 0
    is 1 - a |t|/L - b (2 pi t/L)^2/2: the bias is a/(2 pi) times the first difference over the lines, and b/2 times the
    second one. For the Hann window a = 0 and b = 1/3.
    """
    length = window.size
    power = float(window @ window)
    step = np.diff(window)
    b = float(step @ step) / power * (length / (2 * np.pi)) ** 2
    a = float(window[0] ** 2) * length / power
    if response.shape[0] < 3:
        return np.zeros(response.shape)
    second = np.zeros(response.shape, dtype=complex)
    second[1:-1] = response[2:] - 2 * response[1:-1] + response[:-2]
    second[0], second[-1] = second[1], second[-2]
    first = np.gradient(response, axis=0)
    return np.abs(b / 2 * second) + np.abs(a / (2 * np.pi) * first)  # type: ignore[no-any-return]
