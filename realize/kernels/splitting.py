"""Separation of the stable part of a model from what has to be kept: unstable poles and poles on the axis."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import scipy.linalg
import scipy.linalg.lapack
from numpy.typing import NDArray

from realize.kernels.lyapunov import quasi_triangular_sylvester, schur_eigenvalues
from realize.kernels.schur_response import triangular_solutions

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

EPS = float(np.finfo(float).eps)
#: Poles closer to the axis than this fraction of the matrix norm are examined; a fourfold integrator scatters to 1e-4.
NEAR = 1e-3
#: At most so many suspects are examined closely, the nearest first: each costs a few triangular solves.
EXAMINED = 64


@dataclass(frozen=True)
class Split:
    """A model in coordinates where A is block diagonal: stable part first, kept part behind it.

    Attributes
    ----------
    stable, kept : tuple of arrays (T, B, C)
        The two parts; T upper quasi-triangular (the kept one has its integrators as a strictly triangular block),
        unless nothing was split (`whole`).
    right, left : (n, n) arrays
        ``left @ A @ right`` is block diagonal, ``left @ right`` the identity.
    kept_poles : complex array
    marginal : bool array
        Which of the kept poles lie on the axis (unit circle) within the rounding of A's entries.
    coupling : float
        Norm of the solution of the Sylvester equation: 0 if the parts were decoupled in orthonormal coordinates.
        Rounding errors of the parts grow by 1 + coupling^2 at most.
    separation : float
        Estimated separation of the two parts relative to the norm of A: smallest singular
        value of the Sylvester operator.
    """

    stable: tuple[Array, Array, Array]
    kept: tuple[Array, Array, Array]
    right: Array
    left: Array
    kept_poles: ComplexArray
    marginal: NDArray[np.bool_]
    coupling: float
    separation: float

    @cached_property
    def stable_poles(self) -> ComplexArray:
        """Poles of the stable part: the eigenvalues of its quasi-triangular T, or of a T that was left as it is."""
        T = self.stable[0]
        below = np.diagonal(T, -1) != 0
        if np.any(np.tril(T, -2)) or np.any(below[1:] & below[:-1]):
            return np.linalg.eigvals(T).astype(complex)
        return schur_eigenvalues(T)


def whole(A: Array, B: Array, C: Array) -> Split:
    """Return the split of a model that is known to be stable: nothing is kept, the coordinates stay.

    Parameters
    ----------
    A, B, C : arrays (n, n), (n, m), (p, n)
    """
    empty = np.zeros((0, 0)), np.zeros((0, B.shape[1])), np.zeros((C.shape[0], 0))
    same = np.eye(A.shape[0])
    return Split((A, B, C), empty, same, same, np.zeros(0, dtype=complex), np.zeros(0, dtype=bool), 0.0, np.inf)


def matrix_norm(A: Array) -> float:
    """Return an upper bound of the 2-norm: root of (largest row sum times largest column sum)."""
    if A.size == 0:
        return 0.0
    absolute = np.abs(A)
    return float(np.sqrt(absolute.sum(axis=0).max()) * np.sqrt(absolute.sum(axis=1).max()))


def _smallest_pair(A: Array, T: Array, Q: Array, point: complex) -> tuple[float, Array, Array]:
    """Return the smallest singular value of A - point I and the moduli of its singular vectors."""
    n = A.shape[0]
    if n <= 64:
        u, s, vh = np.linalg.svd(A - point * np.eye(n))
        return float(s[-1]), np.abs(u[:, -1]), np.abs(vh[-1])
    w = np.array([[point.real, point.imag], [-point.imag, point.real]])
    state = np.random.default_rng(n).standard_normal((n, 2))
    other, size = state, 1.0
    for _ in range(4):
        # two real columns stand for one complex vector: (T - point) x = f, then the adjoint
        other, scale, _info = scipy.linalg.lapack.dtrsyl(T, w, state / np.linalg.norm(state), isgn=-1)
        grown = float(np.linalg.norm(other))
        state, again, _info = scipy.linalg.lapack.dtrsyl(T, w.T, other / grown, trana="T", isgn=-1)
        size = max(scale / grown, again / float(np.linalg.norm(state)))
    left, right = Q @ (other[:, 0] + 1j * other[:, 1]), Q @ (state[:, 0] + 1j * state[:, 1])
    # `other` approximates a right singular vector, `state` (after the adjoint) a left one
    return size, np.abs(right) / np.linalg.norm(right), np.abs(left) / np.linalg.norm(left)


def singular_at(A: Array, T: Array, Q: Array, point: complex) -> bool:
    """Say whether a relative change of A's entries by 4 n eps at most makes `point` an eigenvalue (to first order)."""
    value, u, v = _smallest_pair(A, T, Q, point)
    own = abs(point) * float(u @ v)
    return value <= 4 * A.shape[0] * EPS * (float(u @ (np.abs(A) @ v)) + own)


