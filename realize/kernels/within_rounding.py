"""Modes of a state model that an elementwise relative change of its own numbers makes unreachable or unobservable.

Each mode is searched for from its eigenvalue on (`single_mode`: the elementwise backward error, made small). Modes
found are taken out one after the other: the next w is orthogonal to the span F of those before, and its residual may
use their rows, so that clusters and chains of generalised vectors are no exception.

Of a vector nearly parallel to those before only what is orthogonal to them counts, so that one mode is not counted
twice. Unobservable modes are those of the dual, within the reachable subspace.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.kernels.single_mode import nearest_mode

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Entries of a new direction this small are rounding where nothing is.
CLEARED = 1e-13
#: Models of at most this order have every mode searched; larger ones those whose own vectors are nearest to hidden.
ALL_MODES = 100
SOME_MODES = 8
#: A first guess this many times the threshold is not worth a search in a large model.
PROMISING = 1e6
#: Vectors of which less than this is orthogonal to those before are judged by that part, less than that are the same.
APART, SAME = 0.1, 1e-8
#: Eigenvalues that differ by more than this, relative to their size, are two modes, however near their vectors are.
OTHER = 1e-3
#: Eigenvalues this near to each other, relative to their size, may be one that rounding drove apart.
CLUSTER = 1e-2
#: Singular vectors tried at the centre of a cluster.
CENTRED = 2


@dataclass(frozen=True)
class Side:
    """Modes hidden on one side.

    Attributes
    ----------
    vectors : (n, k) array
        Real basis F of the hidden vectors, in the coordinates of the model given.
    modes : list of complex
        Their eigenvalues; k of them.
    errors : list of float
        Backward error of each mode.
    kept : float
        Smallest backward error found among the modes that are left; infinite for none.
    kept_mode : complex or None
    """

    vectors: Array
    modes: list[complex] = field(default_factory=list)
    errors: list[float] = field(default_factory=list)
    kept: float = math.inf
    kept_mode: complex | None = None


Spectrum = tuple[ComplexArray, ComplexArray]


def hidden_side(
    A: Array, B: Array, threshold: float, within: Array | None = None, spectrum: Spectrum | None = None
) -> Side:
    """Return the modes that a relative change of at most the threshold makes unreachable.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
        Scaled so that rows of A are of like size: the search is orthogonal, the decision does not depend on it.
    threshold : float
        Largest relative change of an entry.
    within : (n, q) array, optional
        Orthonormal basis of an invariant subspace of A' in which the vectors lie; everything unless given.
    spectrum : (n,) and (n, n) arrays, optional
        Eigenvalues and left vectors of A, where they are known and ``within`` is not given.
    """
    n = A.shape[0]
    space = np.eye(n) if within is None else within
    M, sizes = np.hstack([A, B]), np.hstack([np.abs(A), np.abs(B)])
    modes: list[complex] = []
    errors: list[float] = []
    F = np.zeros((n, 0))
    while True:
        # each mode by itself first, then what is left beside those found
        free = space if not F.shape[1] else _complement(space, F)
        if spectrum is not None and not F.shape[1]:
            poles, vectors = spectrum
        else:
            poles, vectors = _left_vectors(free.T @ A @ free)
        guesses = _first_guesses(free @ vectors, B, sizes[:, n:])
        kept, kept_mode = math.inf, None
        accepted, searched = False, 0
        for k in np.argsort(guesses, kind="stable"):
            s = complex(poles[k])
            if s.imag < 0:
                continue
            if n > ALL_MODES and (searched >= SOME_MODES or guesses[k] > PROMISING * threshold):
                kept, kept_mode = min((kept, kept_mode), (guesses[k], s), key=lambda pair: pair[0])
                break
            searched += 1
            starts = _starts(s, free @ vectors[:, k], poles, A, B, free)
            for at, w in starts:
                error, at, w = _judged(M, space, F, at, w, threshold, modes)
                wider = _orthonormal(F, _real_basis(at, w)) if error <= threshold else None
                if wider is not None:
                    F, accepted = wider, True
                    modes += [at, at.conjugate()] if at.imag else [at]
                    errors += [error] * (2 if at.imag else 1)
                    break
                if threshold < error < kept:
                    kept, kept_mode = error, at
        if not accepted or F.shape[1] >= space.shape[1]:
            break
    return Side(F, modes, errors, kept, kept_mode)


def _starts(
    s: complex, w: ComplexArray, poles: ComplexArray, A: Array, B: Array, space: Array
) -> list[tuple[complex, ComplexArray]]:
    """Return where to search from.

    A pair near the real axis may be two real modes that rounding drove apart; and in a cluster the vectors of the
    eigenvalues say little: the smallest singular vectors of [A - s I, B] at its centre are better.
    """
    found: list[tuple[complex, ComplexArray]] = []
    near = poles[np.abs(poles - s) <= CLUSTER * abs(s)]
    if near.size > 1:
        centre = complex(near.mean())
        centre = complex(centre.real) if abs(centre.imag) <= 1e-6 * abs(centre) else centre
        table = space.T @ np.hstack([A - centre * np.eye(A.shape[0]), B])
        table = table.real if centre.imag == 0 else table
        vectors = np.linalg.svd(table)[0][:, ::-1].conj()
        found += [(centre, (space @ vectors[:, k]).astype(complex)) for k in range(min(near.size, CENTRED))]
    if s.imag and abs(s.imag) < CLUSTER * abs(s):
        found += [(complex(s.real), w.real.astype(complex)), (complex(s.real), w.imag.astype(complex))]
    return [*found, (s, w)]


def _real_basis(s: complex, w: ComplexArray) -> Array:
    return np.column_stack([w.real, w.imag]) if s.imag else w.real[:, None]


def _judged(
    M: Array,
    space: Array,
    F: Array,
    s: complex,
    w: ComplexArray,
    threshold: float,
    modes: list[complex],
) -> tuple[float, complex, ComplexArray]:
    """Return backward error, eigenvalue and vector from a start: by itself, or beside those found that are near."""
    first = w
    error, at, w = nearest_mode(M, s, w, threshold / 64, space)
    if not F.shape[1]:
        return error, at, w
    rest = _rest(F, w)
    other = all(abs(at - mode) > OTHER * max(abs(at), abs(mode)) for mode in modes)
    if error > threshold or not (rest >= APART or (other and rest >= SAME)):
        # not far from those before: what is orthogonal to them decides
        again, at = (w, at) if rest > SAME else (first, s)
        error, at, w = nearest_mode(M, at, again, threshold / 64, _complement(space, F), F)
    return error, at, w


def _left_vectors(A: Array) -> tuple[ComplexArray, ComplexArray]:
    """Return eigenvalues and vectors w with w' A = s w' (not conjugated), columns of unit length."""
    poles, vectors = scipy.linalg.eig(A.T, check_finite=False)
    return poles, vectors


def spectra(A: Array) -> tuple[Spectrum, Spectrum]:
    """Return eigenvalues with left vectors of A, and with those of A', from one decomposition."""
    poles, left, right = scipy.linalg.eig(A, left=True, right=True, check_finite=False)
    return (poles, left.conj()), (poles, right)


