"""Dense factorisations in high precision: matrices of numbers without radius, for choosing coordinates."""

from __future__ import annotations

from typing import Any

from flint import arb, arb_mat

from realize.kernels.exact.numbers import power_of_two

#: Exponent that stands for zero.
NOTHING = -(1 << 40)


def middle(matrix: arb_mat) -> arb_mat:
    """Return the midpoints of a matrix of balls."""
    return matrix.mid()


def identity(n: int) -> arb_mat:
    """Return the unit matrix."""
    return diagonal([arb(1)] * n)


def diagonal(entries: list[Any]) -> arb_mat:
    """Return a diagonal matrix."""
    n = len(entries)
    return arb_mat(n, n, [entries[i] if i == j else arb(0) for i in range(n) for j in range(n)])


def exponent(number: arb) -> int:
    """Return e with 2^(e-1) <= |midpoint| < 2^e; a very small number for zero."""
    mantissa, power = number.mid().man_exp()
    return int(mantissa).bit_length() + int(power) if mantissa else NOTHING


def top_exponent(matrix: arb_mat) -> int:
    """Return the exponent of the largest entry, radius included."""
    return max((exponent(entry.abs_upper()) for entry in matrix.entries()), default=NOTHING)


def raised(number: arb, shift: int) -> arb:
    """Return a number times 2^shift."""
    return number * arb(power_of_two(shift))


def leading(matrix: arb_mat, count: int) -> arb_mat:
    """Return the first columns."""
    rows = [row[:count] for row in matrix.tolist()]
    return arb_mat(matrix.nrows(), count, [entry for row in rows for entry in row])


def orthonormal(matrix: arb_mat) -> arb_mat:
    """Return orthonormal columns that span the same nested subspaces (Gram & Schmidt, twice)."""
    columns: list[list[Any]] = []
    for column in matrix.transpose().tolist():
        for _ in range(2):
            for other in columns:
                share = sum((x * y for x, y in zip(column, other, strict=True)), arb(0))
                column = [(x - share * y).mid() for x, y in zip(column, other, strict=True)]
        norm = sum((x * x for x in column), arb(0)).sqrt()
        columns.append([(x / norm).mid() for x in column])
    return arb_mat(matrix.nrows(), len(columns), [c[i] for i in range(matrix.nrows()) for c in columns])


def pivoted_cholesky(P: arb_mat, rank: int, floor: int) -> arb_mat | None:
    """Return L (n x k) with P = L L', the largest remaining diagonal entry first.

    Ends at the rank, or where a pivot is below 2^floor times the first.
    """
    n = P.nrows()
    table = P.tolist()
    rest = [table[i][i] for i in range(n)]
    open_rows = list(range(n))
    columns: list[list[Any]] = []
    first = None
    while len(columns) < rank:
        k = max(open_rows, key=lambda i: exponent(rest[i]) if rest[i] > 0 else NOTHING)
        here = exponent(rest[k]) if rest[k] > 0 else NOTHING
        first = here if first is None else first
        if here <= max(first + floor, NOTHING):
            break
        root = rest[k].sqrt().mid()
        column = [arb(0)] * n
        column[k] = root
        open_rows.remove(k)
        for i in open_rows:
            value = table[i][k]
            for other in columns:
                if other[k] and other[i]:
                    value = value - other[i] * other[k]
            column[i] = (value / root).mid()
            rest[i] = (rest[i] - column[i] * column[i]).mid()
        columns.append(column)
    if not columns:
        return None
    return arb_mat(n, len(columns), [column[i] for i in range(n) for column in columns])


def pivoted_elimination(M: arb_mat, rank: int, floor: int) -> tuple[arb_mat, list[Any], arb_mat, int]:
    """Return X, d, Y with M = X diag(d) Y, complete pivoting, and the exponent of what remains.

    Ends at the rank, or where a pivot is below 2^floor times the first.
    """
    p, m = M.nrows(), M.ncols()
    rest = M.tolist()
    rows, columns = list(range(p)), list(range(m))
    pivots: list[Any] = []
    xs: list[list[Any]] = []
    ys: list[list[Any]] = []
    while len(pivots) < rank and rows and columns:
        i, j = max(((a, b) for a in rows for b in columns), key=lambda place: exponent(rest[place[0]][place[1]]))
        pivot = rest[i][j]
        if not pivot or (pivots and exponent(pivot) <= exponent(pivots[0]) + floor):
            break
        x, y = [arb(0)] * p, [arb(0)] * m
        for a in rows:
            x[a] = (rest[a][j] / pivot).mid()
        for b in columns:
            y[b] = (rest[i][b] / pivot).mid()
        x[i], y[j] = arb(1), arb(1)
        rows.remove(i)
        columns.remove(j)
        for a in rows:
            if x[a]:
                factor, line = x[a], rest[a]
                for b in columns:
                    line[b] = (line[b] - factor * rest[i][b]).mid()
        pivots.append(pivot)
        xs.append(x)
        ys.append(y)
    left = max((exponent(rest[a][b]) for a in rows for b in columns), default=NOTHING)
    k = len(pivots)
    X = arb_mat(p, k, [x[a] for a in range(p) for x in xs])
    return X, pivots, arb_mat(k, m, [value for y in ys for value in y]), left


