"""Modes of a state model that an elementwise relative change of its own numbers makes unreachable or unobservable.

Eigenvalues far from each other are tried one by one: the vector of the eigenvalue is where the search for the smallest
change starts (`single_mode`). Eigenvalues near each other may be one that rounding drove apart, and their vectors say
little: of the invariant subspace of such a group, the directions that the inputs reach least are tried, as many as
possible first. In the end all that was found is judged together, by one change of the numbers (`joint_change`).
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np
import scipy.linalg
import scipy.linalg.lapack
from numpy.typing import NDArray

from realize.kernels.joint_change import joint_change
from realize.kernels.single_mode import nearest_mode

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
EPS = float(np.finfo(float).eps)

#: Models of at most this order have every mode searched; larger ones those whose own vectors are nearest to hidden.
ALL_MODES = 100
SOME_MODES = 8
#: A first guess this many times the threshold is not worth a search in a large model.
PROMISING = 1e6
#: Columns of which less than this is not in the span of those before are the same.
SAME = 1e-9
#: Eigenvalues this near to each other, relative to their size, may be one that rounding drove apart.
CLUSTER = 1e-2
#: A search that ends at a mode this near to where it began, relative to its size, joins both.
NEIGHBOURS = 0.2
#: So do those whose own uncertainties overlap, if these stay below this part of the size of A.
UNCERTAIN = 1e-2
#: Roundings that the uncertainty of an eigenvalue is made of.
ROUNDINGS = 16
#: A change below this many times the rounding of one number ends a search.
ENOUGH = 0.5
#: Larger groups of near eigenvalues are taken apart by their own vectors only.
LARGEST_GROUP = 16


class Part(NamedTuple):
    """Hidden vectors of one group of eigenvalues, given by their places in the spectrum."""

    places: frozenset[int]
    vectors: Array
    modes: list[complex]
    error: float


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
        Change of the numbers that each takes.
    kept : float
        Smallest change found that would hide one more; infinite for none.
    parts : list of Part
        The same group by group.
    doubtful : bool
        A group was too large for its invariant subspace, or vectors of two groups are the same: a mode may
        have been missed.
    """

    vectors: Array
    modes: list[complex] = field(default_factory=list)
    errors: list[float] = field(default_factory=list)
    kept: float = math.inf
    parts: list[Part] = field(default_factory=list)
    doubtful: bool = False


class Spectrum(NamedTuple):
    """Eigenvalues, vectors w with w' A = s w' in columns of unit length, and how uncertain the eigenvalues are."""

    poles: ComplexArray
    vectors: ComplexArray
    uncertain: Array


def spectra(A: Array) -> tuple[Spectrum, Spectrum]:
    """Return the spectrum of A, and that of A', from one decomposition."""
    if not A.size:
        none = Spectrum(np.zeros(0, dtype=complex), np.zeros((0, 0), dtype=complex), np.zeros(0))
        return none, none
    poles, left, right = scipy.linalg.eig(A, left=True, right=True, check_finite=False)
    norm = float(np.linalg.norm(A))
    cosines = np.abs(np.sum(left.conj() * right, axis=0))
    with np.errstate(divide="ignore", over="ignore"):
        uncertain = ROUNDINGS * EPS * norm / cosines
    uncertain = np.minimum(uncertain, UNCERTAIN * norm)
    return Spectrum(poles, left.conj(), uncertain), Spectrum(poles, right, uncertain)


def groups(spectrum: Spectrum) -> list[NDArray[np.intp]]:
    """Return the places of eigenvalues near each other, with their conjugates, group by group.

    A pair of conjugates that is near nothing else, and apart by itself, is a group of two.
    """
    poles = spectrum.poles
    size, uncertain = CLUSTER * np.abs(poles), 2 * spectrum.uncertain
    # rounding drives apart what is sensitive on both sides
    reach = np.maximum(np.maximum(size[:, None], size), np.minimum(uncertain[:, None], uncertain))
    near = np.abs(poles[:, None] - poles) <= reach
    # conjugates stay together; LAPACK lists them side by side
    up = np.flatnonzero(poles.imag > 0)
    near[up, up + 1] = near[up + 1, up] = True
    count, labels = _components(near)
    return [np.flatnonzero(labels == k) for k in range(count)]


def _components(near: NDArray[np.bool_]) -> tuple[int, NDArray[np.int64]]:
    from scipy.sparse.csgraph import connected_components

    count, labels = connected_components(near, directed=False)
    return int(count), labels


