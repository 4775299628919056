"""Residue matrices of low rank: C_j B_j for each pole or pair, their tangents, and the best ones in a given metric.

Each residue [outputs][inputs] of rank r is C B with r columns of C that are columns of the residue itself (B holds the
unit matrix there): outputs r + r (inputs - r) free numbers, none of them redundant.

Source
------
R. E. Skelton's and others' modal models have residues of rank one for simple poles; the minimum in a metric by
alternating least squares is textbook material (G. H. Golub, C. F. Van Loan, Matrix Computations, 4th edition 2013,
from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from realize.kernels.information import ChannelFactor

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class Shape:
    """Residue C B of the pole at ``index`` (the first of a pair): C [outputs][r], B [r][inputs], B[:, pivots] = 1."""

    index: int
    paired: bool
    C: ComplexArray
    B: ComplexArray
    pivots: NDArray[np.intp]

    @property
    def rank(self) -> int:
        return self.C.shape[1]

    @property
    def others(self) -> NDArray[np.intp]:
        """Columns that are no pivots."""
        left = np.ones(self.B.shape[1], dtype=bool)
        left[self.pivots] = False
        return np.flatnonzero(left)

    @property
    def size(self) -> int:
        """Real unknowns."""
        count = self.C.size + self.rank * (self.B.shape[1] - self.rank)
        return 2 * count if self.paired else count

    @property
    def residue(self) -> ComplexArray:
        return self.C @ self.B


def shape_of(residue: ComplexArray, rank: int, index: int, paired: bool) -> Shape:
    """Return the nearest residue of a rank (Frobenius norm), with the pivots that span its columns best."""
    u, d, vt = np.linalg.svd(residue)
    near = (u[:, :rank] * d[:rank]) @ vt[:rank]
    pivots: list[int] = []
    rest = near.copy()
    for _ in range(rank):
        best = int(np.argmax(np.linalg.norm(rest, axis=0)))
        pivots.append(best)
        column = rest[:, best] / max(float(np.linalg.norm(rest[:, best])), np.finfo(float).tiny)
        rest = rest - np.outer(column, column.conj() @ rest)
        rest[:, pivots] = 0
    C = near[:, pivots]
    B = np.linalg.lstsq(C, near, rcond=None)[0] if rank else np.zeros((0, near.shape[1]), complex)
    B[:, pivots] = np.eye(rank)
    return Shape(index, paired, C.astype(complex), B.astype(complex), np.array(pivots, dtype=np.intp))


def tangent(shape: Shape) -> ComplexArray:
    """Return d residue / d unknowns: [unknown][outputs][inputs]; a pair has real and imaginary parts in turn."""
    p, m = shape.C.shape[0], shape.B.shape[1]
    rows = []
    for i in range(p):
        for q in range(shape.rank):
            d = np.zeros((p, m), dtype=complex)
            d[i] = shape.B[q]
            rows.append(d)
    for q in range(shape.rank):
        for j in shape.others:
            d = np.zeros((p, m), dtype=complex)
            d[:, j] = shape.C[:, q]
            rows.append(d)
    base = np.array(rows).reshape(-1, p, m)
    if not shape.paired:
        return base
    return np.stack([base, 1j * base], axis=1).reshape(-1, p, m)


def moved(shape: Shape, step: Array) -> Shape:
    """Return the shape after a step of its unknowns."""
    change = step[::2] + 1j * step[1::2] if shape.paired else step + 0j
    count = shape.C.size
    B = shape.B.copy()
    B[:, shape.others] += change[count:].reshape(shape.rank, -1)
    return replace(shape, C=shape.C + change[:count].reshape(shape.C.shape), B=B)


def nearest_in_metric(residue: ComplexArray, metric: Array, shape: Shape, rounds: int) -> tuple[Shape, float]:
    """Return the residue of the shape's rank nearest to a given one, and the square of its distance.

    Parameters
    ----------
    residue : [outputs][inputs] complex
    metric : [rows][2 outputs inputs] float
        M: the distance of d is ||M (Re d_11, Im d_11, Re d_12, ...)||; real poles: [rows][outputs inputs].
    shape : Shape
        Where to start.
    rounds : int
        Largest number of Gauss-Newton steps.
    """
    best, lowest = shape, _distance(residue, metric, shape)
    for _ in range(rounds):
        slopes = metric @ flat_rows(tangent(best), best.paired).T
        wanted = metric @ flat_rows((residue - best.residue)[None], best.paired)[0]
        norm = np.linalg.norm(slopes, axis=0)
        norm = np.where(norm > 0, norm, 1.0)
        step = np.linalg.lstsq(slopes / norm, wanted, rcond=None)[0] / norm
        trial, found = best, np.inf
        for _ in range(6):
            trial = moved(best, step)
            found = _distance(residue, metric, trial)
            if found <= lowest:
                break
            step = step / 4
        if not found < lowest:
            break
        gain = lowest - found
        best, lowest = trial, found
        # the statistic is compared with quantiles of order 10: a change of a thousandth decides nothing
        if gain <= 1e-3 * lowest:
            break
    return best, lowest


def _distance(residue: ComplexArray, metric: Array, shape: Shape) -> float:
    return float(np.sum((metric @ flat_rows((residue - shape.residue)[None], shape.paired)[0]) ** 2))


def flat_rows(matrices: ComplexArray, paired: bool) -> Array:
    """Return matrices [u][outputs][inputs] as rows: real and imaginary parts in turn for a pair, real parts else."""
    flat = matrices.reshape(matrices.shape[0], -1)
    if not paired:
        return flat.real.copy()
    return np.stack([flat.real, flat.imag], axis=2).reshape(flat.shape[0], -1)


class Unknowns:
    """Poles, shapes and direct terms as one vector, and how each channel depends on it.

    The vector: the n pole coordinates (``information``), the unknowns of each shape in turn, then one direct term a
    channel if there are any. Channel c holds ``scale[c]`` times its entry of C B: the rank is that of a matrix in
    units of outputs and inputs, not of channels that were scaled one by one.
    """

    def __init__(self, order: int, shapes: list[Shape], scale: Array, direct: bool) -> None:
        self.order, self.shapes, self.direct, self.scale = order, shapes, direct, scale
        self.outputs, self.inputs = scale.shape
        self.starts = order + np.concatenate([[0], np.cumsum([s.size for s in shapes])]).astype(int)
        self.size = int(self.starts[-1]) + (self.outputs * self.inputs if direct else 0)
        self._tangents = [tangent(s) for s in shapes]

    def matrix(self, channel: int) -> Array:
        """Return d (poles, coefficients, direct term of the channel) / d unknowns: [2 n (+ 1)][unknowns]."""
        n = self.order
        i, j = divmod(channel, self.inputs)
        result = np.zeros((2 * n + int(self.direct), self.size))
        result[:n, :n] = np.eye(n)
        for s, start, slopes in zip(self.shapes, self.starts[:-1], self._tangents, strict=True):
            own = slopes[:, i, j] * self.scale[i, j]
            result[n + s.index, start : start + s.size] = own.real
            if s.paired:
                result[n + s.index + 1, start : start + s.size] = own.imag
        if self.direct:
            result[2 * n, self.starts[-1] + channel] = 1.0
        return result

    def jacobian(self, factors: list[ChannelFactor]) -> Array:
        """Return the weighted derivatives of all channels by the unknowns, in the bases of the factors."""
        return np.vstack([factor.triangle @ self.matrix(c) for c, factor in enumerate(factors)])
