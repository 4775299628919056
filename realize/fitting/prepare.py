"""From checked data to the fitting problem in numbers near 1."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.errors import InputError, Refused
from realize.fitting import noise as noises
from realize.fitting.problem import Problem
from realize.fitting.sampled import warped
from realize.fitting.structure import Structure, inside

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class Prepared:
    """A problem, and what was taken off the data to get there.

    Parameters
    ----------
    problem : Problem
    basis : str
        How the deviations were got.
    shift, lift : int, [channels] int
        Powers of two taken off the frequencies and the channels.
    used : [k] bool
        Lines that take part.
    cautions : tuple of str
    """

    problem: Problem
    basis: str
    shift: int
    lift: NDArray[np.int64]
    used: NDArray[np.bool_]
    cautions: tuple[str, ...]


def prepared(
    w: Array,
    H: ComplexArray,
    sigma: Array | None,
    gamma: Array | None,
    direct: bool,
    kept: Structure,
    period: float | None,
) -> Prepared:
    """Return the problem of checked data: frequencies and channels near 1, weights, structure.

    Parameters
    ----------
    w : [k] float
        rad/s.
    H : [k][outputs][inputs] complex
    sigma, gamma : [k][channels] float or None
        Deviations and coherence.
    direct : bool
        Whether the model has a direct term.
    kept : Structure
    period : float or None
    """
    lines, p, m = H.shape
    x, used = (w, np.ones(lines, bool)) if period is None else warped(w, period)
    cautions: list[str] = []
    if not np.all(used):
        cautions.append("the line at half the sampling rate (z = -1) is left out of the fit")
    if not np.any(used):
        raise InputError("only a line at half the sampling rate", "lines below it", field="frequency")
    on_pole = _lines_at(fixed_poles_of(kept, period), w, period) & used
    if np.any(on_pole):
        cautions.append(f"{int(np.sum(on_pole))} line(s) at a fixed pole are left out of the fit")
        used &= ~on_pole
    if not np.any(used & (x > 0)):
        raise InputError(
            "no line above frequency 0 that could be used", "lines away from fixed poles", field="frequency"
        )
    shift = _middle_exponent(x[used])
    points = 1j * np.ldexp(x[used], -shift)
    flat = H.reshape(lines, p * m)
    lift = _top_exponents(flat)
    values = _scaled(flat, -lift)[used]
    vanish = np.inf if period is None else float(np.ldexp(1.0, -shift))
    weights, basis = _weights(points.imag, values, sigma, gamma, lift, used)
    if sigma is not None and basis != "given":
        cautions.append("a channel has no deviation above zero: the deviations given are not used")
    within = None if kept.plain else inside(kept, period, shift, lift)
    problem = Problem(points, values, weights, basis == "given", basis == "estimated", direct, vanish, within, p)
    return Prepared(problem, basis, shift, lift, used, tuple(cautions))


def fixed_poles_of(structure: Structure, period: float | None) -> ComplexArray:
    """Return all fixed poles, integrators included."""
    origin = 0j if period is None else 1 + 0j
    return np.array([*structure.fixed_poles, *[origin] * structure.integrators], dtype=complex)


def _lines_at(poles: ComplexArray, w: Array, period: float | None) -> NDArray[np.bool_]:
    points = 1j * w if period is None else np.exp(1j * w * period)
    return np.any(points[:, None] == poles[None, :], axis=1)


def _middle_exponent(x: Array) -> int:
    positive = x[x > 0]
    if positive.size == 0:
        return 0
    return round((np.log2(positive[0]) + np.log2(positive[-1])) / 2)


def _top_exponents(flat: ComplexArray) -> NDArray[np.int64]:
    size = np.max(np.maximum(np.abs(flat.real), np.abs(flat.imag)), axis=0)
    return np.where(size > 0, np.frexp(size)[1], 0).astype(np.int64)


def _scaled(flat: ComplexArray, exponents: NDArray[np.int64]) -> ComplexArray:
    result = np.empty(flat.shape, dtype=complex)
    with np.errstate(under="ignore"):
        result.real = np.ldexp(flat.real, exponents)
        result.imag = np.ldexp(flat.imag, exponents)
    return result


def _weights(
    x: Array,
    values: ComplexArray,
    sigma: Array | None,
    gamma: Array | None,
    lift: NDArray[np.int64],
    used: NDArray[np.bool_],
) -> tuple[Array, str]:
    """Return weights of the scaled problem and how they were got."""
    if sigma is not None:
        with np.errstate(under="ignore", over="ignore"):
            given = noises.floored(np.ldexp(sigma[used], -lift), values)
        if given is not None and np.all(np.isfinite(given)):
            return 1 / given, "given"
    if gamma is not None:
        shape = noises.from_coherence(values, gamma[used])
        basis = "coherence"
    else:
        shape = noises.noise_shape(x, values, noises.smoothed_size(values, 2))
        basis = "estimated"
    dead = ~np.any(values != 0, axis=0)
    shape[:, dead] = 1.0
    if not np.all(np.isfinite(shape)) or np.any(shape <= 0):
        raise Refused("no deviation can be estimated from these data; give a deviation for each line")
    return 1 / shape, basis
