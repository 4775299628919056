"""Changes of basis over the rationals: Krylov bases, crate diagrams, the observable part, and their one rounding."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np
from flint import fmpq, fmpq_mat, fmpq_poly, fmpz, fmpz_mat, nmod_mat
from numpy.typing import NDArray

from realize.kernels.exact.numbers import fraction, nearest, prime

Array = NDArray[np.float64]
Ratios = Sequence[Sequence[Any]]
_SMALLEST = 2.0**-1022


class SingularBasis(ValueError):
    """The columns of a basis do not span the state space; `rank` says how much of it they do."""

    def __init__(self, rank: int, states: int) -> None:
        super().__init__(f"rank {rank} of {states}")
        self.rank, self.states = rank, states


class BeyondRange(ArithmeticError):
    """An exact number lies beyond the range of doubles."""


class RationalStates(NamedTuple):
    """A state model over the rationals."""

    A: fmpq_mat
    B: fmpq_mat
    C: fmpq_mat
    D: fmpq_mat


class Basis(NamedTuple):
    """A model in a new basis: x = T z, z = S x, all exact."""

    states: RationalStates
    T: fmpq_mat
    S: fmpq_mat


def rational_matrix(matrix: Any, rows: int, columns: int) -> fmpq_mat:
    """Return a matrix over the rationals from doubles, or from nested lists of integer ratios.

    Parameters
    ----------
    matrix : array, or nested lists of integer ratios (p, q), or rational matrix
    rows, columns : int
        The shape, which empty lists do not tell.
    """
    if isinstance(matrix, fmpq_mat):
        return matrix
    if isinstance(matrix, np.ndarray):
        entries = [fmpq(*float(x).as_integer_ratio()) for x in matrix.reshape(-1)]
    else:
        entries = [fraction(x) for row in matrix for x in row]
    return fmpq_mat(rows, columns, entries)


def rational_states(A: Any, B: Any, C: Any, D: Any, E: Any = None) -> RationalStates:
    """Return a state model over the rationals; a nonsingular E is divided out exactly.

    Raises
    ------
    ZeroDivisionError
        If E is singular.
    """
    if isinstance(A, fmpq_mat):
        return RationalStates(A, B, C, D)
    n, p, m = len(A), len(D), len(D[0])
    a, b = rational_matrix(A, n, n), rational_matrix(B, n, m)
    if E is not None and n:
        e = rational_matrix(E, n, n)
        a, b = e.solve(a), e.solve(b)
    return RationalStates(a, b, rational_matrix(C, p, n), rational_matrix(D, p, m))


def dual(states: RationalStates) -> RationalStates:
    """Return the dual model A', C', B', D'."""
    return RationalStates(*(m.transpose() for m in (states.A, states.C, states.B, states.D)))


def rounded_matrix(matrix: fmpq_mat) -> Array:
    """Return the nearest doubles.

    Raises
    ------
    BeyondRange
        If an entry is not zero and has no double of full accuracy.
    """
    values = np.array([nearest(x) for x in matrix.entries()], dtype=float).reshape(matrix.nrows(), matrix.ncols())
    small = np.abs(values) < _SMALLEST
    if not np.all(np.isfinite(values)):
        raise BeyondRange("an entry beyond the range of doubles (too large)")
    if small.any():
        for i, j in np.argwhere(small):
            if matrix[int(i), int(j)] != fmpq(*float(values[i, j]).as_integer_ratio()):
                raise BeyondRange("an entry beyond the range of doubles (too small)")
    return values


def basis_operations(states: int, bits: int) -> float:
    """Return predicted operations of a change to a Krylov basis: n^2 numbers of up to n^2 times the bits."""
    length = states * (states + 1) * (bits + 8) / 62
    return 5e5 + 1e4 * states**2 + 700.0 * states**2 * length * (1 + states / 60)


def jordan_operations(states: int, bits: int) -> float:
    """Return predicted operations of the Jordan form; repeated factors with long entries take more."""
    return 5e6 + 6e3 * states**3 * (1 + bits / 500) * (1 + states / 100)


def solved(matrix: fmpq_mat, right: fmpq_mat) -> fmpq_mat:
    """Return matrix^-1 right, columns of the matrix scaled to integers by themselves.

    Raises
    ------
    ZeroDivisionError
        If the matrix is singular.
    """
    n = matrix.nrows()
    if n == 0 or right.ncols() == 0:
        return right
    factors, integers = [], []
    for column in columns(matrix):
        above, below = column.numer_denom()
        factors.append(fmpq(int(fmpz(below))))
        integers.append(above.entries())
    whole = fmpz_mat(n, n, [integers[j][i] for i in range(n) for j in range(n)])
    above, below = right.numer_denom()
    table = whole.solve(above).tolist()
    return fmpq_mat(
        n,
        right.ncols(),
        [x * factor / int(fmpz(below)) for row, factor in zip(table, factors, strict=True) for x in row],
    )


def columns(matrix: fmpq_mat) -> list[fmpq_mat]:
    """Return the columns of a matrix."""
    n, table = matrix.nrows(), matrix.tolist()
    return [fmpq_mat(n, 1, [row[j] for row in table]) for j in range(matrix.ncols())]


def beside(parts: Sequence[fmpq_mat], rows: int) -> fmpq_mat:
    """Return matrices side by side."""
    tables = [part.tolist() for part in parts]
    width = sum(part.ncols() for part in parts)
    return fmpq_mat(rows, width, [x for i in range(rows) for table in tables for x in table[i]])


def krylov(A: fmpq_mat, start: fmpq_mat, count: int) -> list[fmpq_mat]:
    """Return start, A start, A^2 start, ..."""
    found = [start]
    while len(found) < count:
        found.append(A * found[-1])
    return found[:count]


class Crate(NamedTuple):
    """The columns A^k b_j chosen from a crate diagram: `indices[j]` of them for input j, and the basis they make."""

    indices: list[int]
    chains: fmpq_mat


def crate(A: fmpq_mat, B: fmpq_mat) -> Crate:
    """Choose the first independent columns of b_1..b_m, A b_1..A b_m, A^2 b_1, ...: the controllability indices.

    Independence is decided modulo a prime near 2^62, where it is proved; a dependence found there is confirmed over the
    rationals afterwards, and where it was an accident of the prime another prime is taken.

    Raises
    ------
    SingularBasis
        If all columns together do not span the state space.

    References
    ----------
    .. [1] T. Kailath, Linear Systems, Prentice-Hall 1980, section 6.4 (from memory).
    """
    n, m = A.nrows(), B.ncols()
    inputs = columns(B)
    for k in range(8):
        q = prime(k)
        try:
            indices = _indices(A, B, q)
        except ZeroDivisionError:
            continue
        total = sum(indices)
        chains = beside([v for j in range(m) for v in krylov(A, inputs[j], indices[j])], n)
        if total < n:
            whole = beside([v for j in range(m) for v in krylov(A, inputs[j], n)], n)
            rank = whole.rank()
            if rank == total:
                raise SingularBasis(rank, n)
            continue
        if _confirmed(A, inputs, indices, chains):
            return Crate(indices, chains)
    raise ArithmeticError("no prime confirmed the choice of columns")


def modular_matrix(matrix: fmpq_mat, q: int) -> nmod_mat:
    """Return a rational matrix modulo a prime; ZeroDivisionError where the prime divides a denominator."""
    above, below = matrix.numer_denom()
    factor = int(fmpz(below)) % q
    if factor == 0:
        raise ZeroDivisionError
    inverse = pow(factor, -1, q)
    return nmod_mat(above.nrows(), above.ncols(), [int(x) * inverse % q for x in above.entries()], q)


def _indices(A: fmpq_mat, B: fmpq_mat, q: int) -> list[int]:
    n, m = A.nrows(), B.ncols()
    a, vectors = modular_matrix(A, q), modular_matrix(B, q)
    found = [0] * m
    open_ = list(range(m))
    rows: list[tuple[int, list[int]]] = []
    while open_ and len(rows) < n:
        table = [[int(x) for x in row] for row in vectors.tolist()]
        for j in list(open_):
            vector = [table[i][j] for i in range(n)]
            for pivot, row in rows:
                factor = vector[pivot]
                if factor:
                    vector = [(x - factor * y) % q for x, y in zip(vector, row, strict=True)]
            at = next((i for i, x in enumerate(vector) if x), None)
            if at is None:
                # once dependent, so are all its images
                open_.remove(j)
                continue
            inverse = pow(vector[at], -1, q)
            rows.append((at, [x * inverse % q for x in vector]))
            found[j] += 1
        vectors = a * vectors
    return found


def _confirmed(A: fmpq_mat, inputs: list[fmpq_mat], indices: list[int], chains: fmpq_mat) -> bool:
    """Say whether each A^k_j b_j depends, over the rationals, on columns that come before it in the crate alone."""
    n, m = A.nrows(), len(inputs)
    place = [(k, j) for j in range(m) for k in range(indices[j])]
    images = beside([krylov(A, inputs[j], indices[j] + 1)[-1] for j in range(m)], n)
    weights = solved(chains, images).tolist()
    return all(not weights[row][j] or place[row] < (indices[j], j) for j in range(m) for row in range(n))


def companion_basis(states: RationalStates, chosen: Crate) -> Basis:
    """Return the model in multi-input companion form, with one solve for each input and no inverse.

    With q_j the last row of chain j of the inverse of the matrix of the chains, the rows of S are q_j A^(k_j - 1), ...,
    q_j A, q_j for each input j [1]_. Then q_l A^(k_l - 1) B are the rows of B that are not zero, q_l A^k_l T those of A
    with coefficients, and the columns of T follow from A T = T A_new and B = T B_new one by one. One input gives the
    controllable companion form [-a; I 0], e_1.

    References
    ----------
    .. [1] D. G. Luenberger, Canonical forms for linear multivariable systems, IEEE Trans. Automat. Control 12 (1967)
           290-293 (from memory).
    """
    A, B = states.A, states.B
    n, m = A.nrows(), B.ncols()
    used = [j for j in range(m) if chosen.indices[j]]
    ends = np.cumsum(chosen.indices)
    unit = fmpq_mat(n, len(used), [fmpq(int(i == ends[j] - 1)) for i in range(n) for j in used])
    last = columns(solved(chosen.chains.transpose(), unit))
    transposed, inputs = A.transpose(), columns(B)
    chains = [krylov(transposed, q, chosen.indices[j] + 1) for q, j in zip(last, used, strict=True)]
    tops = [chain[-2] for chain in chains]
    beyond = [chain[-1] for chain in chains]
    rows = [v for chain in chains for v in reversed(chain[:-1])]
    S = beside(rows, n).transpose()
    starts = [int(ends[j] - chosen.indices[j]) for j in used]
    zero = fmpq(0)
    B_new = [[zero] * m for _ in range(n)]
    A_new = [[zero] * n for _ in range(n)]
    for start, top in zip(starts, tops, strict=True):
        B_new[start] = (top.transpose() * B).entries()
    firsts: dict[int, fmpq_mat] = {}
    # an input feeds its own chain with weight 1 and otherwise only longer chains
    for place in sorted(range(len(used)), key=lambda k: -chosen.indices[used[k]]):
        t = inputs[used[place]]
        for other, first in firsts.items():
            weight = B_new[starts[other]][used[place]]
            if weight:
                t = t - first * weight
        firsts[place] = t
    found: list[fmpq_mat] = []
    for place, j in enumerate(used):
        t = firsts[place]
        for k in range(chosen.indices[j]):
            found.append(t)
            image = A * t
            for other, row in enumerate(beyond):
                weight = (row.transpose() * t)[0, 0]
                A_new[starts[other]][starts[place] + k] = weight
                if weight:
                    image = image - firsts[other] * weight
            t = image
            if k:
                A_new[starts[place] + k][starts[place] + k - 1] = fmpq(1)
    T = beside(found, n)
    matrix = fmpq_mat(n, n, [x for row in A_new for x in row])
    right = fmpq_mat(n, m, [x for row in B_new for x in row])
    return Basis(RationalStates(matrix, right, states.C * T, states.D), T, S)


def controllability_basis(states: RationalStates, companion: Basis) -> Basis:
    """Return the model of one input in the basis b, A b, ..., A^(n-1) b, from its controllable companion form.

    A_new has ones below the diagonal and -a_n..-a_1 in its last column, B_new = e_1 and C_new = [C b, C A b, ...]: the
    Markov parameters. The inverse is U S with U the upper triangular Toeplitz matrix of 1, a_1, a_2, ...
    """
    n = states.A.nrows()
    a = [fmpq(1), *(-companion.states.A[0, k] for k in range(n))]
    U = fmpq_mat(n, n, [a[j - i] if j >= i else fmpq(0) for i in range(n) for j in range(n)])
    T = beside(krylov(states.A, states.B, n), n)
    A = fmpq_mat(n, n, [-a[n - i] if j == n - 1 else fmpq(int(i == j + 1)) for i in range(n) for j in range(n)])
    B = fmpq_mat(n, 1, [fmpq(int(i == 0)) for i in range(n)])
    return Basis(RationalStates(A, B, states.C * T, states.D), T, U * companion.S)


def dual_basis(basis: Basis) -> Basis:
    """Return the dual of a change of basis: of A', C', B' from that of A, B, C."""
    return Basis(dual(basis.states), basis.S.transpose(), basis.T.transpose())


