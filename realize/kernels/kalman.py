"""The four parts of a state model: what inputs reach, what outputs see."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.kernels.separation import separated
from realize.kernels.staircase import Staircase
from realize.kernels.within_rounding import hidden_side

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: A shear larger than this leaves doubles no digit in eight.
LARGEST_SHEAR = 1e8


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
    decisions : dict of Staircase
        The staircases that the sizes rest on: ``reachable``; ``observable`` (of the reachable states);
        ``observable_of_all`` (of all states without those that are reachable only; missing where every state is
        reachable).
    """

    A: Array
    B: Array
    C: Array
    T: Array
    S: Array
    sizes: tuple[int, int, int, int]
    condition: float
    decisions: dict[str, Staircase]


def kalman_decomposition(
    A: Array, B: Array, C: Array, tolerance: float, band: float, gap: float, searched: int
) -> Kalman:
    """Split a state model into its four parts [1]_ by staircases, orthogonal but for one shear.

    The reachable states come from a staircase of (A, B), those of them that are observable from one of the dual, both
    orthogonal [2]_. What is reachable only is set aside, and a third staircase finds the states w of the rest that are
    not seen: they are seen neither by C nor through the observable states x1 = X w, which is the shear.

    Parameters
    ----------
    A : (n, n) array
        Scaled.
    B : (n, m) array
        Scaled, column by column.
    C : (p, n) array
        Scaled, row by row.
    tolerance : float
        Singular values up to this times the Frobenius norm of A (of B, of C) count as zero.
    band, gap : float
        How doubtful decisions are taken (`decided_staircase`).
    searched : int
        Largest order for which each mode is tried by itself as well (`separated`).

    Returns
    -------
    Kalman

    References
    ----------
    .. [1] R. E. Kalman, Mathematical description of linear dynamical systems, SIAM J. Control 1 (1963) 152-192 (from
           memory).
    .. [2] A. Varga, Numerically stable algorithm for standard controllability form determination, Electronics Letters
           17 (1981) 74-75 (from memory).
    """
    n = A.shape[0]
    small_a, small_b, small_c = (tolerance * float(np.linalg.norm(matrix)) for matrix in (A, B, C))
    first = separated(A, B, (small_b, small_a), tolerance, band, gap, searched)
    r = first.order
    Q, output = first.Q, C @ first.Q
    second = separated(
        np.ascontiguousarray(first.A[:r, :r].T),
        np.ascontiguousarray(output[:, :r].T),
        (small_c, small_a),
        tolerance,
        band,
        gap,
        searched,
    )
    o = second.order
    decisions = {"reachable": first, "observable": second}
    T = np.hstack([Q[:, :r] @ second.Q, Q[:, r:]])
    new_a, new_b, new_c = np.zeros((n, n)), np.zeros(B.shape), np.zeros(C.shape)
    new_a[:r, :r] = second.A.T
    new_b[:r] = second.Q.T @ first.B[:r]
    new_c[:, :r] = second.B.T
    new_a[r:, r:] = first.A[r:, r:]
    new_a[:r, r:] = second.Q.T @ first.A[:r, r:]
    new_c[:, r:] = output[:, r:]
    if r == n:
        return Kalman(new_a, new_b, new_c, T, T.T.copy(), (o, r - o, 0, 0), 1.0, decisions)
    rest = np.concatenate([np.arange(o), np.arange(r, n)])
    inner = new_a[np.ix_(rest, rest)]
    third = separated(
        np.ascontiguousarray(inner.T),
        np.ascontiguousarray(new_c[:, rest].T),
        (small_c, small_a),
        tolerance,
        band,
        gap,
        searched,
    )
    decisions["observable_of_all"] = third
    hidden = min(rest.size - third.order, n - r)
    unseen = third.Q[:, rest.size - hidden :]
    if 1 < n <= searched:
        # the numbers as they were given decide: rotations have spread their rounding
        every = hidden_side(A.T.copy(), C.T.copy(), tolerance).vectors
        more = min(every.shape[1] - (r - o), n - r)
        if more > hidden:
            hidden, unseen = more, scipy.linalg.svd((T.T @ every)[rest], full_matrices=False)[0][:, :more]
    # states that are observable by one decision and unseen by the other stay observable
    _, parts, mixed = scipy.linalg.svd(unseen[o:], full_matrices=False)
    apart = parts > LARGEST_SHEAR**-1
    hidden, unseen = int(apart.sum()), unseen @ mixed[apart].T
    # a basis of the unseen states: X w beside w = W, orthonormal
    full, upper = scipy.linalg.qr(unseen[o:], check_finite=False)
    Z = np.hstack([full[:, hidden:], full[:, :hidden]])
    X = np.zeros((o, 0))
    if hidden:
        X = scipy.linalg.solve_triangular(upper[:hidden], unseen[:o].T, trans=1, check_finite=False).T
    seen = n - hidden
    S = T.T.copy()
    T[:, r:] = T[:, r:] @ Z
    S[r:] = Z.T @ S[r:]
    new_a[r:, r:] = Z.T @ new_a[r:, r:] @ Z
    new_a[:r, r:] = new_a[:r, r:] @ Z
    new_c[:, r:] = new_c[:, r:] @ Z
    if hidden:
        T[:, seen:] += T[:, :o] @ X
        S[:o] -= X @ S[seen:]
        new_a[o:r, seen:] += new_a[o:r, :o] @ X
        new_a[:o, r:seen] -= X @ new_a[seen:, r:seen]
        new_a[:o, seen:], new_a[r:seen, seen:], new_c[:, seen:] = 0.0, 0.0, 0.0
    shear = float(np.linalg.norm(X, 2)) if X.size else 0.0
    condition = ((shear + np.hypot(shear, 2.0)) / 2) ** 2
    return Kalman(new_a, new_b, new_c, T, S, (o, r - o, seen - r, hidden), float(condition), decisions)


def elementwise_distances(A: Array, B: Array, own: Array, basis: Array) -> tuple[ComplexArray, Array]:
    """Return modes that inputs do not reach, and the elementwise relative change of A and B that makes that exact.

    With an eigenvalue s of `own` and its left eigenvector y, w = basis y is a left vector of A that is orthogonal to B
    but for rounding. The smallest change that makes it exact, relative to each entry of A, B and s, is the largest of

        \\|w' (A - s I)\\|_j / (\\|w\\|' (\\|A\\| + \\|s\\| I))_j   and   \\|w' B\\|_j / (\\|w\\|' \\|B\\|)_j    [1]_.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    own : (k, k) array
        The part of A that is not reached.
    basis : (n, k) array
        The states of that part: basis' A = own basis'.

    Returns
    -------
    modes : complex array [k]
    changes : array [k]

    References
    ----------
    .. [1] W. Oettli, W. Prager, Compatibility of approximate solution of linear equations with given error bounds,
           Numer. Math. 6 (1964) 405-409 (from memory).
    """
    if own.shape[0] == 0:
        return np.zeros(0, dtype=complex), np.zeros(0)
    modes, vectors = scipy.linalg.eig(own.T, check_finite=False)
    W = basis @ vectors
    size = np.abs(W)
    with np.errstate(divide="ignore", invalid="ignore"):
        inner = np.abs(A.T @ W - W * modes) / (np.abs(A).T @ size + np.abs(modes) * size)
        inputs = np.abs(B.T @ W) / (np.abs(B).T @ size)
    ratios = np.vstack([inner, inputs])
    return modes, np.max(np.where(np.isfinite(ratios), ratios, 0.0), axis=0)
