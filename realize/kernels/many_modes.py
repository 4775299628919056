"""Modes of large state models that inputs do not reach, all of them tried at once from one eigenvalue decomposition."""

from __future__ import annotations

import math

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.kernels.within_rounding import Side

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Modes that inputs drive by more than this, relative to the numbers of B, are not looked at any closer.
PROMISING = 1e-3
#: Directions of less than this size beside those before are none.
SAME = 1e-10
#: Eigenvalues nearer to each other than this, relative to their size, have no vectors of their own.
CROWDED = 1e-6
#: Corrections of each vector.
PASSES = 3


def decomposition(A: Array) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
    """Return eigenvalues s, left vectors W and right vectors X in columns of unit length: W' A = s W', A X = X s.

    W' is transposed and not conjugated.
    """
    poles, left, right = scipy.linalg.eig(A, left=True, right=True, check_finite=False)
    return poles, left.conj(), right


def crowded(poles: ComplexArray) -> bool:
    """Return whether eigenvalues are too near to each other to be told apart by their vectors."""
    gaps = np.abs(poles[:, None] - poles)
    np.fill_diagonal(gaps, np.inf)
    return bool(np.any(gaps <= CROWDED * np.abs(poles)[:, None]))


def hidden_modes(
    A: Array, B: Array, threshold: float, poles: ComplexArray, W: ComplexArray, X: ComplexArray
) -> tuple[Side, NDArray[np.bool_]]:
    """Return the simple modes that a relative change of at most the threshold makes unreachable, and which they are.

    A computed left vector w of a hidden mode s is off by the rounding of A over the distance of s to the others, so
    that w'B is not quite zero. The smallest change of A and B that makes it so is, to first order, that of a vector
    w + d with d' = y' (A - s I)^+ and ::

        w'B + y' Z + b = 0,    Z = (A - s I)^+ B = sum_j x_j (w_j'B) / (s_j - s),    |y|^2 + |b|^2 least

    (the smallest singular value of [A - s I, B], Eising 1984). A few such steps are taken, the residual of w included;
    the elementwise backward error decides (`realize.kernels.within_rounding`).

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
        Scaled.
    threshold : float
        Elementwise relative change within which a mode counts as unreachable.
    poles, W, X : arrays
        Eigenvalues, left and right vectors of A (`decomposition`).

    Returns
    -------
    side : Side
        ``vectors`` orthonormal; ``kept`` the smallest change found among the modes that are left.
    which : bool array [n]
        The eigenvalues that are hidden.

    References
    ----------
    .. [1] R. Eising, Between controllable and uncontrollable, Syst. Control Lett. 4 (1984) 263-264 (from memory).
    """
    n, m = B.shape
    driven = W.T @ B
    guesses = _ratio(np.abs(driven), np.abs(W).T @ np.abs(B))
    near = np.flatnonzero((guesses <= PROMISING) & (poles.imag >= 0))
    which = np.zeros(n, dtype=bool)
    rest = guesses[guesses > PROMISING].min(initial=math.inf)
    if not near.size:
        return Side(np.zeros((n, 0)), kept=float(rest)), which
    corrected, best = W[:, near], _backward_errors(A, B, poles[near], W[:, near])
    real = poles[near].imag == 0
    with np.errstate(all="ignore"):
        dual = W / np.sum(W * X, axis=0)
        apart = poles[:, None] - poles[near]
        apart[near, np.arange(near.size)] = np.inf
        over = 1.0 / apart
        Z = (X @ (over[:, :, None] * (dual.T @ B)[:, None, :]).reshape(n, -1)).reshape(n, near.size, m)
        a, b = float(np.linalg.norm(A)) or 1.0, float(np.linalg.norm(B)) or 1.0
        Z = np.moveaxis(Z, 1, 0) * (a / b)
        # y over a and b over its own size: least together
        normal = np.conj(np.swapaxes(Z, 1, 2)) @ Z + np.eye(m)
        fine = np.flatnonzero(np.all(np.isfinite(normal), axis=(1, 2)))
        inverse = np.zeros(normal.shape, dtype=complex)
        inverse[fine] = np.linalg.inv(np.swapaxes(normal[fine], 1, 2))
        w, s = W[:, near], poles[near]
        for _ in range(PASSES):
            residual = A.T @ w - w * s
            left = w.T @ B - np.einsum("ik,kij->kj", residual, Z) * (b / a)
            weights = np.einsum("kij,kj->ki", inverse, left)
            y = -np.einsum("kj,kij->ik", weights, Z.conj()) * (a / b)
            w = w + dual @ (over * (X.T @ (y - residual)))
            w[:, real] = w[:, real].real
            w = w / np.linalg.norm(w, axis=0)
            s = np.sum(w.conj() * (A.T @ w), axis=0)
            again = _backward_errors(A, B, s, w)
            better = np.isfinite(again) & (again < best)
            corrected = np.where(better, w, corrected)
            best = np.where(better, again, best)
    errors = best
    found = np.flatnonzero(errors <= threshold)
    kept = min(float(rest), float(errors[errors > threshold].min(initial=math.inf)))
    columns: list[Array] = []
    modes: list[complex] = []
    changes: list[float] = []
    for k in found:
        at, vector = complex(poles[near[k]]), corrected[:, k]
        pair = [at, at.conjugate()] if at.imag else [at]
        columns += [vector.real, vector.imag] if at.imag else [vector.real]
        modes += pair
        changes += [float(errors[k])] * len(pair)
        which[near[k]] = True
        if at.imag:
            which[int(np.argmin(np.abs(poles - at.conjugate())))] = True
    return Side(_basis(columns, n), modes, changes, kept), which


def _basis(columns: list[Array], n: int) -> Array:
    if not columns:
        return np.zeros((n, 0))
    q, r, _ = scipy.linalg.qr(np.column_stack(columns), mode="economic", pivoting=True, check_finite=False)
    size = np.abs(np.diagonal(r))
    basis: Array = q[:, size > SAME * size[0]]
    return basis


def _backward_errors(A: Array, B: Array, poles: ComplexArray, W: ComplexArray) -> Array:
    """Return the elementwise relative change of A and B that makes each vector exact (Oettli & Prager 1964)."""
    size = np.abs(W)
    inner = _ratio(np.abs(A.T @ W - W * poles).T, (np.abs(A).T @ size).T)
    return np.maximum(inner, _ratio(np.abs(B.T @ W).T, (np.abs(B).T @ size).T))


def _ratio(above: Array, below: Array) -> Array:
    """Return the largest ratio of each row; where there is no number to change, nothing can be."""
    ratio = np.divide(above, below, out=np.where(above > 0, np.inf, 0.0), where=below > 0)
    largest: Array = ratio.max(axis=1, initial=0.0)
    return largest
