"""Units of time, inputs, outputs and states taken out of a model in exact powers of two."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.kernels.response import balancing_scale

Array = NDArray[np.float64]

#: Binary digits that A must lose in size before its loops alone scale the states.
WORTH_IT = 3
#: Matrices with more entries a row have no chains.
MOST_PAIRS = 8
#: Matrices with a larger share of entries that are not zero are one part.
FULL = 0.6
#: Binary digits that couplings must stand above the loops before chains are scaled by themselves, and how often.
FAR, REPEATED = 40, 40


@dataclass(frozen=True)
class Scaled:
    """A model in units of its own: exact powers of two taken out.

    A = 2^time S A' S^-1, B = 2^input S B', C = 2^output C' S^-1 with S = diag(2^states), and
    C (sI - A)^-1 B = 2^(input + output - time) C' (s' I - A')^-1 B' at s = 2^time s'. `input` and `output` are both
    even or both odd, so that the balanced coordinates of the two models differ by powers of two only.
    """

    A: Array
    B: Array
    C: Array
    states: NDArray[np.int64]
    time: int
    input: int
    output: int

    @property
    def gain(self) -> int:
        """Exponent of the factor from the scaled model's gains to the model's own."""
        return self.input + self.output - self.time


def _top(matrix: Array) -> int:
    largest = float(np.max(np.abs(matrix), initial=0.0))
    return int(np.frexp(largest)[1]) if largest > 0 else 0


def _power(matrix: Array, exponents: NDArray[np.int64] | int) -> Array:
    least, most = (int(np.min(exponents)), int(np.max(exponents))) if np.size(exponents) else (0, 0)
    if least == most == 0:
        return np.array(matrix)
    if least >= -1000 and most <= 1000:
        # a product with a power of two rounds as ldexp does, and is many times as quick
        return np.asarray(matrix * np.ldexp(1.0, exponents), dtype=float)
    return np.ldexp(matrix, np.clip(exponents, -5000, 5000).astype(np.int64) if np.ndim(exponents) else exponents)


def _exponents(factors: Array) -> NDArray[np.int64]:
    return np.frexp(factors)[1].astype(np.int64) - 1


def _size(A: Array, states: NDArray[np.int64]) -> int:
    """Return the exponent of the largest entry of A with its states in units 2^states."""
    if not np.any(states):
        return _top(A) if np.any(A) else -5000
    mantissa, exponent = np.frexp(np.abs(A))
    return int(np.max((exponent + states[None, :] - states[:, None])[mantissa > 0], initial=-5000))


def _size_of_loops(A: Array) -> int:
    """Return an exponent that the largest entry of A has in any units of the states: that of its shortest loops."""
    root = np.sqrt(np.abs(A))
    return _top(root * root.T)


def _scale_of_loops(pattern: Array, n: int) -> NDArray[np.int64] | None:
    """Return exponents of states that are balanced by their loops alone; None where there is no loop of two states.

    What inputs reach and outputs see scales the states of a strongly connected part by one common factor: where it had
    a say inside, a chain between a large B and a small C could pull loops apart, with A far larger than its
    eigenvalues.

    Parameters
    ----------
    pattern : (N, N) array
        Sizes of the entries of [A B 0; 0 0 0; C 0 0].
    n : int
        Number of states.
    """
    from scipy.sparse.csgraph import connected_components

    count, label = connected_components(pattern[:n, :n] > 0, directed=True, connection="strong")
    if count == n:
        return None
    same = label[:, None] == label[None, :]
    inner = balancing_scale(np.where(same, pattern[:n, :n], 0.0))
    states = _exponents(inner)
    whole = np.concatenate([states, np.zeros(pattern.shape[0] - n, dtype=np.int64)])
    even = np.ldexp(pattern, whole[None, :] - whole[:, None])
    if not np.all(np.isfinite(even)):
        return None
    return states + _scale_of_parts(even, label, count)


def _scale_of_parts(pattern: Array, label: NDArray[np.int32], count: int) -> NDArray[np.int64]:
    """Return exponents of states, one for each part they are in, that balance the parts with inputs and outputs."""
    parts = np.concatenate([label, count + np.arange(pattern.shape[0] - label.size)])
    outer = np.zeros((parts.max() + 1, parts.max() + 1))
    np.maximum.at(outer, (parts[:, None], parts[None, :]), pattern)
    return _exponents(balancing_scale(outer)[:count])[label]


def _with_parts_moved(pattern: Array, states: NDArray[np.int64], n: int) -> NDArray[np.int64]:
    """Return the exponents with whole strongly connected parts moved where inputs and outputs ask for it.

    State by state no part moves: each of its states is held by the others.
    """
    from scipy.sparse.csgraph import connected_components

    present = pattern[:n, :n] > 0
    if np.count_nonzero(present) > FULL * n * n:
        return states
    count, label = connected_components(present, directed=True, connection="strong")
    if count in (1, n):
        return states
    whole = np.concatenate([states, np.zeros(pattern.shape[0] - n, dtype=np.int64)])
    even = np.ldexp(pattern, whole[None, :] - whole[:, None])
    if not np.all(np.isfinite(even)):
        return states
    more = _scale_of_parts(even, label, count)
    return states + more if np.abs(more).max() > WORTH_IT else states


def far_apart(A: Array) -> bool:
    """Say whether couplings that are part of no loop stand far above everything that is part of one."""
    return bool(np.any(A) and np.all(np.isfinite(A))) and _size_of_loops(A) + FAR < _top(A)


def _scale_of_chains(A: Array, B: Array, C: Array, states: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return exponents of states in whose units couplings that are part of no loop come near to the loops in size.

    The border counts in units of the loops, inputs and outputs are brought to size 1 again and again: each time a
    coupling gives a share of its size to them.
    """
    n, m, p = A.shape[0], B.shape[1], C.shape[0]
    time, size = _size_of_loops(A) - 1, _size(A, states)
    border = np.zeros((n + m + p, n + m + p))
    for _ in range(REPEATED):
        inner = _exponent_table(A, states[None, :] - states[:, None] - time)
        first, last = _exponent_table(B, -states[:, None]), _exponent_table(C, states[None, :])
        border[:n, :n] = np.exp2(np.clip(inner, -900, 900))
        border[:n, n : n + m] = np.exp2(np.clip(first - first.max(), -900, 0))
        border[n + m :, :n] = np.exp2(np.clip(last - last.max(), -900, 0))
        more = _exponents(balancing_scale(border)[:n])
        smaller = _size(A, states + more)
        if smaller >= size:
            break
        states, size = states + more, smaller
    return states


