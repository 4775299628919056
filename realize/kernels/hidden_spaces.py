"""Which states inputs do not reach and outputs do not see: one decision for the Kalman decomposition and staircases."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.kernels import many_modes
from realize.kernels.within_rounding import Side, hidden_side, spectra

Array = NDArray[np.float64]

#: Exact ranks are taken up to this order; each mode is searched for by itself up to that one.
LARGEST_EXACT, SEARCHED = 150, 60


@dataclass(frozen=True)
class Spaces:
    """Hidden subspaces and what they rest on.

    Attributes
    ----------
    unreachable, reachable_only, unobservable : Side
        ``vectors`` are orthonormal: left ones that inputs do not reach; right ones within the reachable states that
        outputs do not see; all right ones that outputs do not see.
    exactly : bool
        True where exact arithmetic decided on the numbers as they are; changes are then zero.
    blind : bool
        True where eigenvalues are too crowded for a decision mode by mode, and the numbers hide nothing exactly.
    """

    unreachable: Side
    reachable_only: Side
    unobservable: Side
    exactly: bool
    blind: bool

    @property
    def proved(self) -> bool:
        """True where the numbers as they are hide something, and just that is taken."""
        return self.exactly and any(
            side.vectors.shape[1] for side in (self.unreachable, self.reachable_only, self.unobservable)
        )


def hidden_spaces(A: Array, B: Array, C: Array, threshold: float) -> Spaces:
    """Return what is hidden: exactly, or, if that is more, within a relative change of each number by the threshold.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
        Scaled by powers of two.
    threshold : float
    """
    n = A.shape[0]
    nothing = Side(np.zeros((n, 0)))
    if n == 0:
        return Spaces(nothing, nothing, nothing, True, False)
    exact = None
    if n <= LARGEST_EXACT:
        from realize.kernels.exact.hidden_spaces import exact_hidden_spaces

        exact = exact_hidden_spaces(A, B, C)
    found, blind = _at_once(A, B, C, threshold)
    if n <= SEARCHED:
        searched = _searched(A, B, C, threshold)
        # what one search misses the other may find; each mode found is hidden by a change that small
        found, blind = max(searched, found, key=lambda sides: _counts(*sides)), False
    if exact is None or _counts(*found) > _hidden(*(space.shape[1] for space in exact)):
        return Spaces(*found, False, blind)
    sides = [_exact_side(own, space) for own, space in zip(found, exact, strict=True)]
    # numbers that hide something exactly are no rounded ones; where they hide nothing, rounding may have undone it
    return Spaces(sides[0], sides[1], sides[2], True, blind and not any(space.shape[1] for space in exact))


def _counts(first: Side, second: Side, every: Side) -> tuple[int, int]:
    return _hidden(*(side.vectors.shape[1] for side in (first, second, every)))


def _hidden(unreachable: int, reachable_only: int, unobservable: int) -> tuple[int, int]:
    """Return what counts between decisions: how much the order falls, then how much is hidden on each side."""
    return unreachable + reachable_only, unreachable + unobservable


@dataclass(frozen=True)
class Unreached:
    """What inputs do not reach, and whether that was decided exactly, or could not well be decided (`Spaces`)."""

    side: Side
    exactly: bool
    blind: bool


def unreached_states(A: Array, B: Array, threshold: float) -> Unreached:
    """Return what inputs do not reach, decided as in `hidden_spaces`.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
        Scaled by powers of two.
    threshold : float
    """
    n = A.shape[0]
    exact = None
    if n == 0:
        return Unreached(Side(np.zeros((0, 0))), True, False)
    if n <= LARGEST_EXACT:
        from realize.kernels.exact.hidden_spaces import exact_unreachable

        exact = exact_unreachable(A, B)
    if n <= SEARCHED:
        side, blind = hidden_side(A, B, threshold), False
    else:
        poles, W, X = many_modes.decomposition(A)
        side, blind = many_modes.hidden_modes(A, B, threshold, poles, W, X)[0], many_modes.crowded(poles)
    if exact is None or side.vectors.shape[1] > exact.shape[1]:
        return Unreached(side, False, blind)
    return Unreached(_exact_side(side, exact), True, blind and not exact.shape[1])


def _exact_side(own: Side, space: Array) -> Side:
    # what the search left is the next mode only where it found all that is hidden exactly
    all_found = own.vectors.shape[1] == space.shape[1]
    return Side(space, own.modes, [0.0] * len(own.modes), own.kept if all_found else np.inf, own.kept_mode)


def _searched(A: Array, B: Array, C: Array, threshold: float) -> tuple[Side, Side, Side]:
    n = A.shape[0]
    left, right = spectra(A)
    first = hidden_side(A, B, threshold, spectrum=left)
    dual, outputs = A.T.copy(), C.T.copy()
    every = hidden_side(dual, outputs, threshold, spectrum=right)
    k = first.vectors.shape[1]
    second = every
    if k:
        reached = np.linalg.qr(first.vectors, mode="complete")[0][:, k:]
        second = hidden_side(dual, outputs, threshold, reached) if k < n else Side(np.zeros((n, 0)))
    return first, second, every


def _at_once(A: Array, B: Array, C: Array, threshold: float) -> tuple[tuple[Side, Side, Side], bool]:
    poles, W, X = many_modes.decomposition(A)
    first, unreached = many_modes.hidden_modes(A, B, threshold, poles, W, X)
    every, unseen = many_modes.hidden_modes(A.T, C.T, threshold, poles, X, W)
    second = every
    if np.any(unreached):
        second = _part(every, poles, unseen & ~unreached, first.vectors)
    return (first, second, every), many_modes.crowded(poles)


def _part(every: Side, poles: NDArray[np.complex128], which: NDArray[np.bool_], unreached: Array) -> Side:
    """Return those of the unseen modes that are reached, within the reachable states."""
    n = every.vectors.shape[0]
    count = int(np.sum(which))
    if not count:
        return Side(np.zeros((n, 0)), kept=every.kept)
    # of the unseen states those that are orthogonal to what is not reached
    inside = every.vectors @ np.linalg.svd(unreached.T @ every.vectors)[2][-count:].T
    inside = np.linalg.qr(inside - unreached @ (unreached.T @ inside))[0]
    errors = [every.errors[int(np.argmin(np.abs(np.array(every.modes) - s)))] for s in poles[which]]
    return Side(inside, poles[which].tolist(), errors, every.kept)
