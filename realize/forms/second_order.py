"""Second-order models as state models, and back where the structure is there."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from realize.forms.inversion import Verdict, divided_out
from realize.kernels.second_order import Pencil

Array = NDArray[np.float64]


class NoStructure(ValueError):
    """A state model that is not of second-order form: says why."""


class SecondOrderParts(NamedTuple):
    """M, D, K, F, (P, V), G of a second-order model, and which states are its positions."""

    mass: Array
    damping: Array
    stiffness: Array
    input: Array
    outputs: tuple[Array, Array]
    direct: Array
    positions: list[int]


def states_of_pencil(pencil: Pencil, M: Array) -> tuple[Pencil, bool, Verdict]:
    """Return the state equations of a second-order model with the mass inverted where that is harmless.

    ::

        q' = v,    v' = M^-1 (F u - K q - D v),    accelerations put into C and D

    else the descriptor equations as they are (`realize.kernels.second_order.first_order_pencil`).

    Returns
    -------
    pencil : Pencil
        With E = I where the mass was inverted.
    inverted : bool
    verdict : Verdict
        What the mass matrix is, with its condition number.
    """
    n = M.shape[0]
    A, B, C, D, _ = pencil
    verdict, solved = divided_out(M, [A[n : 2 * n, :n], A[n : 2 * n, n : 2 * n], B[n : 2 * n]])
    if solved is None:
        return pencil, False, verdict
    below = np.hstack(solved)
    a = np.vstack([A[:n, : 2 * n], below[:, : 2 * n]])
    b = np.vstack([B[:n], below[:, 2 * n :]])
    c, d = np.array(C[:, : 2 * n]), np.array(D)
    if C.shape[1] > 2 * n:
        # the accelerations that outputs read, in the order of their coordinates
        which = np.argmax(pencil.E[2 * n :, n : 2 * n], axis=1)
        c += C[:, 2 * n :] @ below[which, : 2 * n]
        d += C[:, 2 * n :] @ below[which, 2 * n :]
    return Pencil(a, b, c, d, np.eye(2 * n)), True, verdict


def second_order_parts(A: Array, B: Array, C: Array, D: Array, E: Array | None) -> SecondOrderParts:
    """Return the second-order form that stands in a state model, every entry copied or divided by a power of two.

    The states must be pairs (q, v) with q' = w v and w a power of two, in any order, and no input may act on q'. Then
    with velocities in units of q', M is the block of E (the identity without E) that belongs to them, and D and K are
    the negated blocks of A.

    Raises
    ------
    NoStructure
    """
    n = A.shape[0]
    e = np.eye(n) if E is None else E
    pairs = _pairs(A, B, e)
    if n == 0 or 2 * len(pairs) != n:
        raise NoStructure(
            f"{len(pairs)} of {n} states are positions whose derivative is another state times a power of two, with no "
            "input beside it; half of them would have to be"
        )
    q = sorted(pairs)
    v = [pairs[position].velocity for position in q]
    weight = np.array([pairs[position].factor for position in q])
    used = {pair.row for pair in pairs.values()}
    # the rows of the positions are q' = w v; the other rows are the equations of motion, in any order
    rows = [i for i in range(n) if i not in used]
    if np.any(e[np.ix_(rows, q)]):
        raise NoStructure("the equations of motion hold derivatives of positions in E")
    # v = q' / w
    M = e[np.ix_(rows, v)] / weight
    damping, K = 0.0 - A[np.ix_(rows, v)] / weight, 0.0 - A[np.ix_(rows, q)]
    F, P, V = B[rows], C[:, q], C[:, v] / weight
    return SecondOrderParts(M, damping, K, F, (P, V), np.array(D), q)


class _Pair(NamedTuple):
    """q' = factor * velocity, and the row that says so."""

    velocity: int
    factor: float
    row: int


def _pairs(A: Array, B: Array, e: Array) -> dict[int, _Pair]:
    """Return position -> velocity from the rows that say no more than q' = w v; w = 1 is looked for first.

    Of two states whose derivatives are each other's multiples (an undamped oscillator of one coordinate) the first is
    the position.
    """
    found: list[tuple[bool, int, int, float]] = []
    for i in range(A.shape[0]):
        left, right = np.flatnonzero(e[i]), np.flatnonzero(A[i])
        if left.size != 1 or right.size != 1 or np.any(B[i]) or left[0] == right[0]:
            continue
        with np.errstate(over="ignore", under="ignore"):
            ratio = float(A[i, right[0]] / e[i, left[0]])
        if ratio != 0 and np.isfinite(ratio) and abs(np.frexp(ratio)[0]) == 0.5:
            found.append((ratio != 1.0, i, int(left[0]), ratio))
    pairs: dict[int, _Pair] = {}
    taken: set[int] = set()
    for _, i, position, ratio in sorted(found):
        velocity = int(np.flatnonzero(A[i])[0])
        if position not in taken and velocity not in taken:
            pairs[position] = _Pair(velocity, ratio, i)
            taken |= {position, velocity}
    return pairs
