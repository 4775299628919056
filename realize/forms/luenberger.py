"""Multi-input companion form in doubles: structure indices from the staircase, the transform by Luenberger's choice."""

from __future__ import annotations

import numpy as np
import scipy.linalg

from realize.errors import Refused
from realize.forms.controllability import condition_of
from realize.forms.coordinates import Array, Coordinates, Setting, Units, take_units_out
from realize.kernels.staircase import reachability_staircase

EPS = float(np.finfo(float).eps)


def _chosen_inputs(A: Array, B: Array, sizes: tuple[int, ...]) -> list[int]:
    """Return how long the chain of each input is, from a staircase: the first independent columns of each step [1]_.

    The part of A^i b_j that is new in step i + 1 is the product of the blocks below the diagonal with b_j; columns are
    normalised from step to step.

    Parameters
    ----------
    A, B : arrays
        In staircase coordinates.
    sizes : tuple of int
        Sizes of the steps, all states reachable.
    """
    indices = [0] * B.shape[1]
    open_ = list(range(B.shape[1]))
    new, start = B[: sizes[0]], 0
    for step, size in enumerate(sizes):
        if step:
            below = slice(start + sizes[step - 1], start + sizes[step - 1] + size)
            new = A[below, start : start + sizes[step - 1]] @ new
            start += sizes[step - 1]
        basis = np.zeros((size, 0))
        kept: list[int] = []
        for place in range(len(open_)):
            column = new[:, place]
            length = float(np.linalg.norm(column))
            rest = column - basis @ (basis.T @ column)
            rest = rest - basis @ (basis.T @ rest)
            left = float(np.linalg.norm(rest))
            if len(kept) == size or left <= 8 * max(A.shape) * EPS * length or length == 0:
                continue
            basis = np.hstack([basis, (rest / left)[:, None]])
            kept.append(place)
        if len(kept) < size:
            raise Refused(
                f"the structure of the model cannot be told in doubles: step {step + 1} of the staircase reaches "
                f"{size} new states, and only {len(kept)} inputs are seen to reach them; use --form reachable-staircase"
            )
        open_ = [open_[place] for place in kept]
        new = new[:, kept]
        new = new / np.linalg.norm(new, axis=0)
        for j in open_:
            indices[j] += 1
    return indices


