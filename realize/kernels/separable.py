"""Separable least squares: linear coefficients projected out, Levenberg-Marquardt over the nonlinear unknowns alone.

Model of channel c: Phi(theta) c_c, fitted to y_c with weights w_c. The derivatives of Phi c by the unknowns are B K_c
apart from what Phi spans, with one set of functions B for all channels and a small matrix K_c. So one triangular
factor of w [Phi B Y] holds all that a step needs: nothing of the length of the data is kept, rows come in chunks, and
channels of the same weights share a factor.

Sources
-------
1. G. H. Golub, V. Pereyra, "The differentiation of pseudo-inverses and nonlinear least squares problems whose
   variables separate", SIAM Journal on Numerical Analysis 10(2), 1973.
2. L. Kaufman, "A variable projection method for solving separable nonlinear least squares problems", BIT 15, 1975.
3. J. J. More, "The Levenberg-Marquardt algorithm: implementation and theory", Lecture Notes in Mathematics 630, 1978.
4. J. Demmel, L. Grigori, M. Hoemmen, J. Langou, "Communication-optimal parallel and sequential QR and LU
   factorizations", SIAM Journal on Scientific Computing 34(1), 2012 (rows by chunks).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Numbers in one chunk of rows: 4 MB, which stays near the processor (factors of 40,000 rows of 123 take 0.4 times
#: those as a whole) and is long enough for matrix products.
CHUNK_NUMBERS = 500_000
#: Weights of two channels are taken for the same when they differ by no more than this, relative: some roundings.
SAME_WEIGHTS = 16 * float(np.finfo(float).eps)


def chunks(rows: int, width: int) -> Iterator[slice]:
    """Return slices of the rows of a matrix of that width, none of them shorter than twice the width."""
    count = max(CHUNK_NUMBERS // max(width, 1), 2 * width, 1)
    for first in range(0, rows, count):
        yield slice(first, min(first + count, rows))


def triangular(matrix: Array, above: Array | None = None) -> Array:
    """Return the triangular factor of a matrix, below another one where that is given."""
    whole = matrix if above is None else np.concatenate([above, matrix], axis=0)
    factor: Array = np.linalg.qr(whole, mode="r")  # type: ignore[assignment]
    return factor


def groups_of(weights: Array) -> list[tuple[IntArray, Array, Array]]:
    """Return groups of channels whose weights are alike up to a factor: (channels, common weights, factors).

    Parameters
    ----------
    weights : [k][channels] float
        Not negative.
    """
    size = np.max(weights, axis=0)
    unit = weights / np.where(size > 0, size, 1.0)
    left = list(range(weights.shape[1]))
    groups = []
    while left:
        first = left[0]
        alike = np.max(np.abs(unit[:, left] - unit[:, [first]]), axis=0) <= SAME_WEIGHTS
        members = np.array(left)[alike]
        groups.append((members, unit[:, first].copy(), size[members].copy()))
        left = [c for c, same in zip(left, alike, strict=True) if not same]
    return groups


@dataclass(frozen=True, eq=False)
class Projected:
    """What is left when the linear coefficients are the best ones.

    Parameters
    ----------
    cost : float
        Sum of squares of the residual.
    jacobian : [r][unknowns] float
        Rotated and shortened: jacobian^T jacobian and jacobian^T residual are those of all the data.
    residual : [r] float
    """

    cost: float
    jacobian: Array
    residual: Array


def solved(triangle: Array, right: Array) -> Array:
    """Solve triangle @ x = right with columns scaled to length 1; the smallest solution where it is not unique."""
    norm = np.linalg.norm(triangle, axis=0)
    norm = np.where(norm > 0, norm, 1.0)
    rcond = max(triangle.shape) * float(np.finfo(float).eps)
    result: Array = np.linalg.lstsq(triangle / norm, right, rcond=rcond)[0] / norm[:, None]
    return result


def projected(factor: Array, linear: int, tangents: int, mixing: Callable[[Array], Array]) -> Projected:
    """Return residual and Jacobian from the triangular factor of [Phi B Y] of channels that share their weights.

    Parameters
    ----------
    factor : [r][linear + tangents + channels] float
    linear, tangents : int
        Number of columns of Phi and B.
    mixing : callable
        Coefficients [linear][channels] -> K [channels][tangents][unknowns].
    """
    both = linear + tangents
    rows = min(linear, factor.shape[0])
    target = factor[:rows, both:]
    rest = factor[linear:, both:]
    cost = float(np.sum(rest**2))
    if tangents == 0 or rest.shape[0] == 0:
        return Projected(cost, np.zeros((0, tangents)), np.zeros(0))
    coefficient = solved(factor[:rows, :linear], target) if linear else np.zeros((0, target.shape[1]))
    slope = -np.matmul(factor[linear:both, linear:both], mixing(coefficient))
    residual = factor[linear:both, both:].T
    return Projected(cost, slope.reshape(-1, slope.shape[2]), residual.reshape(-1))


def joined(parts: list[Projected]) -> Projected:
    """Return several groups of channels as one, the Jacobian shortened to a square."""
    cost = float(sum(part.cost for part in parts))
    jacobian = np.concatenate([part.jacobian for part in parts])
    residual = np.concatenate([part.residual for part in parts])
    if jacobian.shape[0] > 2 * (jacobian.shape[1] + 1):
        factor = triangular(np.hstack([jacobian, residual[:, None]]))
        n = jacobian.shape[1]
        jacobian, residual = factor[:n, :n], factor[:n, n]
    return Projected(cost, jacobian, residual)


def minimised(
    unknowns: Array,
    lower: Array,
    upper: Array,
    at: Callable[[Array], Projected],
    total: float,
    iterations: int,
    tolerance: float,
) -> tuple[Array, float, float]:
    """Return the unknowns of the lowest cost met, that cost, and the cost of the start (reference 3).

    Parameters
    ----------
    unknowns, lower, upper : [n] float
        Start and bounds; no step is longer than 1 in any of them.
    at : callable
        Residual and Jacobian at given unknowns.
    total : float
        Sum of squares of the data: a cost of a few roundings of it is zero.
    iterations : int
        Largest number of accepted or rejected steps.
    tolerance : float
        Two steps in a row that lower the cost by less than this fraction are the last.
    """
    here = at(unknowns)
    start = here.cost
    floor = (4 * float(np.finfo(float).eps)) ** 2 * total
    damping, growth, small = 1e-3, 2.0, 0
    for _ in range(iterations):
        if here.cost <= floor or here.jacobian.shape[0] == 0:
            break
        size = np.linalg.norm(here.jacobian, axis=0)
        size = np.where(size > 0, size, 1.0)
        scaled = here.jacobian / size
        whole = np.hstack([scaled, -here.residual[:, None]])
        extra = np.hstack([np.sqrt(damping) * np.eye(size.size), np.zeros((size.size, 1))])
        factor = triangular(extra, whole)
        step = np.linalg.solve(factor[: size.size, : size.size], factor[: size.size, size.size])
        change = scaled @ step
        predicted = float(-2 * change @ here.residual - change @ change)
        step = step / size
        step *= min(1.0, 1.0 / max(float(np.max(np.abs(step))), 1e-300))
        trial = np.clip(unknowns + step, lower, upper)
        there = at(trial)
        gain = here.cost - there.cost
        if gain > 0:
            small = small + 1 if gain <= tolerance * here.cost else 0
            unknowns, here = trial, there
            if small >= 2:
                break
            damping = max(damping * max(1 / 3, 1 - (2 * gain / max(predicted, gain * 1e-3) - 1) ** 3), 1e-12)
            growth = 2.0
        else:
            if predicted <= 0.01 * tolerance * here.cost or damping > 1e12:
                break
            damping *= growth
            growth *= 2
    return unknowns, here.cost, start
