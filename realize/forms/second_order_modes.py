"""Second-order models in modal coordinates: unit mass, diagonal damping and stiffness, from partial fractions."""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from realize.forms.modal import factor
from realize.forms.second_order import NoStructure, SecondOrderParts

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Parts of a residue below so many roundings of its size are zero: roundings of numbers that are real or imaginary.
ROUNDINGS = 4.0


class Mode(NamedTuple):
    """(velocity s + position) / (s^2 + damping s + stiffness)."""

    damping: float
    stiffness: float
    position: Array
    velocity: Array


def modes_of_residues(poles: ComplexArray, residues: ComplexArray, powers: NDArray[np.int64]) -> Iterator[Mode]:
    """Yield the modes of partial fractions.

    ::

        R / (s - p) + conj            = (2 Re(R) s - 2 Re(R conj p)) / (s^2 - 2 Re(p) s + |p|^2)
        R_1 / (s - p) + R_2 / (s - p)^2 = (R_1 s + R_2 - p R_1) / (s - p)^2
        R / (s - p) + S / (s - q)     = ((R + S) s - q R - p S) / ((s - p) (s - q)),   p, q real, neighbours in size

    Raises
    ------
    NoStructure
        If a real pole is left over, or a pole repeats more often than one coordinate can hold.
    """
    single: list[tuple[float, Array]] = []
    for pole in dict.fromkeys(poles.tolist()):
        members = np.flatnonzero(poles == pole)
        highest = int(powers[members].max())
        if pole.imag < 0:
            continue
        if highest > (2 if pole.imag == 0 else 1):
            raise NoStructure(f"the pole {pole:.6g} repeats {highest} times in one chain, more than a coordinate holds")
        first, second = (residues[members[powers[members] == power]].sum(axis=0) for power in (1, 2))
        if pole.imag > 0:
            size = ROUNDINGS * np.finfo(float).eps * np.abs(first) * abs(pole)
            position, velocity = -2 * (first * pole.conjugate()).real, 2 * first.real
            position[np.abs(position) <= size] = 0.0
            velocity[np.abs(velocity) * abs(pole) <= size] = 0.0
            if abs(pole) ** 2 < np.finfo(float).tiny:
                raise NoStructure("the square of a pole lies beyond the range of doubles; scale time first")
            yield Mode(-2 * pole.real, pole.real**2 + pole.imag**2, position, velocity)
        elif highest == 2:
            yield Mode(-2 * pole.real, pole.real**2, second.real - pole.real * first.real, first.real)
        else:
            single.append((pole.real, first.real))
    single.sort(key=lambda entry: (abs(entry[0]), entry[0]))
    if len(single) % 2:
        raise NoStructure(f"{len(single)} real poles are no pairs: a coordinate has two poles")
    for (p, R), (q, S) in zip(single[::2], single[1::2], strict=True):
        yield Mode(-(p + q), p * q, -(q * R + p * S), R + S)


def modal_coordinates(
    poles: ComplexArray, residues: ComplexArray, powers: NDArray[np.int64], direct: Array
) -> SecondOrderParts:
    """Return M = I, diagonal D and K, F, P, V and G with the response of partial fractions.

    The numerator of each mode is taken apart as [P; V] F, with as many coordinates as its rank: one for each mode of a
    structure whose mode shapes are real.

    Parameters
    ----------
    poles : [n], residues : [n][p][m], powers : [n]
        As in a pole-residue model, closed under conjugation.
    direct : [p][m]

    Raises
    ------
    NoStructure
    """
    p, m = direct.shape
    diagonals: list[tuple[float, float]] = []
    inputs: list[Array] = []
    outputs: list[tuple[Array, Array]] = []
    for mode in modes_of_residues(poles, residues, powers):
        # velocities in units of the frequency, a power of two, so that both count alike in the rank
        unit = float(np.ldexp(1.0, int(np.frexp(np.sqrt(abs(mode.stiffness)))[1]))) if mode.stiffness else 1.0
        whole = np.vstack([mode.position, mode.velocity * unit])
        rows, columns = np.flatnonzero(whole.any(axis=1)), np.flatnonzero(whole.any(axis=0))
        left, right = factor(whole[np.ix_(rows, columns)].astype(complex))
        for k in range(left.shape[1]):
            c, b = np.zeros(2 * p), np.zeros(m)
            c[rows], b[columns] = left[:, k].real, right[k].real
            diagonals.append((mode.damping, mode.stiffness))
            inputs.append(b)
            outputs.append((c[:p], c[p:] / unit))
    if not diagonals:
        raise NoStructure("there are no poles, and a second-order model has at least one coordinate")
    n = len(diagonals)
    damping, stiffness = (np.diag([entry[k] for entry in diagonals]) for k in (0, 1))
    position, velocity = (np.array([entry[k] for entry in outputs]).T for k in (0, 1))
    parts = (damping, stiffness, np.array(inputs), position, velocity)
    if not all(np.all(np.isfinite(part)) for part in parts):
        raise NoStructure("a coefficient lies beyond the range of doubles; scale time or gain first")
    return SecondOrderParts(
        np.eye(n), damping + 0.0, stiffness, np.array(inputs), (position, velocity), np.array(direct), list(range(n))
    )
