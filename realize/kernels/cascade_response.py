"""Response of state models in cascade coordinates, section by section.

A single-input, single-output part of a block triangular model is a cascade if every block of one or two states is
driven by one signal, and that signal is what drove the block before, times a number, plus the states of that block::

    u_(k+1) = delta_k u_k + gamma_k x_k,    t = s - a_k (the first diagonal entry of the block)
    u_(k+1) / u_k = (delta_k det(sI - A_k) + gamma_k adj(sI - A_k) beta_k) / det(sI - A_k)

so that the response is a product of quotients of polynomials of degree one or two in t, formed exactly from the entries
and rounded once. Signals that fall by orders of magnitude along the cascade then keep their relative accuracy.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from realize.kernels.response import scaled_polynomial, scaled_quotient, scaled_step

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True)
class CascadeSection:
    """Numerator and denominator in t = s - centre, highest power first, exact."""

    centre: float
    numerator: tuple[Fraction, ...]
    denominator: tuple[Fraction, ...]


@dataclass(frozen=True)
class Cascade:
    """One channel: gain times the product of its sections."""

    output: int
    input: int
    gain: float
    sections: tuple[CascadeSection, ...]


def _parts(pattern: NDArray[np.bool_]) -> list[NDArray[np.intp]]:
    """Return the weakly connected components of a square pattern, as sorted indices."""
    n = pattern.shape[0]
    both = pattern | pattern.T
    label = np.full(n, -1)
    parts = []
    for start in range(n):
        if label[start] >= 0:
            continue
        label[start] = start
        waiting = [start]
        while waiting:
            near = np.flatnonzero(both[waiting].any(axis=0) & (label < 0))
            label[near] = start
            waiting = near.tolist()
        parts.append(np.flatnonzero(label == start))
    return parts


def cascades_of(A: Array, B: Array, C: Array, D: Array) -> list[Cascade] | None:
    """Return the cascades that a model consists of, at most one a channel, or None if it is something else.

    Parameters
    ----------
    A : (n, n); B : (n, m); C : (p, n); D : (p, m)
    """
    p, m = D.shape
    n = A.shape[0]
    lower = not np.any(np.triu(A, 2))
    if not lower or n == 0:
        return None
    above = np.diagonal(A, 1) != 0
    if np.any(above[:-1] & above[1:]):
        return None
    found: dict[tuple[int, int], Cascade] = {}
    for index in _parts(A != 0):
        inputs = np.flatnonzero(B[index].any(axis=0))
        outputs = np.flatnonzero(C[:, index].any(axis=1))
        if inputs.size == 0 or outputs.size == 0:
            continue
        if inputs.size != 1 or outputs.size != 1 or (int(outputs[0]), int(inputs[0])) in found:
            return None
        i, j = int(outputs[0]), int(inputs[0])
        made = _chain(A[np.ix_(index, index)], B[index, j], C[i, index], float(D[i, j]))
        if made is None:
            return None
        found[i, j] = Cascade(i, j, *made)
    rest = [
        Cascade(i, j, float(D[i, j]), ()) for i in range(p) for j in range(m) if (i, j) not in found and D[i, j] != 0
    ]
    return [*found.values(), *rest]


def _chain(A: Array, b: Array, c: Array, d: float) -> tuple[float, tuple[CascadeSection, ...]] | None:
    """Return gain and sections of one component, or None if its blocks do not form a chain."""
    n = A.shape[0]
    starts, k = [], 0
    while k < n:
        starts.append(k)
        k += 2 if k < n - 1 and A[k, k + 1] != 0 else 1
    sizes = np.diff([*starts, n])
    # the signal that drives each block, and the output, as rows over (input, states so far)
    rows, columns = [], []
    for start, size in zip(starts, sizes.tolist(), strict=True):
        into = np.concatenate([b[start : start + size, None], A[start : start + size, :start]], axis=1)
        pivot = int(np.argmax(np.abs(into).max(axis=1)))
        row = into[pivot]
        if not row.any():
            return None
        place = int(np.flatnonzero(row)[0])
        # scaled so that the column holds the block's own sizes
        column = [Fraction(float(entry)) / Fraction(float(row[place])) for entry in into[:, place]]
        for entries, factor in zip(into, column, strict=True):
            if any(Fraction(x) != factor * Fraction(y) for x, y in zip(entries.tolist(), row.tolist(), strict=True)):
                return None
        rows.append(row)
        columns.append(column)
    rows.append(np.concatenate([[d], c]))
    if len(rows) > 1 and rows[0].size != 1:
        return None
    sections = []
    for k, (start, size) in enumerate(zip(starts, sizes.tolist(), strict=True)):
        before, after = rows[k], rows[k + 1]
        head = after[: start + 1]
        place = int(np.flatnonzero(before)[0])
        delta = Fraction(float(head[place])) / Fraction(float(before[place]))
        if any(Fraction(x) != delta * Fraction(y) for x, y in zip(head.tolist(), before.tolist(), strict=True)):
            return None
        own = [Fraction(x) for x in after[start + 1 : start + 1 + size].tolist()]
        sections.append(_section(A[start : start + size, start : start + size], columns[k], own, delta))
    return float(rows[0][0]), tuple(sections)


def _section(block: Array, column: list[Fraction], row: list[Fraction], delta: Fraction) -> CascadeSection:
    centre = float(block[0, 0])
    if block.shape[0] == 1:
        return CascadeSection(centre, (delta, row[0] * column[0]), (Fraction(1), Fraction(0)))
    (a, over), (under, e) = ([Fraction(float(x)) for x in line] for line in block)
    e -= a
    # with t = s - a: det = t (t - e) - over under, adj = [[t - e, over], [under, t]]
    below = (Fraction(1), -e, -over * under)
    linear = row[0] * column[0] + row[1] * column[1]
    constant = -e * row[0] * column[0] + row[0] * over * column[1] + row[1] * under * column[0]
    return CascadeSection(centre, (delta, delta * below[1] + linear, delta * below[2] + constant), below)


def _scaled_coefficients(values: tuple[Fraction, ...]) -> tuple[Array, NDArray[np.int64]]:
    """Return mantissas and binary exponents, leading zeros left out."""
    first = next((k for k, value in enumerate(values) if value), len(values) - 1)
    mantissas, exponents = [], []
    for value in values[first:]:
        shift = value.numerator.bit_length() - value.denominator.bit_length()
        mantissa, step = np.frexp(float(value / Fraction(2) ** shift))
        mantissas.append(float(mantissa))
        exponents.append(shift + int(step) if value else 0)
    return np.array(mantissas), np.array(exponents, dtype=np.int64)


class CascadeResponse:
    """Function of complex points: response [k][outputs][inputs] and relative error bounds [k] of it."""

    def __init__(self, cascades: list[Cascade], shape: tuple[int, int]) -> None:
        self.cascades, self.shape = cascades, shape
        self.order = sum(len(section.denominator) - 1 for one in cascades for section in one.sections)
        self.scaled = [
            [
                (section.centre, _scaled_coefficients(section.numerator), _scaled_coefficients(section.denominator))
                for section in one.sections
            ]
            for one in cascades
        ]

    def __call__(self, points: ComplexArray) -> tuple[ComplexArray, Array]:
        values = np.zeros((points.size, *self.shape), dtype=complex)
        worst = np.zeros(points.size)
        for one, sections in zip(self.cascades, self.scaled, strict=True):
            mantissa, exponent = np.frexp(one.gain)
            above = np.full(points.size, mantissa, dtype=complex), np.full(points.size, int(exponent), dtype=np.int64)
            below = np.ones(points.size, dtype=complex), np.zeros(points.size, dtype=np.int64)
            bound = np.full(points.size, np.finfo(float).eps)
            for centre, numerator, denominator in sections:
                t = points - centre
                for polynomial, which in ((numerator, 0), (denominator, 1)):
                    value, top, error = scaled_polynomial(polynomial, t)
                    bound = bound + error + 8 * np.finfo(float).eps
                    if which == 0:
                        above = scaled_step(above, (value, top))
                    else:
                        below = scaled_step(below, (value, top))
            values[:, one.output, one.input] = scaled_quotient(above, below)
            worst = np.maximum(worst, bound)
        return values, np.where(np.isnan(worst), np.inf, worst)

    def exact(self, points: ComplexArray) -> ComplexArray:
        """Return the correctly rounded response at finite points."""
        from realize.kernels.exact.numbers import fraction
        from realize.kernels.exact.points import products_at
        from realize.kernels.exact.polynomials import polynomial, shifted

        def expanded(values: tuple[Fraction, ...], centre: float) -> object:
            ratios = [(value.numerator, value.denominator) for value in values]
            return shifted(polynomial(ratios), -fraction(centre.as_integer_ratio()))

        values = np.zeros((points.size, *self.shape), dtype=complex)
        for one in self.cascades:
            above = [expanded(section.numerator, section.centre) for section in one.sections]
            below = [expanded(section.denominator, section.centre) for section in one.sections]
            gain = fraction(one.gain.as_integer_ratio())
            values[:, one.output, one.input] = products_at(gain, above, below, points)  # type: ignore[arg-type]
        return values