def observable_part(states: RationalStates) -> RationalStates:
    """Return the model without its unobservable states: the quotient, in the coordinates of an echelon basis.

    With R the reduced row echelon form of [C; CA; ...; CA^(n-1)], R A = A_o R and C = C_o R; the columns of R at its
    pivots are the identity, so A_o and C_o are columns of R A and C.
    """
    n = states.A.nrows()
    p = states.C.nrows()
    if n == 0:
        return states
    parts = krylov(states.A.transpose(), states.C.transpose(), n)
    stacked = fmpq_mat(n * p, n, [x for part in parts for x in part.transpose().entries()])
    reduced, rank = stacked.rref()
    if rank == n:
        return states
    table = reduced.tolist()[:rank]
    R = fmpq_mat(rank, n, [x for row in table for x in row])
    pivots = [next(j for j, x in enumerate(row) if x) for row in table]
    moved, c = (R * states.A).tolist(), states.C.tolist()
    return RationalStates(
        fmpq_mat(rank, rank, [moved[i][j] for i in range(rank) for j in pivots]),
        R * states.B,
        fmpq_mat(p, rank, [c[i][j] for i in range(p) for j in pivots]),
        states.D,
    )


def controllable_realization(fractions: Sequence[Sequence[tuple[fmpq_poly, fmpq_poly]]]) -> RationalStates:
    """Return a controllable realization of proper fractions [output][input]: one companion block for each input.

    The block of an input has the least common denominator of its column, [-a; I 0] and e_1.

    Raises
    ------
    ValueError
        If a fraction is improper.
    """
    p, m = len(fractions), len(fractions[0])
    blocks = []
    for j in range(m):
        common = fmpq_poly([1])
        for i in range(p):
            d = fractions[i][j][1]
            common = common * (d // common.gcd(d))
        common = common / common.leading_coefficient()
        blocks.append((common, [fractions[i][j][0] * (common // fractions[i][j][1]) for i in range(p)]))
    n = sum(common.degree() for common, _ in blocks)
    zero = fmpq(0)
    A = [[zero] * n for _ in range(n)]
    B = [[zero] * m for _ in range(n)]
    C = [[zero] * n for _ in range(p)]
    D = [[zero] * m for _ in range(p)]
    start = 0
    for j, (common, above) in enumerate(blocks):
        degree = common.degree()
        a = common.coeffs()[::-1]
        for k in range(degree):
            A[start][start + k] = -a[k + 1]
            if k:
                A[start + k][start + k - 1] = fmpq(1)
        if degree:
            B[start][j] = fmpq(1)
        for i, numerator in enumerate(above):
            if numerator.degree() > degree:
                raise ValueError("an improper fraction has no state model")
            c = numerator.coeffs()
            c = c + [zero] * (degree + 1 - len(c))
            D[i][j] = c[degree]
            for k in range(degree):
                C[i][start + k] = c[degree - 1 - k] - c[degree] * a[k + 1]
        start += degree

    def matrix(rows: list[list[fmpq]], height: int, width: int) -> fmpq_mat:
        return fmpq_mat(height, width, [x for row in rows for x in row])

    return RationalStates(matrix(A, n, n), matrix(B, n, m), matrix(C, p, n), matrix(D, p, m))
