"""Staircase coordinates and the Kalman decomposition: what inputs reach and outputs see, with every decision shown."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.forms.coordinates import Array, Coordinates, Setting, Units, modes, take_units_out
from realize.kernels.kalman import elementwise_distances, kalman_decomposition
from realize.kernels.separation import separated
from realize.kernels.staircase import (
    Staircase,
    controllability_indices,
    observability_indices,
)

EPS = float(np.finfo(float).eps)
#: A singular value above its threshold by less than this factor may be dropped.
AMBIGUOUS = 1e3
#: Ambiguous values are dropped where the next one is larger by this times the factor: rounding has no such gap.
GAP = 1e4
#: What was kept within this factor of its threshold is ambiguous: a chain of steps magnifies rounding by as much.
BLIND = 1e7
#: Up to this order each mode is tried by itself as well as by the staircase.
SEARCHED = 60


def rounding(order: int) -> float:
    """Return 4 n eps: the elementwise relative change within which a model counts as another one."""
    return 4 * max(order, 1) * EPS


def _even(matrix: Array, axis: int) -> tuple[Array, Any]:
    """Return a matrix with columns (axis 0) or rows (axis 1) of like size, and the exponents taken out."""
    sizes = np.abs(matrix).max(axis=axis, initial=0.0)
    exponents = np.where(sizes > 0, np.frexp(sizes)[1], 0).astype(np.int64)
    spread = np.expand_dims(exponents, axis)
    return np.ldexp(matrix, -spread), spread


def _number(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None


def decision(found: Staircase) -> dict[str, Any]:
    """Return what the sizes of a staircase rest on, singular values over their threshold."""
    dropped, kept = found.largest_dropped, found.smallest_kept
    return {
        "smallest_kept": _number(kept),
        "largest_dropped": dropped,
        "gap": _number(kept / dropped) if dropped > 0 else None,
        "ambiguous": bool(kept < BLIND or dropped > 1),
        "steps": [
            {
                "kept": int(up.size),
                "smallest_kept": _number(float(up[-1])) if up.size else None,
                "largest_dropped": _number(float(down[0])) if down.size else None,
            }
            for up, down in zip(found.kept, found.dropped, strict=True)
        ],
    }


def _listed(own: Any, changes: Array, period: float | None, why: str) -> list[dict[str, Any]]:
    """Return removed modes with frequency, damping, why, and the elementwise change that their removal asks for."""
    rows = []
    for value, change in zip(own.tolist(), changes.tolist(), strict=True):
        if value.imag >= 0:
            rows.append({**modes(np.array([value]), period)[0], "why": why, "elementwise_change": change})
    return rows


def _cautions(what: str, ambiguous: bool, removed: list[dict[str, Any]], order: int) -> tuple[str, ...]:
    notes = []
    if ambiguous:
        notes.append(
            f"The number of {what} states is ambiguous: a rank decision is too near to its threshold to be told from "
            "magnified rounding (details: decisions)."
        )
    doubtful = [row for row in removed if row["elementwise_change"] > AMBIGUOUS * rounding(order)]
    if doubtful:
        worst = max(row["elementwise_change"] for row in doubtful)
        notes.append(
            f"{len(doubtful)} of the modes set apart as not {what} are so within the rounding of the largest numbers "
            f"only: number by number it takes a relative change of {worst:.1e}, and one rounding is "
            f"{rounding(order):.1e}. The number is ambiguous."
        )
    return tuple(notes)


def _staircase(A: Array, B: Array) -> tuple[Staircase, Array]:
    """Return the staircase of (A, B), inputs of like size for the decisions, and B in the new coordinates."""
    even, exponents = _even(B, 0)
    small = rounding(A.shape[0])
    limits = small * float(np.linalg.norm(even)), small * float(np.linalg.norm(A))
    found = separated(A, even, limits, small, AMBIGUOUS, GAP, SEARCHED)
    return found, np.ldexp(found.B, exponents)


def reachable_staircase(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Rotate the states into the reachability staircase, those that no input reaches last [1]_ [2]_.

    Each step of states is what the step before reaches at once: A has full-rank blocks beside its diagonal and exact
    zeros below them, B is zero below the first step. A singular value counts as zero up to 4 n eps times the norm of
    the scaled A (or B): what an elementwise relative change of that size can make.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
    D : (p, m) array
    setting : Setting

    Returns
    -------
    Coordinates
        Details: ``sizes`` of the steps; ``reachable``, ``unreachable`` (numbers of states);
        ``controllability_indices``; ``removed`` (modes that are not reached); ``decisions``, singular values over their
        threshold; ``threshold`` (4 n eps).

    References
    ----------
    .. [1] A. Varga, Numerically stable algorithm for standard controllability form determination, Electronics Letters
           17 (1981) 74-75 (from memory).
    .. [2] P. Van Dooren, The generalized eigenstructure problem in linear system theory, IEEE Trans. Autom. Control 26
           (1981) 111-129 (from memory).
    """
    units = take_units_out(A, B, C, setting)
    found, b = _staircase(units.A, units.B)
    details, cautions = _told(units, found, units.A, units.B, setting, reach=True, channels=B.shape[1])
    return units.restored(
        found.A, b, units.C @ found.Q, D, found.Q, found.Q.T.copy(), details=details, cautions=cautions
    )


