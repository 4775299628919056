"""Norms of state models: largest gain over all frequencies, H2 norm.

The largest gain is found from values of C (sI - A)^-1 B + D and confirmed by the eigenvalues of a Hamiltonian matrix;
nothing here shares a computation with balancing.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.kernels.lyapunov import NotStable, observability_factor, schur_eigenvalues, schur_gramian_factors
from realize.kernels.response import DIRECT_SIZE, balanced_states, state_response, triangular_blocks
from realize.kernels.unit_scaling import far_apart, scale_model

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

EPS = float(np.finfo(float).eps)
#: Up to this order the Hamiltonian matrix (twice the size) confirms the peak; its eigenvalues take about 2 s there.
CONFIRMED_ORDER = 400


@dataclass(frozen=True)
class Peak:
    """Largest gain over all frequencies.

    Attributes
    ----------
    value : float
        The largest gain found, attained at `frequency`; infinite if a pole lies on the axis.
    frequency : float
        rad/s, or rad per sample up to pi for sampled models; infinite where the feed-through is the peak.
    upper : float
        What the gain does not exceed at any frequency; infinite where nothing was confirmed.
    basis : {"bounded", "measured"}
        "bounded": the Hamiltonian matrix of `upper` has no eigenvalue on the axis. "measured": samples seeded at every
        pole with local refinement.
    """

    value: float
    frequency: float
    upper: float
    basis: Literal["bounded", "measured"]

    @property
    def lower(self) -> float:
        """The gain attained at `frequency`: the value itself."""
        return self.value


def gains(values: ComplexArray) -> Array:
    """Return the largest singular value at each point of [k][outputs][inputs]; infinite where an entry is so."""
    result = np.full(values.shape[0], np.inf)
    if values.shape[1] == 0 or values.shape[2] == 0:
        return np.zeros(values.shape[0])
    finite = np.isfinite(values).all(axis=(1, 2))
    if finite.any() and 1 in values.shape[1:]:
        flat = np.abs(values[finite]).reshape(int(finite.sum()), -1)
        size = flat.max(axis=1)
        safe = np.where(size > 0, size, 1.0)
        result[finite] = np.linalg.norm(flat / safe[:, None], axis=1) * size
    elif finite.any():
        size = np.abs(values[finite]).max(axis=(1, 2))
        safe = np.where(size > 0, size, 1.0)
        result[finite] = np.linalg.svd(values[finite] / safe[:, None, None], compute_uv=False)[:, 0] * size
    return result


def response_evaluator(A: Array, B: Array, C: Array, D: Array) -> Callable[[ComplexArray], ComplexArray]:
    """Return a function of complex points that gives C (sI - A)^-1 B + D, with the Schur form computed once."""
    if A.shape[0] <= DIRECT_SIZE or triangular_blocks(A) is not None:
        return lambda points: state_response(A, B, C, D, None, points)
    A, B, C, _ = balanced_states(A, B, C, None)
    T, Q = scipy.linalg.schur(A.astype(complex), output="complex", check_finite=False)
    b, c = Q.conj().T @ B, C @ Q
    return lambda points: state_response(T, b, c, D, None, points)


def pole_frequencies(poles: ComplexArray, *, sampled: bool) -> Array:
    """Return the frequencies where the gain of a model with these poles has its features, increasing, 0 included.

    Continuous: modulus, imaginary part and resonance |p| sqrt(1 - 2 zeta^2) of each pole, a decade beyond either end
    and the geometric means between neighbours. Sampled: the arguments, their means, pi, and the moduli of log(p).
    """
    if sampled:
        with np.errstate(divide="ignore"):
            logarithm = np.log(poles[poles != 0].astype(complex))
        sizes = np.concatenate([np.abs(logarithm.imag), np.abs(logarithm)])
        found = np.unique(np.concatenate([[0.0, math.pi], sizes[(sizes > 0) & (sizes < math.pi)]]))
        spread = np.geomspace(max(float(found[1]) / 10, 1e-12), math.pi, 30)
        found = np.unique(np.concatenate([found, spread[:-1]]))
        return np.unique(np.concatenate([found, (found[1:] + found[:-1]) / 2]))
    size = np.abs(poles)
    size = size[size > 0]
    if size.size == 0:
        return np.array([0.0, 1.0])
    inside = 1 - 2 * (poles.real[np.abs(poles) > 0] / size) ** 2
    found = np.concatenate([size, np.abs(poles.imag), size * np.sqrt(np.maximum(inside, 0))])
    found = np.unique(found[found > size.min() * 1e-3])
    low, high = found[0] / 10, found[-1] * 10
    found = np.unique(np.concatenate([[low, high], found, np.geomspace(low, high, 30)]))
    return np.concatenate([[0.0], np.unique(np.concatenate([found, np.sqrt(found[1:]) * np.sqrt(found[:-1])]))])


def refined_peak(
    evaluate: Callable[[Array], Array], frequencies: Array, *, kept: int = 8, rounds: int = 14
) -> tuple[float, float]:
    """Return (largest value, its frequency) of a function of frequency: samples, then zooms into the highest maxima.

    Parameters
    ----------
    evaluate : callable
        Array of frequencies to array of gains.
    frequencies : (k,) array
        Increasing seeds; the search stays between the first and the last.
    kept : int
        How many local maxima are followed.
    rounds : int
        Zooms, each of them four times closer.
    """
    sample = evaluate(frequencies)
    best = int(np.argmax(sample))
    value, where = float(sample[best]), float(frequencies[best])
    if not math.isfinite(value) or frequencies.size < 2:
        return value, where
    padded = np.concatenate([[-np.inf], sample, [-np.inf]])
    tops = np.flatnonzero((padded[1:-1] >= padded[:-2]) & (padded[1:-1] >= padded[2:]))
    tops = tops[np.argsort(-sample[tops], kind="stable")][:kept]
    low = frequencies[np.maximum(tops - 1, 0)]
    high = frequencies[np.minimum(tops + 1, frequencies.size - 1)]
    for _ in range(rounds):
        grid = low[:, None] + (high - low)[:, None] * np.linspace(0, 1, 9)[None, :]
        found = evaluate(grid.ravel()).reshape(grid.shape)
        at = np.argmax(found, axis=1)
        k = int(np.argmax(found[np.arange(at.size), at]))
        if found[k, at[k]] > value:
            value, where = float(found[k, at[k]]), float(grid[k, at[k]])
        if not math.isfinite(value):
            break
        rows = np.arange(at.size)
        low, high = grid[rows, np.maximum(at - 1, 0)], grid[rows, np.minimum(at + 1, 8)]
    return value, where


def _units(A: Array, B: Array, C: Array, D: Array, sampled: bool) -> tuple[Array, Array, Array, Array, int, int]:
    """Return the model with time and gain scaled by powers of two: exponents of time and gain last."""

    def top(matrix: Array) -> int:
        largest = float(np.max(np.abs(matrix), initial=0.0))
        return int(np.frexp(largest)[1]) if largest > 0 else 0

    with np.errstate(under="ignore"):
        # inputs and outputs to size 1 before the states are balanced, so that nothing overflows there
        b, c = top(B), top(C)
        B, C = np.ldexp(B, -b), np.ldexp(C, -c)
        A, B, C, _ = balanced_states(A, B, C, None)
        if far_apart(A):
            # couplings that are part of no loop must not set the unit of time
            scaled = scale_model(A, B, C, sampled=sampled)
            A, B, C, time, gain = scaled.A, scaled.B, scaled.C, scaled.time, b + c + scaled.gain
        else:
            time = 0 if sampled else top(A)
            A, gain = np.ldexp(A, -time), b + c - time
        extra_b, extra_c = top(B), top(C)
        gain += extra_b + extra_c
        B, C = np.ldexp(B, -extra_b), np.ldexp(C, -extra_c)
        if not np.any(B) or not np.any(C):
            gain = top(D)
        shift = gain - top(D) if np.any(D) else 0
        if shift < 0:
            # the feed-through is the larger one and sets the unit of gain
            half = -shift // 2
            B, C = np.ldexp(B, shift + half), np.ldexp(C, -half)
            gain = gain - shift
        return A, B, C, np.ldexp(D, -gain), time, gain


def _bilinear(A: Array, B: Array, C: Array, D: Array) -> tuple[Array, Array, Array, Array, int]:
    """Return a continuous model with G_c(j tan(theta / 2)) = G(sign e^(j theta)), and that sign."""
    n = A.shape[0]
    poles = np.linalg.eigvals(A).astype(complex)
    sign = 1 if np.min(np.abs(poles + 1)) >= np.min(np.abs(poles - 1)) else -1
    shifted = sign * A + np.eye(n)
    mapped = np.linalg.solve(shifted, np.hstack([sign * A - np.eye(n), B])).astype(float)
    left = np.linalg.solve(shifted.T, C.T).T.astype(float)
    # G(z) = C (zI - A)^-1 B + D with z = sign (1 + s) / (1 - s); z = -sign at infinite s
    return mapped[:, :n], 2.0 * sign * mapped[:, n:], left, D - sign * (C @ mapped[:, n:]), sign


def crossing_frequencies(
    A: Array, B: Array, C: Array, D: Array, level: float, poles: ComplexArray
) -> tuple[Array, float]:
    """Return frequencies where a singular value of the response may equal `level`, and the margin that would be clear.

    They are the eigenvalues on the axis of the Hamiltonian matrix [1]_

        [A + B R^-1 D'C,  B R^-1 B'; -C'(I + D R^-1 D')C,  -(A + B R^-1 D'C)'],   R = level^2 I - D'D.

    Eigenvalues within rounding of the axis count as on it. The second result is the relative distance above a peak from
    which on rounding cannot put them there (0 if there are none).

    Parameters
    ----------
    A, B, C, D : arrays
    level : float
        Larger than the largest singular value of D.
    poles : (n,) array
        Eigenvalues of A.

    References
    ----------
    .. [1] S. Boyd, V. Balakrishnan, P. Kabamba, A bisection method for computing the H-infinity norm of a transfer
           matrix, Math. Control Signals Systems 2 (1989) 207-219.
    """
    n, m = B.shape
    # B R^-1 B' = level^-2 B K B' etc.; B and C are divided by sqrt(level) so that the blocks have like sizes
    root = math.sqrt(level)
    b, c, d = B / root, C / root, D / level
    inner = np.eye(m) - d.T @ d
    solved = np.linalg.solve(inner, np.hstack([d.T @ c, b.T]))
    closed = A + b @ solved[:, :n]
    top = b @ solved[:, n:]
    low = -(c.T @ c + (d.T @ c).T @ solved[:, :n])
    H = np.block([[closed, (top + top.T) / 2], [(low + low.T) / 2, -closed.T]])
    values = np.linalg.eigvals(H)
    # the eigenvalues are those of a matrix this close (backward error of the QR algorithm)
    sums = math.sqrt(float(np.linalg.norm(H, 1))) * math.sqrt(float(np.linalg.norm(H, np.inf)))
    doubt = 4 * math.sqrt(2 * n) * EPS * sums
    # at 1 + 2 x of a peak of half-width w they are off the axis by 2 w sqrt(x); the change stands for x = doubt / w
    width = np.min(np.abs(values.imag[:, None] * 1j - poles[None, :]), axis=1)
    near = values.real**2 <= 16 * doubt * np.maximum(width, doubt)
    needed = float(np.max(8 * doubt / width[near], initial=0.0)) if near.any() else 0.0
    return np.unique(np.abs(values.imag[near])), needed


def peak_gain(A: Array, B: Array, C: Array, D: Array, *, sampled: bool, tolerance: float) -> Peak:
    """Return the L-infinity norm: the largest singular value of C (sI - A)^-1 B + D over the axis (unit circle).

    Samples seeded at every pole are refined; then the Hamiltonian matrix of (1 + 2 tolerance) times the largest gain
    either shows where the gain exceeds that level, and the search goes on at the midpoints, or confirms it [1]_.
    Sampled models are mapped by z = (1 + s) / (1 - s). Where rounding hides the answer the level is raised until it is
    clear, and `upper` says so. Beyond order 400 the samples stand alone.

    Parameters
    ----------
    A : (n, n) array
        May be unstable, but without poles on the axis.
    B : (n, m) array
    C : (p, n) array
    D : (p, m) array
    sampled : bool
    tolerance : float
        Relative; about 1e-10.

    Returns
    -------
    Peak
        `value` is attained at `frequency`, whatever else.

    References
    ----------
    .. [1] N. A. Bruinsma, M. Steinbuch, A fast algorithm to compute the H-infinity norm of a transfer function matrix,
           Systems & Control Letters 14 (1990) 287-293.
    """
    own = (A, B, C, D)
    if A.shape[0] == 0 or not np.any(B) or not np.any(C):
        value = float(gains(D[None].astype(complex))[0])
        return Peak(value, 0.0, value * (1 + 4 * max(D.shape) * EPS), "bounded")
    A, B, C, D, time, gain = _units(A, B, C, D, sampled)
    direct = float(gains(D[None].astype(complex))[0])
    evaluate = response_evaluator(A, B, C, D)

    def at(frequency: Array) -> Array:
        return gains(evaluate(np.asarray(np.exp(1j * frequency) if sampled else 1j * frequency, dtype=complex)))

    poles = np.linalg.eigvals(A).astype(complex)
    value, where = refined_peak(at, pole_frequencies(poles, sampled=sampled))
    if not sampled and direct >= value:
        value, where = direct, math.inf
    upper, basis = math.inf, "measured"
    if math.isfinite(value) and A.shape[0] <= CONFIRMED_ORDER:
        value, where, upper = _confirm(A, B, C, D, at, value, where, sampled, tolerance)
        basis = "bounded" if math.isfinite(upper) else "measured"
    if math.isfinite(where) and not sampled:
        where = _scaled_up(where, time)
    attained = _scaled_up(value, gain)
    if math.isfinite(where):
        # in the model's own units the same point may round to a little more
        point = np.exp(1j * np.array([where])) if sampled else 1j * np.array([where])
        again = float(gains(state_response(*own, None, point))[0]) if own[0].shape[0] <= DIRECT_SIZE else attained
        attained = max(attained, again) if math.isfinite(again) else attained
    return Peak(attained, where, max(_scaled_up(upper, gain), attained), basis)  # type: ignore[arg-type]


def _scaled_up(value: float, exponent: int) -> float:
    try:
        return math.ldexp(value, exponent)
    except OverflowError:
        return math.inf


def _confirm(
    A: Array,
    B: Array,
    C: Array,
    D: Array,
    at: Callable[[Array], Array],
    value: float,
    where: float,
    sampled: bool,
    tolerance: float,
) -> tuple[float, float, float]:
    """Raise the largest gain by the two-step algorithm until no singular value crosses the level above it."""
    sign = 1
    if sampled:
        A, B, C, D, sign = _bilinear(A, B, C, D)
    size = float(np.max(np.abs(A), initial=0.0))
    power = int(np.frexp(size)[1]) if size > 0 else 0
    # time is scaled once more, and B and C share the factor
    A, B, C = np.ldexp(A, -power), np.ldexp(B, -(power // 2)), np.ldexp(C, -(power - power // 2))
    A, B, C, _ = balanced_states(A, B, C, None)
    direct = float(gains(D[None].astype(complex))[0])

    def own_frequency(frequency: Array) -> Array:
        frequency = np.ldexp(frequency, power)
        if not sampled:
            return frequency
        angle = 2 * np.arctan(frequency)
        return angle if sign > 0 else math.pi - angle

    if value == 0.0:
        # zero at every sample: seeds outnumber the zeros a nonzero response of this order can have
        return value, where, 0.0
    poles = np.linalg.eigvals(A).astype(complex)
    step = tolerance
    for _ in range(60):
        level = max(value, direct) * (1 + 2 * step)
        crossings, needed = crossing_frequencies(A, B, C, D, level, poles)
        if crossings.size == 0:
            return value, where, level
        ends = np.concatenate([[0.0], crossings, [2 * crossings[-1] + 1.0]])
        trial = np.unique(own_frequency(np.concatenate([ends, (ends[1:] + ends[:-1]) / 2])))
        found = at(trial)
        best = int(np.argmax(found))
        if found[best] > level:
            value, where = refined_peak(at, trial)
            continue
        if found[best] > value:
            value, where = float(found[best]), float(trial[best])
        # what looks like a crossing is none: rounding moved an eigenvalue to the axis, so a clearer level is tried
        step = max(8 * step, needed)
        if step > 0.1:
            break
    return value, where, math.inf


def squared_norm(A: Array, B: Array, C: Array, D: Array, *, sampled: bool) -> float:
    """Return the H2 norm of a stable model: root of trace(B'Q B) (sampled: plus trace(D'D)), Q the observability
    Gramian.

    Parameters
    ----------
    A, B, C, D : arrays
    sampled : bool

    Returns
    -------
    float
        Infinite for a continuous model with feed-through.

    Raises
    ------
    NotStable
        If A is not stable.
    """
    if not sampled and np.any(D):
        return math.inf
    direct = float(np.linalg.norm(np.ldexp(D, -_exponent(D)))) if D.size else 0.0
    direct = _scaled_up(direct, _exponent(D))
    if A.shape[0] == 0:
        return direct
    b, c = _exponent(B), _exponent(C)
    with np.errstate(under="ignore"):
        B, C = np.ldexp(B, -b), np.ldexp(C, -c)
        if far_apart(A):
            scaled = scale_model(A, B, C, sampled=sampled)
            A, B, C, time = scaled.A, scaled.B, scaled.C, scaled.time
            b, c = b + scaled.input, c + scaled.output
            A, time = np.ldexp(A, -(time % 2)), time + time % 2
        else:
            time = 0 if sampled else _exponent(A)
            time += time % 2
            A, B, C, _ = balanced_states(np.ldexp(A, -time), B, C, None)
    T, Q = scipy.linalg.schur(A, output="real", check_finite=False)
    if np.any(np.abs(schur_eigenvalues(T)) >= 1) if sampled else np.any(schur_eigenvalues(T).real >= 0):
        raise NotStable("a pole lies on or outside the boundary of the stability region")
    if sampled:
        factor = schur_gramian_factors(T, Q.T @ B, C @ Q, sampled=True)[1]
        own = float(np.linalg.norm(factor @ (Q.T @ B)))
    else:
        own = float(np.linalg.norm(observability_factor(T, C @ Q)[0] @ (Q.T @ B)))
    # the Gramian carries the unit of time to the power 1: its square root comes back with half the exponent
    return math.hypot(_scaled_up(own, b + c - time // 2), direct)


def _exponent(matrix: Array) -> int:
    largest = float(np.max(np.abs(matrix), initial=0.0))
    return int(np.frexp(largest)[1]) if largest > 0 else 0
