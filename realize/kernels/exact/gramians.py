"""Coordinates of a minimal realization from Gramians in high precision, the minimal order being known exactly.

With the bilinear image z = (a + s) / (a - s) of the model, Ad = (a I - A)^-1 (a I + A), Bd = sqrt(2 a) (a I - A)^-1 B,
the Gramians of reachability and observability are P = sum Ad^k Bd Bd' Ad'^k and Q likewise; Smith's doubling
P <- P + Ad P Ad', Ad <- Ad^2 sums 2^k terms in k steps [1]_. Pivoted Cholesky factors P = L L' and Q = R'R, cut at the
exact ranks, and M = R L, whose rank is the minimal order r: with M = U N Z' the projections V = L Z N^-1/2 and
W = N^-1/2 U'R have W V = I, and W A V, W B, C V is a minimal realization in balanced coordinates [2]_ [3]_.

The precision is doubled until each cut shows a gap and W V = I. The Gramians choose coordinates only, so that any shift
of A that makes their sums converge serves: unstable plants and poles on the axis are no exception. What the rounded
result is worth is for the claims to prove.

.. [1] R. A. Smith, Matrix equation XA + BX = C, SIAM J. Appl. Math. 16 (1968) 198-201.
.. [2] B. C. Moore, Principal component analysis in linear systems, IEEE Trans. Automat. Control 26 (1981) 17-32.
.. [3] M. S. Tombs, I. Postlethwaite, Truncated balanced realization of a stable non-minimal state-space system, Int. J.
       Control 46 (1987) 1319-1330.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from contextlib import suppress
from dataclasses import dataclass
from typing import Any

import numpy as np
from flint import arb, arb_mat, fmpq, nmod_mat
from numpy.typing import NDArray

from realize.kernels.exact.dense_balls import (
    block_hessenberg,
    diagonal,
    exponent,
    identity,
    leading,
    middle,
    orthonormal,
    pivoted_cholesky,
    pivoted_elimination,
    raised,
    top_exponent,
    triangular_factors,
)
from realize.kernels.exact.integer_scaling import integer_states, split, state_shifts
from realize.kernels.exact.numbers import binary_exponent, fraction, near_ball, nearest, power_of_two, precision, prime

Array = NDArray[np.float64]
Ratios = Sequence[Sequence[Any]]

#: Precision (bits) of the first try and of the last.
FIRST_BITS, LAST_BITS = 320, 10240
#: Doublings until 2^-bits: more than this many mean that the sums do not converge.
DOUBLINGS = 60
#: Bits by which what is left after an exact rank must lie below the last pivot.
CLEAR = 40
#: Roots of pivots below this, relative to the largest, leave the range in which products of doubles are exact enough.
SMALLEST_ROOT = 1e-140


class NoCoordinates(ArithmeticError):
    """No precision tried gave projections that are the inverse of each other."""


@dataclass(frozen=True)
class Projected:
    """A minimal realization in balanced coordinates, in high precision, and the projections that lead there.

    A = W A_source V, B = W B_source, C = C_source V with W V = I.

    Attributes
    ----------
    A, B, C : arb_mat, r x r, r x m, p x r
    W, V : arb_mat, r x n, n x r
    values : list of float
        Logarithms (base 2) of the singular values of R L, decreasing: Hankel singular values of the model with inputs
        and outputs scaled by powers of two to the size 1, where no shift was needed.
    bits : int
        Precision of the numbers.
    shifted : bool
        True where A was shifted for the Gramians, so that ``values`` are not those of the plant.
    """

    A: arb_mat
    B: arb_mat
    C: arb_mat
    W: arb_mat
    V: arb_mat
    values: list[float]
    bits: int
    shifted: bool


def balanced_projection(
    A: Ratios, B: Ratios, C: Ratios, order: int, ranks: tuple[int, int, int] | None, *, sampled: bool
) -> Projected:
    """Return the `order` leading balanced states of C (sI - A)^-1 B in high precision.

    Parameters
    ----------
    A, B, C : nested sequences of integer ratios, n x n, n x m, p x n
        n, m and p at least 1.
    order : int
        At least 1; the exact minimal order, or a smaller one, to which the model is then truncated.
    ranks : (int, int, int), optional
        Dimensions of the reachable and of the observable subspace, and the minimal order, where they are known (see
        `ranks_of`): the factors are cut there. None: at the noise of the precision.
    sampled : bool

    Raises
    ------
    NoCoordinates
    """
    scaled = _scaled(A, B, C, sampled)
    bits = FIRST_BITS
    while bits <= LAST_BITS:
        with precision(bits):
            found = _projected(scaled, order, ranks, sampled, bits)
        if found is not None:
            return found
        bits *= 2
    raise NoCoordinates(f"no balanced coordinates of order {order} with {LAST_BITS} bits")


@dataclass(frozen=True)
class _Scaled:
    """Rational matrices with states, time, inputs and outputs scaled by powers of two, and the exponents."""

    A: list[list[fmpq]]
    B: list[list[fmpq]]
    C: list[list[fmpq]]
    states: list[int]
    time: int
    inputs: list[int]
    outputs: list[int]


def _scaled(A: Ratios, B: Ratios, C: Ratios, sampled: bool) -> _Scaled:
    a, b, c = ([[fraction(entry) for entry in row] for row in matrix] for matrix in (A, B, C))
    n = len(a)
    shift = [int(k) for k in state_shifts(split(a))]
    a = [[a[i][j] * power_of_two(shift[j] - shift[i]) if a[i][j] else a[i][j] for j in range(n)] for i in range(n)]
    b = [[entry * power_of_two(-shift[i]) for entry in row] for i, row in enumerate(b)]
    c = [[entry * power_of_two(shift[j]) for j, entry in enumerate(row)] for row in c]

    def top(entries: list[fmpq]) -> int:
        return max((binary_exponent(entry) for entry in entries if entry), default=0)

    time = 0 if sampled else top([entry for row in a for entry in row])
    inputs = [top([row[j] for row in b]) for j in range(len(b[0]))]
    outputs = [top(row) for row in c]
    a = [[entry * power_of_two(-time) for entry in row] for row in a]
    b = [[entry * power_of_two(-e) for entry, e in zip(row, inputs, strict=True)] for row in b]
    c = [[entry * power_of_two(-e) for entry in row] for row, e in zip(c, outputs, strict=True)]
    return _Scaled(a, b, c, shift, time, inputs, outputs)


def _balls(rows: list[list[fmpq]]) -> arb_mat:
    return arb_mat(len(rows), len(rows[0]), [arb(entry) for row in rows for entry in row])


def _doubles(rows: list[list[fmpq]]) -> Array:
    return np.array([[nearest(entry) for entry in row] for row in rows])


def _spectrum(scaled: _Scaled, sampled: bool) -> tuple[float, float, float]:
    """Return (rightmost real part or largest modulus, slow speed, fast speed) of the scaled A, about."""
    values = np.linalg.eigvals(_doubles(scaled.A))
    edge = float(np.abs(values).max()) if sampled else float(values.real.max())
    speed = np.abs(values)
    fast = float(speed.max())
    speed = speed[speed > 1e-9 * fast]
    slow = float(speed.min()) if speed.size else 1.0
    return edge, slow, fast or 1.0


def _projected(
    scaled: _Scaled, order: int, ranks: tuple[int, int, int] | None, sampled: bool, bits: int
) -> Projected | None:
    n = len(scaled.A)
    A, B, C = (middle(_balls(part)) for part in (scaled.A, scaled.B, scaled.C))
    edge, slow, fast = _spectrum(scaled, sampled)
    shifted = edge >= 1 - 1e-12 if sampled else edge >= -1e-12 * fast
    shift = (edge + 0.05 * slow if not sampled else edge * 1.05) if shifted else (1.0 if sampled else 0.0)
    for _ in range(8):
        P = Q = None
        with suppress(ZeroDivisionError):
            Ad, Bd, Cd = _discrete(A, B, C, shift, math.sqrt(slow * fast), sampled)
            P, Q = _doubled(Ad, Bd * Bd.transpose(), bits), _doubled(Ad.transpose(), Cd.transpose() * Cd, bits)
        if P is not None and Q is not None:
            break
        # the eigenvalues in doubles were not right: shift further
        shifted = True
        shift = shift * 1.5 + 0.05 if sampled else 2 * abs(shift) + 0.05 * slow + 1e-6 * fast
    else:
        return None
    assert P is not None and Q is not None
    reached, seen, minimal = ranks or (n, n, n)
    floor = -(7 * bits) // 8
    L, Rt = (pivoted_cholesky(*part, floor) for part in ((P, reached), (Q, seen)))
    if L is None or Rt is None or (ranks and (L.ncols() < reached or Rt.ncols() < seen)):
        return None
    M = middle(Rt.transpose() * L)
    pieces = _singular(M, min(minimal, M.nrows(), M.ncols()), order, floor, exact=ranks is not None)
    if pieces is None:
        return None
    left, right, values = pieces
    # W V = I to all bits: triangular factors of the small product, whose off-diagonal entries are roundings of doubles
    N = middle(left.transpose() * M * right)
    factors = triangular_factors(N)
    if factors is None:
        return None
    lower, pivots, upper = factors
    roots = [abs(pivot).sqrt() for pivot in pivots]
    signs = [1 if pivot > 0 else -1 for pivot in pivots]
    try:
        W = lower.solve(left.transpose() * Rt.transpose())
        V = upper.transpose().solve((L * right).transpose()).transpose()
        W, V = middle(W), middle(V)
        W = middle(diagonal([s / root for s, root in zip(signs, roots, strict=True)]) * W)
        V = middle(V * diagonal([1 / root for root in roots]))
    except ZeroDivisionError:
        return None
    if top_exponent(W * V - identity(order)) > -160:
        return None
    made = (middle(W * A * V), middle(W * B), middle(C * V))
    A, B, C = _unscaled(made, scaled)
    states = [power_of_two(k) for k in scaled.states]
    W = middle(W * diagonal([arb(1 / k) for k in states]))
    V = middle(diagonal([arb(k) for k in states]) * V)
    return Projected(A, B, C, W, V, values, bits, shifted)


def _unscaled(made: tuple[arb_mat, arb_mat, arb_mat], scaled: _Scaled) -> tuple[arb_mat, arb_mat, arb_mat]:
    """Put the units of time, inputs and outputs back; B and C share what they differ by."""
    A, B, C = made
    half = (max(scaled.inputs) - max(scaled.outputs)) // 2
    time = arb(power_of_two(scaled.time))
    columns = [arb(power_of_two(e - half)) for e in scaled.inputs]
    rows = [arb(power_of_two(e + half)) for e in scaled.outputs]
    return middle(A * time), middle(B * diagonal(columns)), middle(diagonal(rows) * C)


def _discrete(
    A: arb_mat, B: arb_mat, C: arb_mat, shift: float, a: float, sampled: bool
) -> tuple[arb_mat, arb_mat, arb_mat]:
    """Return the bilinear image of the model shifted by `shift`; of a sampled model A / shift and so on."""
    n = A.nrows()
    if sampled:
        return middle(A * (1 / arb(shift))), B, C
    unit = identity(n)
    moved = A - unit * arb(shift) if shift else A
    minus = unit * arb(a) - moved
    Ad = minus.solve(unit * arb(a) + moved)
    return (
        middle(Ad),
        middle(minus.solve(B) * arb(2 * a).sqrt()),
        middle(minus.transpose().solve(C.transpose()).transpose() * arb(2 * a).sqrt()),
    )


def _doubled(A: arb_mat, first: arb_mat, bits: int) -> arb_mat | None:
    """Return sum A^k first A'^k, or None where it does not converge."""
    total = middle(first)
    limit = -bits
    for _ in range(DOUBLINGS):
        step = A * total * A.transpose()
        total = middle(total + step)
        if top_exponent(A) < limit // 2:
            return total
        if top_exponent(A) > 4 * bits:
            return None
        A = middle(A * A)
    return None