def connected(A: Array, T: Array, Q: Array, pole: complex, point: complex) -> bool:
    """Say whether rounding can move this pole to `point`: all of the way between them is singular within rounding."""
    # golden fractions of the way: none of them falls on another pole of an evenly spaced row
    return all(singular_at(A, T, Q, pole + part * (point - pole)) for part in (1.0, 0.618, 0.382, 0.854))


def _suspects(A: Array, T: Array, points: ComplexArray) -> NDArray[np.bool_]:
    """Say at which points A - point I may be singular within rounding, by blocked substitution for many at a time.

    |(T - point I)^-1 f| for a random f of length 1 is about 1 / (sigma sqrt(n)) at least, up to a factor that exceeds
    1e3 with a probability below 1e-3; everything larger than 1e-3 of the tolerance's inverse stays under suspicion.
    """
    n = T.shape[0]
    right = np.random.default_rng(n).standard_normal((n, 1)) / np.sqrt(n)
    with np.errstate(over="ignore", invalid="ignore"):
        size = np.concatenate(
            [np.linalg.norm(found[:, 0], axis=1) for found in triangular_solutions(T, right, points)] or [np.zeros(0)]
        )
    hit = ~np.isfinite(size)
    tolerance = 4 * n * EPS * (matrix_norm(A) + np.abs(points)) * np.sqrt(2 * n)
    return hit | (np.where(hit, 0.0, size) * tolerance >= 1e-3)


def _nearest_on_axis(pole: complex, sampled: bool) -> complex:
    if sampled:
        return pole / abs(pole) if pole != 0 else 1.0 + 0j
    return complex(0.0, pole.imag)


def _classify(
    A: Array, T: Array, Q: Array, poles: ComplexArray, sampled: bool
) -> tuple[NDArray[np.bool_], NDArray[np.bool_], Array]:
    """Return for each pole: kept? marginal? and the real point of the axis it lies on (0, or +1 and -1), else NaN."""
    distance = np.abs(poles) - 1 if sampled else poles.real
    size = 1.0 if sampled else matrix_norm(A)
    kept = distance >= 0
    marginal = distance == 0
    near = np.flatnonzero((np.abs(distance) <= NEAR * size) & (poles.imag >= 0))
    near = near[np.argsort(np.abs(distance[near]), kind="stable")]
    corners = [1.0, -1.0] if sampled else [0.0]
    if near.size:
        points = np.array([_nearest_on_axis(complex(poles[k]), sampled) for k in near] + corners)
        suspect = _suspects(A, T, points)
        corners = [corner for corner, open_ in zip(corners, suspect[near.size :], strict=True) if open_]
        # a pole near a suspicious corner may belong to it although its own point of the axis is harmless
        close = np.zeros(near.size, dtype=bool)
        for corner in corners:
            close |= np.abs(poles[near] - corner) <= NEAR * size
        near = near[suspect[: near.size] | close][:EXAMINED]
    at_corner = np.full(poles.size, np.nan)
    for k in near:
        pole = complex(poles[k])
        mates = [k] if pole.imag == 0 else [k, k + 1]
        for corner in corners:
            # a pair that can be moved to the corner is two integrators
            if abs(pole - corner) <= NEAR * size and connected(A, T, Q, pole, complex(corner)):
                at_corner[mates] = corner
                marginal[mates] = kept[mates] = True
        if not kept[k] or distance[k] > 0:
            if connected(A, T, Q, pole, _nearest_on_axis(pole, sampled)):
                marginal[mates] = kept[mates] = True
    return kept, marginal, at_corner


