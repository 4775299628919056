"""One-sided Jacobi rotations of columns that are each in a unit of their own."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

#: Sweeps before giving up: the rotations found so far are returned, and whoever asked measures what is left.
SWEEPS = 40


def orthogonal_columns(columns: Array, exponents: NDArray[np.int64]) -> Array:
    """Return the rotations that make the columns of a matrix orthogonal, relative to their lengths.

    For M = X D with D = diag(2^exponents), M V = Z has columns with cosines of a few units of rounding. What is
    returned is W = D V D^-1, so that X W D = Z: neither very long nor very short columns leave the range of doubles
    [1]_, [2]_. Disjoint pairs of columns are turned at once, in the order of a tournament.

    Parameters
    ----------
    columns : (r, n) array X
        Entries of moderate size.
    exponents : (n,) integer array

    Returns
    -------
    (n, n) array W

    References
    ----------
    .. [1] M. R. Hestenes, Inversion of matrices by biorthogonalization and related results, J. SIAM 6 (1958) 51-90.
    .. [2] J. Demmel, K. Veselic, Jacobi's method is more accurate than QR, SIAM J. Matrix Anal. Appl. 13 (1992)
           1204-1245.
    """
    n = columns.shape[1]
    X, W = np.array(columns, dtype=float), np.eye(n)
    exponents = np.asarray(exponents, dtype=np.int64)
    if n < 2:
        return W
    enough = np.sqrt(columns.shape[0]) * float(np.finfo(float).eps)
    rounds = tournament(n)
    with np.errstate(all="ignore"):  # what is no number is no rotation
        for _ in range(SWEEPS):
            worst = 0.0
            for first, second in rounds:
                worst = max(worst, _turn(X, W, exponents, first, second, enough))
            if worst <= enough:
                break
    return W


def tournament(n: int) -> list[tuple[NDArray[np.int64], NDArray[np.int64]]]:
    """Return rounds of disjoint pairs of 0..n-1 in which every pair meets once."""
    ring = list(range(n + n % 2))
    rounds = []
    for _ in range(len(ring) - 1):
        half = len(ring) // 2
        pairs = [
            (min(a, b), max(a, b)) for a, b in zip(ring[:half], ring[: half - 1 : -1], strict=True) if max(a, b) < n
        ]
        rounds.append((np.array([a for a, _ in pairs]), np.array([b for _, b in pairs])))
        ring = [ring[0], ring[-1], *ring[1:-1]]
    return rounds


def _turn(
    X: Array, W: Array, exponents: NDArray[np.int64], i: NDArray[np.int64], j: NDArray[np.int64], enough: float
) -> float:
    """Rotate pairs of columns in place; return the largest cosine met."""
    a, b = X[:, i], X[:, j]
    p, q = np.linalg.norm(a, axis=0), np.linalg.norm(b, axis=0)
    lengths = p * q
    cosine = np.divide(np.sum(a * b, axis=0), lengths, out=np.zeros(i.size), where=lengths > 0)
    size = np.abs(cosine)
    worst = float(size.max(initial=0.0))
    if worst <= enough:
        return worst
    # the longer column of each pair comes first: ratio = |short| / |long| with units, at most 1
    gap = exponents[j] - exponents[i]
    swap = np.ldexp(q, np.clip(gap, -2000, 2000)) > p
    i, j = np.where(swap, j, i), np.where(swap, i, j)
    gap = np.where(swap, -gap, gap)
    p, q = np.where(swap, q, p), np.where(swap, p, q)
    a, b = X[:, i], X[:, j]
    unit = np.ldexp(1.0, np.clip(gap, -2000, 1000).astype(np.int32))
    bare = np.divide(q, p, out=np.zeros(i.size), where=p > 0)
    ratio = np.minimum(unit * bare, 1.0)
    # tan of the angle over the ratio: 2 cos / (1 - r^2 + sqrt((1 - r^2)^2 + 4 r^2 cos^2))
    difference = (1 - ratio) * (1 + ratio)
    over = 2 * cosine / (difference + np.hypot(difference, 2 * ratio * cosine))
    over = np.where((size > enough) & np.isfinite(over), over, 0.0)
    c = 1 / np.hypot(1.0, ratio * over)
    # in the columns' own units the two sines are s 2^gap and s 2^-gap
    up = c * over * ratio * unit
    down = c * over * bare
    X[:, i], X[:, j] = c * a + up * b, c * b - down * a
    a, b = W[:, i], W[:, j]
    W[:, i], W[:, j] = c * a + up * b, c * b - down * a
    return worst
