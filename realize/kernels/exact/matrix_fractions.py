"""Matrix fractions over the rationals: multiplied out, made coprime and reduced, Bezout identity, controller form.

A coprime right fraction with column-reduced denominator is read off the Hankel matrix of the Markov parameters: among
its columns, taken in the order (power, input), each input has a first one that depends on those before it, and the
coefficients of that dependence are a column of the denominator (Kailath, Linear Systems, 1980, section 6.4). Ranks and
positions come from a prime; the coefficients are solved for exactly, and the identity N = G D is checked exactly, which
together with the degree proves that the fraction is coprime.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, NamedTuple

from flint import fmpq, fmpq_mat, fmpq_poly, nmod_mat

from realize.kernels.exact.order import mcmillan_degree
from realize.kernels.exact.pencils import prime
from realize.kernels.exact.polynomials import ONE, ZERO, quotient

Polynomials = list[list[fmpq_poly]]
Grid = Sequence[Sequence[tuple[fmpq_poly, fmpq_poly]]]


class ZeroDeterminant(ValueError):
    """The determinant of a denominator matrix is zero for every s."""


def transposed(matrix: Sequence[Sequence[Any]]) -> list[list[Any]]:
    """Return the transpose of a nested list."""
    return [list(column) for column in zip(*matrix, strict=True)]


def multiplied_out(numerator: Polynomials, denominator: Polynomials, side: str) -> tuple[Polynomials, fmpq_poly]:
    """Return the numerators of all channels and their common denominator det D of N D^-1 or D^-1 N.

    Fraction-free elimination (Bareiss 1968) of [D N]: every division is exact.

    Raises
    ------
    ZeroDeterminant
    """
    if side == "right":
        numerators, determinant = multiplied_out(transposed(numerator), transposed(denominator), "left")
        return transposed(numerators), determinant
    n = len(denominator)
    rows = [list(a) + list(b) for a, b in zip(denominator, numerator, strict=True)]
    before = ONE
    for k in range(n):
        pivot = next((i for i in range(k, n) if rows[i][k]), None)
        if pivot is None:
            raise ZeroDeterminant("the determinant of the denominator is zero for every s")
        rows[k], rows[pivot] = rows[pivot], rows[k]
        lead = rows[k][k]
        for i in range(n):
            if i != k:
                factor = rows[i][k]
                rows[i] = [quotient(lead * a - factor * b, before) for a, b in zip(rows[i], rows[k], strict=True)]
        before = lead
    return [row[n:] for row in rows], before


class RightFraction(NamedTuple):
    """N, D with G = N D^-1, column-reduced, coprime; ``indices``: the degrees of the columns of D."""

    N: Polynomials
    D: Polynomials
    indices: tuple[int, ...]
    #: N of the strictly proper part alone.
    proper: Polynomials
    #: The polynomial part of G.
    polynomial: Polynomials


def _markov(rest: fmpq_poly, d: fmpq_poly, count: int) -> list[fmpq]:
    """Return the coefficients of s^-1, ..., s^-count of rest / d, deg rest < deg d."""
    if not rest:
        return [fmpq(0)] * count
    n = d.degree()
    lead = d.leading_coefficient()
    below = [c / lead for c in reversed(d.coeffs()[:n])]
    above = [c / lead for c in reversed(rest.coeffs() + [fmpq(0)] * (n - rest.length()))]
    found: list[fmpq] = []
    for k in range(count):
        value = above[k] if k < n else fmpq(0)
        for j in range(min(k, n)):
            value -= below[j] * found[k - 1 - j]
        found.append(value)
    return found


def _pivots(matrix: nmod_mat) -> list[int]:
    reduced, rank = matrix.rref()
    found, row, width = [], 0, reduced.ncols()
    for j in range(width):
        if row < rank and reduced[row, j] != 0:
            found.append(j)
            row += 1
    return found


def coprime_right(grid: Grid) -> RightFraction:
    """Return the coprime column-reduced right fraction of a transfer matrix [output][input] of reduced fractions.

    The leading coefficients of the columns make a unit upper triangular matrix, so D is column-reduced; the degree of
    det D is the sum of the indices, which is the McMillan degree of the strictly proper part.
    """
    p, m = len(grid), len(grid[0])
    parts = [[divmod(n, d) for n, d in row] for row in grid]
    whole = [[part[0] for part in row] for row in parts]
    rest = [[part[1] for part in row] for row in parts]
    below = [[d for _, d in row] for row in grid]
    order = mcmillan_degree(rest, below).order
    markov = [[_markov(rest[i][j], below[i][j], 2 * order + 1) for j in range(m)] for i in range(p)]
    attempt = 0
    while True:
        q = prime(attempt)
        attempt += 1
        try:
            found = _from_hankel(markov, rest, below, order, q)
        except ZeroDivisionError:
            continue
        if found is not None:
            break
        if attempt > 8:
            # every one of these primes would have to divide a minor: the order itself was a lower bound
            order += 1
            attempt = 0
            markov = [[_markov(rest[i][j], below[i][j], 2 * order + 1) for j in range(m)] for i in range(p)]
    D, proper, indices = found
    N = [[proper[i][j] + sum((whole[i][k] * D[k][j] for k in range(m)), ZERO) for j in range(m)] for i in range(p)]
    return RightFraction(N, D, indices, proper, whole)


def _from_hankel(
    markov: list[list[list[fmpq]]], rest: Polynomials, below: Polynomials, order: int, q: int
) -> tuple[Polynomials, Polynomials, tuple[int, ...]] | None:
    p, m = len(markov), len(markov[0])
    rows = [(i, a) for i in range(max(order, 1)) for a in range(p)]
    columns = [(k, j) for k in range(order + 1) for j in range(m)]

    def residue(value: fmpq) -> int:
        return int(value.p % q) * pow(int(value.q % q), -1, q) % q

    known = [[[residue(value) for value in channel] for channel in row] for row in markov]
    table = nmod_mat([[known[a][j][i + k] for k, j in columns] for i, a in rows], q)
    pivots = _pivots(table)
    if len(pivots) != order:
        return None
    independent = {columns[c] for c in pivots}
    indices = tuple(sum((k, j) in independent for k in range(order + 1)) for j in range(m))
    if any((k, j) not in independent for j in range(m) for k in range(indices[j])):
        return None
    chosen = [columns[c] for c in pivots]
    wanted = [(indices[j], j) for j in range(m)]
    coefficients: list[list[fmpq]] = []
    if order:
        narrow = nmod_mat([[known[a][j][i + k] for i, a in rows] for k, j in chosen], q)
        kept = [rows[r] for r in _pivots(narrow)]
        left = fmpq_mat([[markov[a][j][i + k] for k, j in chosen] for i, a in kept])
        right = fmpq_mat([[markov[a][j][i + k] for k, j in wanted] for i, a in kept])
        coefficients = left.solve(right).tolist()
    D: Polynomials = [[ZERO] * m for _ in range(m)]
    for column in range(m):
        c = [[fmpq(0)] * (indices[column] + 1) for _ in range(m)]
        c[column][indices[column]] = fmpq(1)
        for (k, j), row in zip(chosen, coefficients, strict=True):
            if row[column]:
                if k > indices[column]:
                    return None
                c[j][k] -= row[column]
        for j in range(m):
            D[j][column] = fmpq_poly(c[j])
    N: Polynomials = [[ZERO] * m for _ in range(p)]
    for i in range(p):
        for j in range(m):
            top = max(D[k][j].degree() for k in range(m))
            line = [fmpq(0)] * max(top, 0)
            for k in range(m):
                entries = D[k][j].coeffs()
                for t in range(len(line)):
                    for step in range(t + 1, len(entries)):
                        line[t] += entries[step] * markov[i][k][step - t - 1]
            N[i][j] = fmpq_poly(line)
    return (D, N, indices) if _identity_holds(N, D, rest, below) else None


def _identity_holds(N: Polynomials, D: Polynomials, rest: Polynomials, below: Polynomials) -> bool:
    """Return whether N = G D exactly, row by row over the least common denominator."""
    m = len(D)
    for i, row in enumerate(rest):
        common = ONE
        for d in below[i]:
            common = common * quotient(d, common.gcd(d))
        weights = [n * quotient(common, d) for n, d in zip(row, below[i], strict=True)]
        for j in range(m):
            if sum((weights[k] * D[k][j] for k in range(m)), ZERO) != N[i][j] * common:
                return False
    return True


def bezout(N: Polynomials, D: Polynomials) -> tuple[Polynomials, Polynomials] | None:
    """Return polynomial matrices X, Y with X N + Y D = I, or None if N and D have a common right factor.

    The coefficients of X and Y solve linear equations with the rows of N, D, s N, s D, ... (Sylvester's resultant);
    the degree is raised until they can be solved, at most to the degree of det D.
    """
    p, m = len(N), len(D)
    rows = [*N, *D]
    degree = max(entry.degree() for row in rows for entry in row)
    limit = sum(max(max(row[j].degree() for row in D), 0) for j in range(m))
    for top in range(limit + 1):
        width = degree + top + 1
        table = [
            [c for j in range(m) for c in _padded(row[j], shift, width)] for shift in range(top + 1) for row in rows
        ]
        goal = [[fmpq(int(k == 0 and j == i)) for j in range(m) for k in range(width)] for i in range(m)]
        solution = _left_solve(table, goal)
        if solution is not None:
            entries = p + m
            whole = [
                [fmpq_poly([line[shift * entries + r] for shift in range(top + 1)]) for r in range(entries)]
                for line in solution
            ]
            return [row[:p] for row in whole], [row[p:] for row in whole]
    return None


def _padded(entry: fmpq_poly, shift: int, width: int) -> list[fmpq]:
    c = [fmpq(0)] * shift + entry.coeffs()
    return c + [fmpq(0)] * (width - len(c))


def _left_solve(table: list[list[fmpq]], goal: list[list[fmpq]]) -> list[list[fmpq]] | None:
    """Return Z with Z table = goal, or None."""
    count = len(table)
    augmented = fmpq_mat([[*column, *side] for column, side in zip(transposed(table), transposed(goal), strict=True)])
    reduced, rank = augmented.rref()
    lines = reduced.tolist()[:rank]
    solution = [[fmpq(0)] * count for _ in goal]
    for line in lines:
        lead = next(k for k, entry in enumerate(line) if entry)
        if lead >= count:
            return None
        for i in range(len(goal)):
            solution[i][lead] = line[count + i]
    return solution


def controller_form(fraction: RightFraction) -> tuple[list[list[fmpq]], list[list[fmpq]], list[list[fmpq]]]:
    """Return A, B, C of the strictly proper part in controller form: one chain for each input, of its index.

    With D = H S + L Psi, S = diag(s^k_j) and Psi the lower powers, A = A0 - B0 H^-1 L, B = B0 H^-1, C = the
    coefficients of N (Kailath 1980, section 6.4.1).
    """
    D, N, indices = fraction.D, fraction.proper, fraction.indices
    m, n = len(D), sum(indices)
    zero = fmpq(0)
    place = [(j, power) for j in range(m) for power in range(indices[j] - 1, -1, -1)]
    H = fmpq_mat([[_coefficient(D[i][j], indices[j]) for j in range(m)] for i in range(m)])
    L = [[_coefficient(D[i][j], power) for j, power in place] for i in range(m)]
    inverse = H.inv()
    feedback = (inverse * fmpq_mat(L)).tolist() if n else [[] for _ in range(m)]
    gains = inverse.tolist()
    A = [[zero] * n for _ in range(n)]
    B = [[zero] * m for _ in range(n)]
    for row, (j, power) in enumerate(place):
        if power == indices[j] - 1:
            A[row] = [-entry for entry in feedback[j]]
            B[row] = list(gains[j])
        else:
            A[row][row - 1] = fmpq(1)
    C = [[_coefficient(line[j], power) for j, power in place] for line in N]
    return A, B, C


def _coefficient(entry: fmpq_poly, power: int) -> fmpq:
    return entry[power] if power <= entry.degree() else fmpq(0)