def _reordered(T: Array, Q: Array, first: NDArray[np.bool_]) -> tuple[Array, Array, int, float]:
    """Return the real Schur form with the selected eigenvalues first, their number and the separation."""
    count = int(np.count_nonzero(first))
    room = max(1, count * (T.shape[0] - count))
    result = scipy.linalg.lapack.dtrsen(
        first.astype(np.int32), T, Q, job="V", lwork=max(T.shape[0], 2 * room), liwork=room
    )
    T, Q, info = result[0], result[1], result[-1]
    if info != 0:
        raise ValueError("eigenvalues too close to be told apart could not be reordered")
    return T, Q, count, float(result[6])


def _decouple(T: Array, count: int) -> Array:
    """Return Y with T11 Y - Y T22 = -T12."""
    return quasi_triangular_sylvester(
        T[:count, :count], T[count:, count:], -T[:count, count:], transposed=False, sign=-1
    )


def _nilpotent(N: Array, tolerance: float) -> tuple[Array, Array] | None:
    """Return (strictly upper triangular form, orthogonal basis) of a matrix with eigenvalues 0 within tolerance."""
    k = N.shape[0]
    basis = np.eye(k)
    N = N.copy()
    for low in range(k):
        _, s, vh = np.linalg.svd(N[low:, low:])
        if s[-1] > tolerance:
            return None
        turn = np.linalg.qr(np.column_stack([vh[-1], np.eye(k - low)]))[0]
        N[low:] = turn.T @ N[low:]
        N[:, low:] = N[:, low:] @ turn
        basis[:, low:] = basis[:, low:] @ turn
        N[low:, low] = 0.0
    return N, basis


def _settle(
    T: Array, corners: Array, marginal: NDArray[np.bool_], tolerance: float, sampled: bool
) -> tuple[Array, Array, Array]:
    """Put poles of the kept block that lie on the axis within rounding exactly there.

    Returns the block with right and left transforms. Integrators become a strictly triangular block (plus or minus
    the identity when sampled), a pair on the axis loses its real part.
    """
    n = T.shape[0]
    right, left = np.eye(n), np.eye(n)
    start = 0
    T = T.copy()
    for corner in (1.0, -1.0) if sampled else (0.0,):
        chosen = np.zeros(n, dtype=bool)
        chosen[start:] = corners[start:] == corner
        if not chosen.any():
            continue
        select = chosen.copy()
        select[:start] = True
        order = np.concatenate([np.flatnonzero(select), np.flatnonzero(~select)])
        turned, turn, count, _ = _reordered(T, np.eye(n), select)
        nil = _nilpotent(turned[start:count, start:count] - corner * np.eye(count - start), tolerance)
        if nil is None:
            continue
        Y = _decouple(turned, count)
        block = scipy.linalg.block_diag(np.eye(start), nil[1], np.eye(n - count))
        shear = np.eye(n)
        shear[:count, count:] = Y
        back = np.eye(n)
        back[:count, count:] = -Y
        right, left = right @ turn @ shear @ block, block.T @ back @ turn.T @ left
        T = block.T @ scipy.linalg.block_diag(turned[:count, :count], turned[count:, count:]) @ block
        T[start:count, start:count] = nil[0] + corner * np.eye(count - start)
        T[start:, :start] = 0.0
        corners, marginal = corners[order], marginal[order]
        start = count
    k = start
    while k < n:
        pair = k + 1 < n and T[k + 1, k] != 0
        if marginal[k] and pair:
            if sampled:
                size = abs(schur_eigenvalues(T[k : k + 2, k : k + 2])[0])
                T[k : k + 2, k : k + 2] /= size
            elif abs(T[k, k]) <= tolerance:
                T[k, k] = T[k + 1, k + 1] = 0.0
        k += 2 if pair else 1
    return T, right, left


