"""The singular values of a product that stand above rounding, found in matrix products alone."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

Array = NDArray[np.float64]

EPS = float(np.finfo(float).eps)
#: Columns drawn at a time.
DRAWN = 48
#: Beyond this fraction of the columns the full decomposition costs no more.
FRACTION = 0.45


@dataclass(frozen=True)
class Leading:
    """M = U diag(values[:k]) Z' + rest, with the norm of the rest known.

    Attributes
    ----------
    left, right : (n, k) and (m, k) arrays U, Z
        Orthonormal columns.
    values : (min(n, m),) array
        Decreasing; those from k on are upper bounds, rest / sqrt(1), rest / sqrt(2), ...
    rest : float
        Frobenius norm of what is left out: no value of M is farther than this from the one given.
    """

    left: Array
    values: Array
    right: Array
    rest: float


def leading_part(M: Array, tolerance: float) -> Leading:
    """Return singular values and vectors of a matrix down to a rest whose Frobenius norm is at most `tolerance`.

    Random combinations of the columns are orthonormalised and projected out, block by block, until what remains is
    small [1]_; the remainder is formed, so its norm is known and not an estimate. With Q'M = W diag(s) Z' the values s
    and vectors Q W, Z are those of M but for the remainder (Weyl). Where many values are above the tolerance the full
    decomposition takes over and nothing remains.

    Parameters
    ----------
    M : (n, m) array
    tolerance : float
        In the unit of M; not below the rounding of its entries.

    M is overwritten.

    Returns
    -------
    Leading

    References
    ----------
    .. [1] N. Halko, P. G. Martinsson, J. A. Tropp, Finding structure with randomness, SIAM Review 53 (2011) 217-288
           (from memory).
    """
    size = min(M.shape)
    rng = np.random.default_rng(size)
    remainder = np.array(M)
    basis: list[Array] = []
    rows: list[Array] = []
    rest = whole = float(np.linalg.norm(remainder))
    while rest > tolerance:
        if _slow(len(basis), rest / whole, tolerance / whole, FRACTION * size / DRAWN):
            del remainder, basis, rows
            # the transpose is in the order of columns that the routine may overwrite
            Z, values, Ut = scipy.linalg.svd(M.T, full_matrices=False, check_finite=False, overwrite_a=True)
            return Leading(Ut.T, values, Z, 0.0)
        # the remainder is orthogonal to the basis but for rounding: once more, before the basis grows
        block = remainder @ rng.standard_normal((M.shape[1], DRAWN))
        block = scipy.linalg.qr(block, mode="economic", check_finite=False, overwrite_a=True)[0]
        for other in basis:
            block -= other @ (other.T @ block)
        block = scipy.linalg.qr(block, mode="economic", check_finite=False, overwrite_a=True)[0]
        row = block.T @ remainder
        remainder -= block @ row
        basis.append(block)
        rows.append(row)
        before, rest = rest, float(np.linalg.norm(remainder))
        if rest > before / 2 and rest <= 4 * EPS * size * float(np.linalg.norm(M)):
            # rounding itself is what remains
            break
    if not basis:
        return Leading(np.zeros((M.shape[0], 0)), _tail(rest, size), np.zeros((M.shape[1], 0)), rest)
    W, values, Zt = scipy.linalg.svd(np.vstack(rows), full_matrices=False, check_finite=False)
    return trimmed(np.hstack(basis) @ W, values, Zt.T, rest, size)


def _slow(blocks: int, rest: float, tolerance: float, most: float) -> bool:
    """Say whether the decay so far, in proportion, leads beyond the number of blocks that pays."""
    if blocks + 1 > most:
        return True
    return blocks >= 2 and math.log(max(tolerance, 1e-300)) < 2 * math.log(rest) * most / blocks


def trimmed(left: Array, values: Array, right: Array, rest: float, size: int) -> Leading:
    """Return the values that stand above what was left out; the others join it.

    Parameters
    ----------
    left, values, right : (n, k), (k,), (m, k) arrays
    rest : float
        Frobenius norm of what was left out so far.
    size : int
        How many values there are altogether.
    """
    left_out = np.sqrt(np.cumsum(np.append(values, rest)[::-1] ** 2)[::-1])
    clear = np.flatnonzero(values >= left_out[1:])
    kept = int(clear[-1]) + 1 if clear.size else 0
    rest = float(left_out[kept])
    return Leading(left[:, :kept], np.append(values[:kept], _tail(rest, size - kept)), right[:, :kept], rest)


def _tail(rest: float, count: int) -> Array:
    """Return what the i-th of `count` values cannot exceed when the sum of their squares is rest^2."""
    return rest / np.sqrt(np.arange(1, count + 1))