def hidden_side(A: Array, B: Array, threshold: float, spectrum: Spectrum | None = None) -> Side:
    """Return the modes that a relative change of at most the threshold makes unreachable.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
        Scaled so that rows of A are of like size: the search is orthogonal, the decision does not depend on it.
    threshold : float
        Largest relative change of an entry.
    spectrum : Spectrum, optional
        That of A, where it is known.
    """
    n = A.shape[0]
    if n == 0:
        return Side(np.zeros((0, 0)))
    M = np.hstack([A, B])
    spectrum = spectra(A)[0] if spectrum is None else spectrum
    guesses = _first_guesses(spectrum.vectors, M, n)
    left = sorted(groups(spectrum), key=lambda places: float(guesses[places].min()))
    invariant = _Invariant(A)
    kept, doubtful = math.inf, False
    parts: list[Part] = []
    searched = 0
    while left:
        places = left.pop(0)
        if n > ALL_MODES:
            guess = float(guesses[places].min())
            if (searched >= SOME_MODES and not parts) or guess > PROMISING * threshold:
                kept = min(kept, max(guess, threshold))
                break
        searched += 1
        part, following, elsewhere = _group(M, spectrum, places, threshold, invariant)
        joined: set[int] = set() if elsewhere is None else _joined(spectrum, places, elsewhere, left, parts)
        if joined:
            # the search ended at a mode of other groups near by: together they are one
            parts = [other for other in parts if not other.places & joined]
            left = [others for others in left if not joined & set(others.tolist())]
            left.insert(0, np.array(sorted({*joined, *places.tolist()})))
            continue
        doubtful = doubtful or places.size > LARGEST_GROUP
        kept = min(kept, following)
        if part is not None:
            parts.append(part)
    return _all(n, parts, kept, doubtful)


def _joined(
    spectrum: Spectrum, places: NDArray[np.intp], modes: ComplexArray, left: list[NDArray[np.intp]], parts: list[Part]
) -> set[int]:
    """Return the places of other groups that modes belong to, where those are not far from the group's own."""
    poles = spectrum.poles
    nearest = np.abs(modes[:, None] - poles).argmin(axis=1)
    others = {int(k) for k in nearest} - set(places.tolist())
    apart = np.abs(poles[list(others)][:, None] - poles[places]).min(axis=1)
    if np.any(apart > NEIGHBOURS * np.abs(poles[list(others)])):
        return set()
    found: set[int] = set()
    for group in [*(frozenset(group.tolist()) for group in left), *(part.places for part in parts)]:
        if others & group:
            found |= group
    return found if len(found) + places.size <= LARGEST_GROUP else set()


def _first_guesses(W: ComplexArray, M: Array, n: int) -> Array:
    """Return for each left eigenvector the relative change of B alone that makes it see nothing of it."""
    above, below = np.abs(W.T @ M[:, n:]), np.abs(W).T @ np.abs(M[:, n:])
    ratio = np.divide(above, below, out=np.zeros(above.shape), where=below > 0)
    guesses: Array = ratio.max(axis=1, initial=0.0)
    return guesses


class _Invariant:
    """Left invariant subspaces of A for chosen eigenvalues, from one real Schur form."""

    def __init__(self, A: Array) -> None:
        self.A = A
        self.schur: tuple[Array, Array, ComplexArray] | None = None

    def basis(self, poles: ComplexArray) -> Array | None:
        """Return an orthonormal basis for as many eigenvalues as given, those nearest to them; None without success."""
        if self.schur is None:
            T, Z = scipy.linalg.schur(self.A.T, check_finite=False)
            none = np.zeros(T.shape[0], dtype=np.int32)
            _, _, re, im, *_ = scipy.linalg.lapack.dtrsen(none, T, Z, job=b"N")
            self.schur = T, Z, re + 1j * im
        T, Z, own = self.schur
        select = np.zeros(own.size, dtype=np.int32)
        for pole in poles:
            k = int(np.argmin(np.where(select == 0, np.abs(own - pole), np.inf)))
            select[k] = 1
            if own[k].imag:
                select[k + (1 if own[k].imag > 0 else -1)] = 1
        _, Q, _, _, count, _, _, info = scipy.linalg.lapack.dtrsen(select, T, Z, job=b"N")
        found: Array = Q[:, : int(count)]
        return found if info == 0 else None


