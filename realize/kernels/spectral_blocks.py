"""A matrix as a sum over its poles: a block for a real pole, a complex pair, or a cluster that cannot be told apart."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg
import scipy.linalg.lapack
from numpy.typing import NDArray

from realize.kernels.lyapunov import quasi_triangular_sylvester, schur_eigenvalues

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

EPS = float(np.finfo(float).eps)


@dataclass(frozen=True)
class Block:
    """Poles with their real invariant subspaces: W'V = I, and W'T V has these poles."""

    poles: ComplexArray
    V: Array
    W: Array


def spectral_blocks(T: Array) -> list[Block]:
    """Return the blocks of a real Schur form, so that the sum of V (W'T V) W' over them is T.

    A pole whose uncertainty n eps |T| / |y'x| (unit eigenvectors x and y [1]_) reaches another one shares its block:
    the subspace of a cluster is well defined where those of its members are not. A complex pair is one block.

    Parameters
    ----------
    T : (n, n) array
        Upper quasi-triangular.

    Returns
    -------
    list of Block

    Raises
    ------
    ValueError
        If a cluster cannot be separated from the rest.

    References
    ----------
    .. [1] G. H. Golub, C. F. Van Loan, Matrix Computations, 4th ed. (2013), sections 7.2.2 and 7.6.
    """
    n = T.shape[0]
    if n == 0:
        return []
    values, left, right = scipy.linalg.eig(T, left=True, right=True, check_finite=False)
    values = values.astype(complex)
    inner = np.einsum("ij,ij->j", left.conj(), right)
    size = float(np.linalg.norm(T, 2)) if n <= 500 else float(np.linalg.norm(T))
    with np.errstate(divide="ignore", over="ignore"):
        doubt = np.minimum(n * EPS * size / np.maximum(np.abs(inner), EPS), 2 * size)
    label = _clusters(values, doubt)
    blocks = []
    own = schur_eigenvalues(T)
    for number in np.unique(label):
        members = np.flatnonzero(label == number)
        if members.size == 1 and values[members[0]].imag == 0:
            k = members[0]
            blocks.append(Block(values[members], right[:, k : k + 1].real, left[:, k : k + 1].real / inner[k].real))
        elif members.size == 2 and values[members[0]].imag != 0 and np.conj(values[members[0]]) == values[members[1]]:
            k = members[0]
            x, y = right[:, k], left[:, k] / np.conj(inner[k])
            blocks.append(
                Block(values[members], np.column_stack([x.real, x.imag]), 2 * np.column_stack([y.real, y.imag]))
            )
        else:
            nearest = np.argmin(np.abs(own[:, None] - values[None, :]), axis=1)
            blocks.append(_cluster_block(T, own, label[nearest] == number))
    if sum(block.poles.size for block in blocks) != n:
        raise ValueError("clustered poles cannot be told apart from the others")
    return blocks


def _clusters(values: ComplexArray, doubt: Array) -> NDArray[np.int64]:
    """Return a number per pole, equal for conjugates and for poles that rounding can move into each other."""
    n = values.size
    near = np.abs(values[:, None] - values[None, :]) <= np.maximum(doubt[:, None], doubt[None, :])
    near |= values[:, None] == np.conj(values)[None, :]
    label = np.full(n, -1, dtype=np.int64)
    for start in range(n):
        if label[start] >= 0:
            continue
        waiting = [start]
        label[start] = start
        while waiting:
            for k in np.flatnonzero(near[waiting.pop()] & (label < 0)):
                label[k] = start
                waiting.append(int(k))
    return label


def _cluster_block(T: Array, poles: ComplexArray, chosen: NDArray[np.bool_]) -> Block:
    n, count = T.shape[0], int(np.count_nonzero(chosen))
    if count == n:
        return Block(poles, np.eye(n), np.eye(n))
    room = max(1, count * (n - count))
    made = scipy.linalg.lapack.dtrsen(
        chosen.astype(np.int32), T, np.eye(n), job="N", lwork=max(n, 2 * room), liwork=room
    )
    turned, basis, info = made[0], made[1], made[-1]
    if info != 0:
        raise ValueError("clustered poles cannot be told apart from the others")
    Y = quasi_triangular_sylvester(
        turned[:count, :count], turned[count:, count:], -turned[:count, count:], transposed=False, sign=-1
    )
    return Block(schur_eigenvalues(turned[:count, :count]), basis[:, :count], basis[:, :count] - basis[:, count:] @ Y.T)
