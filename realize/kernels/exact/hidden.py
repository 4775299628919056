"""Eigenvalues of a state model that no input reaches or no output sees, from exact numbers.

The rows w of a basis of what is orthogonal to B, AB, A^2 B, ... span an invariant subspace, w A = S w: the eigenvalues
of S are the unreachable ones. The basis comes from an exact echelon form, S from an exact solve; its eigenvalues are
the roots of its characteristic polynomial, multiplicities exact.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from typing import Any

from flint import fmpq, fmpq_mat, fmpq_poly, nmod_mat

from realize.kernels.exact.integer_scaling import integer_states
from realize.kernels.exact.numbers import fraction, prime
from realize.kernels.exact.polynomials import ONE, quotient
from realize.kernels.exact.roots import roots

Ratios = Sequence[Sequence[Any]]


def hidden_modes(A: Ratios, B: Ratios, C: Ratios, order: int) -> list[tuple[complex, str]]:
    """Return the eigenvalues that a minimal realization of the given order lacks, and why.

    A mode is called unreachable and unobservable where the count says that so many are both; among those that could be,
    the ones whose eigenvalues coincide.
    """
    n = len(A)
    unreached = _roots_of(_invariant_part(A, B))
    transposed = [list(row) for row in zip(*A, strict=True)], [list(row) for row in zip(*C, strict=True)]
    unseen = _roots_of(_invariant_part(*transposed))
    both = sum(unreached.values()) + sum(unseen.values()) - (n - order)
    found: list[tuple[complex, str]] = []
    for pole in sorted(unreached, key=_speed):
        shared = min(unreached[pole], unseen.get(pole, 0), max(both, 0))
        both -= shared
        unseen[pole] = unseen.get(pole, 0) - shared
        found += [(pole, "unreachable and unobservable")] * shared + [(pole, "unreachable")] * (
            unreached[pole] - shared
        )
    for pole in sorted(unseen, key=_speed):
        found += [(pole, "unobservable")] * unseen[pole]
    return sorted(found, key=lambda mode: (_speed(mode[0]), mode[1]))


def _speed(pole: complex) -> tuple[float, float, float]:
    return abs(pole), pole.real, -pole.imag


def _roots_of(p: fmpq_poly) -> Counter[complex]:
    if p.degree() < 1:
        return Counter()
    return Counter({complex(root.value): root.multiplicity for root in roots(p)})


def _invariant_part(A: Ratios, B: Ratios) -> fmpq_poly:
    """Return the characteristic polynomial of A on the states that B does not reach."""
    n = len(A)
    integers = integer_states(A, B, None)
    # which columns of the Krylov sequence are independent, modulo a prime
    columns = _independent_columns(integers.A, integers.B, n)
    if len(columns) == n:
        return ONE
    if not columns:
        return integers_polynomial([[fraction(x) for x in row] for row in A])
    powers: dict[int, Any] = {}
    v = integers.B
    for k in range(max(step for step, _ in columns) + 1):
        powers[k] = v
        v = integers.A * v
    basis = fmpq_mat([[fmpq(powers[k][i, j]) for k, j in columns] for i in range(n)])
    # K spans the reachable subspace: A K = K S_r; the rest is det(sI - A) / det(sI - S_r)
    scaled = fmpq_mat([[fmpq(integers.A[i, j]) for j in range(n)] for i in range(n)])
    rows = _independent_rows(basis)
    top = fmpq_mat([basis.tolist()[i] for i in rows])
    image = (scaled * basis).tolist()
    inner = top.solve(fmpq_mat([image[i] for i in rows]))
    whole, part = integers.A.charpoly(), inner.charpoly()
    rest = quotient(fmpq_poly([fmpq(c) for c in whole.coeffs()]), part)
    # back to the units of A
    degree, scale = rest.degree(), integers.scale
    return fmpq_poly([c * scale ** (k - degree) for k, c in enumerate(rest.coeffs())])


def integers_polynomial(A: list[list[fmpq]]) -> fmpq_poly:
    """Return det(sI - A)."""
    return fmpq_mat(A).charpoly()


def _independent_columns(a: Any, b: Any, n: int) -> list[tuple[int, int]]:
    """Return (power, input) of Krylov columns that are independent modulo a prime near 2^62, each chain unbroken."""
    best: list[tuple[int, int]] = []
    for k in range(2):
        q = prime(k)
        A, v = nmod_mat(a, q), nmod_mat(b, q)
        open_inputs = list(range(b.ncols()))
        chosen: list[tuple[int, int]] = []
        kept: list[list[int]] = []
        pivots: list[int] = []
        for step in range(n):
            for j in list(open_inputs):
                column = [int(v[i, j]) for i in range(n)]
                for row, pivot in zip(kept, pivots, strict=True):
                    if column[pivot]:
                        factor = column[pivot]
                        column = [(x - factor * y) % q for x, y in zip(column, row, strict=True)]
                pivot = next((i for i, x in enumerate(column) if x), -1)
                if pivot < 0:
                    open_inputs.remove(j)
                    continue
                inverse = pow(column[pivot], -1, q)
                kept.append([x * inverse % q for x in column])
                pivots.append(pivot)
                chosen.append((step, j))
            if not open_inputs:
                break
            v = A * v
        if len(chosen) > len(best):
            best = chosen
    return best


def _independent_rows(basis: fmpq_mat) -> list[int]:
    """Return rows that make a basis of the row space, found modulo a prime."""
    rank = basis.ncols()
    for k in range(8):
        q = prime(k)
        try:
            table = nmod_mat(
                basis.ncols(),
                basis.nrows(),
                [int(x.p) % q * pow(int(x.q), -1, q) % q for column in basis.transpose().tolist() for x in column],
                q,
            )
        except ValueError:
            continue
        echelon, found = table.rref()
        if found == rank:
            rows = []
            for line in echelon.tolist()[:rank]:
                rows.append(next(i for i, x in enumerate(line) if int(x)))
            return rows
    raise ArithmeticError("no prime tells the rows apart")
