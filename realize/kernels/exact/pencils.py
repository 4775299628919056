"""Exact transfer matrix of a descriptor model, prime by prime."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from flint import fmpq, fmpq_poly, fmpz, fmpz_mat, nmod_mat, nmod_poly

from realize.kernels.exact.integer_scaling import split
from realize.kernels.exact.numbers import power_of_two, prime

Ratios = Sequence[Sequence[Any]]


class SingularPencil(ValueError):
    """det(sE - A) is identically zero: the descriptor equations have no unique solution."""


def _integer_rows(blocks: list[list[list[Any]]], column_shifts: list[np.ndarray]) -> tuple[list[list[list[int]]], fmpq]:
    """Return blocks of equal row count with each common row made integer, and the product of the row factors."""
    parts = [split(block) for block in blocks]
    factor = fmpq(1)
    result: list[list[list[int]]] = [[] for _ in blocks]
    for i in range(len(blocks[0])):
        lows = [
            int(part.low[i, j] + shift[j])
            for part, shift in zip(parts, column_shifts, strict=True)
            for j, o in enumerate(part.odd[i])
            if o
        ]
        lift = -min(lows) if lows else 0
        common = 1
        for part in parts:
            for q in part.below[i]:
                common = common * q // int(fmpz(common).gcd(q))
        factor *= common * power_of_two(lift)
        for part, shift, rows in zip(parts, column_shifts, result, strict=True):
            rows.append(
                [
                    (o * (common // part.below[i][j])) << int(part.low[i, j] + shift[j] + lift) if o else 0
                    for j, o in enumerate(part.odd[i])
                ]
            )
    return result, factor


def pencil_transfer(
    A: Ratios, B: Ratios, C: Ratios, D: list[list[fmpq]], E: Ratios
) -> tuple[list[list[fmpq_poly]], fmpq_poly]:
    """Return C adj(sE - A) B + D det(sE - A) and det(sE - A) for a regular pencil, E singular or not.

    Modulo a prime, with M = s0 E - A invertible, X = M^-1 E, Y = M^-1 B and u = s - s0: det(sE - A) =
    det(M) det(I + uX), from the characteristic polynomial of X, and C (sE - A)^-1 B = sum (-u)^k C X^k Y. Residues are
    joined by the Chinese remainder theorem until they exceed the bound prod of row sums on all coefficients.
    """
    n, p, m = len(A), len(C), len(B[0]) if B else 0
    time, columns = _scales(A, E)
    (a, e, b), row_factor = _integer_rows(
        [[list(row) for row in A], [list(row) for row in E], [list(row) for row in B]],
        [columns, columns + time, np.zeros(m, dtype=np.int64)],
    )
    # the row of outputs: c is scaled like the columns of the pencil; D stays apart
    (c,), output_factors = _output_rows(C, columns)
    A_int, E_int, B_int, C_int = (_matrix(*part) for part in ((a, n, n), (e, n, n), (b, n, m), (c, p, n)))
    bits = _bound(a, e, b, c)
    channels = p * m
    residues: list[list[int]] = []
    modulus, k = fmpz(1), 0
    moduli: list[int] = []
    while int(modulus).bit_length() <= bits + 1:
        q = prime(k)
        k += 1
        moduli.append(q)
        modulus *= q
        residues.append(_modulo(A_int, E_int, B_int, C_int, q, n, channels))
    values = _joined(residues, moduli, modulus)
    # s = 2^time * sigma: coefficient k of sigma^k belongs to s^k / 2^(time k); column factors and row factors leave det
    column_factor = power_of_two(int(columns.sum()))
    steps = [power_of_two(-int(time) * power) for power in range(n + 1)]

    def scaled_back(part: list[fmpz], factor: fmpq) -> fmpq_poly:
        return fmpq_poly([fmpq(value) * step / factor for value, step in zip(part, steps, strict=True)])

    denominator = scaled_back(values[: n + 1], row_factor * column_factor)
    if not denominator:
        raise SingularPencil("det(sE - A) is identically zero")
    numerators = []
    for i in range(p):
        row = []
        for j in range(m):
            start = (n + 1) * (1 + i * m + j)
            factor = row_factor * column_factor * output_factors[i]
            row.append(scaled_back(values[start : start + n + 1], factor) + D[i][j] * denominator)
        numerators.append(row)
    return numerators, denominator


def _matrix(rows: list[list[int]], height: int, width: int) -> fmpz_mat:
    return fmpz_mat(height, width, [entry for row in rows for entry in row])


def _scales(A: Ratios, E: Ratios) -> tuple[int, np.ndarray]:
    """Return the exponent of the unit of time, and of each column, that bring the entries of sE - A together."""
    a, e = split(A), split(E)
    here = [np.array([[bool(o) for o in row] for row in part.odd], dtype=bool) for part in (a, e)]
    if not here[0].any() or not here[1].any():
        return 0, np.zeros(len(A), dtype=np.int64)
    time = int(np.median(a.top[here[0]])) - int(np.median(e.top[here[1]]))
    huge = np.int64(1) << 40
    top = np.maximum(np.where(here[0], a.top, -huge), np.where(here[1], e.top + time, -huge)).max(axis=0)
    return time, np.where(top > -huge, -top, 0)


def _output_rows(C: Ratios, columns: np.ndarray) -> tuple[list[list[list[int]]], list[fmpq]]:
    rows, factors = [], []
    for row in C:
        (integer,), factor = _integer_rows([[list(row)]], [columns])
        rows.append(integer[0])
        factors.append(factor)
    return [rows], factors


def _bound(a: list[list[int]], e: list[list[int]], b: list[list[int]], c: list[list[int]]) -> int:
    """Return bits that no coefficient exceeds: the product of absolute row sums of the bordered pencil."""
    plain, bordered = 1, 1
    for row_a, row_e, row_b in zip(a, e, b, strict=True):
        own = sum(map(abs, row_a)) + sum(map(abs, row_e))
        plain *= max(own, 1)
        bordered *= max(own + max(map(abs, row_b), default=0), 1)
    widest = max((sum(map(abs, row)) for row in c), default=0)
    return max(plain.bit_length(), (bordered * max(widest, 1)).bit_length()) + 1


def _modulo(A: fmpz_mat, E: fmpz_mat, B: fmpz_mat, C: fmpz_mat, q: int, n: int, channels: int) -> list[int]:
    """Return the coefficients of the determinant and of all numerators modulo a prime, lowest power first."""
    a, e, b, c = (nmod_mat(matrix, q) for matrix in (A, E, B, C))
    for start in range(n + 1):
        pencil = e * start - a
        determinant = pencil.det()
        if determinant:
            break
    else:
        return [0] * ((n + 1) * (1 + channels))
    x = pencil.solve(e)
    cp = x.charpoly().coeffs()
    signed = [cp[n - k] * (-1 if k % 2 else 1) * determinant for k in range(n + 1)]
    determinant_poly = nmod_poly(signed, q)
    back = nmod_poly([-start % q, 1], q)

    def plain(poly: nmod_poly) -> list[int]:
        values = [int(value) for value in poly(back).coeffs()]
        return values + [0] * (n + 1 - len(values))

    result = plain(determinant_poly)
    if channels:
        v = pencil.solve(b)
        series: list[list[Any]] = [[] for _ in range(channels)]
        for k in range(n + 1):
            values = (c * v).entries()
            for channel, value in enumerate(values):
                series[channel].append(-value if k % 2 else value)
            if k < n:
                v = x * v
        for values in series:
            result += plain(nmod_poly((nmod_poly(values, q) * determinant_poly).coeffs()[: n + 1], q))
    return result


def _joined(residues: list[list[int]], moduli: list[int], modulus: fmpz) -> list[fmpz]:
    """Return the integers of least modulus with given residues (Chinese remainder theorem)."""
    basis = []
    for q in moduli:
        other = modulus // q
        basis.append([other * pow(int(other % q), -1, q)])
    table = fmpz_mat([list(column) for column in zip(*residues, strict=True)]) * fmpz_mat(basis)
    whole = []
    for value in table.entries():
        value = value % modulus
        whole.append(value - modulus if 2 * value > modulus else value)
    return whole