def observable_staircase(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Rotate the states into the observability staircase, those that no output sees last.

    The dual of `reachable_staircase`: A is block lower Hessenberg with exact zeros above its blocks, C is zero beyond
    the first step.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
    D : (p, m) array
    setting : Setting

    Returns
    -------
    Coordinates
        Details as in `reachable_staircase`, with ``observable``, ``unobservable`` and ``observability_indices``.

    References
    ----------
    .. [1] Varga 1981 and Van Dooren 1981, as in `reachable_staircase`.
    """
    units = take_units_out(A, B, C, setting)
    dual_a, dual_b = units.A.T.copy(), units.C.T.copy()
    found, c = _staircase(dual_a, dual_b)
    details, cautions = _told(units, found, dual_a, dual_b, setting, reach=False, channels=C.shape[0])
    return units.restored(
        found.A.T.copy(),
        found.Q.T @ units.B,
        c.T.copy(),
        D,
        found.Q,
        found.Q.T.copy(),
        details=details,
        cautions=cautions,
    )


def _told(
    units: Units, found: Staircase, A: Array, B: Array, setting: Setting, *, reach: bool, channels: int
) -> tuple[dict[str, Any], tuple[str, ...]]:
    n, r = A.shape[0], found.order
    what = "reachable" if reach else "observable"
    own, changes = elementwise_distances(A, B, found.A[r:, r:], found.Q[:, r:])
    removed = _listed(own * np.ldexp(1.0, units.time), changes, setting.period, f"un{what}")
    told = decision(found)
    indices = controllability_indices if reach else observability_indices
    details = {
        "sizes": list(found.sizes),
        what: r,
        f"un{what}": n - r,
        ("controllability_indices" if reach else "observability_indices"): list(indices(found.sizes, channels)),
        "removed": removed,
        "threshold": rounding(n),
        "decisions": told,
    }
    return details, _cautions(what, told["ambiguous"], removed, n)


PARTS = ("reachable_and_observable", "reachable_only", "observable_only", "neither")


def kalman_states(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Split the states into reachable and observable, reachable only, observable only, and neither [1]_.

    In this order A has the block pattern [* 0 * 0; * * * *; 0 0 * 0; 0 0 * *], B = [*; *; 0; 0], C = [* 0 * 0], zeros
    exact; the first part alone has the response of the plant. The transform is orthogonal unless unreachable states are
    seen through reachable ones. Ranks are decided as in `reachable_staircase`.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
    D : (p, m) array
    setting : Setting

    Returns
    -------
    Coordinates
        Details: ``dimensions`` of the four parts; ``removed``: the modes of the last three, with frequency (rad/s),
        damping ratio and why; ``decisions`` of each staircase; ``threshold`` (4 n eps).

    References
    ----------
    .. [1] R. E. Kalman, Mathematical description of linear dynamical systems, SIAM J. Control 1 (1963) 152-192 (from
           memory).
    """
    units = take_units_out(A, B, C, setting)
    n = A.shape[0]
    even_b, exponents_b = _even(units.B, 0)
    even_c, exponents_c = _even(units.C, 1)
    parts = kalman_decomposition(units.A, even_b, even_c, rounding(n), AMBIGUOUS, GAP, SEARCHED)
    edges = np.cumsum([0, *parts.sizes])
    scale = np.ldexp(1.0, units.time)
    removed: list[dict[str, Any]] = []
    for k, why in ((1, "unobservable"), (2, "unreachable"), (3, "unreachable and unobservable")):
        part = slice(int(edges[k]), int(edges[k + 1]))
        own = parts.A[part, part]
        if k == 1:
            values, changes = elementwise_distances(units.A.T, units.C.T, own.T, parts.T[:, part])
        else:
            # the rows of S span with those of the other unreachable part what no input reaches
            tail = slice(int(edges[2]), n)
            values, changes = elementwise_distances(units.A, units.B, parts.A[tail, tail], parts.S[tail].T)
            values, changes = _of_part(values, changes, own)
        removed += _listed(values * scale, changes, setting.period, why)
    decisions = {name: decision(found) for name, found in parts.decisions.items()}
    details = {
        "dimensions": dict(zip(PARTS, parts.sizes, strict=True)),
        "removed": removed,
        "threshold": rounding(n),
        "decisions": decisions,
    }
    ambiguous = any(told["ambiguous"] for told in decisions.values())
    return units.restored(
        parts.A,
        np.ldexp(parts.B, exponents_b),
        np.ldexp(parts.C, exponents_c),
        D,
        parts.T,
        parts.S,
        parts.condition,
        details,
        _cautions("reachable and observable", ambiguous, removed, n),
    )


def _of_part(values: Any, changes: Array, own: Array) -> tuple[Any, Array]:
    """Return the modes of a diagonal block, each with the change of the nearest mode of the whole."""
    mine = np.linalg.eigvals(own) if own.size else np.zeros(0)
    nearest = [int(np.argmin(np.abs(values - value))) for value in mine]
    return mine.astype(complex), changes[nearest] if nearest else np.zeros(0)
