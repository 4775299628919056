"""From the coefficients of a structured fit to partial fractions and to zeros, poles and gain."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
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
class Chain:
    """All channels as prod(s - zeros) / prod(s - outer), times sum residues / (s - poles)^powers + direct.

    The first factor is common to the channels and holds the structure: fixed zeros and relative degree.
    """

    zeros: ComplexArray
    outer: ComplexArray
    poles: ComplexArray
    powers: NDArray[np.int64]
    residues: ComplexArray
    direct: Array


@dataclass(frozen=True, eq=False)
class Factors:
    """Zeros and leading coefficients: channel c is gain[c] prod(s - zeros[c]) / prod(s - poles).

    ``chain`` is the same with a common factor, None where that would be improper.
    """

    zeros: tuple[ComplexArray, ...]
    gain: Array
    chain: Chain | None = None


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
    powers, residues = _residues(lambda at: basis.columns(at) @ coefficients, every)
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
        powers,
        residues,
        direct,
        projection.response() - task.values,
        factors,
    )


def _residues(
    function: Callable[[ComplexArray], ComplexArray], every: ComplexArray
) -> tuple[NDArray[np.int64], ComplexArray]:
    """Return powers [n] and residues [n][channels] of a function with these poles, from circles around them."""
    counted: Counter[complex] = Counter()
    listed = []
    for pole in every.tolist():
        counted[pole] += 1
        listed.append(counted[pole])
    powers = np.array(listed, dtype=np.int64)
    residues = np.zeros((every.size, function(np.ones(1, dtype=complex) * 1j).shape[1]), dtype=complex)
    distinct = np.array(list(counted), dtype=complex)
    for pole in distinct[distinct.imag >= 0].tolist():
        others = np.abs(distinct[distinct != pole] - pole)
        radius = 0.5 * float(np.min(others)) if others.size else max(abs(pole), 1.0)
        turn = radius * np.exp(2j * np.pi * (np.arange(CIRCLE) + 0.5) / CIRCLE)
        around = function(pole + turn)
        for k in np.flatnonzero(every == pole):
            found = np.mean(around * turn[:, None] ** powers[k], axis=0)
            residues[k] = found if pole.imag else found.real
            if pole.imag:
                mate = np.flatnonzero((every == complex(pole).conjugate()) & (powers == powers[k]))[0]
                residues[mate] = residues[k].conj()
    return powers, residues


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
    return Factors(tuple(listed), np.array(gains), _chain(task, projection, poles))


def _chain(task: Task, projection: StructuredProjection, poles: ComplexArray) -> Chain | None:
    """Return the solution with its common factor apart, whose leading coefficient goes to the residues."""
    basis = projection.basis
    outer: list[complex] = []
    left = poles.tolist()
    for unit in basis.outer:
        members = [p for p in left if p.imag > 0] if unit.pair else [p for p in left if p.imag == 0]
        size = [abs(abs(p) - unit.w) + abs((-2 * p.real if unit.pair else -p.real) - unit.a) for p in members]
        chosen = members[int(np.argmin(size))]
        for pole in [chosen, chosen.conjugate()] if unit.pair else [chosen]:
            left.remove(pole)
            outer.append(pole)
    zeros = task.known.zeros
    if zeros.size > len(outer):
        return None
    place = np.array([1j * float(np.exp(np.mean(np.log(np.abs(task.points[task.points != 0])))))])
    mantissa, exponent = _product(place[0] - zeros, place[0] - np.array(outer, dtype=complex))
    lead = float((basis.factor(place)[0] / np.ldexp(1.0, exponent) / mantissa).real)
    every = np.array(left, dtype=complex)
    powers, residues = _residues(lambda at: basis.rest(at) @ np.array(projection.coefficients).T, every)
    direct = np.zeros(task.values.shape[1])
    if not basis.strict:
        direct = np.array([coefficient[-1] for coefficient in projection.coefficients])
    return Chain(zeros, np.array(outer, dtype=complex), every, powers, residues * lead, direct * lead)


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