def luenberger_form(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Return the multi-input companion form in doubles, for models beyond what exact arithmetic does in seconds.

    The controllability indices come from an orthogonal staircase, the chain of each input from the first independent
    columns of each step [1]_; with q_j the rows of the inverse of the chains' matrix at their ends, the rows of S are
    q_j A^(k_j - 1), ..., q_j. Zeros and ones of the form are set, not computed.

    Parameters
    ----------
    A : (n, n), B : (n, m), C : (p, n), D : (p, m) arrays
    setting : Setting

    Returns
    -------
    Coordinates
        `details` holds ``controllability_indices`` and ``decided``: the smallest singular value that a decision of the
        staircase rests on, over its threshold (4 n eps).

    Raises
    ------
    Refused
        If the model is not controllable within rounding, or the transform is singular to working precision.

    References
    ----------
    .. [1] D. G. Luenberger, Canonical forms for linear multivariable systems, IEEE Trans. Automat. Control 12 (1967)
           290-293 (from memory).
    """
    n, m = B.shape
    if n == 0:
        return Coordinates(A, B, C, D, np.eye(0), np.eye(0), 1.0, {"controllability_indices": [0] * m})
    units = take_units_out(A, B, C, setting)
    columns = np.where(np.any(units.B, axis=0), np.frexp(np.max(np.abs(units.B), axis=0))[1], 0)
    stair = reachability_staircase(
        units.A,
        np.ldexp(units.B, -columns[None, :]),
        (4 * n * EPS * np.sqrt(m), 4 * n * EPS * float(np.linalg.norm(units.A, 2))),
    )
    if stair.order < n:
        raise Refused(
            f"the model is not controllable within rounding: {stair.order} of its {n} states can be reached from the "
            "inputs, so that no transform leads to this form; use --form reachable-staircase, or take its minimal "
            "realization first"
        )
    indices = _chosen_inputs(stair.A, stair.B, stair.sizes)
    used = [j for j in range(m) if indices[j]]
    right_B = np.ldexp(stair.B, columns[None, :])
    chains = []
    for j in used:
        chain = [right_B[:, j]]
        while len(chain) < indices[j]:
            chain.append(stair.A @ chain[-1])
        chains += chain
    M = np.stack(chains, axis=1)
    ends = np.cumsum([indices[j] for j in used]) - 1
    with np.errstate(all="ignore"):
        rows = _rows(stair.A, M, ends, [indices[j] for j in used])
        S = np.vstack([row for own in rows for row in reversed(own[:-1])])
        size = np.frexp(np.max(np.abs(S), axis=1))[1]
        even = np.ldexp(S, -size[:, None])
        T = np.ldexp(_solve(even, np.eye(n)), -size[None, :])
        tops = np.ldexp(_solve(even.T, np.stack([own[-1] for own in rows], axis=1)).T, -size[None, :])
        return _assembled(units, stair.Q, indices, used, S, T, tops, right_B, D, stair.smallest_kept)


def _solve(matrix: Array, right: Array) -> Array:
    try:
        factors = scipy.linalg.lu_factor(matrix, check_finite=False)
        solution: Array = scipy.linalg.lu_solve(factors, right, check_finite=False)
    except (np.linalg.LinAlgError, ValueError):
        solution = np.full(right.shape, np.nan)
    if not np.all(np.isfinite(solution)):
        raise Refused(
            "the transform to the multi-input companion form is singular to working precision; use --form schur, or "
            "--arithmetic exact"
        )
    return solution


def _rows(A: Array, M: Array, ends: Array, lengths: list[int]) -> list[list[Array]]:
    """Return q, q A, ..., q A^k for each chain of length k."""
    size = np.linalg.norm(M, axis=0)
    power = np.frexp(size)[1]
    even = np.ldexp(M, -power[None, :])
    unit = np.zeros((M.shape[0], ends.size))
    unit[ends, np.arange(ends.size)] = np.ldexp(1.0, -power[ends])
    last = _solve(even.T, unit)
    found = []
    for k, length in enumerate(lengths):
        own = [last[:, k]]
        while len(own) <= length:
            own.append(own[-1] @ A)
        found.append(own)
    return found


def _assembled(
    units: Units,
    Q: Array,
    indices: list[int],
    used: list[int],
    S: Array,
    T: Array,
    tops: Array,
    B: Array,
    D: Array,
    kept: float,
) -> Coordinates:
    """Return the form in the model's own units: chains with ones need states in powers of the unit of time."""
    n, m = B.shape
    starts = np.concatenate([[0], np.cumsum([indices[j] for j in used])[:-1]]).astype(int)
    depth = np.concatenate([np.arange(indices[j]) for j in used])
    power = np.concatenate([np.arange(indices[j])[::-1] for j in used])
    shift = -(units.gain + units.time * depth)
    A_new, B_new = np.zeros((n, n)), np.zeros((n, m))
    for start, top, j in zip(starts, tops, used, strict=True):
        # A^k_j b_j depends on earlier columns alone, so that rows of short chains have zeros against long ones
        A_new[start] = np.where(power < indices[j], np.ldexp(top, units.time * (1 + depth)), 0.0)
        # an input feeds its own chain with weight 1 and otherwise only longer ones before it
        weights = S[start] @ B
        for other in range(m):
            fed = indices[other] < indices[j] and j < other
            B_new[start, other] = 1.0 if other == j else weights[other] if fed else 0.0
        inner = np.arange(start + 1, start + indices[j])
        A_new[inner, inner - 1] = 1.0
    transform = np.ldexp(Q @ T, units.states[:, None] - shift[None, :])
    back = np.ldexp(S @ Q.T, shift[:, None] - units.states[None, :])
    C_new = np.ldexp(units.C @ (Q @ T), units.gain - shift[None, :])
    condition = condition_of(transform, back) if np.all(np.isfinite(transform) & np.isfinite(back)) else float("inf")
    details = {"controllability_indices": indices, "decided": float(kept) if np.isfinite(kept) else None}
    return Coordinates(A_new, B_new, C_new, D, transform, back, condition, details)