def _exponent_table(matrix: Array, more: NDArray[np.int64]) -> Array:
    """Return log2 of the sizes of the entries, rounded up, after a scaling; minus infinity for zeros."""
    mantissa, exponent = np.frexp(np.abs(matrix))
    return np.where(mantissa > 0, exponent + more, -np.inf)


def scale_model(A: Array, B: Array, C: Array, *, sampled: bool) -> Scaled:
    """Take units of time, inputs, outputs and states out of a model in powers of two.

    The states are balanced on the bordered matrix [A B; C 0], so that inputs and outputs count too; all inputs share
    one factor and all outputs another, because balanced truncation depends on the weights between them. Where that
    makes A larger by more than a factor of eight than balancing by its loops does, strongly connected parts are
    balanced by themselves first (a companion form with coefficients far from 1).

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
    sampled : bool
        True leaves the unit of time alone.

    Returns
    -------
    Scaled
    """
    n, m, p = A.shape[0], B.shape[1], C.shape[0]
    # the states on their own first: units that are far off would hide what counts at inputs and outputs
    alone, A, B, C = _balanced_alone(A, B, C)
    states = np.zeros(n, dtype=np.int64)
    time = 0 if sampled else _top(A)
    inputs, outputs = _top(B), _top(C)
    with np.errstate(under="ignore"):
        if n:
            border = np.zeros((n + m + p, n + m + p))
            border[:n, :n], border[:n, n : n + m] = np.ldexp(A, -time), np.ldexp(B, -inputs)
            border[n + m :, :n] = np.ldexp(C, -outputs)
            # inputs have no row and outputs no column, so they are left alone
            pattern = np.abs(border)
            states = _with_parts_moved(pattern, _exponents(balancing_scale(pattern)[:n]), n)
            size = _size(A, states)
            # where loops of one or two states are about as large already nothing could be gained
            by_loops = _scale_of_loops(pattern, n) if _size_of_loops(A) - 1 + WORTH_IT < size else None
            if by_loops is not None and _size(A, by_loops) + WORTH_IT < size:
                states = by_loops
            elif _size_of_loops(A) + FAR < size:
                states = _scale_of_chains(A, B, C, states)
            between = states[None, :] - states[:, None]
            own = _power(A, between)
            if not np.all(np.isfinite(own)):
                states[:] = 0
                between, own = np.zeros_like(between), A
            time = 0 if sampled else _top(own)
            A = _power(A, between - time)
            first, last = _power(B, -states[:, None] - inputs), _power(C, states[None, :] - outputs)
            inputs, outputs = inputs + _top(first), outputs + _top(last)
            inputs += (inputs + outputs) % 2
            B, C = _power(B, -states[:, None] - inputs), _power(C, states[None, :] - outputs)
    return Scaled(A, B, C, states + alone, time, inputs, outputs)