def _singular(
    M: arb_mat, rank: int, order: int, floor: int, *, exact: bool
) -> tuple[arb_mat, arb_mat, list[float]] | None:
    """Return about the leading left and right singular vectors of a graded matrix, and log2 of the singular values.

    Elimination with complete pivoting shows the rank and the grading; the singular value decomposition of its factors
    in doubles keeps the relative accuracy of small values (Demmel et al., Computing the singular value decomposition
    with high relative accuracy, Linear Algebra Appl. 299, 1999).
    """
    X, pivots, Y, left = pivoted_elimination(M, rank, floor)
    if len(pivots) < order or (exact and (len(pivots) < rank or left > exponent(pivots[-1]) - CLEAR)):
        return None
    from realize.kernels.balancing import product_svd

    first = exponent(pivots[0])
    logs = [float(exponent(pivot)) for pivot in pivots]
    halves = np.array([math.sqrt(abs(near_ball(raised(pivot, -first)))) for pivot in pivots])
    if halves.min() > SMALLEST_ROOT:
        sign = np.array([1.0 if pivot > 0 else -1.0 for pivot in pivots])
        # orthogonal factors first: columns keep their grading, and the product becomes square
        left_axes, x = np.linalg.qr(_rounded(X) * halves * sign)
        right_axes, y = np.linalg.qr(_rounded(Y).T * halves)
        U, s, Z = product_svd(x, y.T)
        U, Z = left_axes @ U, right_axes @ Z
        U, s, Z = U[:, :order], s[:order], Z[:, :order]
        if np.all(np.isfinite(s)) and s[-1] > 0:
            return _from_doubles(U), _from_doubles(Z), [float(np.log2(value)) + first for value in s]
    # a grading beyond the doubles: the factors themselves are well enough conditioned
    left_part, right_part = orthonormal(X), orthonormal(Y.transpose())
    return leading(left_part, order), leading(right_part, order), logs[:order]