def split_stable(A: Array, B: Array, C: Array, *, sampled: bool) -> Split:
    """Separate the stable part from unstable poles and poles on the axis.

    Real Schur form with the stable eigenvalues first, [T1 X; 0 T2], then T1 Y - Y T2 = -X makes it block diagonal [1]_.
    A pole counts as on the axis when a relative change of the entries of A by 4 n eps puts one there; such poles are
    then put exactly on it.

    Parameters
    ----------
    A : (n, n) array
        Scaled beforehand: the decision is made on the size of the entries.
    B : (n, m) array
    C : (p, n) array
    sampled : bool
        Unit circle instead of left half-plane.

    Returns
    -------
    Split

    Raises
    ------
    ValueError
        If the two parts cannot be told apart.

    References
    ----------
    .. [1] G. H. Golub, C. F. Van Loan, Matrix Computations, 4th ed. (2013), section 7.6.3.
    """
    n = A.shape[0]
    empty = (np.zeros((0, 0)), np.zeros((0, B.shape[1])), np.zeros((C.shape[0], 0)))
    none = np.zeros(0, dtype=complex)
    if n == 0:
        return Split(empty, empty, np.eye(0), np.eye(0), none, np.zeros(0, dtype=bool), 0.0, np.inf)
    T, Q = scipy.linalg.schur(A, output="real", check_finite=False)
    poles = schur_eigenvalues(T)
    kept, marginal, corners = _classify(A, T, Q, poles, sampled)
    if not kept.any():
        return Split((T, Q.T @ B, C @ Q), empty, Q, Q.T, none, np.zeros(0, dtype=bool), 0.0, np.inf)
    order = np.concatenate([np.flatnonzero(~kept), np.flatnonzero(kept)])
    separation, count = np.inf, 0
    if not kept.all():
        T, Q, count, separation = _reordered(T, Q, ~kept)
    Y = _decouple(T, count)
    right, left = Q.copy(), Q.T.copy()
    right[:, count:] += Q[:, :count] @ Y
    left[:count] -= Y @ Q[:, count:].T
    size = matrix_norm(A) + (1.0 if sampled else 0.0)
    settled, turn, back = _settle(
        T[count:, count:], corners[order][count:], marginal[order][count:], 4 * n * EPS * size, sampled
    )
    right[:, count:] = right[:, count:] @ turn
    left[count:] = back @ left[count:]
    stable = (np.ascontiguousarray(T[:count, :count]), left[:count] @ B, C @ right[:, :count])
    return Split(
        stable,
        (settled, left[count:] @ B, C @ right[:, count:]),
        right,
        left,
        schur_eigenvalues(settled),
        _on_axis(schur_eigenvalues(settled), marginal[order][count:], sampled),
        float(np.linalg.norm(Y)) if Y.size else 0.0,
        separation / size if size > 0 else np.inf,
    )


def _on_axis(poles: ComplexArray, marginal: NDArray[np.bool_], sampled: bool) -> NDArray[np.bool_]:
    """Say which kept poles count as on the axis: as many as were found, the nearest ones."""
    distance = np.abs(np.abs(poles) - 1) if sampled else np.abs(poles.real)
    result = np.zeros(poles.size, dtype=bool)
    result[np.argsort(distance, kind="stable")[: int(np.count_nonzero(marginal))]] = True
    return result