def _scale_of_pairs(A: Array) -> NDArray[np.int64] | None:
    """Return exponents of states that make A[i, j] and A[j, i] alike, for few pairs; None where nothing is to be done.

    Row by row balancing stops where each row is as large as its column. Along a chain of states that leaves a drift:
    every state passes on to the next what it gets from the one before. Least squares over all pairs has none.
    """
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components
    from scipy.sparse.linalg import splu

    n = A.shape[0]
    present = A != 0
    if np.count_nonzero(present) > MOST_PAIRS * n:
        return None
    i, j = np.nonzero(np.triu(present & present.T, 1))
    if i.size == 0:
        return None
    want = (np.log2(np.abs(A[i, j])) - np.log2(np.abs(A[j, i]))) / 2
    if np.abs(want).max() <= WORTH_IT:
        return None
    # the normal equations of s_i - s_j = want; the first state of each connected part has exponent 0
    ones = np.ones(i.size)
    graph = coo_array((ones, (i, j)), shape=(n, n))
    label = connected_components(graph, directed=False)[1]
    first = np.zeros(n)
    first[np.unique(label, return_index=True)[1]] = 1.0
    degree = np.bincount(i, minlength=n) + np.bincount(j, minlength=n) + first
    rows, columns = np.concatenate([i, j, np.arange(n)]), np.concatenate([j, i, np.arange(n)])
    laplacian = coo_array((np.concatenate([-ones, -ones, degree]), (rows, columns)), shape=(n, n)).tocsc()
    right = np.bincount(i, want, n) - np.bincount(j, want, n)
    found = splu(laplacian).solve(right)
    return np.rint(found).astype(np.int64) if np.all(np.isfinite(found)) else None


def _balanced_alone(A: Array, B: Array, C: Array) -> tuple[NDArray[np.int64], Array, Array, Array]:
    """Return exponents of states that balance A by itself, and the model in them; zeros where numbers would be lost."""
    n = A.shape[0]
    nothing = np.zeros(n, dtype=np.int64)
    if n == 0 or not np.all(np.isfinite(A)):
        return nothing, A, B, C
    with np.errstate(under="ignore", over="ignore"):
        even = _scale_of_pairs(A)
        start = A if even is None else _power(A, even[None, :] - even[:, None])
        states = np.frexp(balancing_scale(np.ldexp(np.abs(start), -_top(start))))[1].astype(np.int64) - 1
        states = states if even is None else states + even
        made = (
            _power(A, states[None, :] - states[:, None]),
            _power(B, np.broadcast_to(-states[:, None], B.shape)),
            _power(C, np.broadcast_to(states[None, :], C.shape)),
        )
    for before, after in zip((A, B, C), made, strict=True):
        if not np.all(np.isfinite(after)) or np.any((after == 0) != (before == 0)):
            return nothing, A, B, C
    return states, *made