def _rounded(matrix: arb_mat) -> Array:
    return np.array([[near_ball(entry) for entry in row] for row in matrix.tolist()])


def _from_doubles(matrix: Array) -> arb_mat:
    return arb_mat(matrix.shape[0], matrix.shape[1], [arb(value) for value in matrix.reshape(-1).tolist()])


def ranks_of(A: Ratios, B: Ratios, C: Ratios) -> tuple[int, int]:
    """Return the dimensions of the reachable and of the observable subspace: ranks modulo two primes near 2^62."""
    n = len(A)
    best = [0, 0]
    done, k = 0, 0
    integers = integer_states(A, B, C)
    while done < 2 and k < 64:
        q = prime(k)
        k += 1
        a, b, c = (nmod_mat(matrix, q) for matrix in (integers.A, integers.B, integers.C))
        for which, (step, start) in enumerate(((a, b), (a.transpose(), c.transpose()))):
            best[which] = max(best[which], _krylov_rank(step, start, n))
        done += 1
    return best[0], best[1]


def _krylov_rank(a: nmod_mat, start: nmod_mat, n: int) -> int:
    """Return the rank of [b, a b, a^2 b, ...] modulo a prime: span(b..a^(2k-1) b) from span(b..a^(k-1) b) and a^k."""
    basis = _independent(start.transpose().tolist(), start.modulus())
    power = a.transpose()
    while basis is not None and basis.nrows() < n:
        grown = _independent(basis.tolist() + (basis * power).tolist(), start.modulus())
        if grown is None or grown.nrows() == basis.nrows():
            break
        basis, power = grown, power * power
    return 0 if basis is None else int(basis.nrows())


