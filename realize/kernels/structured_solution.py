"""From the coefficients of a structured fit to partial fractions and to zeros, poles and gain."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.kernels.structured_fit import StructuredProjection, Task, free_sections
from realize.kernels.zeros import NormalRank
from realize.kernels.zeros import zeros as zeros_of

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Points of a circle around a pole, of half the distance to the next one: the error of its residues is 2^-64.
CIRCLE = 64


@dataclass(frozen=True, eq=False)
class Factors:
    """Zeros and leading coefficients: channel c is gain[c] prod(s - zeros[c]) / prod(s - poles)."""

    zeros: tuple[ComplexArray, ...]
    gain: Array


@dataclass(frozen=True, eq=False)
class Solution:
    """A function as partial fractions: sum residues / (s - poles)^powers + direct.

    Parameters
    ----------
    poles, powers : [n] complex, int
        Free poles first, then the fixed ones as they were given; pairs adjacent.
    residues : [n][channels] complex
    direct : [channels] float
    misfit : [k][channels] complex
        Fitted minus given values.
    factors : Factors or None
        Where partial fractions cannot hold the structure: fixed zeros, or a relative degree above 1.
    """

    poles: ComplexArray
    powers: NDArray[np.int64]
    residues: ComplexArray
    direct: Array
    misfit: ComplexArray
    factors: Factors | None = None


def structured_solution(task: Task, poles: ComplexArray) -> Solution:
    """Return the best function with these free poles."""
    known = task.known
    projection = StructuredProjection(task, free_sections(poles), np.zeros(task.groups.shape[1]))
    basis = projection.basis
    coefficients = np.array(projection.coefficients).T
    every = np.concatenate([poles, known.poles])
    counted: Counter[complex] = Counter()
    powers = []
    for pole in every.tolist():
        counted[pole] += 1
        powers.append(counted[pole])
    residues = np.zeros((every.size, task.values.shape[1]), dtype=complex)
    distinct = np.array(list(counted), dtype=complex)
    for pole in distinct[distinct.imag >= 0].tolist():
        others = np.abs(distinct[distinct != pole] - pole)
        radius = 0.5 * float(np.min(others)) if others.size else max(abs(pole), 1.0)
        turn = radius * np.exp(2j * np.pi * (np.arange(CIRCLE) + 0.5) / CIRCLE)
        around = basis.columns(pole + turn) @ coefficients
        for k in np.flatnonzero(every == pole):
            found = np.mean(around * turn[:, None] ** powers[k], axis=0)
            residues[k] = found if pole.imag else found.real
            if pole.imag:
                mate = np.flatnonzero((every == complex(pole).conjugate()) & (np.array(powers) == powers[k]))[0]
                residues[mate] = residues[k].conj()
    direct = np.zeros(task.values.shape[1])
    factored = known.excess > 1 or known.zeros.size > 0
    if known.excess == 0 and not factored:
        direct = coefficients[-1].copy()
    factors = _factors(task, projection, every) if factored else None
    if factors is not None and known.excess == 0:
        direct = np.where([z.size == every.size for z in factors.zeros], factors.gain, 0.0)
    dead = ~np.any(task.values != 0, axis=0) if task.gain is None else np.zeros(direct.size, bool)
    residues[:, dead], direct[dead] = 0.0, 0.0
    return Solution(
        every,
        np.array(powers, dtype=np.int64),
        residues,
        direct,
        projection.response() - task.values,
        factors,
    )


def _factors(task: Task, projection: StructuredProjection, poles: ComplexArray) -> Factors:
    """Return zeros of every channel, the fixed ones as given, and the leading coefficient that fits best.

    With a given gain at s = 0 the leading coefficient is the one that makes it.
    """
    basis = projection.basis
    A, b, rows = basis.rest_states()
    listed, gains = [], []
    for c, coefficient in enumerate(projection.coefficients):
        constant = 0.0 if basis.strict else float(coefficient[-1])
        own = coefficient[: rows.shape[0]] @ rows
        zeros = np.zeros(0, dtype=complex)
        if np.any(own) or constant:
            try:
                zeros = zeros_of(A, b[:, None], own[None, :], np.array([[constant]]))
            except NormalRank:
                own, constant = np.zeros(own.size), 0.0
        if not np.any(own) and not constant:
            listed.append(np.zeros(0, dtype=complex))
            gains.append(0.0)
            continue
        zeros = np.concatenate([task.known.zeros, zeros])
        gain = None if task.gain is None else float(task.gain[c])
        listed.append(zeros)
        gains.append(_leading(task, projection, c, zeros, poles, gain))
    return Factors(tuple(listed), np.array(gains))


def _leading(
    task: Task, projection: StructuredProjection, c: int, zeros: ComplexArray, poles: ComplexArray, gain: float | None
) -> float:
    if gain is not None:
        if not np.any(zeros == 0):
            mantissa, exponent = _product(-poles, -zeros)
            return float(np.ldexp(gain * mantissa.real, exponent))
        return 0.0
    fitted = projection.basis.columns() @ projection.coefficients[c]
    logarithm = np.zeros(task.points.size, dtype=complex)
    for zero in zeros.tolist():
        with np.errstate(divide="ignore"):
            logarithm += np.log(task.points - zero)
    for pole in poles.tolist():
        logarithm -= np.log(task.points - pole)
    top = float(np.max(logarithm.real))
    shape = np.exp(logarithm - top) * task.weights[:, c]
    value = float(np.sum((shape.conj() * fitted * task.weights[:, c]).real) / np.sum(np.abs(shape) ** 2))
    return float(value * np.exp(-top))


def _product(above: ComplexArray, below: ComplexArray) -> tuple[complex, int]:
    """Return prod(above) / prod(below) as mantissa and exponent of two."""
    value, exponent = 1.0 + 0j, 0
    for numbers, divide in ((above, False), (below, True)):
        for number in numbers.tolist():
            value = value / number if divide else value * number
            shift = int(np.frexp(abs(value))[1])
            value, exponent = value * 2.0**-shift, exponent + shift
    return value, exponent
