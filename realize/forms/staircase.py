"""Staircase coordinates and the Kalman decomposition: what inputs reach and outputs see, with every decision shown."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.forms.coordinates import Array, Coordinates, Setting, Units, modes, take_units_out
from realize.kernels.hidden_spaces import SEARCHED, Spaces, Unreached, hidden_spaces
from realize.kernels.kalman import Kalman, kalman_decomposition, nearest_hidden
from realize.kernels.separation import separated
from realize.kernels.staircase import (
    Staircase,
    controllability_indices,
    observability_indices,
)
from realize.kernels.within_rounding import Side

EPS = float(np.finfo(float).eps)
#: A singular value above its threshold by less than this factor may be dropped.
AMBIGUOUS = 1e3
#: Ambiguous values are dropped where the next one is larger by this times the factor: rounding has no such gap.
GAP = 1e4


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


def decided(side: Side, threshold: float) -> dict[str, Any]:
    """Return what a number of hidden modes rests on: changes of the numbers over the threshold.

    Clear is what stays only with a change of a thousand times the threshold, while what went takes less than a quarter
    of it, or there is a gap between them that rounding does not make.
    """
    dropped, kept = max(side.errors, default=0.0) / threshold, side.kept / threshold
    return {
        "hidden": int(side.vectors.shape[1]),
        "smallest_kept": _number(kept),
        "largest_dropped": dropped,
        "gap": _number(kept / dropped) if dropped > 0 else None,
        "ambiguous": bool(kept < AMBIGUOUS or (dropped > 0.25 and kept < AMBIGUOUS * GAP)),
    }


def _changes(values: Any, side: Side) -> Array:
    """Return for each mode the change that hides it: that of the nearest mode of the decision."""
    if not side.modes:
        return np.zeros(len(values))
    found = np.array(side.modes)
    return np.array([side.errors[int(np.argmin(np.abs(found - value)))] for value in values])


def _steps(found: Staircase) -> list[dict[str, Any]]:
    """Return the rank decisions of the steps, singular values over their threshold."""
    return [
        {
            "kept": int(up.size),
            "smallest_kept": _number(float(up[-1])) if up.size else None,
            "largest_dropped": _number(float(down[0])) if down.size else None,
        }
        for up, down in zip(found.kept, found.dropped, strict=True)
    ]


def _listed(own: Any, changes: Array, period: float | None, why: str) -> list[dict[str, Any]]:
    """Return removed modes with frequency, damping, why, and the elementwise change that their removal asks for."""
    rows = []
    for value, change in zip(own.tolist(), changes.tolist(), strict=True):
        if value.imag >= 0:
            rows.append({**modes(np.array([value]), period)[0], "why": why, "elementwise_change": change})
    return rows


def _doubt(own: dict[str, Any], threshold: float) -> str:
    """Return why a decision is ambiguous."""
    kept = own["smallest_kept"]
    if kept is not None and kept < AMBIGUOUS:
        return f"numbers changed by {kept:.2g} times the threshold of {threshold:.1e} would hide one mode more"
    return "what is hidden lies close to the threshold"


def _staircase(A: Array, B: Array) -> tuple[Staircase, Unreached, Array]:
    """Return the staircase of (A, B), inputs of like size for the decisions, and B in the new coordinates."""
    even, exponents = _even(B, 0)
    small = rounding(A.shape[0])
    limits = small * float(np.linalg.norm(even)), small * float(np.linalg.norm(A))
    found, decision = separated(A, even, limits, small, AMBIGUOUS, GAP)
    return found, decision, np.ldexp(found.B, exponents)


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
    found, own, b = _staircase(units.A, units.B)
    details, cautions = _told(units, found, own, setting, reach=True, channels=B.shape[1])
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
    found, own, c = _staircase(dual_a, dual_b)
    details, cautions = _told(units, found, own, setting, reach=False, channels=C.shape[0])
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
    units: Units, found: Staircase, own: Unreached, setting: Setting, *, reach: bool, channels: int
) -> tuple[dict[str, Any], tuple[str, ...]]:
    n, r = found.A.shape[0], found.order
    what = "reachable" if reach else "observable"
    threshold = rounding(n)
    values = np.linalg.eigvals(found.A[r:, r:]).astype(complex)
    removed = _listed(values * np.ldexp(1.0, units.time), _changes(values, own.side), setting.period, f"un{what}")
    told = decided(own.side, threshold)
    indices = controllability_indices if reach else observability_indices
    details = {
        "sizes": list(found.sizes),
        what: r,
        f"un{what}": n - r,
        ("controllability_indices" if reach else "observability_indices"): list(indices(found.sizes, channels)),
        "decided": "exactly" if own.exactly else "within rounding",
        "removed": removed,
        "threshold": threshold,
        "decisions": told | {"steps": _steps(found)},
    }
    notes = []
    if told["ambiguous"]:
        notes.append(f"The number of {what} states is ambiguous: {_doubt(told, threshold)} (details: decisions).")
    if own.blind:
        notes.append(_CROWDED.format(f"number of {what} states is"))
    if r != n - own.side.vectors.shape[1]:
        notes.append(
            f"The number of {what} states is ambiguous: the steps end before the modes do that can be told apart."
        )
    smallest = found.smallest_kept
    if smallest < AMBIGUOUS and n - r == own.side.vectors.shape[1]:
        notes.append(
            f"The sizes of the steps are ambiguous: a singular value of {smallest:.1e} times its threshold was kept "
            "(details: decisions, steps)."
        )
    return details, tuple(notes)


_CROWDED = "The {} ambiguous: some poles are equal within rounding, and a mode hidden among them may have been missed."


PARTS = ("reachable_and_observable", "reachable_only", "observable_only", "neither")


def kalman_states(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Split the states into reachable and observable, reachable only, observable only, and neither [1]_.

    In this order A has the block pattern [* 0 * 0; * * * *; 0 0 * 0; 0 0 * *], B = [*; *; 0; 0], C = [* 0 * 0], zeros
    exact; the first part alone has the response of the plant. The transform is orthogonal unless unreachable states are
    seen through reachable ones. The dimensions are the exact ones, or, if those hide more, those that a relative change
    of every number by at most 4 n eps makes.

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
        Details: ``dimensions`` of the four parts; ``decided``; ``removed``: the modes of the last three, with frequency
        (rad/s), damping ratio and why; ``decisions`` about what inputs reach and outputs see; ``threshold`` (4 n eps);
        ``cleared``.

    References
    ----------
    .. [1] R. E. Kalman, Mathematical description of linear dynamical systems, SIAM J. Control 1 (1963) 152-192 (from
           memory).
    """
    units = take_units_out(A, B, C, setting)
    n = A.shape[0]
    even_b, exponents_b = _even(units.B, 0)
    even_c, exponents_c = _even(units.C, 1)
    threshold = rounding(n)
    spaces = hidden_spaces(units.A, even_b, even_c, threshold)
    parts = kalman_decomposition(units.A, even_b, even_c, spaces)
    edges = np.cumsum([0, *parts.sizes])
    scale = np.ldexp(1.0, units.time)
    removed: list[dict[str, Any]] = []
    for k, why in ((1, "unobservable"), (2, "unreachable"), (3, "unreachable and unobservable")):
        own = parts.A[edges[k] : edges[k + 1], edges[k] : edges[k + 1]]
        values = np.linalg.eigvals(own).astype(complex)
        changes = _changes(values, spaces.reachable_only if k == 1 else spaces.unreachable)
        removed += _listed(values * scale, changes, setting.period, why)
    told = {
        "reachable": decided(spaces.unreachable, threshold),
        "observable": decided(spaces.reachable_only, threshold),
        "observable_of_all": decided(spaces.unobservable, threshold),
    }
    details = {
        "dimensions": dict(zip(PARTS, parts.sizes, strict=True)),
        "decided": "exactly" if spaces.exactly else "within rounding",
        "removed": removed,
        "threshold": threshold,
        "cleared": parts.cleared,
        "decisions": told,
    }
    return units.restored(
        parts.A,
        np.ldexp(parts.B, exponents_b),
        np.ldexp(parts.C, exponents_c),
        D,
        parts.T,
        parts.S,
        parts.condition,
        details,
        _kalman_cautions(told, spaces, parts, threshold),
    )


def _kalman_cautions(told: dict[str, Any], spaces: Spaces, parts: Kalman, threshold: float) -> tuple[str, ...]:
    notes = []
    for name, what in (("reachable", "reachable"), ("observable", "observable among the reachable")):
        own = told[name]
        if own["ambiguous"]:
            notes.append(
                f"The number of states that are {what} is ambiguous: {_doubt(own, threshold)} (details: decisions)."
            )
    if not notes and told["observable_of_all"]["ambiguous"]:
        notes.append("Which of the unreachable states are observable is ambiguous (details: decisions).")
    if spaces.blind:
        notes.append(_CROWDED.format("dimensions are"))
    if parts.cleared > AMBIGUOUS * threshold:
        notes.append(
            f"The dimensions are ambiguous: the blocks set to zero held {parts.cleared:.1e} of the matrices, which is "
            "more than rounding makes."
        )
    searched = not spaces.proved and len(parts.A) <= SEARCHED
    if not notes and searched and nearest_hidden(parts) < AMBIGUOUS * threshold:
        notes.append(
            "The dimensions are ambiguous: among the states that count as reachable, or as observable, a mode is "
            "hidden within magnified rounding."
        )
    return tuple(notes)