def _group(
    M: Array, spectrum: Spectrum, places: NDArray[np.intp], threshold: float, invariant: _Invariant
) -> tuple[Part | None, float, ComplexArray | None]:
    """Return what is hidden of a group, the smallest change found that is too large, and modes met elsewhere."""
    kept = math.inf
    elsewhere: ComplexArray | None = None
    for F in _starts(M, spectrum, places, threshold, invariant):
        error, F, S = joint_change(M, F, ENOUGH * EPS)
        if not math.isfinite(error):
            continue
        modes: ComplexArray = np.linalg.eigvals(S).astype(complex)
        own = np.isin(np.abs(modes[:, None] - spectrum.poles).argmin(axis=1), places).all()
        if own and error <= threshold:
            return Part(frozenset(places.tolist()), F, [complex(x) for x in modes], error), kept, None
        if own:
            kept = min(kept, error)
        elif error <= threshold and elsewhere is None:
            elsewhere = modes
    return None, kept, elsewhere


def _starts(
    M: Array, spectrum: Spectrum, places: NDArray[np.intp], threshold: float, invariant: _Invariant
) -> Iterator[Array]:
    """Yield bases of what may be hidden of a group, the largest first."""
    n = M.shape[0]
    poles = spectrum.poles[places]
    found: list[tuple[float, Array]] = []
    for k in places:
        s = complex(spectrum.poles[k])
        if s.imag >= 0:
            error, at, w = nearest_mode(M, s, spectrum.vectors[:, k], ENOUGH * EPS)
            found.append((error, _real_basis(at, w)))
    if places.size == 1 or (places.size == 2 and poles[0].imag and abs(poles[0].imag) > CLUSTER * abs(poles[0])):
        yield from (F for _, F in found)
        return
    W = invariant.basis(poles) if places.size <= LARGEST_GROUP else None
    if W is not None:
        centre = float(poles.real.mean())
        inner, inputs = W.T @ M[:, :n] @ W - centre * np.eye(W.shape[1]), W.T @ M[:, n:]
        found += _at_centre(M, W, poles)
    found = [entry for entry in sorted(found, key=lambda entry: entry[0]) if math.isfinite(entry[0])]
    good = _span([F for error, F in found if error <= threshold], n)
    for size in range(places.size, 0, -1):
        if W is not None and size <= W.shape[1]:
            yield W @ _least_reached(inner, inputs, size)
        if good.shape[1] >= size:
            yield good[:, :size]
    if found and found[0][0] > threshold:
        yield found[0][1]


def _at_centre(M: Array, W: Array, poles: ComplexArray) -> list[tuple[float, Array]]:
    """Return single modes searched from the smallest singular vectors at the centre of a group."""
    n = M.shape[0]
    centre = complex(poles[poles.imag >= 0].mean())
    centre = complex(centre.real) if np.any(poles.imag == 0) or abs(centre.imag) <= CLUSTER * abs(centre) else centre
    table = W.T @ (M - centre * np.eye(n, M.shape[1]))
    vectors = np.linalg.svd(table.real if centre.imag == 0 else table)[0][:, ::-1].conj()
    found = []
    for k in range(min(2, vectors.shape[1])):
        error, at, w = nearest_mode(M, centre, (W @ vectors[:, k]).astype(complex), ENOUGH * EPS)
        found.append((error, _real_basis(at, w)))
    return found


def _least_reached(A: Array, B: Array, size: int) -> Array:
    """Return as many directions of a small model as wanted, those that its inputs reach least."""
    scale = float(np.linalg.norm(A, 2)) or 1.0
    columns = [B]
    for _ in range(A.shape[0] - 1):
        columns.append(A @ columns[-1] / scale)
    return np.linalg.svd(np.hstack(columns))[0][:, -size:]


def _real_basis(s: complex, w: ComplexArray) -> Array:
    if s.imag:
        return np.column_stack([w.real, w.imag])
    return (w.real if np.linalg.norm(w.real) >= np.linalg.norm(w.imag) else w.imag)[:, None]


def _span(bases: list[Array], n: int) -> Array:
    """Return orthonormal columns of all bases, one after the other, without what is there already."""
    F = np.zeros((n, 0))
    for basis in bases:
        for column in basis.T:
            rest = column / np.linalg.norm(column)
            for _ in range(2):
                rest = rest - F @ (F.T @ rest)
            size = float(np.linalg.norm(rest))
            if size > SAME:
                F = np.column_stack([F, rest / size])
    return F


def _all(n: int, parts: list[Part], kept: float, doubtful: bool) -> Side:
    """Return all that was found, without what is found twice."""
    F = np.zeros((n, 0))
    chosen = []
    for part in sorted(parts, key=lambda part: part.error):
        wider = _span([F, part.vectors], n)
        if wider.shape[1] == F.shape[1] + part.vectors.shape[1]:
            F = wider
            chosen.append(part)
    modes = [mode for part in chosen for mode in part.modes]
    errors = [part.error for part in chosen for _ in part.modes]
    return Side(F, modes, errors, kept, chosen, doubtful or len(chosen) < len(parts))