def _independent(rows: list[list[Any]], modulus: int) -> nmod_mat | None:
    """Return a basis of the span of rows, None where they are all zero."""
    width = len(rows[0]) if rows else 0
    echelon, rank = nmod_mat(len(rows), width, [int(x) for row in rows for x in row], modulus).rref()
    if not rank:
        return None
    return nmod_mat(rank, width, [int(x) for row in echelon.tolist()[:rank] for x in row], modulus)


def balanced_states(found: Projected) -> tuple[Array, Array, Array]:
    """Return A, B, C of the balanced coordinates, each entry rounded once."""
    return _rounded(found.A), _rounded(found.B), _rounded(found.C)


def staircase_states(found: Projected, *, outputs: bool) -> tuple[Array, Array, Array]:
    """Return A, B, C in staircase coordinates, an orthogonal transform of the balanced ones, each entry rounded once.

    B = [B1; 0; ...] and A block upper Hessenberg (``outputs``: the dual, from C): products C A^k B that are zero in
    exact arithmetic are sums of exact zeros here, so that the roll-off survives the rounding.
    """
    with precision(found.bits):
        if outputs:
            a, c, b, _ = block_hessenberg(
                found.A.transpose(), found.C.transpose(), found.B.transpose(), -found.bits // 3
            )
            a, b, c = a.transpose(), b.transpose(), c.transpose()
        else:
            a, b, c, _ = block_hessenberg(found.A, found.B, found.C, -found.bits // 3)
        floors = [top_exponent(part) - found.bits // 3 for part in (a, b, c)]
        return tuple(  # type: ignore[return-value]
            np.array([[near_ball(x) if exponent(x) > floor else 0.0 for x in row] for row in part.tolist()]).reshape(
                part.nrows(), part.ncols()
            )
            for part, floor in zip((a, b, c), floors, strict=True)
        )