def _first_guesses(W: ComplexArray, B: Array, sizes: Array) -> Array:
    """Return for each left eigenvector the relative change of B alone that makes it see nothing of it."""
    above, below = np.abs(W.T @ B), np.abs(W).T @ sizes
    ratio = np.divide(above, below, out=np.zeros(above.shape), where=below > 0)
    guesses: Array = ratio.max(axis=1, initial=0.0)
    return guesses


def _complement(space: Array, F: Array) -> Array:
    """Return an orthonormal basis of what of the space is orthogonal to F, which lies in it."""
    inside = space.T @ F
    q, _ = np.linalg.qr(inside, mode="complete")
    return space @ q[:, F.shape[1] :]


def _rest(F: Array, w: ComplexArray) -> float:
    """Return what part of a vector is orthogonal to the vectors before."""
    return float(np.linalg.norm(w - F @ (F.T @ w)) / np.linalg.norm(w))


def _orthonormal(F: Array, more: Array) -> Array | None:
    """Return an orthonormal basis of both, or None where there is nothing new in a column."""
    for column in more.T:
        size = np.linalg.norm(column)
        for _ in range(2):
            column = column - F @ (F.T @ column)
        rest = np.linalg.norm(column)
        if not rest > SAME * size:
            return None
        column = column / rest
        F = np.column_stack([F, np.where(np.abs(column) > CLEARED, column, 0.0)])
    return F
