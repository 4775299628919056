"""Real Schur coordinates, ordered."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.forms.coordinates import Array, Coordinates, Setting, frequency_and_damping, modes, take_units_out
from realize.kernels.ordered_schur import block_eigenvalues, block_starts, eigenvalue_conditions, ordered_schur

EPS = float(np.finfo(float).eps)
#: Up to this order the condition of each eigenvalue is part of the details.
CONDITIONS_UP_TO = 200


def ordering_key(eigenvalues: Any, setting: Setting) -> Array:
    """Return numbers whose increasing order is the order asked for, rows of (group, number)."""
    frequency, damping = frequency_and_damping(eigenvalues, setting.period)
    if setting.ordering == "damping":
        return np.stack([np.zeros(frequency.shape), damping], axis=1)
    if setting.ordering == "stability":
        # a pole on the axis is no stable one; within a group the slowest first
        real = np.log(np.maximum(np.abs(eigenvalues), 1e-300)) if setting.sampled else np.real(eigenvalues)
        return np.stack([(real < 0).astype(float), frequency], axis=1)
    return np.stack([np.zeros(frequency.shape), frequency], axis=1)


def real_schur(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Rotate the states so that A is real Schur (quasi upper triangular), its blocks in the order asked for.

    A = Q R Q' with 1 x 1 blocks for real and 2 x 2 blocks for complex eigenvalues, exact zeros below [1]_; blocks are
    moved by swapping neighbours [2]_, after the units were taken out by powers of two.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
    D : (p, m) array
    setting : Setting
        ``ordering``: "speed", slowest first; "damping", least damped first; "stability", unstable ones first, and the
        slowest first among those alike.

    Returns
    -------
    Coordinates
        Details: ``ordering``; ``blocks`` (size, eigenvalue, frequency in rad/s, damping ratio, and up to 200 states the
        condition number of the eigenvalue); ``unstable`` (number of states with poles that are not stable, with
        "stability"); ``undecided``: neighbours whose order one rounding of A can turn round.

    References
    ----------
    .. [1] G. H. Golub, C. F. Van Loan, Matrix Computations, 4th ed., 7.4 and 7.6 (from memory).
    .. [2] Z. Bai, J. W. Demmel, On swapping diagonal blocks in real Schur form, Linear Algebra Appl. 186 (1993) 73-95
           (from memory).
    """
    units = take_units_out(A, B, C, setting)
    scale = np.ldexp(1.0, units.time)

    def key(eigenvalues: Any) -> Array:
        return ordering_key(eigenvalues * scale, setting)

    R, Q, stuck = ordered_schur(units.A, key)
    starts = block_starts(R)
    own = block_eigenvalues(R, starts)
    sizes = np.diff(np.append(starts, R.shape[0]))
    conditions = eigenvalue_conditions(R, own) if 0 < R.shape[0] <= CONDITIONS_UP_TO else None
    blocks: list[dict[str, Any]] = []
    for k, row in enumerate(modes(own * scale, setting.period)):
        blocks.append({"size": int(sizes[k]), **row})
        if conditions is not None:
            blocks[-1]["condition"] = float(conditions[k]) if np.isfinite(conditions[k]) else None
    details: dict[str, Any] = {"ordering": setting.ordering, "blocks": blocks}
    cautions: tuple[str, ...] = ()
    if setting.ordering == "stability":
        details["unstable"] = int(sizes[ordering_key(own * scale, setting)[:, 0] == 0].sum()) if own.size else 0
    if conditions is not None:
        # one rounding of A, of its size times eps, moves an eigenvalue by its condition times that
        moves = np.minimum(conditions, 1 / EPS) * EPS * np.linalg.norm(units.A)
        details["undecided"] = [
            [k, k + 1]
            for k in range(len(blocks) - 1)
            if _close(own[k], own[k + 1], float(moves[k] + moves[k + 1]), scale, setting)
        ]
    if stuck:
        cautions = (f"{stuck} blocks were too close to be swapped: the order is not quite the one asked for.",)
    return units.restored(R, Q.T @ units.B, units.C @ Q, D, Q, Q.T.copy(), 1.0, details, cautions)


def _close(one: complex, two: complex, move: float, scale: float, setting: Setting) -> bool:
    """Return whether two eigenvalues can change places in the ordering when they move by so much in all."""
    first, second = ordering_key(np.array([one, two]) * scale, setting)
    if setting.ordering == "damping":
        # the damping ratio turns by the move over the size
        size = min(abs(one), abs(two))
        return bool(abs(first[1] - second[1]) * size <= move)
    if setting.ordering == "stability" and first[0] != second[0]:
        edge = (lambda z: abs(abs(z) - 1)) if setting.sampled else (lambda z: abs(z.real))
        return bool(min(edge(one), edge(two)) <= move)
    if setting.sampled:
        return bool(abs(one - two) <= move)
    return bool(abs(abs(one) - abs(two)) <= move)
