"""The four parts of a state model: what inputs reach, what outputs see."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.kernels.hidden_spaces import Spaces

Array = NDArray[np.float64]

#: A shear larger than this leaves doubles no digit in eight.
LARGEST_SHEAR = 1e8
#: Times that an eigenvalue is put right by its singular vector.
REFINED = 3


@dataclass(frozen=True)
class Kalman:
    """A Kalman decomposition: x = T z, z = S x, the four parts of z one after the other.

    Attributes
    ----------
    A, B, C : ndarray
        With exact zeros (* stands for the rest)::

            A = [ *  0  *  0 ]   B = [ * ]   reachable and observable
                [ *  *  *  * ]       [ * ]   reachable only
                [ 0  0  *  0 ]       [ 0 ]   observable only
                [ 0  0  *  * ]       [ 0 ]   neither
            C = [ *  0  *  0 ]
    T, S : (n, n) arrays
    sizes : (int, int, int, int)
    condition : float
        Spectral condition number of T.
    cleared : float
        Largest Frobenius norm of what was set to zero in A (B, C), relative to A (B, C).
    """

    A: Array
    B: Array
    C: Array
    T: Array
    S: Array
    sizes: tuple[int, int, int, int]
    condition: float
    cleared: float


def kalman_decomposition(A: Array, B: Array, C: Array, spaces: Spaces) -> Kalman:
    """Split a state model into its four parts [1]_ by rotations and one shear.

    The rotation sets apart what inputs do not reach, and of the rest what outputs do not see. Of the other states those
    w that are not seen are seen neither by C nor through the observable states x1 = X w, which is the shear.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
        Scaled.
    spaces : Spaces
        What is hidden, of the same matrices.

    Returns
    -------
    Kalman

    References
    ----------
    .. [1] R. E. Kalman, Mathematical description of linear dynamical systems, SIAM J. Control 1 (1963) 152-192 (from
           memory).
    """
    n = A.shape[0]
    F, G = spaces.unreachable.vectors, spaces.reachable_only.vectors
    r, o = n - F.shape[1], n - F.shape[1] - G.shape[1]
    # observable among the reachable states first, then the other reachable ones, then the rest
    if F.shape[1] or G.shape[1]:
        whole = np.linalg.qr(np.hstack([F, G]), mode="complete")[0]
        T = np.hstack([whole[:, n - o :], whole[:, n - r : n - o], whole[:, : n - r]])
    else:
        T = np.eye(n)
    new_a, new_b, new_c = T.T @ A @ T, T.T @ B, C @ T
    S = T.T.copy()
    hidden, unseen = _unseen(T, spaces.unobservable.vectors, o, r)
    seen = n - hidden
    shear = 0.0
    if hidden:
        # a basis of the unseen states: X w beside w = W, orthonormal
        full, upper = scipy.linalg.qr(unseen[o:], check_finite=False)
        Z = np.hstack([full[:, hidden:], full[:, :hidden]])
        X = scipy.linalg.solve_triangular(upper[:hidden], unseen[:o].T, trans=1, check_finite=False).T
        T[:, r:] = T[:, r:] @ Z
        S[r:] = Z.T @ S[r:]
        T[:, seen:] += T[:, :o] @ X
        S[:o] -= X @ S[seen:]
        new_a[r:] = Z.T @ new_a[r:]
        new_a[:, r:] = new_a[:, r:] @ Z
        new_b[r:] = Z.T @ new_b[r:]
        new_c[:, r:] = new_c[:, r:] @ Z
        new_a[:, seen:] += new_a[:, :o] @ X
        new_a[:o] -= X @ new_a[seen:]
        new_b[:o] -= X @ new_b[seen:]
        new_c[:, seen:] += new_c[:, :o] @ X
        shear = float(np.linalg.norm(X, 2)) if X.size else 0.0
    part = np.repeat(np.arange(4), (o, r - o, seen - r, hidden))
    zero = np.array([[0, 1, 0, 1], [0, 0, 0, 0], [1, 1, 0, 1], [1, 1, 0, 0]], dtype=bool)
    cleared = 0.0
    for matrix, pattern in (
        (new_a, zero[part[:, None], part[None, :]]),
        (new_b, np.broadcast_to((part >= 2)[:, None], new_b.shape)),
        (new_c, np.broadcast_to((part % 2 == 1)[None, :], new_c.shape)),
    ):
        size = float(np.linalg.norm(matrix))
        if size > 0:
            cleared = max(cleared, float(np.linalg.norm(matrix[pattern])) / size)
        matrix[pattern] = 0.0
    condition = ((shear + np.hypot(shear, 2.0)) / 2) ** 2
    return Kalman(new_a, new_b, new_c, T, S, (o, r - o, seen - r, hidden), float(condition), cleared)


def _unseen(T: Array, unobservable: Array, o: int, r: int) -> tuple[int, Array]:
    """Return number and basis of the unseen states that are not reached, without those that are reachable only."""
    n = T.shape[0]
    count = min(unobservable.shape[1] - (r - o), n - r)
    if count <= 0:
        return 0, np.zeros((n - r + o, 0))
    rest = T.T @ unobservable
    own = np.vstack([rest[:o], rest[r:]])
    unseen = scipy.linalg.svd(own, full_matrices=False)[0][:, :count]
    # states that are observable by one decision and unseen by the other stay observable
    _, parts, mixed = scipy.linalg.svd(unseen[o:], full_matrices=False)
    apart = parts > LARGEST_SHEAR**-1
    return int(apart.sum()), unseen @ mixed[apart].T


def nearest_hidden(parts: Kalman) -> float:
    """Return how near a part that counts as reachable, or as observable, is to hiding a mode.

    The smallest singular value of [A - s I, B] from every eigenvalue s on, relative to the Frobenius norm of [A, B]
    [1]_: what a search in the old coordinates has missed is near zero here.

    References
    ----------
    .. [1] R. Eising, Between controllable and uncontrollable, Syst. Control Lett. 4 (1984) 263-264 (from memory).
    """
    o, r = parts.sizes[0], parts.sizes[0] + parts.sizes[1]
    seen = np.concatenate([np.arange(o), np.arange(r, r + parts.sizes[2])])
    nearest = np.inf
    for A, B in (
        (parts.A[:r, :r], parts.B[:r]),
        (parts.A[np.ix_(seen, seen)].T, parts.C[:, seen].T),
    ):
        size = float(np.hypot(np.linalg.norm(A), np.linalg.norm(B)))
        for s in np.linalg.eigvals(A) if size > 0 else ():
            for _ in range(REFINED):
                U, values, _ = np.linalg.svd(np.hstack([A - s * np.eye(A.shape[0]), B]), full_matrices=False)
                nearest = min(nearest, float(values[-1]) / size)
                w = U[:, -1]
                s = np.vdot(w, A @ w)
    return nearest
