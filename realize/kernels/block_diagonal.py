"""Block diagonalisation by ordered Schur forms and Sylvester equations: what cannot be told apart stays together."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg
import scipy.linalg.lapack
from numpy.typing import NDArray

from realize.kernels.lyapunov import quasi_triangular_sylvester, schur_eigenvalues

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Block:
    """States start..start + size of a block diagonal matrix.

    Attributes
    ----------
    start, size : int
    eigenvalues : complex array
    coupling : float
        Norm of the solution of the Sylvester equation that split the block off.
    separation : float
        Clusters only: smallest estimated separation (smallest singular value of the Sylvester operator) of one
        eigenvalue or pair of the cluster from the others; NaN for a single eigenvalue or pair.
    """

    start: int
    size: int
    eigenvalues: NDArray[np.complex128]
    coupling: float
    separation: float


@dataclass(frozen=True)
class BlockDiagonal:
    """A = right diag(A_1, A_2, ...) left, with left = right^-1."""

    A: Array
    right: Array
    left: Array
    blocks: list[Block]


def _width(T: Array, k: int) -> int:
    return 2 if k + 1 < T.shape[0] and T[k + 1, k] != 0 else 1


def _moved(T: Array, Q: Array, source: int, target: int) -> tuple[Array, Array]:
    """Return the Schur form with the block at `source` (zero-based) moved to `target`."""
    T, Q, _, _, info = _exchange(T, Q, source + 1, target + 1)
    if info not in (0, 1):
        raise ValueError("eigenvalues could not be reordered")
    # swaps that were too close to be made (info 1) leave a valid form, with the block somewhere on the way
    return T, Q


def _exchange(T: Array, Q: Array, source: int, target: int) -> tuple[Array, Array, int, int, int]:
    result = scipy.linalg.lapack.dtrexc(T, Q, source, target, wantq=1)
    return result[0], result[1], source, target, int(result[-1])


def block_diagonal(A: Array, limit: float) -> BlockDiagonal:
    """Return a block diagonal form with the smallest blocks that a bounded transform allows.

    From the real Schur form [T11 T12; 0 T22] with one eigenvalue or pair in T11, T11 Y - Y T22 = -T12 splits it off.
    Where |Y| exceeds the limit, the eigenvalue of T22 nearest to the mean of T11 is moved up to T11 and the split tried
    anew [1]_. The columns of each block are made orthonormal, which leaves the transform within a factor root(blocks)
    of the best condition that block diagonal scaling reaches [2]_.

    Parameters
    ----------
    A : (n, n) array
        Scaled beforehand: the limit is on the entries as they are.
    limit : float
        Largest Frobenius norm of Y.

    Returns
    -------
    BlockDiagonal
        Single eigenvalues are 1 x 1, pairs [[a, -b], [b, a]] with b > 0, clusters upper quasi-triangular.

    References
    ----------
    .. [1] C. A. Bavely, G. W. Stewart, An algorithm for computing reducing subspaces by block diagonalization, SIAM J.
           Numer. Anal. 16 (1979) 359-367.
    .. [2] J. W. Demmel, The condition number of equivalence transformations that block diagonalize matrix pencils, SIAM
           J. Numer. Anal. 20 (1983) 599-610.
    """
    n = A.shape[0]
    if n == 0:
        return BlockDiagonal(A, np.eye(0), np.eye(0), [])
    T, Q = scipy.linalg.schur(A, output="real", check_finite=False)
    right, left = np.eye(n), np.eye(n)
    spans: list[tuple[int, int, float]] = []
    start = 0
    while start < n:
        size, coupling = _width(T, start), 0.0
        while start + size < n:
            end = start + size
            Y = _decoupled(T, start, end)
            if Y is not None and float(np.linalg.norm(Y)) <= limit:
                coupling = float(np.linalg.norm(Y))
                # the transform so far lives in the rows and columns from `start` on
                right[:, end:] += right[:, start:end] @ Y
                left[start:end] -= Y @ left[end:]
                T[start:end, end:] = 0.0
                break
            rest = schur_eigenvalues(T[end:, end:])
            inside = schur_eigenvalues(T[start:end, start:end])
            mean, height = np.mean(inside.real), np.mean(np.abs(inside.imag))
            nearest = end + int(np.argmin(np.hypot(rest.real - mean, np.abs(rest.imag) - height)))
            if nearest > 0 and T[nearest, nearest - 1] != 0:
                nearest -= 1
            inner, turn = _moved(T[start:, start:], np.eye(n - start), nearest - start, end - start)
            T[start:, start:] = inner
            right[:, start:] = right[:, start:] @ turn
            left[start:] = turn.T @ left[start:]
            size += _width(T, end)
        spans.append((start, size, coupling))
        start += size
    right, left = Q @ right, left @ Q.T
    blocks = []
    result = np.zeros((n, n))
    for start, size, coupling in spans:
        part = slice(start, start + size)
        own, turn, back, separation = _standard(T[part, part], right[:, part])
        right[:, part], left[part], result[part, part] = right[:, part] @ turn, back @ left[part], own
        blocks.append(Block(start, size, schur_eigenvalues(T[part, part]), coupling, separation))
    return BlockDiagonal(result, right, left, blocks)


def _decoupled(T: Array, start: int, end: int) -> Array | None:
    try:
        Y = quasi_triangular_sylvester(
            T[start:end, start:end], T[end:, end:], -T[start:end, end:], transposed=False, sign=-1
        )
    except ValueError:
        return None
    return Y if np.all(np.isfinite(Y)) else None


def _standard(block: Array, columns: Array) -> tuple[Array, Array, Array, float]:
    """Return the block in its standard form, the change of basis there and back, and the separation inside."""
    size = block.shape[0]
    _, R = np.linalg.qr(columns)
    inverse = scipy.linalg.solve_triangular(R, np.eye(size))
    if size == 1:
        return block, inverse, R, float("nan")
    own, turn = scipy.linalg.schur(R @ block @ inverse, output="real", check_finite=False)
    right, left = inverse @ turn, turn.T @ R
    if size == 2 and own[1, 0] != 0:
        # [a b; c a] with b c < 0 becomes [a -w; w a]
        w = float(np.sqrt(abs(own[0, 1])) * np.sqrt(abs(own[1, 0])))
        ratio = float(np.sqrt(abs(own[1, 0])) / np.sqrt(abs(own[0, 1])))
        scale = np.array([1.0, ratio * (1.0 if own[1, 0] > 0 else -1.0)])
        mean = 0.5 * (own[0, 0] + own[1, 1])
        return np.array([[mean, -w], [w, mean]]), right * scale, left / scale[:, None], float("nan")
    first = np.zeros(size, dtype=np.int32)
    first[: _width(own, 0)] = 1
    count = int(first.sum())
    if count == size:
        return own, right, left, float("nan")
    room = max(1, 2 * count * (size - count))
    answer = scipy.linalg.lapack.dtrsen(first, own, np.eye(size), job="V", lwork=max(size, room), liwork=room)
    return own, right, left, float(answer[6])