def triangular_factors(N: arb_mat) -> tuple[arb_mat, list[Any], arb_mat] | None:
    """Return unit lower L, pivots d and unit upper U with N = L diag(d) U, or None where a pivot is zero."""
    n = N.nrows()
    rest = N.tolist()
    lower = [[arb(int(i == j)) for j in range(n)] for i in range(n)]
    upper = [[arb(int(i == j)) for j in range(n)] for i in range(n)]
    pivots = []
    for k in range(n):
        pivot = rest[k][k]
        if not pivot:
            return None
        pivots.append(pivot)
        for j in range(k + 1, n):
            upper[k][j] = (rest[k][j] / pivot).mid()
        for i in range(k + 1, n):
            factor = lower[i][k] = (rest[i][k] / pivot).mid()
            for j in range(k + 1, n):
                rest[i][j] = (rest[i][j] - factor * rest[k][j]).mid()
    return arb_mat(lower), pivots, arb_mat(upper)


def block_hessenberg(A: arb_mat, B: arb_mat, C: arb_mat, noise: int) -> tuple[arb_mat, arb_mat, arb_mat, list[int]]:
    """Return orthogonally similar matrices in staircase form, and the sizes of the stairs.

    B = [B1; 0; ...], A block upper Hessenberg. Reflections of Householder, column by column; columns whose rest is
    below 2^noise times the largest entry of their matrix add nothing to a stair.
    """
    n, m = A.nrows(), B.ncols()
    a, b, c = A.tolist(), B.tolist(), C.tolist()
    done, stairs = 0, []
    source, start, width = b, 0, m
    floors = (top_exponent(A) + noise, top_exponent(B) + noise)
    floor = floors[1]
    while done < n:
        grown = 0
        for k in range(start, start + width):
            if done + grown >= n:
                break
            top = done + grown
            column = [source[i][k] for i in range(top, n)]
            if max(exponent(value) for value in column) <= floor:
                continue
            vector, scale = _reflection(column)
            _apply_rows(a, vector, scale, top)
            _apply_rows(b, vector, scale, top)
            _apply_columns(a, vector, scale, top)
            _apply_columns(c, vector, scale, top)
            for i in range(top + 1, n):
                source[i][k] = arb(0)
            grown += 1
        if not grown:
            break
        stairs.append(grown)
        source, start, width, floor = a, done, grown, floors[0]
        done += grown
    edge, before = (stairs[0] if stairs else 0), 0
    for i in range(edge, n):
        b[i] = [arb(0)] * m
    for size_now, size_next in zip(stairs, [*stairs[1:], 0], strict=True):
        edge = before + size_now + size_next
        for i in range(edge, n):
            for j in range(before, before + size_now):
                a[i][j] = arb(0)
        before += size_now
    p = C.nrows()
    return (
        arb_mat(a),
        arb_mat(n, m, [x for row in b for x in row]),
        arb_mat(p, n, [x for row in c for x in row]),
        stairs,
    )


def _reflection(column: list[Any]) -> tuple[list[Any], Any]:
    """Return v and 2 / v'v of the reflection that leaves nothing but the first entry of a column."""
    norm = sum((x * x for x in column), arb(0)).sqrt().mid()
    v = list(column)
    v[0] = (v[0] + norm if v[0] > 0 else v[0] - norm).mid()
    return v, (2 / sum((x * x for x in v), arb(0))).mid()


def _apply_rows(matrix: list[list[Any]], v: list[Any], scale: Any, top: int) -> None:
    for j in range(len(matrix[0]) if matrix else 0):
        total = sum((v[i] * matrix[top + i][j] for i in range(len(v)) if matrix[top + i][j]), arb(0)) * scale
        if total:
            for i, x in enumerate(v):
                matrix[top + i][j] = (matrix[top + i][j] - x * total).mid()


def _apply_columns(matrix: list[list[Any]], v: list[Any], scale: Any, top: int) -> None:
    for row in matrix:
        total = sum((v[i] * row[top + i] for i in range(len(v)) if row[top + i]), arb(0)) * scale
        if total:
            for i, x in enumerate(v):
                row[top + i] = (row[top + i] - total * x).mid()
