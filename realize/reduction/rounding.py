"""What rounding may add to a theorem's bound."""

from __future__ import annotations

import math

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.kernels.norms import pole_frequencies
from realize.reduction.prepare import Prepared
from realize.reduction.result import Projected

Array = NDArray[np.float64]
Errors = tuple[Array, Array, Array]

EPS = float(np.finfo(float).eps)
#: The sensitivity of a result with more states than this is sampled at fewer frequencies.
SAMPLED_FREQUENCIES = 60
#: Up to this order all frequencies are solved for together.
DIRECT_SIZE = 64


def effect(part: Projected, changes: tuple[Array, Array, Array], *, sampled: bool) -> float:
    """Return what errors in the entries of a model can do to its response, to first order.

    |dG| <= |C (sI - A)^-1| |dA| |(sI - A)^-1 B| + |C (sI - A)^-1| |dB| + |dC| |(sI - A)^-1 B|, largest over the
    frequencies of its poles. Infinite where a pole is on the boundary of stability.

    Parameters
    ----------
    part : Projected
    changes : (n, n) array, (n,) array, (n,) array
        Errors of the entries of A, of the rows of B and of the columns of C.
    sampled : bool
    """
    change_a, change_b, change_c = changes
    n = part.A.shape[0]
    if n == 0:
        return 0.0
    poles = np.linalg.eigvals(part.A).astype(complex)
    frequencies = pole_frequencies(poles, sampled=sampled)
    points = np.exp(1j * frequencies) if sampled else 1j * frequencies
    distance = np.min(np.abs(points[:, None] - poles[None, :]), axis=1)
    points = points[np.argsort(distance, kind="stable")[:SAMPLED_FREQUENCIES]]
    if n <= DIRECT_SIZE:
        pencil = points[:, None, None] * np.eye(n) - part.A
        try:
            states = np.linalg.solve(pencil, np.broadcast_to(part.B.astype(complex), (points.size, *part.B.shape)))
            costates = np.linalg.solve(
                pencil.transpose(0, 2, 1), np.broadcast_to(part.C.T.astype(complex), (points.size, *part.C.T.shape))
            )
        except np.linalg.LinAlgError:
            # a pole of the result is on the boundary of stability: what rounding can do there has no bound
            return math.inf
        x, y = np.linalg.norm(states, axis=2), np.linalg.norm(costates, axis=2)
        return float(np.max(np.einsum("ki,ki->k", y @ change_a, x) + y @ change_b + x @ change_c))
    triangle, basis = scipy.linalg.schur(part.A.astype(complex), output="complex")
    into, out = basis.conj().T @ part.B, part.C @ basis
    worst = 0.0
    for point in points:
        pencil = point * np.eye(n) - triangle
        if np.any(np.diagonal(pencil) == 0):
            return math.inf
        state = basis @ scipy.linalg.solve_triangular(pencil, into, check_finite=False)
        costate = scipy.linalg.solve_triangular(pencil, out.T, trans=1, check_finite=False).T @ basis.conj().T
        size, other = np.linalg.norm(state, axis=1), np.linalg.norm(costate, axis=0)
        worst = max(worst, float(other @ change_a @ size + other @ change_b + change_c @ size))
    return worst


def balanced_effect(prepared: Prepared, part: Projected, count: int) -> float:
    """Return what rounding can do to the response of the first `count` balanced states.

    The errors of the products, and the smaller of two estimates for the values behind them: their own errors, entry by
    entry, or once the backward error of the Schur form by what it does to the response, since the balanced model is
    exact for a model that near.
    """
    products, values = balanced_errors(prepared, part, count)
    doubt = min(effect(part, values, sampled=prepared.sampled), prepared.factors.response_error)
    return effect(part, products, sampled=prepared.sampled) + doubt


def balanced_errors(prepared: Prepared, part: Projected, count: int) -> tuple[Errors, Errors]:
    """Return the errors of the entries of the first `count` balanced states: of the products, and of the values.

    The error of an entry is n^1/2 eps times the size of the products it is summed from, which are graded by the Hankel
    singular values (the root is the usual statistical growth: Higham, Accuracy and Stability of Numerical Algorithms,
    2002, section 2.8); to that come the relative errors of the two values it belongs to.
    """
    factors = prepared.factors
    unit = EPS * math.sqrt(factors.values.size)
    root = np.sqrt(factors.values[:count])
    uncertain = factors.errors[:count] / factors.values[:count] / 2
    # sizes of the sums behind each entry, form by form as in `balanced_part`
    left, right = np.abs(factors.left[:, :count]), np.abs(factors.right[:, :count])
    roots = factors.roots
    above = (left.T @ (np.abs(roots.M) @ left)) / root[:, None] * root
    below = (right.T @ (np.abs(roots.N) @ right)) * root[:, None] / root
    change_a = unit * (np.triu(above) + np.tril(below, -1))
    sums_b = root * np.linalg.norm(right.T @ np.abs(roots.input), axis=1)
    sums_c = root * np.linalg.norm(np.abs(roots.output) @ left, axis=0)
    doubt_a = np.abs(part.A) * (uncertain[:, None] + uncertain)
    doubt_b, doubt_c = uncertain * np.linalg.norm(part.B, axis=1), uncertain * np.linalg.norm(part.C, axis=0)
    return (change_a, unit * sums_b, unit * sums_c), (doubt_a, doubt_b, doubt_c)


def product_errors(T: Array, B: Array, C: Array, W: Array, V: Array) -> tuple[Array, Array, Array]:
    """Return the rounding of the entries of W'T V, of the rows of W'B and of the columns of C V."""
    unit = EPS * math.sqrt(T.shape[0])
    left, right = np.abs(W), np.abs(V)
    return (
        unit * (left.T @ (np.abs(T) @ right)),
        unit * np.linalg.norm(left.T @ np.abs(B), axis=1),
        unit * np.linalg.norm(np.abs(C) @ right, axis=0),
    )


def spectral_errors(T: Array, B: Array, C: Array, W: Array, V: Array) -> tuple[Array, Array, Array]:
    """Return the errors of the entries of a model in the coordinates of computed eigenvectors.

    The eigenvectors are exact for a matrix within n eps |T| in norm: an entry of W'T V is off by that times the lengths
    of its row of W' and its column of V.
    """
    n = T.shape[0]
    unit = n * EPS
    left, right = np.linalg.norm(W, axis=0), np.linalg.norm(V, axis=0)
    return (
        unit * np.linalg.norm(T) * np.outer(left, right),
        unit * left * np.linalg.norm(B),
        unit * right * np.linalg.norm(C),
    )


def cut_rounding(prepared: Prepared, count: int) -> float:
    """Return twice the estimated errors of the values that are cut (scaled unit)."""
    if count >= prepared.factors.values.size:
        return 0.0
    return 2 * float(prepared.factors.errors[count : prepared.available].sum())
