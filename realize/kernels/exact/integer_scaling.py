"""Integer matrices of a state model: states, inputs, outputs and time scaled so that integers stay short."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import lcm
from typing import Any

import numpy as np
from flint import fmpq, fmpz_mat

from realize.kernels.exact.numbers import fraction, power_of_two

Ratios = Sequence[Sequence[Any]]
#: Spread (bits) between the largest and the finest bit of a matrix below which no scaling of states is tried.
SHORT = 64
#: Passes of the balancing iteration over all states.
SWEEPS = 4


@dataclass(frozen=True)
class Integers:
    """Integer matrices with A = T^-1 (A_int / scale) T and so on, T a diagonal matrix of powers of two.

    Markov parameters: C A^k B [i][j] = (C_int A_int^k B_int)[i][j] / (scale^k output_scales[i] input_scales[j]).
    """

    A: fmpz_mat
    B: fmpz_mat
    C: fmpz_mat
    scale: fmpq
    input_scales: list[fmpq]
    output_scales: list[fmpq]


def pair(entry: Any) -> tuple[int, int]:
    """Return numerator and denominator as Python integers."""
    if isinstance(entry, tuple):
        return entry
    value = fraction(entry)
    return int(value.p), int(value.q)


@dataclass(frozen=True)
class Split:
    """A matrix as odd_numerator * 2^low / odd_denominator, with the exponent of the top bit; zeros have numerator 0."""

    odd: list[list[int]]
    low: np.ndarray
    top: np.ndarray
    below: list[list[int]]

    @property
    def common(self) -> int:
        """Least common multiple of the odd denominators."""
        return lcm(*{q for row in self.below for q in row}) if self.below else 1


def split(matrix: Ratios) -> Split:
    """Return the entries of a rational matrix with their powers of two split off."""
    rows, columns = len(matrix), len(matrix[0]) if matrix else 0
    low = np.zeros((rows, columns), dtype=np.int64)
    top = np.zeros((rows, columns), dtype=np.int64)
    odd, below = [], []
    for i, row in enumerate(matrix):
        above_row, below_row = [], []
        for j, entry in enumerate(row):
            p, q = pair(entry)
            if not p:
                above_row.append(0)
                below_row.append(1)
                continue
            up, down = (p & -p).bit_length() - 1, (q & -q).bit_length() - 1
            p, q = p >> up, q >> down
            above_row.append(p)
            below_row.append(q)
            low[i, j] = up - down
            top[i, j] = up - down + p.bit_length() - q.bit_length()
        odd.append(above_row)
        below.append(below_row)
    return Split(odd, low, top, below)


def _spread(parts: Split, shift: np.ndarray) -> int:
    """Return the bits between the highest and the finest bit of 2^-shift_i a_ij 2^shift_j."""
    present = np.array([[bool(entry) for entry in row] for row in parts.odd], dtype=bool)
    if not present.any():
        return 0
    move = shift[None, :] - shift[:, None]
    return int((parts.top + move)[present].max() - (parts.low + move)[present].min())


def _balance(exponents: np.ndarray, present: np.ndarray, sign: int) -> np.ndarray:
    """Return shifts that bring the extreme exponents of row and column of each state together.

    Osborne, On pre-conditioning of matrices, J. ACM 7, 1960, in the maximum norm and on exponents.
    """
    n = exponents.shape[0]
    huge = np.int64(1) << 40
    e = np.where(present & ~np.eye(n, dtype=bool), sign * exponents, -huge)
    shift = np.zeros(n, dtype=np.int64)
    for _ in range(SWEEPS):
        changed = False
        for i in range(n):
            row = int((e[i] + shift).max()) - int(shift[i])
            column = int((e[:, i] - shift).max()) + int(shift[i])
            if row < -huge // 2 or column < -huge // 2:
                continue
            move = (row - column) // 2
            if move:
                shift[i] += move
                changed = True
        if not changed:
            break
    return sign * shift


def state_shifts(parts: Split) -> np.ndarray:
    """Return exponents of a diagonal scaling of the states that makes the integers short: the best of three."""
    n = len(parts.odd)
    zero = np.zeros(n, dtype=np.int64)
    best, spread = zero, _spread(parts, zero)
    if spread <= SHORT or n == 1:
        return best
    present = np.array([[bool(entry) for entry in row] for row in parts.odd], dtype=bool)
    for candidate in (_balance(parts.top, present, 1), _balance(parts.low, present, -1)):
        found = _spread(parts, candidate)
        if found < spread:
            best, spread = candidate, found
    return best


def _integers(parts: Split, move: np.ndarray, common: int) -> list[list[int]]:
    """Return common * entry * 2^move, which the caller knows to be integers."""
    powers = (parts.low + move).tolist()
    return [
        [(o * (common // q)) << k if o else 0 for o, q, k in zip(odd, below, lift, strict=True)]
        for odd, below, lift in zip(parts.odd, parts.below, powers, strict=True)
    ]


def integer_states(A: Ratios, B: Ratios | None, C: Ratios | None) -> Integers:
    """Return integer matrices for A, B, C after scaling states, time, inputs and outputs.

    States by powers of two, chosen so that the integers of A are short; each column of B and row of C by its own
    power of two and the least common multiple of the odd denominators.
    """
    n = len(A)
    a = split(A)
    shift = state_shifts(a)
    present = np.array([[bool(entry) for entry in row] for row in a.odd], dtype=bool).reshape(n, n)
    move = shift[None, :] - shift[:, None]
    lift = -int((a.low + move)[present].min()) if present.any() else 0
    common = a.common
    A_int = fmpz_mat(_integers(a, move + lift, common)) if n else fmpz_mat(0, 0)
    input_scales, output_scales = [], []
    B_int, C_int = fmpz_mat(n, 0), fmpz_mat(0, n)
    if B is not None and B and B[0]:
        columns = [[[row[j]] for row in B] for j in range(len(B[0]))]
        integer_columns = []
        for column in columns:
            values, factor = _vector(split(column), -shift[:, None])
            integer_columns.append([row[0] for row in values])
            input_scales.append(factor)
        B_int = fmpz_mat([list(row) for row in zip(*integer_columns, strict=True)])
    if C is not None and C and C[0]:
        integer_rows = []
        for row in C:
            values, factor = _vector(split([row]), shift[None, :])
            integer_rows.append(values[0])
            output_scales.append(factor)
        C_int = fmpz_mat(integer_rows)
    return Integers(A_int, B_int, C_int, common * power_of_two(lift), input_scales, output_scales)


def _vector(parts: Split, move: np.ndarray) -> tuple[list[list[int]], fmpq]:
    present = np.array([[bool(entry) for entry in row] for row in parts.odd], dtype=bool)
    lift = -int((parts.low + move)[present].min()) if present.any() else 0
    common = parts.common
    return _integers(parts, move + lift, common), common * power_of_two(lift)
